"""Background off, tissue found, dye distrusted."""

from __future__ import annotations

import numpy as np
import pytest

from leadline.base.errors import LeadlineError
from leadline.model.volume import Volume
from leadline.registration.grids import Grid
from leadline.registration.prepare import find_tissue, nearest_labels, prepare_atlas, prepare_sample

VOXEL = np.full(3, 50.0)


def ball(radius: float = 16.0) -> np.ndarray:
    at = np.indices((44, 44, 44)) - 21.5
    return np.sqrt((at**2).sum(axis=0)) < radius


def photograph(tissue: np.ndarray, seed: int = 1) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return np.clip(100 + 300.0 * tissue + rng.normal(0, 12, tissue.shape), 0, None).astype(np.uint16)


def test_tissue_is_found_and_specks_are_not() -> None:
    specked = ball()
    specked[2:4, 2:4, 2:4] = True
    found = find_tissue(photograph(specked).astype(np.float32))
    assert (found & ball()).sum() > 0.97 * ball().sum()
    assert not found[:6, :6, :6].any()


def test_background_becomes_nought_and_tissue_one() -> None:
    sample = prepare_sample(Volume(photograph(ball()), VOXEL, "PIR"), None, step_um=50.0, levels=2)
    fine, half = sample.images
    assert np.median(fine.intensity[ball(14)]) == pytest.approx(1.0, abs=0.02)
    assert fine.intensity[~ball(19)].mean() < 0.05
    assert half.grid.step_um == 100.0
    assert half.intensity.shape == (22, 22, 22)


def test_a_track_of_dye_is_not_trusted_and_the_rest_is() -> None:
    dye = photograph(0.3 * ball()).astype(float)
    dye[10:34, 21:23, 21:23] += 1500
    sample = prepare_sample(Volume(photograph(ball()), VOXEL, "PIR"), Volume(dye, VOXEL, "PIR"), step_um=50.0, levels=1)
    trust = sample.images[0].trust
    assert not trust[12:32, 21:23, 21:23].any()
    assert trust[ball()].mean() > 0.95


def test_a_dye_channel_of_another_size_is_refused() -> None:
    with pytest.raises(LeadlineError, match="differ in size"):
        prepare_sample(
            Volume(photograph(ball()), VOXEL, "PIR"),
            Volume(np.ones((20, 44, 44)), VOXEL, "PIR"),
            step_um=50.0,
            levels=1,
        )


def test_an_atlas_without_tissue_is_refused() -> None:
    flat = Volume(np.ones((40, 40, 40)), VOXEL, "PIR")
    with pytest.raises(LeadlineError, match="atlas template shows no tissue"):
        prepare_atlas(flat, flat, step_um=50.0, levels=2)


def test_labels_keep_their_exact_ids_on_another_grid() -> None:
    ids = np.array([0, 16777217, 4294967295, 16777219], np.uint32)
    labels = Volume(np.broadcast_to(ids[:, None, None], (4, 3, 3)), np.full(3, 100.0), "PIR")
    grid = Grid((8, 6, 6), 50.0, np.full(3, -25.0))
    assert nearest_labels(labels, grid)[:, 0, 0].tolist() == np.repeat(ids, 2).tolist()
