"""Suggested anchors: few, named, near the truth, and they say why."""

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))

import invented

from leadline.anchoring.knowledge import builtin
from leadline.anchoring.posterior import infer
from leadline.anchoring.suggest import suggest

SHANK = invented.shank()


@pytest.fixture(scope="module")
def posterior():
    return infer([SHANK], invented.STRUCTURES, builtin())[0]


def test_suggestions_are_few_near_the_truth_and_do_not_cross(posterior):
    found = suggest([posterior], [SHANK], invented.STRUCTURES, at_most=3)
    assert 1 <= len(found) <= 3
    for one in found:
        assert abs(invented.truth(one.anchor.tip_distance_um) - one.anchor.track_depth_um) < 100
        assert one.anchor.source == "auto"
        assert one.anchor.sd_um >= 30
    ordered = sorted(found, key=lambda s: s.anchor.tip_distance_um)
    depths = [s.anchor.track_depth_um for s in ordered]
    assert depths == sorted(depths, reverse=True)


def test_they_carry_names_and_reasons_in_words_and_numbers(posterior):
    found = suggest([posterior], [SHANK], invented.STRUCTURES, at_most=6)
    names = {s.anchor.landmark for s in found}
    assert len(names) == len(found)
    known = {row.name for row in invented.STRUCTURES.rows}
    assert all(n == "brain surface" or n.split(", upper edge")[0].split(", lower edge")[0] in known for n in names)
    assert all("of draws" in s.support for s in found)
    assert any("nats" in s.support and "+" in s.support for s in found)


def test_what_is_anchored_already_is_not_suggested_again(posterior):
    first = suggest([posterior], [SHANK], invented.STRUCTURES, at_most=1)[0].anchor
    anchored = replace(SHANK, anchors=(first,))
    after = infer([anchored], invented.STRUCTURES, builtin())
    again = suggest(after, [anchored], invented.STRUCTURES)
    assert all(abs(s.anchor.tip_distance_um - first.tip_distance_um) >= 120 for s in again)


def test_a_shank_without_a_telling_recording_has_none():
    mute = invented.shank(with_profile=False)
    assert suggest(infer([mute], invented.STRUCTURES, builtin()), [mute], invented.STRUCTURES) == ()
    doubted = infer([SHANK], invented.STRUCTURES, builtin(), physiology=False)
    assert suggest(doubted, [SHANK], invented.STRUCTURES) == ()


def test_feature_support_falls_where_the_map_is_wrong(posterior):
    moved = replace(posterior, depth_um=posterior.depth_um + 250.0, label_id=SHANK.label_at(posterior.depth_um + 250.0))
    right, wrong = (
        sum(float(v) for s in suggest([p], [SHANK], invented.STRUCTURES) for v in _numbers(s.support))
        for p in (posterior, moved)
    )
    assert right > wrong


def _numbers(text):
    return [word.strip(",") for word in text.split() if word[0] == "+" and word[1:2].isdigit()] or [np.nan_to_num(0.0)]
