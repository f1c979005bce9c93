"""Planned entries read in the way that fits the tracks."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from leadline.tracing.plans import doubts

MIDDLE_UM = 5000.0
TRACKS = np.array([[6900.0, 900.0, 2600.0], [3700.0, 800.0, 7500.0], [7300.0, 1100.0, 6800.0]])
NAMES = ("A", "B", "C")


def plans(tracks=TRACKS, miss_um=150.0, seed=0):
    missed = tracks + np.random.default_rng(seed).normal(0, miss_um, tracks.shape)
    return {name: tuple(p) for name, p in zip(NAMES, missed, strict=False)}


def mirrored(points):
    return points * [1, 1, -1] + [0, 0, 2 * MIDDLE_UM]


@given(seed=st.integers(0, 10_000))
def test_plans_that_were_met_are_not_doubted(seed):
    assert doubts(plans(seed=seed), TRACKS, MIDDLE_UM) == ()
    assert doubts(plans(seed=seed), TRACKS[:1], MIDDLE_UM) == ()


@given(seed=st.integers(0, 10_000))
def test_a_mirrored_brain_is_said_with_both_distances(seed):
    (sentence,) = doubts(plans(seed=seed), mirrored(TRACKS), MIDDLE_UM)
    assert "far better mirrored left to right" in sentence
    assert "R or L" in sentence
    assert "'A'" in sentence


def test_one_lateral_plan_is_enough_and_one_near_the_midline_is_not():
    assert doubts(plans(TRACKS[:1], 0.0), mirrored(TRACKS[:1]), MIDDLE_UM)
    near = np.array([[6900.0, 900.0, 4700.0]])
    assert doubts(plans(near, 0.0), mirrored(near), MIDDLE_UM) == ()


def test_plans_in_another_order_or_in_millimetres_are_said():
    turned = {n: (p[2], p[1], p[0]) for n, p in plans().items()}
    assert "read as ml, dv, ap" in doubts(turned, TRACKS, MIDDLE_UM)[0]
    small = {n: tuple(np.array(p) / 1000) for n, p in plans().items()}
    assert "as millimetres" in doubts(small, TRACKS, MIDDLE_UM)[0]


def test_a_plan_that_no_reading_explains_is_left_to_the_assignment():
    assert doubts({"A": (1000.0, 6000.0, 9000.0)}, TRACKS, MIDDLE_UM) == ()


def test_no_plan_and_no_track_say_nothing():
    assert doubts({}, TRACKS, MIDDLE_UM) == ()
    assert doubts(plans(), np.zeros((0, 3)), MIDDLE_UM) == ()
