"""A template with the sample's own contrast: each region's brightness is learnt from the sample."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, Float32Array, FloatArray
from leadline.registration.grids import halve
from leadline.registration.nodes import spline_basis, to_voxels

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from leadline.registration.grids import Grid

FEW_VOXELS = 300
RIDGE_VOXELS = 200.0
RIDGE_VARIANCE = 0.01
LIGHT_UM, MOST_LIGHT = 1000.0, 4.0


def relabelled(labels: AnyArray) -> NDArray[np.int32]:
    """Labels as ranks 0, 1, 2, … with 0 outside."""
    ids, rank = np.unique(labels, return_inverse=True)
    first = 0 if ids[0] == 0 else 1
    return np.asarray(rank.reshape(labels.shape) + first, np.int32)


def matched_contrast(
    template: Float32Array, rank: NDArray[np.int32], sample: Float32Array, believed: BoolArray, grid: Grid
) -> Float32Array:
    """Give every region of the template the brightness and contrast that the sample shows there.

    In each region the sample is regressed on the template, ``sample = a + b template``; regions with few voxels lean
    to the line through all regions. A region's core is used where it has one, so that a misplaced border does not
    colour its neighbours. Regions stand on both sides of the brain and the light does not: after a first pass the
    slow part of what the regions do not explain is divided out of the sample, and the regions are learnt again.
    """
    from scipy.ndimage import maximum_filter, minimum_filter

    inside = believed & (rank > 0)
    if not inside.any():
        return template
    core = inside & (minimum_filter(rank, 3) == maximum_filter(rank, 3))
    first = _learnt(template, rank, sample, inside, core)
    even = sample / _light(sample, first, inside, grid)
    return _learnt(template, rank, even, inside, core)


def _learnt(
    template: Float32Array, rank: NDArray[np.int32], sample: Float32Array, inside: BoolArray, core: BoolArray
) -> Float32Array:
    count = int(rank.max()) + 1
    whole, cores = _sums(template, rank, sample, inside, count), _sums(template, rank, sample, core, count)
    n, f, m, ff, fm = np.where(cores[0] > FEW_VOXELS, cores, whole)
    size = np.maximum(n, 1)
    mean_f, mean_m = f / size, m / size
    var_f, covariance = ff / size - mean_f**2, fm / size - mean_f * mean_m
    seen = n > 0
    line = np.polyfit(mean_f[seen], mean_m[seen], 1, w=np.sqrt(n[seen])) if seen.sum() > 1 else np.array([1.0, 0.0])
    ridge = RIDGE_VOXELS * RIDGE_VARIANCE
    slope = np.clip((covariance * n + ridge * np.clip(line[0], 0, 1) / 2) / (var_f * n + ridge), 0, 2)
    sure = n / (n + RIDGE_VOXELS)
    level = sure * mean_m + (1 - sure) * np.polyval(line, mean_f)
    offset = np.where(seen, level - slope * mean_f, line[1])
    slope = np.where(seen, slope, line[0])
    offset[0], slope[0] = 0.0, 1.0
    return np.asarray(offset.astype(np.float32)[rank] + slope.astype(np.float32)[rank] * template)


def _light(sample: Float32Array, predicted: Float32Array, believed: BoolArray, grid: Grid) -> Float32Array:
    """How bright the sample is against a prediction, over ``LIGHT_UM``; worked out on a grid four times as coarse."""
    from scipy.ndimage import gaussian_filter

    coarse = grid.halved().halved()
    seen, want = (
        gaussian_filter(halve(halve(np.where(believed, image, 0))), LIGHT_UM / coarse.step_um)
        for image in (sample, predicted)
    )
    least = 1e-3 * float(want.max())
    ratio = np.where(want > least, np.clip(seen / np.maximum(want, least), 1 / MOST_LIGHT, MOST_LIGHT), 1.0)
    light = to_voxels(spline_basis(coarse, grid, 1), ratio.astype(np.float32))
    return np.where(light > 0, light, np.float32(1))


def _sums(
    template: Float32Array, rank: NDArray[np.int32], sample: Float32Array, chosen: BoolArray, count: int
) -> FloatArray:
    which = rank[chosen]
    f, m = template[chosen].astype(float), sample[chosen].astype(float)
    return np.stack([np.bincount(which, w, minlength=count) for w in (None, f, m, f * f, f * m)])
