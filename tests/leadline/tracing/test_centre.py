"""Centre lines: Gaussians in planes, stiff curves."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.tracing import centre


@settings(max_examples=20, deadline=None)
@given(st.floats(-40, 40), st.floats(-40, 40), st.floats(15, 55), st.floats(2, 50), st.floats(-2, 2))
def test_a_clean_gaussian_is_fitted_to_a_tenth_of_a_micrometre(u, v, sigma, peak, floor):
    line = np.linspace([0.0, 0, 0], [0, 400.0, 0], 21)
    sides = centre.frames(line)[0]
    place = sides @ [u, v]

    def dye(points):
        away2 = ((points[:, [0, 2]] - place[[0, 2]]) ** 2).sum(axis=1)
        return peak * np.exp(-away2 / (2 * sigma**2)) + floor

    fitted = centre.fit_gaussians(centre.look(line, dye, 12.0), voxel_um=12.0)
    np.testing.assert_allclose(fitted.offset_um, np.tile([u, v], (21, 1)), atol=0.1)
    np.testing.assert_allclose(fitted.sigma_um, sigma, atol=0.2)


def test_stated_errors_of_centres_are_honest():
    """Root mean square of error over stated error near one, in white noise."""
    rng = np.random.default_rng(3)
    line = np.linspace([0.0, 0, 0], [0, 8000.0, 0], 401)

    def dye(points):
        return 6 * np.exp(-(points[:, [0, 2]] ** 2).sum(axis=1) / (2 * 30.0**2)) + rng.normal(0, 1, len(points))

    stations = centre.look(line, dye, 20.0)
    fitted = centre.fit_gaussians(stations, voxel_um=20.0)
    ratio = fitted.offset_um / fitted.error_um[:, None]
    assert 0.7 < np.sqrt(np.mean(ratio**2)) < 1.4


def test_a_stiff_curve_keeps_long_waves_and_drops_short_ones():
    s = np.arange(0, 12000, 20.0)
    weight = np.full(len(s), 1 / centre.FIT_SD_UM**2)
    for length, low, high in ((6000.0, 0.98, 1.01), (1500.0, 0.45, 0.55), (400.0, -0.01, 0.01)):
        wave = np.sin(2 * np.pi * s / length)[:, None]
        kept = (centre.stiff(wave, weight, 20.0) * wave)[100:-100].sum() / (wave[100:-100] ** 2).sum()
        assert low < kept < high


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 2**16))
def test_a_stiff_curve_leaves_polynomials_below_its_order_alone(seed):
    rng = np.random.default_rng(seed)
    t = np.linspace(-1, 1, 80)[:, None]
    weight = np.where(rng.uniform(size=80) < 0.6, rng.uniform(0.001, 0.02, 80), 0.0)
    line = rng.normal(0, 500, 3) + t * rng.normal(0, 500, 3)
    arc = line + t**2 * rng.normal(0, 80, 3)
    np.testing.assert_allclose(centre.stiff(line, weight, 20.0, order=2), line, atol=0.2)
    np.testing.assert_allclose(centre.stiff(arc, weight, 20.0, order=3), arc, atol=0.2)


def test_a_joined_curve_goes_on_straight_beyond_what_counts():
    line = np.linspace([0.0, 0, 0], [0, 3000.0, 0], 151)
    stations = centre.look(line, lambda p: np.ones(len(p)), 20.0)
    centres = centre.Centres(np.full((151, 2), 5.0), np.ones(151), np.full(151, 30.0), np.full(151, 2.0))
    counts = (np.arange(151) > 30) & (np.arange(151) < 100)
    curve, _ = centre.join(stations, centres, counts)
    np.testing.assert_allclose(curve - line, np.tile((stations.sides[0] @ [5.0, 5.0]), (151, 1)), atol=0.05)


def test_single_stray_centres_do_not_move_the_curve():
    line = np.linspace([0.0, 0, 0], [0, 3000.0, 0], 151)
    stations = centre.look(line, lambda p: np.ones(len(p)), 20.0)
    offset = np.zeros((151, 2))
    offset[[40, 41, 90]] = 60.0
    centres = centre.Centres(offset, np.ones(151), np.full(151, 30.0), np.full(151, 2.0))
    curve, _ = centre.join(stations, centres, np.ones(151, bool))
    assert np.abs(curve - line).max() < 2.0


def test_what_is_outside_the_volume_is_left_out_of_the_average():
    values = np.array([[1.0], [np.nan], [1.0], [np.nan], [1.0]])
    assert centre.smoothed_along(values, 1.0) == pytest.approx(np.ones((5, 1)))
