"""Current sources of a simulated neocortical column with known layers.

Outside judge: hnn-core's column (Neymotin et al. 2020, eLife 9, e51214), its potentials and its own second difference.
Feed-forward (proximal) input ends on basal and oblique dendrites, near the cell bodies; feed-back (distal) input on
the apical tufts. Skipped where hnn-core is not installed: it brings a simulator, and a compiler, with it.
"""

import numpy as np
import pytest

from leadline.model.probe import Probe
from leadline.physiology.csd import csd_operator

hnn_core = pytest.importorskip("hnn_core", reason="hnn-core is not installed")
Z_UM = np.arange(-325.0, 2226.0, 50.0)
SIGMA = 0.3


def evoked(kind):
    """Mean potential (contacts, samples) in uV of a straight shank, and its times in ms, after one volley."""
    net = hnn_core.neymotin_2020_model(mesh_shape=(2, 2))
    cells = ("L2_pyramidal", "L5_pyramidal")  # the interneurons' answer would lie over the input itself
    net.add_evoked_drive(
        kind, mu=15.0, sigma=1.0, numspikes=1, location=kind, weights_ampa=dict.fromkeys(cells, 0.002),
        synaptic_delays=dict.fromkeys(cells, 0.1), event_seed=4,
    )  # fmt: skip
    net.add_electrode_array("shank", [(35.0, 35.0, float(z)) for z in Z_UM], conductivity=SIGMA)
    hnn_core.simulate_dipole(net, tstop=30.0, n_trials=1)
    array = net.rec_arrays["shank"]
    return np.asarray(array.voltages)[0], np.asarray(array.times)


@pytest.fixture(scope="module")
def responses():
    return {kind: evoked(kind) for kind in ("proximal", "distal")}


def line():
    n = len(Z_UM)
    return Probe(tuple(map(str, range(n))), np.zeros(n), Z_UM, np.zeros(n), np.arange(n))


def first_sink_um(potential, times, operator):
    window = (times > 15.0) & (times < 18.0)
    density = operator @ (potential - potential[:, times < 14.0].mean(axis=1, keepdims=True))
    return Z_UM[1:-1][density[1:-1, window].min(axis=1).argmin()]


def test_feed_back_sinks_in_the_tufts_and_feed_forward_near_the_cell_bodies(responses):
    operator = csd_operator(line())
    sink = {kind: first_sink_um(v, t, operator) for kind, (v, t) in responses.items()}
    # Cell bodies of layer 5 lie at 0 um, of layer 2/3 at about 1300 um; the tufts reach up to about 2000 um.
    assert sink["distal"] > 1500.0
    assert sink["proximal"] < 1300.0


def test_three_contacts_give_hnn_cores_second_difference(responses):
    from hnn_core.extracellular import calculate_csd2d

    potential, _ = responses["proximal"]
    ours = csd_operator(line(), half_width_um=50.0, sigma_s_per_m=SIGMA) @ potential
    theirs = calculate_csd2d(potential, delta=50.0)  # uV/um^2; 1 uV/um^2 at 1 S/m is 1000 uA/mm^3
    assert ours[1:-1] == pytest.approx(theirs[1:-1] * SIGMA * 1000.0, abs=1e-9)
