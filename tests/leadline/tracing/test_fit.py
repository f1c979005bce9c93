"""Tracks of hand-traced points."""

from __future__ import annotations

import numpy as np
import phantom
import pytest
from scipy.spatial import cKDTree
from scoring import beyond, dense

from leadline.base.errors import LeadlineError
from leadline.tracing.fit import from_points

SMALL = phantom.Conditions(size_um=(3600.0, 3800.0, 3600.0), singles=1, vessels=0, pools=1, bubbles=0)


@pytest.fixture(scope="module")
def made():
    return phantom.make(61, SMALL)


def picked(made, many, *, first=60, noise=0.0, seed=0):
    line = made.tracks[0].points_um
    rows = np.linspace(first, len(line) - 1, many).astype(int)
    return line[rows] + np.random.default_rng(seed).normal(0, noise, (many, 3))


@pytest.mark.parametrize(("many", "within"), [(4, 20.0), (12, 10.0)])
def test_the_curve_follows_the_points(made, many, within):
    """Median distance from the true line; four points leave the bow between them to chance."""
    got = from_points(picked(made, many, noise=8.0), made.background, made.dye)
    gap, _ = cKDTree(dense(got.points_um)).query(made.tracks[0].points_um)
    assert np.median(gap) < within


def test_it_begins_at_the_surface_and_ends_at_the_last_point(made):
    """Points begun 240 um below the surface are extended to it (40 um, the bar for entries)."""
    got = from_points(picked(made, 10), made.background)
    assert abs(beyond(got.points_um[0], made.tracks[0].points_um, -1)) < 40
    assert np.linalg.norm(got.points_um[-1] - made.tracks[0].points_um[-1]) < 15
    assert got.entry_sd_um < 60


def test_points_begun_above_the_brain_are_cropped_to_the_surface(made):
    line = made.tracks[0].points_um
    above = line[0] - (line[40] - line[0]) / np.linalg.norm(line[40] - line[0]) * np.array([[300.0], [120.0]])
    got = from_points(np.vstack([above, picked(made, 8)]), made.background)
    assert abs(beyond(got.points_um[0], line, -1)) < 40


@pytest.mark.parametrize("first", [5, 60, 200])
def test_an_entry_that_a_person_has_set_is_where_the_track_begins(made, first):
    """Wherever the surface is found, and though the points may be given from the deep end."""
    points = picked(made, 9, first=first)
    for given in (points, points[::-1]):
        got = from_points(given, made.background, entry_set=True)
        assert np.linalg.norm(got.points_um[0] - given[0]) < 10.0
        assert np.linalg.norm(got.points_um[-1] - given[-1]) < 10.0
        assert got.entry_sd_um == got.end_sd_um


def test_the_order_of_the_points_does_not_matter(made):
    points = picked(made, 9, noise=5.0)
    one = from_points(points, made.background)
    two = from_points(np.random.default_rng(1).permutation(points), made.background)
    np.testing.assert_allclose(one.points_um, two.points_um)


def test_dye_tells_width_and_contrast_and_moves_nothing(made):
    points = picked(made, 12)
    bare, seen = from_points(points, made.background), from_points(points, made.background, made.dye)
    np.testing.assert_array_equal(bare.points_um, seen.points_um)
    assert np.isnan(bare.contrast)
    assert seen.contrast > 5
    assert seen.radius_um[0] == pytest.approx(made.tracks[0].sigma_um, rel=0.35)


def test_points_at_one_place_are_refused(made):
    with pytest.raises(LeadlineError, match="3 points lie at one place"):
        from_points(np.full((3, 3), 1500.0), made.background)


def test_points_outside_the_stack_are_refused(made):
    with pytest.raises(LeadlineError, match=r"1 of 2 points lie outside the stack.*9000"):
        from_points(np.array([[1500.0, 1500, 1500], [1500, 9000, 1500]]), made.background)
