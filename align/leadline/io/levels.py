"""Where the voxels of a coarser level lie, when the file does not say."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from leadline.io.images import Level

if TYPE_CHECKING:
    from leadline.base.arrays import AnyArray, FloatArray

_BLOCK = 16
"""Edge of the block of coarse voxels that is looked at."""


def placed(levels: tuple[Level, ...]) -> tuple[Level, ...]:
    """Levels with their offsets, seen in the voxels themselves.

    Some writers make a level by averaging boxes of voxels, so its first centre lies half a coarse voxel inside; others
    take every n-th voxel, so it lies on the first fine one. Files that carry no translation do not tell which, and a
    wrong choice moves the brain by up to half a coarse voxel. A small block in the middle is compared with both.
    """
    offsets = [np.zeros(3)]
    for fine, coarse in pairwise(levels):
        step = coarse.factor / fine.factor
        inside = np.zeros(3) if _every_nth(fine, coarse, step) else (step - 1.0) / 2.0
        offsets.append(offsets[-1] + inside * fine.factor)
    return tuple(replace(level, offset=offset) for level, offset in zip(levels, offsets, strict=True))


def _every_nth(fine: Level, coarse: Level, step: FloatArray) -> bool:
    """Whether the coarse voxels are every n-th fine one rather than the mean of their boxes."""
    n = np.rint(step).astype(int)
    if not np.allclose(step, n):
        return False
    size = np.minimum(_BLOCK, np.minimum(coarse.data.shape, np.asarray(fine.data.shape) // n))
    start = (np.asarray(coarse.data.shape) - size) // 2
    start = np.minimum(start, np.asarray(fine.data.shape) // n - size)
    seen = _read(coarse, start, size)
    below = _read(fine, start * n, size * n)
    boxes = below.reshape(size[0], n[0], size[1], n[1], size[2], n[2])
    picked_rms = np.square(boxes[:, 0, :, 0, :, 0] - seen).mean()
    mean_rms = np.square(boxes.mean(axis=(1, 3, 5)) - seen).mean()
    return bool(picked_rms < mean_rms)


def _read(level: Level, start: AnyArray, size: AnyArray) -> FloatArray:
    block: FloatArray = np.asarray(level.data[tuple(slice(a, a + n) for a, n in zip(start, size, strict=True))], float)
    return block
