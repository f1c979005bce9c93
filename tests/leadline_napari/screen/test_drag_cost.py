"""What a step of a drag costs, new regions and odds and the painting of every lane included."""

import time

import numpy as np
import pytest

pytest.importorskip("napari")
pytest.importorskip("pyqtgraph")

from qtpy.QtWidgets import QApplication

from leadline.io.brainfile import read_brain
from leadline.model.posterior import DepthPosterior
from leadline.model.probe import Probe
from leadline.model.profile import Profile
from leadline.pipeline.bench import Bench
from leadline.pipeline.exact import ShankGround, ground
from leadline_napari.controllers.desk import Desk
from leadline_napari.controllers.lanes import lanes_of
from leadline_napari.controllers.resolve import live_preview
from leadline_napari.controllers.scene import Scene, extent, stack_tissue, strata_of
from leadline_napari.controllers.section import SectionController
from leadline_napari.results import read_results
from leadline_napari.session import AddAnchor, SelectShank
from leadline_napari.style import DARK
from leadline_napari.views.section import SectionView

ROWS, SHANKS, DRAWS, STEPS = 384, 4, 400, 40
TIP = 20.0 + 4.0 * np.arange(ROWS)
LANES = ("ripple_power_db", "theta_power_db", "gamma_power_db", "unit_density_per_100um", "spike_amplitude_uv")


class Door:
    """The view as its controller sees it."""

    def __init__(self, view):
        self.show, self.show_readout = view.show_state, view.show_readout


def big_probe(small: ShankGround, shank: int) -> ShankGround:
    """The tiny brain's shank with 384 recorded contacts, each a row of its own."""
    from dataclasses import replace

    rng = np.random.default_rng(shank)
    number = np.arange(ROWS)
    contacts = Probe(
        tuple(f"c{k}" for k in number), 16.0 * (number % 2), TIP, np.full(ROWS, shank), number + ROWS * shank
    )
    features = {name: np.cumsum(rng.normal(size=ROWS)) for name in LANES}
    profile = Profile("A", np.full(ROWS, shank), TIP, features)
    evidence = replace(small.evidence, shank=shank, tip_distance_um=TIP, profile=profile)
    return ShankGround(replace(small.track, shank=shank), contacts, evidence, small.table, small.error_um)


@pytest.fixture
def section(finished, at_once, qtbot):
    brain = read_brain(finished)
    bench, results = Bench(brain), read_results(brain)
    (small,) = ground(bench, list(results.tracks.values()))
    shanks = tuple(big_probe(small, k) for k in range(SHANKS))
    top, bottom = extent(shanks[0])
    view = SectionView(DARK)
    qtbot.addWidget(view)
    view.resize(700, 800)
    view.show()
    at_once.hold = True
    controller = SectionController(Desk(brain), Door(view), at_once, pytest.fail)
    controller.bench, controller.results = bench, results
    controller.desk.act(SelectShank("A", 0))
    tissue = stack_tissue(bench, shanks[0].track, top, bottom)
    lanes = lanes_of(shanks[0].evidence.profile, None, 0)
    controller.scene = Scene(shanks, 0, strata_of(shanks[0], bench.atlas), (tissue,), lanes, top, bottom)
    end = shanks[0].track.length_um
    depth = end - TIP + np.random.default_rng(9).normal(0, 30, (DRAWS, 1))
    posterior = DepthPosterior("A", 0, TIP, depth)
    controller.live = controller.base = live_preview(posterior, shanks[0], (), posterior.sd_um)
    controller.show_lanes(LANES)
    return controller


def test_a_step_of_a_drag_on_four_shanks_of_384_contacts_takes_less_than_a_frame(section, qtbot):
    from leadline.model.anchor import Anchor

    start = Anchor("A", 0, 800.0, round(section.live.depth_at(800.0), 1))
    section.desk.act(AddAnchor(start))
    qtbot.wait(100)
    spent = []
    before = section.view.show.__self__.log.grab().toImage()
    for step in range(STEPS):
        begin = time.process_time()
        section.drag_to(start, "depth", start.track_depth_um + 2.0 * step)
        QApplication.processEvents()
        spent.append(time.process_time() - begin)
    after = section.view.show.__self__.log.grab().toImage()
    assert before != after
    assert len(section.state.lanes) == 5
    median, p95 = np.median(spent) * 1e3, np.percentile(spent, 95) * 1e3
    print(f"drag step: {median:.1f} ms CPU median, {p95:.1f} ms 95th percentile")
    assert median <= 16.0
