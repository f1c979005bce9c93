"""Large stacks brought to a working resolution in one streamed pass, by exact area mean."""

from __future__ import annotations

from itertools import product
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT, Progress
from leadline.model.volume import Volume

if TYPE_CHECKING:
    from collections.abc import Iterator

BLOCK_BYTES = 64 * 2**20
"""Voxels read at once; a chunk that is larger is still read whole."""
_KERNEL_TYPES = ("uint8", "uint16", "int16", "float32", "float64")


def reduce_to(volume: Volume, target_um: float, progress: Progress = SILENT) -> Volume:
    """Average a volume down to voxels of ``target_um``, each axis by itself, never up.

    Every output voxel is the mean of the input over its own box; factors may be fractional, then input voxels on the
    border count by the part that lies inside. At the far edge a box that is filled more than half is the mean of
    what it holds, one that is less is left out. Memory: the result and about 64 MiB.

    Parameters
    ----------
    volume : any size, read once, block by block.
    target_um : wanted voxel edge; axes that are coarser already stay as they are.

    Returns
    -------
    Volume : float32 in memory; ``origin_um`` is the centre of its first voxel.

    Raises
    ------
    LeadlineError : a voxel is not finite, or all voxels are equal (an empty stack).
    """
    factor = np.maximum(1.0, target_um / volume.voxel_um)
    factor = np.where(np.abs(factor - np.rint(factor)) < 1e-6, np.rint(factor), factor)
    shape = np.maximum(1, np.rint(np.asarray(volume.shape) / factor - 1e-9)).astype(int)
    total = np.zeros(shape, np.float32)
    blocks = list(_blocks(volume))
    progress.begin("reading", len(blocks))
    for block in blocks:
        _add(total, volume.data[block], [piece.start for piece in block], factor)
        progress.step()
    for axis, filled in enumerate(_filled(volume.shape, factor, shape)):
        total /= np.expand_dims(filled, [k for k in range(3) if k != axis]).astype(np.float32)
    origin = volume.origin_um + (factor - 1.0) / 2.0 * volume.voxel_um
    result = Volume(total, volume.voxel_um * factor, volume.code, origin)
    _require_image(result)
    return result


def _blocks(volume: Volume) -> Iterator[tuple[slice, slice, slice]]:
    """Blocks of whole chunks that fill the volume, grown along the last axes first up to ``BLOCK_BYTES``."""
    shape = volume.shape
    size = list(volume.chunk or (1, shape[1], shape[2]))
    size = [min(max(1, chunk), n) for chunk, n in zip(size, shape, strict=True)]
    for axis in (2, 1, 0):
        room = BLOCK_BYTES // (int(np.prod(size)) * volume.data.dtype.itemsize)
        size[axis] = min(shape[axis], size[axis] * max(1, room))
    for starts in product(*(range(0, n, step) for n, step in zip(shape, size, strict=True))):
        a, b, c = (slice(s, min(n, s + step)) for s, step, n in zip(starts, size, shape, strict=True))
        yield a, b, c


def _filled(shape: tuple[int, int, int], factor: FloatArray, out: AnyArray) -> list[FloatArray]:
    """How many input voxels lie in each output voxel, by axis."""
    edges = [np.minimum(np.arange(m + 1) * f, n) for n, f, m in zip(shape, factor, out, strict=True)]
    return [np.diff(edge) for edge in edges]


def _add(total: AnyArray, block: AnyArray, start: list[int], factor: FloatArray) -> None:
    """Add a block's share to the output voxels that it touches."""
    from leadline.io._reduce_kernel import add_block

    order = sorted(range(3), key=lambda axis: -block.strides[axis])
    if block.dtype.name not in _KERNEL_TYPES:
        block = block.astype(np.float64)
    fast = np.ascontiguousarray(block.transpose(order), block.dtype.newbyteorder("=")).view()
    fast.setflags(write=False)  # read-only and writable arrays would be compiled for twice
    first = [int(start[axis] / factor[axis]) for axis in order]
    last = [
        min(total.shape[axis], int(np.ceil((start[axis] + n) / factor[axis])))
        for axis, n in zip(order, fast.shape, strict=True)
    ]
    if any(a >= b for a, b in zip(first, last, strict=True)):
        return
    share = np.zeros([b - a for a, b in zip(first, last, strict=True)])
    offset = np.array([start[axis] - k * factor[axis] for axis, k in zip(order, first, strict=True)])
    # sums of a few hundred 16 bit values are exact in float32 but for the cut ones, whose weights are rounded
    sums = np.float64 if fast.dtype == np.float64 else np.float32
    add_block(fast, offset, factor[order], np.empty(fast.shape[2], sums), share)
    part = total.transpose(order)[tuple(slice(a, b) for a, b in zip(first, last, strict=True))]
    part += share


def _require_image(volume: Volume) -> None:
    voxels = volume.array()
    finite = np.isfinite(voxels)
    if not finite.all():
        index = np.argwhere(~finite)[0]
        place = ", ".join(f"{x:.0f}" for x in volume.points(index))
        raise LeadlineError(
            f"the stack holds values that are not finite (NaN or infinite), first near ({place}) um",
            mend="Replace them by the background value and export again",
        )
    if voxels.min() == voxels.max():
        raise LeadlineError(
            f"the stack is empty: every voxel is {float(voxels.flat[0]):g}", mend="Choose another channel or file"
        )
