import time

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from leadline.anchoring.manual import manual_map
from leadline.base.errors import LeadlineError
from leadline.locating.preview import LabelTable, odds_of, preview_odds, shifted
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


def test_an_anchor_that_is_placed_pulls_the_median_through_it_and_all_else_along():
    moved = shifted(posterior(), (), (anchor(2000.0, 2100.0),))
    np.testing.assert_allclose(moved.median_um - posterior().median_um, 2100.0 - posterior().median_um[90], atol=1e-9)


def test_an_anchor_that_stays_holds_its_place_while_another_is_dragged():
    start = posterior()
    stays, old = anchor(3000.0, 1000.0), anchor(1000.0, 3000.0)
    moved = shifted(start, (stays, old), (stays, anchor(1000.0, 3080.0)))
    at = TIP.tolist().index
    assert moved.median_um[at(3000.0)] == start.median_um[at(3000.0)]
    assert moved.median_um[at(1000.0)] == pytest.approx(3080.0)
    assert moved.median_um[at(2000.0)] - start.median_um[at(2000.0)] == pytest.approx(
        (3080.0 - start.median_um[at(1000.0)]) / 2
    )


def test_by_hand_the_median_is_the_map_of_the_anchors_to_the_last_bit_of_rounding():
    anchors = (anchor(3000.0, 950.0), anchor(1500.0, 2600.0), anchor(400.0, 3600.0))
    by_hand = manual_map(anchors, END)
    np.testing.assert_allclose(shifted(posterior(), (), anchors, by_hand).median_um, by_hand(TIP), atol=1e-9)


@given(st.lists(st.floats(-300, 300), min_size=1, max_size=4), st.integers(0, 5))
def test_draws_never_fold_however_hard_an_anchor_is_pulled(pulls, seed):
    held = [
        anchor(float(t), END - float(t) + p) for t, p in zip(np.linspace(500, 3500, len(pulls)), pulls, strict=True)
    ]
    moved = shifted(posterior(draws=10, seed=seed), (), held)
    assert (np.diff(moved.depth_um, axis=1) < 0).all()


def test_taking_an_anchor_away_waits_for_the_exact_posterior():
    both = (anchor(3000.0, 1000.0), anchor(1000.0, 3000.0))
    start = posterior()
    assert shifted(start, both, both[:1]) is start


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


def test_a_drag_step_of_384_rows_and_400_draws_leaves_most_of_a_frame_to_the_screen():
    tip = np.arange(384) * 10.0
    start = DepthPosterior("A", 0, tip, 4000.0 - tip + np.random.default_rng(0).normal(0, 30, (400, 1)))
    labels, spent = table(), []
    for step in range(12):
        begin = time.process_time()
        moved = shifted(start, (), (anchor(2000.0, 2000.0 + step),))
        preview_odds(moved.median_um, moved.depth_um, labels)
        spent.append(time.process_time() - begin)
    assert np.median(spent) < 0.016
