"""Volumes brought to a coarser grid slab by slab, and read again where a curve runs."""

from __future__ import annotations

from dataclasses import replace
from itertools import product
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.model.volume import Volume
from leadline.tracing.lazy import averaged

if TYPE_CHECKING:
    from collections.abc import Iterator

    from leadline.base.arrays import AnyArray, Float32Array, FloatArray

SLAB_VOXELS = 8_000_000
READ_VOXELS = 1_000_000


def check_frame(dye: Volume, background: Volume) -> None:
    """Raise LeadlineError unless both channels lie on the same voxels."""
    same = (
        dye.shape == background.shape
        and np.allclose(dye.voxel_um, background.voxel_um)
        and np.allclose(dye.origin_um, background.origin_um)
    )
    if not same:
        raise LeadlineError(
            f"the dye channel has shape {dye.shape} and voxels {dye.voxel_um.tolist()} um, "
            f"the background channel {background.shape} and {background.voxel_um.tolist()} um",
            where="tracing",
            mend="Give two channels of the same stack",
        )


def reduced(volume: Volume, target_um: float) -> Volume:
    """The volume in memory as float32, averaged over whole blocks of about ``target_um``.

    Reads slabs along the first axis, so that a volume on disk is never held whole.
    """
    coarse = averaged(volume, target_um)
    out = np.empty(coarse.shape, np.float32)
    for rows in slabs(volume, coarse):
        out[rows] = coarse.data[rows]
    return replace(coarse, data=out)


def slabs(volume: Volume, coarse: Volume, multiple: int = 1) -> list[slice]:
    """Rows of a volume averaged from another that are read at once; their number is a multiple of ``multiple``."""
    planes = round(float(coarse.voxel_um[0] / volume.voxel_um[0]))
    rows = max(1, int(SLAB_VOXELS // (planes * volume.shape[1] * volume.shape[2])) // multiple) * multiple
    return [slice(start, min(start + rows, coarse.shape[0])) for start in range(0, coarse.shape[0], rows)]


def sampled(volume: Volume, points_um: FloatArray) -> FloatArray:
    """Values at points ``(n, 3)`` by linear interpolation; NaN outside.

    Linear weights keep the first moment of what they sample, so centres are not drawn to the voxel grid. Points are
    read in runs whose bounding boxes stay small: a curve through a large volume costs only its corridor.
    """
    from scipy.ndimage import map_coordinates

    index = volume.index(points_um)
    last = np.asarray(volume.shape) - 1
    out = np.full(len(index), np.nan)
    for rows in _runs(index, last):
        part = index[rows]
        inside = ((part >= -0.5) & (part <= last + 0.5)).all(axis=1)
        if not inside.any():
            continue
        lo = np.clip(np.floor(part[inside].min(axis=0)).astype(int), 0, last)
        hi = np.clip(np.ceil(part[inside].max(axis=0)).astype(int) + 1, lo + 1, last + 1)
        block = np.asarray(volume.data[lo[0] : hi[0], lo[1] : hi[1], lo[2] : hi[2]])
        if block.dtype.kind == "f":
            block = np.nan_to_num(block.astype(np.float32, copy=False), nan=0.0, posinf=0.0, neginf=0.0)
        values = map_coordinates(block, (part[inside] - lo).T, order=1, mode="nearest", output=np.float32)
        out[np.arange(rows.start, rows.stop)[inside]] = values
    return out


def _runs(index: FloatArray, last: FloatArray) -> Iterator[slice]:
    """Split rows in halves until the box around each run is small."""
    stack = [slice(0, len(index))]
    while stack:
        rows = stack.pop()
        part = np.clip(index[rows], 0, last)
        size = np.prod(np.ptp(part, axis=0) + 2) if len(part) else 0.0
        if size > READ_VOXELS and rows.stop - rows.start > 1:
            middle = (rows.start + rows.stop) // 2
            stack += [slice(middle, rows.stop), slice(rows.start, middle)]
        elif len(part):
            yield rows


def grown(values: AnyArray, places: tuple[FloatArray, FloatArray, FloatArray]) -> Float32Array:
    """A coarse volume on the finer grid of three axes of fractional indices, linear between voxels, constant beyond.

    ``values`` may carry further axes behind the first three. One axis after the other: the cost is that of writing.
    """
    out = np.asarray(values, np.float32)
    for axis in (0, 1, 2):
        at = np.clip(places[axis], 0, out.shape[axis] - 1)
        low = np.minimum(at.astype(int), max(out.shape[axis] - 2, 0))
        part = (at - low).astype(np.float32).reshape([-1 if k == axis else 1 for k in range(out.ndim)])
        high = np.minimum(low + 1, out.shape[axis] - 1)
        lower = out.take(low, axis=axis)
        out = lower + part * (out.take(high, axis=axis) - lower)
    return out


def blocks(shape: tuple[int, ...], size: int, margin: tuple[int, ...]) -> Iterator[tuple[tuple[slice, ...], ...]]:
    """Blocks of ``size`` voxels with a margin: pairs of (block with margin, the block itself inside it)."""
    for starts in product(*(range(0, n, size) for n in shape)):
        stops = [min(a + size, n) for a, n in zip(starts, shape, strict=True)]
        lo = [max(a - m, 0) for a, m in zip(starts, margin, strict=True)]
        hi = [min(b + m, n) for b, m, n in zip(stops, margin, shape, strict=True)]
        outer = tuple(slice(a, b) for a, b in zip(lo, hi, strict=True))
        inner = tuple(slice(a - o, b - o) for a, b, o in zip(starts, stops, lo, strict=True))
        yield outer, inner
