"""Large stacks brought to coarser grids in one streamed pass, by exact area mean."""

from __future__ import annotations

from collections import deque
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from itertools import chain, product
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT, Progress
from leadline.model.volume import Volume

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Sequence

T = TypeVar("T")
A = TypeVar("A")
Block = tuple[slice, slice, slice]

BLOCK_BYTES = 16 * 2**20
"""Voxels read at once; a chunk that is larger is still read whole."""
READERS = 1
"""Threads that read and unpack the next blocks while one is summed."""
_KERNEL_TYPES = tuple(np.dtype(name) for name in ("uint8", "uint16", "int16", "float32", "float64"))


@dataclass(frozen=True, slots=True, eq=False)
class Grid:
    """A coarser grid over a volume, the same outer edge. ``factor`` : (3,) its voxels in voxels of the volume."""

    factor: FloatArray
    shape: tuple[int, int, int]
    below: tuple[int, int, int]

    @classmethod
    def over(cls, volume: Volume, target_um: float) -> Grid:
        """Voxels of ``target_um``, each axis by itself, never finer than those of the volume.

        At the far edge a box that is filled more than half counts, one that is less is left out.
        """
        factor = np.maximum(1.0, target_um / volume.voxel_um)
        factor = np.where(np.abs(factor - np.rint(factor)) < 1e-6, np.rint(factor), factor)
        a, b, c = (int(n) for n in np.maximum(1, np.rint(np.asarray(volume.shape) / factor - 1e-9)))
        return cls(factor, (a, b, c), volume.shape)

    def filled(self, axis: int) -> FloatArray:
        """How many voxels below lie in each voxel along an axis."""
        return np.diff(np.minimum(np.arange(self.shape[axis] + 1) * self.factor[axis], self.below[axis]))

    def voxel_um(self, volume: Volume) -> FloatArray:
        """Size of its voxels over a volume."""
        return volume.voxel_um * self.factor

    def origin_um(self, volume: Volume) -> FloatArray:
        """Centre of its first voxel over a volume."""
        return volume.origin_um + (self.factor - 1.0) / 2.0 * volume.voxel_um


