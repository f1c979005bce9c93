"""Planned entries read in the way that fits the tracks."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.tracing.assign import TracedPath, Wanted
from leadline.tracing.plans import doubts

MIDDLE_UM = 5000.0
ENTRIES = np.array([[6900.0, 900.0, 2600.0], [3700.0, 800.0, 7500.0], [7300.0, 1100.0, 6800.0]])
DOWN = np.array([100.0, 3500.0, -50.0])


def plans(entries=ENTRIES, miss_um=150.0, seed=0):
    missed = entries + np.random.default_rng(seed).normal(0, miss_um, np.shape(entries))
    return [Wanted(name, entry_near_um=tuple(p)) for name, p in zip("ABC", missed, strict=False)]


def tracks(entries=ENTRIES):
    return [TracedPath(np.array([e, e + DOWN])) for e in entries]


def mirrored(points):
    return np.asarray(points) * [1, 1, -1] + [0, 0, 2 * MIDDLE_UM]


@settings(max_examples=25)
@given(seed=st.integers(0, 10_000))
def test_plans_that_were_met_are_not_doubted(seed):
    assert doubts(plans(seed=seed), tracks(), MIDDLE_UM) == ()
    assert doubts(plans(seed=seed)[:1], tracks(), MIDDLE_UM) == ()


@settings(max_examples=25)
@given(seed=st.integers(0, 10_000))
def test_a_mirrored_brain_is_said_with_both_distances(seed):
    (sentence,) = doubts(plans(seed=seed), tracks(mirrored(ENTRIES)), MIDDLE_UM)
    assert "far better mirrored left to right" in sentence
    assert "R or L" in sentence
    assert "'A'" in sentence


def test_shanks_tell_two_penetrations_of_mirrored_aims_apart():
    """One shank on the right, four on the left at the same place: mirrored, each would find a track at its plan."""
    four = np.array([[6900.0 + 250.0 * k, 900.0, 7400.0] for k in (-1.5, -0.5, 0.5, 1.5)])
    both = np.vstack([ENTRIES[:1], four])
    wanted = [
        Wanted("A", entry_near_um=tuple(ENTRIES[0])),
        Wanted("B", (0.0, 250.0, 500.0, 750.0), entry_near_um=(6900.0, 900.0, 7400.0), shank_toward="P"),
    ]
    assert doubts(wanted, tracks(both), MIDDLE_UM) == ()
    assert "mirrored left to right" in doubts(wanted, tracks(mirrored(both)), MIDDLE_UM)[0]
    one = [wanted[0], Wanted("B", wanted[1].shank_x_um)]  # B claims its four shanks without a plan
    assert doubts(one, tracks(both), MIDDLE_UM) == ()
    assert "mirrored left to right" in doubts(one, tracks(mirrored(both)), MIDDLE_UM)[0]


def test_one_lateral_plan_is_enough_and_one_near_the_midline_is_not():
    one = ENTRIES[:1]
    assert doubts(plans(one, 0.0), tracks(mirrored(one)), MIDDLE_UM)
    near = np.array([[6900.0, 900.0, 4700.0]])
    assert doubts(plans(near, 0.0), tracks(mirrored(near)), MIDDLE_UM) == ()


def test_plans_in_another_order_or_in_millimetres_are_said():
    turned = [Wanted(w.name, entry_near_um=w.entry_near_um[::-1]) for w in plans()]
    assert "read as ml, dv, ap" in doubts(turned, tracks(), MIDDLE_UM)[0]
    small = [Wanted(w.name, entry_near_um=tuple(np.array(w.entry_near_um) / 1000)) for w in plans()]
    assert "as millimetres" in doubts(small, tracks(), MIDDLE_UM)[0]


def test_a_plan_that_no_reading_explains_is_left_to_the_assignment():
    assert doubts([Wanted("A", entry_near_um=(1000.0, 6000.0, 9000.0))], tracks(), MIDDLE_UM) == ()


def test_no_plan_and_no_track_say_nothing():
    assert doubts([Wanted("A")], tracks(), MIDDLE_UM) == ()
    assert doubts(plans(), [], MIDDLE_UM) == ()
