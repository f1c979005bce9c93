"""Volumes that are worked out, or read again, as they are sliced: memory does not grow with the stack."""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import replace
from itertools import product
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.model.volume import Volume

if TYPE_CHECKING:
    from leadline.base.arrays import AnyArray, Float32Array, IntArray
    from leadline.model.volume import Voxels

KEPT_BYTES = 128 * 2**20
KEPT_CHUNK_BYTES = 32 * 2**20

Region = tuple[slice, slice, slice]


def region_of(key: Any, shape: tuple[int, ...]) -> Region:
    """A basic index of slices of step 1 as three slices with start and stop."""
    parts = (key if isinstance(key, tuple) else (key,)) + (slice(None),) * 3
    a, b, c = (slice(*part.indices(n)[:2]) for part, n in zip(parts, shape, strict=False))
    return a, b, c


class Averaged:
    """The mean over whole blocks of ``factor`` voxels; what is left over at the far end is dropped."""

    dtype = np.dtype(np.float32)

    def __init__(self, data: Voxels, factor: IntArray) -> None:
        self._data, self.factor = data, factor
        self.shape = tuple(int(n) for n in np.asarray(data.shape) // factor)

    def __getitem__(self, key: Any) -> Float32Array:
        """Means of a region of slices."""
        parts = zip(region_of(key, self.shape), self.factor, strict=True)
        a, b, c = (slice(int(part.start * f), int(part.stop * f)) for part, f in parts)
        return block_mean(np.asarray(self._data[a, b, c]), self.factor)


def averaged(volume: Volume, target_um: float) -> Volume:
    """The volume averaged over whole blocks of about ``target_um``, read as it is sliced.

    Each axis is averaged over ``max(1, round(target_um / voxel))`` voxels.
    """
    factor = np.maximum(1, np.round(target_um / volume.voxel_um)).astype(int)
    factor = np.minimum(factor, volume.shape)
    origin = volume.origin_um + (factor - 1) / 2 * volume.voxel_um
    return Volume(Averaged(volume.data, factor), factor * volume.voxel_um, volume.code, origin)


def block_mean(block: AnyArray, factor: IntArray) -> Float32Array:
    """Mean over blocks, one axis after the other; values that are not finite count as 0.

    Whole slices are added, always in the same order: a mean does not depend on what else is read with it.
    """
    values = block if block.dtype.kind in "iub" else np.nan_to_num(block.astype(np.float32), posinf=0.0, neginf=0.0)
    for axis in (2, 1, 0):
        n = int(factor[axis])
        if n > 1:
            first, *others = (values[(slice(None),) * axis + (slice(k, None, n),)] for k in range(n))
            total = first.astype(np.float32)
            for other in others:
                total += other
            values = total
    return np.asarray(values * np.float32(1.0 / np.prod(factor)), np.float32)


class Kept:
    """Voxels on disk whose chunks are kept for a while once they are read; for what is read again and again."""

    def __init__(self, data: Voxels, chunk: tuple[int, int, int]) -> None:
        self._data, self._chunk = data, chunk
        self._chunks: OrderedDict[tuple[int, ...], AnyArray] = OrderedDict()
        self._many = max(1, KEPT_BYTES // (int(np.prod(chunk)) * data.dtype.itemsize))
        self.shape, self.dtype = data.shape, data.dtype

    def __getitem__(self, key: Any) -> AnyArray:
        """Voxels of a region of slices."""
        region = region_of(key, self.shape)
        out = np.empty([part.stop - part.start for part in region], self.dtype)
        spans = (range(p.start // c, -(-p.stop // c)) for p, c in zip(region, self._chunk, strict=True))
        for number in product(*spans):
            chunk = self._read(number)
            into, what = [], []
            for part, n, size, have in zip(region, number, self._chunk, chunk.shape, strict=True):
                low, high = max(part.start, n * size), min(part.stop, n * size + have)
                into.append(slice(low - part.start, high - part.start))
                what.append(slice(low - n * size, high - n * size))
            out[tuple(into)] = chunk[tuple(what)]
        return out

    def _read(self, number: tuple[int, ...]) -> AnyArray:
        chunk = self._chunks.pop(number, None)
        if chunk is None:
            while len(self._chunks) >= self._many:
                self._chunks.popitem(last=False)
            place = (slice(n * c, min((n + 1) * c, m)) for n, c, m in zip(number, self._chunk, self.shape, strict=True))
            chunk = np.asarray(self._data[tuple(place)])
        self._chunks[number] = chunk
        return chunk


def remembering(volume: Volume) -> Volume:
    """The volume with its chunks kept for a while, where it is on disk in chunks that are small enough."""
    chunk = volume.chunk
    if isinstance(volume.data, np.ndarray) or chunk is None:
        return volume
    if int(np.prod(chunk)) * volume.data.dtype.itemsize > KEPT_CHUNK_BYTES:
        return volume
    return replace(volume, data=Kept(volume.data, chunk))