def reduce_to(volume: Volume, target_um: float, progress: Progress = SILENT) -> Volume:
    """Average a volume down to voxels of ``target_um``, each axis by itself, never up.

    Every output voxel is the mean of the input over its own box; factors may be fractional, then input voxels on the
    border count by the part that lies inside. Memory: the result and a few blocks of 16 MiB.

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
    grid = Grid.over(volume, target_um)
    order = course(volume)
    blocks = list(chain.from_iterable(slabs(volume, order)))
    progress.begin("reading", len(blocks))
    adder = Adder((grid,), order)
    (total,) = adder.totals
    for pieces in read(volume, blocks):
        for start, piece in pieces:
            adder.add(start, piece)
        progress.step()
    total = total.transpose(np.argsort(order))
    for axis in range(3):
        total /= np.expand_dims(grid.filled(axis), [k for k in range(3) if k != axis]).astype(np.float32)
    result = Volume(total, grid.voxel_um(volume), volume.code, grid.origin_um(volume))
    require_image(result)
    return result


def course(volume: Volume) -> tuple[int, int, int]:
    """Axes in the order in which a volume is walked: first the one along which slabs are cheap, last the fastest."""
    shape = volume.shape
    chunk = volume.chunk or (1, shape[1], shape[2])
    slow = 0 if chunk[0] < shape[0] else int(np.argmin([c / n for c, n in zip(chunk, shape, strict=True)]))
    return ((0, 1, 2), (1, 0, 2), (2, 1, 0))[slow]


def slabs(volume: Volume, order: tuple[int, int, int], least: int = 1) -> list[list[Block]]:
    """Blocks of whole chunks that fill the volume, slab after slab along the first axis of ``order``.

    Blocks grow along the last axes first, up to ``BLOCK_BYTES``; slabs are a multiple of ``least`` voxels thick.
    """
    shape = volume.shape
    size = [min(max(1, c), n) for c, n in zip(volume.chunk or (1, shape[1], shape[2]), shape, strict=True)]
    size[order[0]] = int(np.lcm(size[order[0]], least))
    for axis in reversed(order):
        room = BLOCK_BYTES // (int(np.prod(size)) * volume.data.dtype.itemsize)
        size[axis] = min(shape[axis], size[axis] * max(1, room))
    cuts = [[slice(a, min(n, a + step)) for a in range(0, n, step)] for n, step in zip(shape, size, strict=True)]
    slow, *others = order
    found = []
    for thick in cuts[slow]:
        slab = []
        for tile in product(*(cuts[axis] for axis in sorted(others))):
            at = dict(zip(sorted(others), tile, strict=True)) | {slow: thick}
            slab.append((at[0], at[1], at[2]))
        found.append(slab)
    return found


Piece = tuple[tuple[int, int, int], AnyArray]


def read(volume: Volume, blocks: Iterable[Block], *, whole_blocks: bool = False) -> Iterator[Iterable[Piece]]:
    """For every block its voxels, in pieces (first index, voxels).

    Sources that offer ``pieces`` hand them over in one small buffer that is used again and stays in the processor's
    cache; others, and all ``whole_blocks``, are read ahead by threads.
    """
    offered = getattr(volume.data, "pieces", None)
    if not whole_blocks and offered is not None and offered(None) is not None:
        for block in blocks:
            yield offered(block)
        return

    def whole(block: Block) -> list[Piece]:
        return [((block[0].start, block[1].start, block[2].start), np.asarray(volume.data[block]))]

    yield from _ahead(whole, blocks)


def _ahead(work: Callable[[A], T], items: Iterable[A]) -> Iterator[T]:
    """Like ``map``, the next items worked on by threads while one is used."""
    waiting: deque[object] = deque()
    pool = ThreadPoolExecutor(READERS)
    try:
        for item in items:
            waiting.append(pool.submit(work, item))
            if len(waiting) > READERS:
                yield waiting.popleft().result()  # type: ignore[attr-defined]
        while waiting:
            yield waiting.popleft().result()  # type: ignore[attr-defined]
    finally:
        pool.shutdown(cancel_futures=True)


class Adder:
    """Sums of a volume over several grids at once, added piece by piece.

    ``totals`` : an array for each grid, its axes in ``order``; along the first of them it may hold a part of the grid
    only, of ``rows`` rows.
    """

    def __init__(self, grids: Sequence[Grid], order: tuple[int, int, int], rows: Sequence[int] | None = None) -> None:
        self._order = order
        self._factor = np.array([grid.factor[list(order)] for grid in grids]).reshape(-1, 3)
        self._shapes = np.array([[grid.shape[axis] for axis in order] for grid in grids], np.int64).reshape(-1, 3)
        if rows is not None:
            self._shapes[:, 0] = rows
        ends = np.cumsum(self._shapes.prod(axis=1))
        self._flat = np.zeros(int(self._shapes.prod(axis=1).sum()), np.float32)
        self._sums: AnyArray = np.zeros((0, 0))
        parts = np.split(self._flat, ends)[:-1]
        self.totals = [part.reshape(shape) for part, shape in zip(parts, self._shapes, strict=True)]

    def add(self, start: tuple[int, int, int], piece: AnyArray, first_rows: Sequence[int] | None = None) -> None:
        """Add the piece whose first voxel is ``start``, stored axes.

        ``first_rows`` : rows of the grids (0) at which the totals begin; what falls outside of them is dropped.
        """
        from leadline.io._reduce_kernel import add_block

        if piece.dtype not in _KERNEL_TYPES:
            piece = piece.astype(np.float64)
        fast = np.ascontiguousarray(piece.transpose(self._order), piece.dtype.newbyteorder("=")).view()
        fast.setflags(write=False)  # read-only and writable arrays would be compiled for twice
        offset = np.empty_like(self._factor)
        offset[:] = [start[axis] for axis in self._order]
        if first_rows is not None:
            offset[:, 0] -= self._factor[:, 0] * first_rows
        width = fast.shape[2] + 1
        if self._sums.shape[1] != width:
            # sums of a few hundred 16 bit values are exact in float32 but for the cut ones, whose weights are rounded
            exact = np.float64 if fast.dtype == np.float64 else np.float32
            self._sums = np.zeros((2 + len(offset), width), exact)
        add_block(fast, offset, self._factor, self._shapes, self._flat, self._sums)


def require_image(volume: Volume) -> None:
    """Raise LeadlineError for values that are not finite, naming the place, and for a volume of one value."""
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
