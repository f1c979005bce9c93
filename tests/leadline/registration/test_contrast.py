"""The template learns each region's brightness from the sample."""

from __future__ import annotations

import numpy as np
import pytest

from leadline.registration.contrast import matched_contrast, relabelled
from leadline.registration.grids import Grid

GRID = Grid((30, 20, 20), 100.0, np.zeros(3))


def regions() -> tuple[np.ndarray, np.ndarray]:
    """Three slabs with ids that float32 could not hold apart, and a template that varies inside each."""
    labels = np.zeros((30, 20, 20), np.uint32)
    labels[3:12], labels[12:20], labels[20:27] = 2**32 - 1, 2**32 - 2, 5
    ripple = 0.2 * np.sin(np.arange(20) / 3)[None, :, None]
    return labels, np.where(labels > 0, 1.0 + ripple, 0.0).astype(np.float32)


def test_ids_become_ranks_and_outside_stays_zero() -> None:
    labels, _ = regions()
    rank = relabelled(labels)
    assert sorted(np.unique(rank)) == [0, 1, 2, 3]
    assert ((rank == 0) == (labels == 0)).all()
    assert relabelled(labels[3:27]).min() == 1


def test_brightness_and_contrast_of_each_region_are_learnt() -> None:
    labels, template = regions()
    sample = np.zeros_like(template)
    for k, (level, slope) in {5: (0.3, 1.5), 2**32 - 1: (0.9, 0.4), 2**32 - 2: (0.1, 0.8)}.items():
        sample[labels == k] = level + slope * template[labels == k]
    sample += np.random.default_rng(1).normal(0, 0.02, sample.shape).astype(np.float32)
    found = matched_contrast(template, relabelled(labels), sample, labels > 0, GRID)
    inside = labels > 0
    assert np.abs(found - sample)[inside].mean() < 0.04
    assert (found[~inside] == 0).all()


def test_a_region_that_is_not_believed_follows_the_line_of_the_others() -> None:
    labels, template = regions()
    sample = 0.5 * template + np.where(labels > 0, 0.1, 0).astype(np.float32)
    believed = (labels > 0) & (labels != 5)
    lied = np.where(labels == 5, 9.0, sample).astype(np.float32)
    found = matched_contrast(template, relabelled(labels), lied, believed, GRID)
    assert found[labels == 5].mean() == pytest.approx(sample[labels == 5].mean(), abs=0.15)


def test_with_nothing_to_learn_from_the_template_is_returned() -> None:
    labels, template = regions()
    nothing = np.zeros(labels.shape, bool)
    assert matched_contrast(template, relabelled(labels), template, nothing, GRID) is template


def test_uneven_light_does_not_colour_the_regions() -> None:
    """A region that stands on both sides keeps one brightness though one side is lit half as bright again."""
    labels = np.zeros((48, 48, 96), np.uint32)
    labels[4:-4, 4:-4, 4:-4] = 1
    labels[14:-14, 14:-14, 14:34] = labels[14:-14, 14:-14, 62:82] = 2
    template = np.where(labels > 0, 1.0, 0.0).astype(np.float32)
    true = np.choose(labels, [0.0, 1.0, 0.6]).astype(np.float32)
    light = np.linspace(0.75, 1.25, 96, dtype=np.float32)[None, None, :]
    grid = Grid(labels.shape, 100.0, np.zeros(3))
    found = matched_contrast(template, relabelled(labels), true * light, labels > 0, grid)
    assert found[labels == 2].mean() / found[labels == 1].mean() == pytest.approx(0.6, abs=0.05)
    assert found[labels == 2].std() < 0.02
