"""Tracks to penetrations: the right ones, in the right order, and honest words where there is doubt."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.tracing.assign import TracedPath, Wanted, assign


def track(ap, ml, *, dv=300.0, length=3000.0, lean=0.0, contrast=20.0):
    s = np.linspace(0, length, 60)[:, None]
    way = np.array([np.sin(lean), np.cos(lean), 0.0])
    return TracedPath(np.array([ap, dv, ml]) + s * way, contrast)


def comb(ap, ml, pitch=250.0, many=4, along="ap", scale=1.0, lean=0.0):
    step = {"ap": (pitch * scale, 0.0), "ml": (0.0, pitch * scale)}[along]
    return [track(ap + k * step[0], ml + k * step[1], lean=lean) for k in range(many)]


FOUR = (0.0, 250.0, 500.0, 750.0)


def test_planned_entries_tell_single_shanks_apart():
    tracks = [track(5000, 7000), track(7000, 8000), track(9000, 4000)]
    wanted = [
        Wanted("C", entry_near_um=(8900, 350, 4200)),
        Wanted("A", entry_near_um=(5200, 300, 7100)),
        Wanted("B", entry_near_um=(7000, 200, 7700)),
    ]
    got = assign(tracks, wanted)
    assert got.matches == {("C", 0): 2, ("A", 0): 0, ("B", 0): 1}
    assert got.missing == ()
    assert got.unused == ()
    assert got.notes == ()


def test_the_sum_is_weighed_not_each_alone():
    """Track 0 is nearest to both plans; only the exchange that serves both is right."""
    tracks = [track(5000, 7000), track(5600, 7000)]
    wanted = [Wanted("A", entry_near_um=(4600, 300, 7000)), Wanted("B", entry_near_um=(5250, 300, 7000))]
    assert assign(tracks, wanted).matches == {("A", 0): 0, ("B", 0): 1}


def test_a_penetration_far_from_every_track_is_missing_and_says_what_was_found():
    tracks = [track(5000, 7000)]
    wanted = [Wanted("A", entry_near_um=(5100, 300, 7000)), Wanted("B", entry_near_um=(8000, 300, 3000))]
    got = assign(tracks, wanted)
    assert got.matches == {("A", 0): 0}
    (message,) = got.missing
    assert "'B'" in message
    assert "[8000, 300, 3000]" in message
    assert "track 0 at [5000, 300, 7000], 5000 um from the plan, taken by 'A'" in message


def test_no_track_at_all_is_said():
    (message,) = assign([], [Wanted("A")]).missing
    assert "'A'" in message
    assert "no track at all" in message


@pytest.mark.parametrize("scale", [0.85, 1.0, 1.2])
def test_a_comb_goes_to_the_probe_with_shanks(scale):
    tracks = [track(3000, 4000), *comb(6000, 7000, scale=scale, lean=0.2), track(9000, 8000)]
    wanted = [
        Wanted("S", entry_near_um=(9000, 300, 8000)),
        Wanted("M", FOUR, shank_toward="P"),
        Wanted("T", entry_near_um=(3000, 300, 4000)),
    ]
    got = assign(tracks, wanted)
    assert got.matches == {("S", 0): 5, ("T", 0): 0, **{("M", k): 1 + k for k in range(4)}}
    assert got.notes == ()


def test_without_a_direction_the_choice_is_noted_with_how_to_overrule_it():
    got = assign(comb(6000, 7000), [Wanted("M", FOUR)])
    assert [got.matches["M", k] for k in range(4)] == [0, 1, 2, 3]
    (note,) = got.notes
    assert "grow towards P" in note
    assert 'shank_toward = "A"' in note


@pytest.mark.parametrize(("letter", "order"), [("L", [3, 2, 1, 0]), ("R", [0, 1, 2, 3])])
def test_shank_toward_decides(letter, order):
    got = assign(comb(6000, 7000, along="ml"), [Wanted("M", FOUR, shank_toward=letter)])
    assert [got.matches["M", k] for k in range(4)] == order
    assert got.notes == ()


def test_shank_numbers_follow_the_letter_even_when_x_falls_with_them():
    got = assign(comb(6000, 7000), [Wanted("M", FOUR[::-1], shank_toward="P")])
    assert [got.matches["M", k] for k in range(4)] == [0, 1, 2, 3]


def test_a_letter_across_the_shanks_is_doubted():
    (note,) = assign(comb(6000, 7000), [Wanted("M", FOUR, shank_toward="R")]).notes
    assert "says little" in note


def test_uneven_spacing_decides_by_itself():
    tracks = [track(6000, 7000), track(6500, 7000), track(6750, 7000)]
    got = assign(tracks, [Wanted("M", (0.0, 250.0, 750.0))])
    assert [got.matches["M", k] for k in range(3)] == [2, 1, 0]
    assert "the spacing says so" in got.notes[0]


def test_a_missing_shank_is_named_and_the_others_keep_their_places():
    tracks = [t for k, t in enumerate(comb(6000, 7000)) if k != 1]
    got = assign(tracks, [Wanted("M", FOUR, shank_toward="P")])
    assert got.matches == {("M", 0): 0, ("M", 2): 1, ("M", 3): 2}
    assert "shank 1" in got.missing[0]


def test_a_probe_of_one_shank_does_not_take_a_shank_of_a_comb():
    """Nothing by chance stands parallel at just the spacing of four others: the single shank left no track."""
    tracks = comb(5000, 7000)
    wanted = [Wanted("A", entry_near_um=(4700, 300, 7000)), Wanted("B", FOUR, shank_toward="P")]
    got = assign(tracks, wanted)
    assert got.matches == {("B", k): k for k in range(4)}
    assert "'A'" in got.missing[0]
    stray = [*tracks, track(4700, 7000, lean=0.3)]
    assert assign(stray, wanted).matches[("A", 0)] == 4


def test_parallel_tracks_at_another_spacing_are_no_comb():
    got = assign(comb(4000, 7000, pitch=1500), [Wanted("M", FOUR)])
    assert not got.matches
    assert "no 4 parallel tracks" in got.missing[0]
    assert got.unused == (0, 1, 2, 3)


def test_two_tracks_that_fit_alike_are_noted_with_evidence():
    tracks = [track(5000, 7000), track(5000, 7400)]
    got = assign(tracks, [Wanted("A", entry_near_um=(5000, 300, 7190))])
    assert got.matches == {("A", 0): 0}
    assert got.unused == (1,)
    (note,) = got.notes
    assert "190 um from the plan" in note
    assert "210 um from the plan" in note
    assert "nearly as well" in note


def test_length_tells_tracks_apart_where_nothing_else_does():
    tracks = [track(5000, 7000, length=1500), track(7000, 7000, length=4000)]
    got = assign(tracks, [Wanted("long", inserted_um=4100.0), Wanted("short", inserted_um=1600.0)])
    assert got.matches == {("long", 0): 1, ("short", 0): 0}


def test_shanks_and_places_must_agree_in_number():
    with pytest.raises(LeadlineError, match=r"'A'.*one place for each shank"):
        Wanted("A", (0.0, 250.0), shanks=(0,))


@settings(max_examples=25, deadline=None)
@given(st.permutations(range(5)), st.permutations(range(5)), st.integers(0, 2**16))
def test_neither_the_order_of_tracks_nor_of_penetrations_matters(order, asked, seed):
    rng = np.random.default_rng(seed)
    entry = np.column_stack([np.arange(5) * 1500.0 + 2000, np.full(5, 300.0), rng.uniform(3000, 8000, 5)])
    tracks = [track(*entry[i, [0, 2]]) for i in order]
    plans = entry + rng.normal(0, 150, (5, 3))
    got = assign(tracks, [Wanted(f"p{i}", entry_near_um=tuple(plans[i])) for i in asked])
    assert {name: order[t] for (name, _), t in got.matches.items()} == {f"p{i}": i for i in range(5)}


@given(st.integers(0, 2**32 - 1))
def test_no_set_of_tracks_is_too_odd_to_be_looked_at(seed):
    rng = np.random.default_rng(seed)
    depth = np.linspace(0, 1, 5)[:, None]
    tracks = []
    for _ in range(rng.integers(2, 7)):
        entry = rng.uniform(0, 400, 3) * [1, 0, 1]
        tracks.append(TracedPath(entry + depth * (rng.normal(0, 150, 3) * [1, 0, 1] + [0, 3000, 0])))
    x_um = tuple(np.cumsum(rng.choice([20.0, 150.0, 250.0, 900.0], rng.integers(2, 5))))
    toward = rng.choice(["P", "A", "R", "L", None])
    found = assign(tracks, [Wanted("A", x_um, shank_toward=toward)])
    assert len(set(found.matches.values())) == len(found.matches)
