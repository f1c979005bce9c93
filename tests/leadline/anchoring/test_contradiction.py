"""Probes upside down, tracks exchanged, contacts far from the brain; and nothing said where nothing is wrong."""

import sys
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))

import invented

from leadline.anchoring import contradiction
from leadline.anchoring.knowledge import builtin
from leadline.model.anchor import Anchor

LISTENER = contradiction.Listener(invented.STRUCTURES, builtin())
SEEDS = range(4)


@cache
def plain(seed, number=0):
    return invented.shank(number, seed=seed, tip=invented.TIP + 60.0)


@cache
def elsewhere(seed):
    """Another penetration: the same layers in other thickness, and a deeper track."""
    borders = np.array([0.0, 90.0, 200.0, 420.0, 1200.0, 1350.0, 1500.0])

    def label(depth_um):
        return invented.IDS[np.searchsorted(borders, depth_um, side="right")]

    rng = np.random.default_rng([seed, 1])
    true = label(invented.truth(invented.TIP))
    profile = plain(seed).profile
    features = {
        name: means[np.searchsorted(invented.IDS, true)] + 0.3 * rng.standard_normal(true.size)
        for name, means in invented.MEANS.items()
    }
    return replace(
        plain(seed), penetration="B", tip_distance_um=invented.TIP, label_id=label(invented.DEPTH),
        lateral_label_id=None,
        profile=replace(profile, penetration="B", tip_distance_um=invented.TIP, features=features),
    )  # fmt: skip


@pytest.mark.parametrize("seed", SEEDS)
def test_a_probe_the_right_way_up_is_not_doubted(seed):
    assert contradiction.upside_down([plain(seed)], LISTENER) == ()


@pytest.mark.parametrize("seed", SEEDS)
def test_a_probe_upside_down_is_said_with_both_evidences(seed):
    (sentence,) = contradiction.upside_down([contradiction.flipped(plain(seed))], LISTENER)
    assert sentence.startswith("penetration A: the recording fits")
    assert "upside down (log evidence" in sentence


def test_all_shanks_of_a_probe_are_asked_together():
    shanks = [plain(seed, number=seed) for seed in (0, 1)]
    assert contradiction.upside_down(shanks, LISTENER) == ()
    assert len(contradiction.upside_down([contradiction.flipped(s) for s in shanks], LISTENER)) == 1


def test_anchors_set_on_the_wrong_order_do_not_hide_it():
    wrong = contradiction.flipped(plain(0))
    anchored = replace(wrong, anchors=(Anchor("A", 0, 1000.0, 1100.0, 20.0), Anchor("A", 0, 500.0, 1600.0, 20.0)))
    assert contradiction.upside_down([anchored], LISTENER) == contradiction.upside_down([wrong], LISTENER) != ()


def test_a_recording_that_says_nothing_is_not_called_upside_down():
    for seed in SEEDS:
        silent = invented.shank(seed=seed, signal=0.0)
        assert contradiction.upside_down([silent], LISTENER) == ()
    assert contradiction.upside_down([invented.shank(with_profile=False)], LISTENER) == ()


def test_flipping_twice_gives_the_same_shank():
    once = plain(0)
    twice = contradiction.flipped(contradiction.flipped(once))
    assert twice.tip_distance_um == pytest.approx(once.tip_distance_um)
    for name, values in once.profile.features.items():
        assert np.array_equal(twice.profile.features[name], values)
    assert twice.profile.flags == once.profile.flags


@pytest.mark.parametrize("seed", SEEDS)
def test_exchanged_recordings_are_said_and_right_ones_are_not(seed):
    a, b = plain(seed), elsewhere(seed)
    assert contradiction.exchanged([[a], [b]], LISTENER) == ()
    (sentence,) = contradiction.exchanged([[s] for s in contradiction.crossed(a, b)], LISTENER)
    assert sentence.startswith("penetrations A and B: each recording fits the other's track")


def test_penetrations_of_other_shanks_or_without_recording_are_not_compared():
    a = plain(0)
    two = [replace(elsewhere(0), shank=k) for k in (0, 1)]
    assert contradiction.exchanged([[a], two], LISTENER) == ()
    assert contradiction.exchanged([[a], [invented.shank(with_profile=False)]], LISTENER) == ()


def test_a_shank_in_its_place_is_not_doubted():
    assert contradiction.misplaced(replace(plain(0), inserted_um=2150.0)) == ()


def test_a_bank_too_high_is_said():
    high = replace(plain(0), tip_distance_um=plain(0).tip_distance_um + 3840.0)
    assert "100% of the contacts lie above the brain" in contradiction.misplaced(high)[0]


def test_units_above_the_brain_and_silence_deep_in_it_are_said():
    shank = plain(0)
    rows = shank.profile.tip_distance_um
    busy = replace(shank.profile, features={"unit_density_per_100um": np.where(rows > 1500, 2.0, 0.0)})
    short = replace(shank, end_depth_um=900.0, profile=busy)
    assert "units are recorded 1315 um above the brain" in contradiction.misplaced(short)[0]
    flags = tuple("outside" if r > 800 else "" for r in rows)
    assert (
        "outside the brain 1235 um below"
        in contradiction.misplaced(replace(shank, profile=replace(shank.profile, flags=flags)))[0]
    )


def test_an_insertion_that_does_not_fit_its_track_is_said():
    assert "inserted_um is 3800" in contradiction.misplaced(replace(plain(0), inserted_um=3800.0))[0]
