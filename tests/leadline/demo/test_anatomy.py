"""The invented anatomy: symmetric, layered in order, complete."""

from __future__ import annotations

import numpy as np
import pytest

from leadline.demo.anatomy import BOX_UM, MIDLINE_UM, codes_at, ids_at, make_atlas, surface_depth_um
from leadline.demo.recipe import Recipe, small
from leadline.demo.structures import AREAS, ids, kinds, structures
from leadline.demo.tracks import make_penetrations


@pytest.fixture(scope="module")
def points() -> np.ndarray:
    return np.random.default_rng(0).uniform(0, 1, (20000, 3)) * BOX_UM


def test_left_and_right_mirror_each_other(points: np.ndarray) -> None:
    mirrored = points * [1, 1, -1] + [0, 0, 2 * MIDLINE_UM]
    np.testing.assert_array_equal(codes_at(points), codes_at(mirrored))


def test_outside_is_where_the_surface_says(points: np.ndarray) -> None:
    np.testing.assert_array_equal(codes_at(points) > 0, surface_depth_um(points) > 0)


def test_surface_depth_is_a_distance_near_the_surface(points: np.ndarray) -> None:
    """Moving 50 um along the gradient changes the depth by about 50 um."""
    depth = surface_depth_um(points)
    near = points[np.abs(depth - 150) < 100]
    slope = np.stack([surface_depth_um(near + 5 * e) - surface_depth_um(near - 5 * e) for e in np.eye(3)], axis=1) / 10
    assert np.percentile(np.linalg.norm(slope, axis=1), 5) > 0.85
    assert np.percentile(np.linalg.norm(slope, axis=1), 95) < 1.15


def test_ids_are_sparse_and_large() -> None:
    assert len(np.unique(ids())) == len(kinds())
    assert (ids() > 2**24).sum() > 50
    assert ids().max() > 2**31
    assert ids().max() < 2**32


def test_every_leaf_is_somewhere_in_the_atlas() -> None:
    atlas = make_atlas(small(Recipe()))
    present = set(np.unique(atlas.labels.array()).tolist())
    parents = {row.parent_id for row in structures().rows}
    leaves = {row.id for row in structures().rows if row.id not in parents}
    assert leaves - present == set()
    assert present - {row.id for row in structures().rows} == {0}


def test_a_track_meets_the_cortical_layers_in_order() -> None:
    order = ["1", "2/3", "4", "5", "6a", "6b"]
    for seed in range(1, 8):
        for pen in make_penetrations(Recipe(seed=seed)):
            shank = pen.shanks[0]
            codes = codes_at(shank.at(np.arange(5.0, 900.0, 10.0)))
            layers = [kinds()[k].layer for k in codes if kinds()[k].layer in order]
            ranks = [order.index(layer) for layer in layers]
            assert ranks == sorted(ranks), (seed, pen.name)
            assert ranks[0] == 0


def test_layer_borders_of_the_visual_area_are_the_published_ones() -> None:
    """Along the normal in the middle of the primary visual area (means of Gouwens et al. 2019, from memory)."""
    area = next(a for a in AREAS if a.acronym == "VIP")
    lateral, depth = np.radians(area.angle_deg), np.arange(0.0, 1400.0, 2.0)
    out = np.array([0.0, -np.cos(lateral), np.sin(lateral)])
    ray = np.array([area.ap_um, 3350.0, MIDLINE_UM + 2420.0]) + np.arange(500.0, 3500.0, 1.0)[:, None] * out
    start = ray[np.flatnonzero(surface_depth_um(ray) > 0)[-1]]
    inward = np.array([np.diff(surface_depth_um(start + 5 * np.array([-e, e])))[0] for e in np.eye(3)])
    inward /= np.linalg.norm(inward)
    codes = codes_at(start + depth[:, None] * inward)
    layers = [kinds()[k].layer for k in codes]
    cortex = [layer for layer in layers if layer[:1] in tuple("12456")]
    share = np.cumsum([cortex.count(layer) for layer in ("1", "2/3", "4", "5", "6a")]) / len(cortex)
    published = np.cumsum([115.1, 218.4, 120.2, 234.0, 195.5]) / 922.6
    np.testing.assert_allclose(share, published, atol=0.04)


def test_ids_and_codes_agree(points: np.ndarray) -> None:
    np.testing.assert_array_equal(ids_at(points), ids()[codes_at(points)])
