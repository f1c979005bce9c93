"""Sentences that say plainly where recording, histology and anchors disagree."""

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))

import invented

from leadline.anchoring.doubts import doubts
from leadline.model.anchor import Anchor

SHANK = invented.shank(with_profile=False)
RNG = np.random.default_rng(0)
ONE_TO_ONE = 2050.0 - invented.TIP
BEFORE = ONE_TO_ONE + 130.0 * RNG.standard_normal((400, 1))


def after(depth, sd=20.0):
    return depth + sd * RNG.standard_normal((400, 1))


def said(depth, shank=SHANK, informed=1.0, sd=20.0, shift=2.0):
    return doubts(shank, BEFORE, after(depth, sd), informed, shift)


def test_nothing_is_said_where_all_agree():
    assert said(ONE_TO_ONE + 60.0) == ()


def test_a_recording_that_knows_no_labels_is_named_so():
    assert said(ONE_TO_ONE, informed=0.1)[0].startswith("the recording does not speak")


@pytest.mark.parametrize(("shift", "way"), [(600.0, "deeper"), (-600.0, "shallower")])
def test_disagreement_beyond_stretch_is_said_with_its_size(shift, way):
    (sentence,) = said(ONE_TO_ONE + shift)
    assert f"um {way} than histology" in sentence
    assert "times what stretch" in sentence


def test_odd_stretch_is_said_with_its_place():
    bent = ONE_TO_ONE + 0.6 * np.clip(1200.0 - invented.TIP, 0.0, 400.0) - 100
    (sentence,) = said(bent)
    assert " um of track, more than tissue" in sentence
    assert "tip distances 775 and 1175" in sentence or "tip distances 825 and 1225" in sentence


def test_an_anchor_that_everything_else_contradicts_is_named():
    anchor = Anchor("A", 0, 1000.0, 1050.0 - 200.0, 40.0, landmark="pale sheet, upper edge")
    (sentence,) = said(ONE_TO_ONE, replace(SHANK, anchors=(anchor,)))
    assert "'pale sheet, upper edge' at tip distance 1000 um" in sentence
    assert "deeper" in sentence


def test_a_recording_that_narrows_nothing_and_rough_drawing_are_said():
    assert any("hardly narrows" in s for s in said(ONE_TO_ONE, sd=125.0))
    assert any("another seed would move depths by 30 um" in s for s in said(ONE_TO_ONE, shift=30.0))
