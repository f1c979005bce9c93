"""The prior over depth maps, before any recording."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.anchoring.depth_prior import build, interpolation
from leadline.anchoring.evidence import ShankEvidence
from leadline.anchoring.knowledge import DepthLaw
from leadline.model.anchor import Anchor

TIP = np.arange(200.0, 3000.0, 20.0)
DEPTH = np.arange(-1500.0, 5000.0, 5.0)


def shank(number=0, end=3200.0, anchors=(), inserted=None, tip=TIP):
    label = np.where(DEPTH < 0, 0, 1)
    return ShankEvidence("A", number, tip, None, DEPTH, label, end, inserted_um=inserted, anchors=anchors)


def moments(prior, position, tip):
    """Mean and sd of the physical depth under the wide Gaussian, at tip distances."""
    at = prior.weights(position, np.asarray(tip, float))
    rows = prior.slice(position)
    mean = at @ prior.physical_mean_um[rows]
    factor = np.hstack([at @ prior.physical_basis[rows], at @ prior.physical_rest[rows]])
    return mean, np.sqrt((factor**2).sum(axis=1))


def test_without_anchors_the_tip_is_expected_at_the_dyes_end_and_one_to_one():
    mean, _ = moments(build([shank()], DepthLaw()), 0, [0.0, 1000.0, 2500.0])
    assert mean == pytest.approx([3200.0, 2200.0, 700.0])


def test_doubt_grows_with_distance_from_the_tip():
    _, sd = moments(build([shank()], DepthLaw()), 0, [0.0, 1000.0, 2000.0, 2900.0])
    assert (np.diff(sd) > 0).all()


@settings(max_examples=20, deadline=None)
@given(st.floats(300, 2900), st.floats(-300, 300), st.floats(5, 60))
def test_an_anchor_is_met_within_its_sd(tip, shift, sd):
    anchor = Anchor("A", 0, tip, 3200.0 - tip + shift, sd)
    mean, after = moments(build([shank(anchors=(anchor,))], DepthLaw()), 0, [tip])
    assert abs(mean[0] - anchor.track_depth_um) < 0.1 * abs(shift) + 1
    assert after[0] <= sd * 1.01


def test_anchors_of_one_shank_inform_its_sisters_with_more_doubt():
    anchor = Anchor("A", 0, 1500.0, 1900.0, 20.0)
    prior = build([shank(0, 3200.0, (anchor,)), shank(1, 3350.0)], DepthLaw())
    own, own_sd = moments(prior, 0, [1500.0])
    sister, sister_sd = moments(prior, 1, [1500.0])
    alone, alone_sd = moments(build([shank(1, 3350.0)], DepthLaw()), 0, [1500.0])
    assert own[0] == pytest.approx(1900.0, abs=15)
    assert alone[0] + 120 < sister[0] < alone[0] + 210
    assert own_sd[0] < sister_sd[0] < 0.5 * alone_sd[0]


def test_the_manipulators_depth_pulls_softly_at_the_surface():
    mean, _ = moments(build([shank(inserted=3000.0)], DepthLaw()), 0, [3000.0])
    assert 0.0 < mean[0] < 100.0


def test_draws_follow_the_two_part_law_of_the_offset():
    law = DepthLaw()
    prior = build([shank()], law)
    z = prior.draw(np.random.default_rng(0), 20000)
    offset = prior.offset_mean_um + z @ prior.offset_basis
    variance = (1 - law.stray_share) * law.offset_sd_um**2 + law.stray_share * law.stray_offset_sd_um**2
    assert offset.std() == pytest.approx(np.sqrt(variance), rel=0.06)
    # within one core sd: the share of each part's normal distribution, from tables of erf
    inside = (1 - law.stray_share) * 0.6827 + law.stray_share * 0.2897
    assert (np.abs(offset) < law.offset_sd_um).mean() == pytest.approx(inside, abs=0.015)
    assert np.median(offset) == pytest.approx(0.0, abs=3)


def test_interpolation_is_exact_on_lines_even_beyond_the_nodes():
    nodes = np.array([0.0, 50.0, 120.0])
    at = np.array([-10.0, 0.0, 30.0, 120.0, 150.0])
    assert interpolation(nodes, at) @ (3 * nodes + 1) == pytest.approx(3 * at + 1)
