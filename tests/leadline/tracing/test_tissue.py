"""Tissue, depth and autofluorescence."""

from __future__ import annotations

import numpy as np

from leadline.model.volume import Volume
from leadline.tracing.autofluorescence import excess, foretell
from leadline.tracing.tissue import depth_on, find_tissue


def slab(hole=False, cut=True):
    """Tissue from axis 1 = 1000 um on, to the volume's end."""
    rng = np.random.default_rng(2)
    grey = np.full((60, 60, 60), 60.0)
    grey[:, 25:, :] = 500
    if hole:
        grey[20:28, 38:46, 20:28] = 60
    return Volume((grey + rng.normal(0, 15, grey.shape)).astype(np.float32), np.full(3, 40.0), "PIR")


def test_depth_is_counted_from_the_surface_not_from_the_cut_sides():
    tissue = find_tissue(slab())
    depth = tissue.depth_at(np.array([[1200.0, 1500, 1200], [20, 2000, 1200], [1200, 400, 1200]]))
    np.testing.assert_allclose(depth, [520, 1020, 0], atol=60)


def test_a_hole_inside_is_no_surface():
    tissue = find_tissue(slab(hole=True))
    assert tissue.depth_at(np.array([[960.0, 1680, 960]]))[0] > 500


def test_depth_on_a_grid_is_depth_at_its_points():
    volume = slab()
    tissue = find_tissue(volume)
    grid = depth_on(tissue, volume)
    index = np.random.default_rng(0).integers(0, 60, (50, 3))
    np.testing.assert_allclose(grid[tuple(index.T)], tissue.depth_at(volume.points(index)), atol=0.05)


def test_autofluorescence_is_taken_off_and_dye_is_left():
    """A slope that grows by 40 % across the volume: what is left of tissue has mean 0 and sd 1, dye stays."""
    rng = np.random.default_rng(7)
    shape = (64, 64, 64)
    auto = 400 + 80 * rng.normal(0, 1, shape) + np.arange(64)[:, None, None] * 4
    slope = 0.3 + 0.002 * np.arange(64)[None, :, None]
    dye = 50 + slope * auto + rng.normal(0, 10, shape)
    dye[30:33, :, 30:33] += 200
    frame = (np.full(3, 25.0), "PIR")
    a, d = (Volume(v.astype(np.float32), *frame) for v in (auto, dye))
    z = excess(d, a, foretell(d, a, np.ones(shape, bool))).array()
    tissue = z[:20]
    assert abs(tissue.mean()) < 0.1
    assert 0.85 < tissue.std() < 1.25
    assert z[31, :, 31].mean() > 8  # 4 asinh(20 / 4) = 9.2


def test_empty_places_do_not_break_the_regression():
    rng = np.random.default_rng(1)
    y, x = (Volume(rng.normal(100, 5, (40, 40, 40)).astype(np.float32), np.full(3, 36.0), "PIR") for _ in range(2))
    inside = np.zeros((40, 40, 40), bool)
    inside[:10] = True
    assert np.isfinite(foretell(y, x, inside).maps).all()
