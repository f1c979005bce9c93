"""The contract's rules for depth maps by hand."""

import numpy as np
import pytest

from leadline.anchoring.manual import manual_map, recentred
from leadline.base.errors import LeadlineError
from leadline.model.anchor import Anchor
from leadline.model.posterior import DepthPosterior

TIP = np.array([0.0, 500.0, 1000.0, 3000.0])


def anchor(tip, depth):
    return Anchor("A", 0, tip, depth)


def test_no_anchor_puts_the_tip_at_the_end_of_the_track():
    assert manual_map([], 3800.0)(TIP).tolist() == [3800.0, 3300.0, 2800.0, 800.0]


def test_one_anchor_shifts():
    assert manual_map([anchor(1000.0, 2900.0)], 3800.0)(TIP).tolist() == [3900.0, 3400.0, 2900.0, 900.0]


def test_two_anchors_stretch_between_and_keep_slope_one_beyond():
    depth = manual_map([anchor(500.0, 3400.0), anchor(1500.0, 2300.0)], 3800.0)(TIP)
    assert depth.tolist() == pytest.approx([3900.0, 3400.0, 2850.0, 800.0])


def test_crossing_anchors_are_refused():
    with pytest.raises(LeadlineError, match="anchors cross"):
        manual_map([anchor(500.0, 2000.0), anchor(1500.0, 2300.0)], 3800.0)


def test_recentred_draws_have_the_map_as_their_median_and_keep_their_spread():
    rng = np.random.default_rng(0)
    draws = DepthPosterior("A", 0, TIP, 3000.0 - TIP + rng.normal(0, 80, (500, 1)), informed=0.9)
    depth_map = manual_map([anchor(1000.0, 2900.0)], 3800.0)
    moved = recentred(draws, depth_map)
    assert moved.median_um == pytest.approx(depth_map(TIP))
    assert moved.sd_um == pytest.approx(draws.sd_um)
    assert moved.informed == 0.0
