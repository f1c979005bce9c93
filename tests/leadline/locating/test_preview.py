from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.locating.preview import LabelTable, believed, odds_of, preview_odds, updated
from leadline.model.anchor import Anchor
from leadline.model.posterior import DepthPosterior

TIP = np.arange(200.0, 4000.0, 20.0)
END = 4000.0


def posterior(draws=200, seed=3, sd=30.0):
    rng = np.random.default_rng(seed)
    return DepthPosterior("A", 0, TIP, END - TIP + rng.normal(0, sd, (draws, 1)))


def table(regions=8, copies=16):
    depth = np.arange(-1500.0, 5500.0, 5.0)
    label = np.where(depth < 0, 0, 10 * (1 + (depth // 500).astype(int) % regions))
    return LabelTable(depth, label, np.stack([np.roll(label, k - copies // 2) for k in range(copies)]))


def anchor(tip, depth, **rest):
    return Anchor("A", 0, tip, depth, **rest)


def gaussian(seed=3, draws=4000):
    """Draws of a map whose offset and slope are unsure: Gaussian, so that the update is exact."""
    rng = np.random.default_rng(seed)
    slope = 1.0 + rng.normal(0, 0.02, (draws, 1))
    return DepthPosterior("A", 0, TIP, END - 2000.0 - slope * (TIP - 2000.0) + rng.normal(0, 60, (draws, 1)))


def conditioned(start, held):
    """Mean and sd of the depth of every row given one anchor, by the textbook formula for Gaussians."""
    row = int(np.flatnonzero(held.tip_distance_um == TIP)[0])
    cov = np.cov(start.depth_um.T, ddof=0)
    gain = cov[:, row] / (cov[row, row] + held.sd_um**2)
    mean = start.depth_um.mean(axis=0)
    return mean + gain * (held.track_depth_um - mean[row]), np.sqrt(np.diag(cov) - gain * cov[row])


def test_an_anchor_that_is_placed_pulls_as_far_as_it_is_surer_than_the_draws():
    start, held = gaussian(), anchor(3000.0, 1080.0, sd_um=40.0)
    mean, sd = conditioned(start, held)
    moved = updated(start, (), (held,))
    np.testing.assert_allclose(moved.depth_um.mean(axis=0), mean, atol=0.01)
    np.testing.assert_allclose(moved.sd_um, sd, atol=0.01)


@given(st.floats(-200, 200), st.sampled_from([30.0, 60.0, 120.0]))
def test_letting_go_of_an_anchor_undoes_it_and_moving_it_is_both(pull, sd):
    start = gaussian(draws=300)
    first, second = anchor(2500.0, 1500.0, sd_um=sd), anchor(2500.0, 1500.0 + pull, sd_um=sd)
    bound = updated(start, (), (first,))
    np.testing.assert_allclose(updated(bound, (first,), ()).depth_um, start.depth_um, atol=0.01)
    np.testing.assert_allclose(
        updated(bound, (first,), (second,)).depth_um, updated(start, (), (second,)).depth_um, atol=0.01
    )


def test_the_same_anchors_leave_the_draws_as_they_are():
    start, held = posterior(), (anchor(3000.0, 1000.0), anchor(1000.0, 3000.0))
    assert updated(start, held, held[::-1]) is start


@given(st.lists(st.floats(-300, 300), min_size=1, max_size=4), st.integers(0, 5))
def test_draws_never_fold_however_hard_an_anchor_is_pulled(pulls, seed):
    held = [
        anchor(float(t), END - float(t) + p, sd_um=5.0)
        for t, p in zip(np.linspace(500, 3500, len(pulls)), pulls, strict=True)
    ]
    rough = np.random.default_rng(seed).normal(0, 8, (10, TIP.size))
    start = posterior(draws=10, seed=seed)
    moved = updated(replace(start, depth_um=-np.sort(-(start.depth_um + rough), axis=1)), (), held)
    assert (np.diff(moved.depth_um, axis=1) < 0).all()


def test_a_draw_keeps_its_own_borders_while_its_rows_move():
    start, labels = posterior(draws=12), table()
    displaced = labels.label_id[labels.cell(start.depth_um + 40.0)]  # every border lies 40 um higher than in the atlas
    seen = believed(replace(start, label_id=displaced), labels)
    odds = preview_odds(start.median_um, start.depth_um, seen)
    np.testing.assert_allclose(odds.share.sum(axis=1), 1.0, atol=1e-6)
    for s in range(12):
        at = seen.lateral_label_id[s][seen.cell(start.depth_um[s])]
        assert (at == displaced[s]).mean() > 0.97  # rows are 20 um apart, the table 5 um
        deeper = seen.lateral_label_id[s][seen.cell(start.depth_um[s] + 100.0)]
        inside = start.depth_um[s] + 100.0 < start.depth_um[s].max()
        assert (deeper == labels.label_id[labels.cell(start.depth_um[s] + 140.0)])[inside].mean() > 0.95
    assert believed(start, labels) is labels


def test_odds_are_shares_of_the_draws_and_name_the_region_at_the_median():
    start, labels = posterior(draws=400, sd=1.0), table()
    odds = preview_odds(start.median_um, start.depth_um, labels)
    np.testing.assert_allclose(odds.share.sum(axis=1), 1.0, atol=1e-5)
    assert odds.region_id.tolist() == [10 * (1 + int(d // 500) % 8) for d in np.rint(start.median_um / 5) * 5]
    far = np.abs((start.median_um % 500) - 250) < 150
    assert (odds.p_region[far] == 1.0).all()
    assert odds.p_region[~far].min() < 0.7


def test_preview_and_counting_agree_where_only_depth_is_uncertain():
    start, labels = posterior(draws=300), table(copies=1)
    quick = preview_odds(start.median_um, start.depth_um, labels)
    draws = labels.label_id[labels.cell(start.depth_um)]
    slow = odds_of(labels.label_id[labels.cell(start.median_um)], draws)
    columns = np.searchsorted(quick.ids, slow.ids)
    np.testing.assert_allclose(quick.share[:, columns], slow.share, atol=1e-6)
    np.testing.assert_allclose(quick.p_region, slow.p_region, atol=1e-6)


def test_an_uneven_table_is_refused():
    with pytest.raises(LeadlineError, match="evenly spaced"):
        LabelTable(np.array([0.0, 5.0, 20.0]), np.zeros(3, int), np.zeros((1, 3), int))
