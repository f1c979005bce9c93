"""A template with the sample's own contrast: each region's brightness is learnt from the sample."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, Float32Array, FloatArray

if TYPE_CHECKING:
    from numpy.typing import NDArray

FEW_VOXELS = 300
RIDGE_VOXELS = 200.0
RIDGE_VARIANCE = 0.01


def relabelled(labels: AnyArray) -> NDArray[np.int32]:
    """Labels as ranks 0, 1, 2, … with 0 outside."""
    ids, rank = np.unique(labels, return_inverse=True)
    first = 0 if ids[0] == 0 else 1
    return np.asarray(rank.reshape(labels.shape) + first, np.int32)


def matched_contrast(
    template: Float32Array, rank: NDArray[np.int32], sample: Float32Array, believed: BoolArray
) -> Float32Array:
    """Give every region of the template the brightness and contrast that the sample shows there.

    In each region the sample is regressed on the template, ``sample = a + b template``; regions with few voxels lean
    to the line through all regions. A region's core is used where it has one, so that a misplaced border does not
    colour its neighbours.
    """
    from scipy.ndimage import maximum_filter, minimum_filter

    count = int(rank.max()) + 1
    inside = believed & (rank > 0)
    core = inside & (minimum_filter(rank, 3) == maximum_filter(rank, 3))
    whole, cores = _sums(template, rank, sample, inside, count), _sums(template, rank, sample, core, count)
    n, f, m, ff, fm = np.where(cores[0] > FEW_VOXELS, cores, whole)
    size = np.maximum(n, 1)
    mean_f, mean_m = f / size, m / size
    var_f, covariance = ff / size - mean_f**2, fm / size - mean_f * mean_m
    seen = n > 0
    if seen.sum() < 2:
        return template
    line = np.polyfit(mean_f[seen], mean_m[seen], 1, w=np.sqrt(n[seen]))
    ridge = RIDGE_VOXELS * RIDGE_VARIANCE
    slope = np.clip((covariance * n + ridge * np.clip(line[0], 0, 1) / 2) / (var_f * n + ridge), 0, 2)
    sure = n / (n + RIDGE_VOXELS)
    level = sure * mean_m + (1 - sure) * np.polyval(line, mean_f)
    offset = np.where(seen, level - slope * mean_f, line[1])
    slope = np.where(seen, slope, line[0])
    offset[0], slope[0] = 0.0, 1.0
    return np.asarray(offset.astype(np.float32)[rank] + slope.astype(np.float32)[rank] * template)


def _sums(
    template: Float32Array, rank: NDArray[np.int32], sample: Float32Array, chosen: BoolArray, count: int
) -> FloatArray:
    which = rank[chosen]
    f, m = template[chosen].astype(float), sample[chosen].astype(float)
    return np.stack([np.bincount(which, w, minlength=count) for w in (None, f, m, f * f, f * m)])
