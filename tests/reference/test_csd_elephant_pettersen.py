"""Current source densities against closed forms and elephant."""

import numpy as np
import pytest

from leadline.model.probe import Probe
from leadline.physiology.csd import csd_operator

SIGMA_S_PER_M = 0.3


def column(n, pitch_um):
    return Probe(tuple(str(i) for i in range(n)), np.zeros(n), np.arange(n) * pitch_um, np.zeros(n, int), np.arange(n))


def slab_potential_uv(at_um, middle_um, density_a_per_m3, height_um, radius_um):
    """Potential on the axis of a cylinder of constant current density.

    Pettersen, Devor, Ulbert, Dale & Einevoll (2006), J. Neurosci. Methods 154, 116, doi:10.1016/j.jneumeth.2005.12.005:
    phi = C / (2 sigma) [F(z + h/2) - F(z - h/2)], F(u) = (u sqrt(u^2 + R^2) + R^2 asinh(u / R) - u |u|) / 2.
    """
    z, half, radius = (np.asarray(at_um, float) - middle_um) * 1e-6, height_um * 0.5e-6, radius_um * 1e-6

    def integral(u):
        return 0.5 * (u * np.sqrt(u**2 + radius**2) + radius**2 * np.arcsinh(u / radius) - u * np.abs(u))

    return 1e6 * density_a_per_m3 / (2 * SIGMA_S_PER_M) * (integral(z + half) - integral(z - half))


def test_the_closed_form_has_its_published_limit():
    """On the axis of a thin disc the potential is (C h / 2 sigma)(sqrt(z^2 + R^2) - |z|) (Pettersen et al. 2006).

    1e-4 A/m^2 on a disc of 250 um give 4.16667e-8, 2.82097e-8 and 9.83617e-9 V at 0, 100 and 500 um (computed).
    """
    thin = slab_potential_uv([0, 100, 500], 0, 1e-4 / 1e-7, 0.1, 250)
    np.testing.assert_allclose(thin * 1e-6, [4.16667e-8, 2.82097e-8, 9.83617e-9], rtol=2e-3)


def test_a_sink_and_a_source_come_back_where_they_were_put():
    """Slabs of -1000 and +1000 A/m^3 (1 uA/mm^3), 100 um high and 500 um wide in radius, at rows 5 and 9 of 16.

    Second differences of the closed form give -+699.5 A/m^3 at the peaks and -67.5 and -95.0 beside the sink
    (computed); what is missing to 1000 is the finite radius, 30 %.
    """
    at = np.arange(16) * 100.0
    potential = slab_potential_uv(at, 500, -1000, 100, 500) + slab_potential_uv(at, 900, 1000, 100, 500)
    found = csd_operator(column(16, 100.0)) @ potential
    assert np.isnan(found[[0, -1]]).all()
    assert found[5] == pytest.approx(-0.6995, abs=1e-4)
    assert found[9] == pytest.approx(0.6995, abs=1e-4)
    assert sorted(found[[4, 6]]) == pytest.approx([-0.0950, -0.0675], abs=1e-4)
    wide = slab_potential_uv(at, 500, -1000, 100, 1e6) + slab_potential_uv(at, 900, 1000, 100, 1e6)
    exact = csd_operator(column(16, 100.0)) @ wide
    # at infinite radius only the quarter of the slab's parabola that a difference of 100 um sees is missing
    assert exact[5] == pytest.approx(-1.0 + 0.25, abs=1e-3)


def test_the_same_density_as_elephant():
    """elephant.current_source_density: StandardCSD equals ours, StepiCSD puts sink and source into the same rows."""
    elephant = pytest.importorskip("elephant.current_source_density")
    neo = pytest.importorskip("neo")
    units = pytest.importorskip("quantities")
    rng = np.random.default_rng(1)
    at = np.arange(16) * 100.0
    potential = slab_potential_uv(at, 500, -1000, 100, 500) + slab_potential_uv(at, 900, 1000, 100, 500)
    potential = potential[:, None] * rng.uniform(0.5, 1.5, 4)
    signal = neo.AnalogSignal(potential.T * 1e-6, units="V", sampling_rate=1000 * units.Hz)
    where = (at[:, None] + 100.0) * 1e-6 * units.m
    given = {"coordinates": where, "sigma": SIGMA_S_PER_M * units.S / units.m, "process_estimate": False}
    ours = csd_operator(column(16, 100.0)) @ potential
    standard = np.asarray(elephant.estimate_csd(signal, method="StandardCSD", **given)).T
    # in the version of 2026 its unit is A/m^2, the density times the pitch
    np.testing.assert_allclose(ours[1:-1], standard[1:-1] / 100e-6 * 1e-3, rtol=1e-6, atol=1e-9)
    step = np.asarray(
        elephant.estimate_csd(
            signal, method="StepiCSD", diam=1000e-6 * units.m, h=np.full(16, 100e-6) * units.m, tol=1e-12, **given
        )
    ).T
    assert np.nanargmin(ours[:, 0]) == step[:, 0].argmin() == 5
    assert np.nanargmax(ours[:, 0]) == step[:, 0].argmax() == 9


def test_fine_pitch_sees_the_same_sink_as_coarse():
    """A sink of 160 um in contacts 20 um apart: the parabola that reaches 80 um lies wholly inside it.

    The curvature of Pettersen's closed form in its middle is C (1 - (h/2) / sqrt((h/2)^2 + R^2)) / sigma.
    """
    at = np.arange(60) * 20.0
    found = csd_operator(column(60, 20.0)) @ slab_potential_uv(at, 600, -1000, 160, 2000)
    assert abs(at[np.nanargmin(found)] - 600) <= 20
    assert np.nanmin(found) == pytest.approx(-(1 - 80 / np.hypot(80, 2000)), abs=1e-3)
