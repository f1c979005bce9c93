"""A volume streamed once through several coarser grids onto disk; stops and goes on at rows of chunks."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.atomic import write_text
from leadline.base.errors import LeadlineError
from leadline.io.reduce import Adder, Grid, read, slabs

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator, Mapping, Sequence
    from pathlib import Path

    from leadline.base.arrays import AnyArray
    from leadline.base.progress import Progress
    from leadline.io.reduce import Block, Piece
    from leadline.model.volume import Volume

EDGE = 1e-6


@dataclass(slots=True)
class Ledger:
    """What is on disk: finished ``rows`` of each array along the axis that is walked, least and largest mean so far."""

    file: Path
    key: str
    shapes: dict[str, list[int]]
    rows: dict[str, int]
    low: float | None = None
    high: float | None = None

    @classmethod
    def of(cls, file: Path, key: str, shapes: Mapping[str, Sequence[int]]) -> Ledger:
        """The ledger in a file if it is of the same work, else one with nothing done."""
        wanted = {name: list(shape) for name, shape in shapes.items()}
        try:
            said = json.loads(file.read_text(encoding="utf-8"))
            if (said["key"], said["shapes"]) == (key, wanted):
                rows = {name: int(said["rows"][name]) for name in wanted}
                return cls(file, key, wanted, rows, said["low"], said["high"])
        except (OSError, ValueError, KeyError, TypeError):
            pass  # none there, or cut off: the work begins anew
        return cls(file, key, wanted, dict.fromkeys(wanted, 0))

    def keep(self) -> None:
        """Write it down, whole or not at all."""
        said = {"key": self.key, "shapes": self.shapes, "rows": self.rows, "low": self.low, "high": self.high}
        write_text(self.file, json.dumps(said) + "\n")

    def saw(self, means: AnyArray) -> bool:
        """Take note of the spread of what is to be written; False where a value is not finite."""
        low, high = float(means.min()), float(means.max())
        self.low = low if self.low is None else min(self.low, low)
        self.high = high if self.high is None else max(self.high, high)
        return bool(np.isfinite([low, high]).all())


class Pile:
    """The rows of one array that are being summed; complete rows of chunks are written and taken off.

    ``array`` : on disk, stored axes. ``order`` : axes as the volume is walked. ``full`` : voxels are copied, not
    summed.
    """

    def __init__(
        self, array: Any, grid: Grid, order: tuple[int, int, int], ledger: Ledger, name: str, *, full: bool
    ) -> None:
        self.array, self.grid, self.order, self.ledger, self.name, self.full = array, grid, order, ledger, name, full
        slow = order[0]
        self.factor, self.many, self.chunk = float(grid.factor[slow]), grid.shape[slow], int(array.chunks[slow])
        self.total: AnyArray = np.zeros((0, 0, 0), np.float32)

    @property
    def row(self) -> int:
        """The first row that is not on disk."""
        return self.ledger.rows[self.name]

    @property
    def needs(self) -> int:
        """The first plane of the volume that a row which is not on disk is made of."""
        slow = self.order[0]
        return self.grid.below[slow] if self.row >= self.many else int(np.floor(self.row * self.factor + EDGE))

    def rows_held(self, planes: int) -> int:
        """Rows to hold while slabs of so many planes are summed."""
        return max(1, min(self.chunk + int(np.ceil(planes / self.factor)) + 2, self.many - self.row))

    def copy(self, start: tuple[int, int, int], piece: AnyArray) -> None:
        """Store voxels as they are, but for those that are on disk."""
        if start[self.order[0]] >= self.row:
            self.array[tuple(slice(a, a + n) for a, n in zip(start, piece.shape, strict=True))] = piece

    def settle(self, planes: int) -> bool:
        """Write what is complete once the volume has been read up to a plane; whether anything was."""
        complete = self.many if planes == self.grid.below[self.order[0]] else int((planes + EDGE) / self.factor)
        if self.full:
            self.ledger.rows[self.name] = max(complete, self.row)
            return True
        rows = complete - self.row
        rows -= 0 if complete == self.many else rows % self.chunk
        if rows <= 0:
            return False
        place: list[slice] = [slice(None)] * 3
        place[self.order[0]] = slice(self.row, self.row + rows)
        self.array[tuple(place)] = self._means(rows).transpose(np.argsort(self.order))
        left = len(self.total) - rows
        self.total[:left] = self.total[rows:]
        self.total[left:] = 0
        self.ledger.rows[self.name] += rows
        return True

    def _means(self, rows: int) -> AnyArray:
        """Rows as they are stored, from their sums; row by row, which stay in the processor's cache."""
        slow, middle, fast = (self.grid.filled(axis) for axis in self.order)
        means: AnyArray = np.empty((rows, *self.total.shape[1:]), self.array.dtype)
        whole, last = self.array.dtype.kind in "iu", None
        for k, filled in enumerate(slow[self.row : self.row + rows]):
            if filled != last:
                share, last = (1.0 / (filled * middle[:, None] * fast)).astype(np.float32), filled
            mean = np.multiply(self.total[k], share, out=self.total[k])
            if not self.ledger.saw(mean):
                raise LeadlineError(
                    "the stack holds values that are not finite (NaN or infinite), first near voxel "
                    + self._place(mean, self.row + k),
                    mend="Replace them by the background value and export again",
                )
            means[k] = np.rint(mean, out=mean) if whole else mean
        return means

    def _place(self, mean: AnyArray, row: int) -> str:
        index = np.array([row, *np.argwhere(~np.isfinite(mean))[0]])[np.argsort(self.order)]
        return "(" + ", ".join(f"{x:.0f}" for x in index * self.grid.factor) + ")"


def stream(volume: Volume, piles: Sequence[Pile], ledger: Ledger, progress: Progress, label: str) -> None:
    """Read a volume slab by slab, from the first that is needed on, and write every pile's rows as they fill.

    Raises LeadlineError when a voxel is not finite, or when all are equal.
    """
    slow = piles[0].order[0]
    full, means = [pile for pile in piles if pile.full], [pile for pile in piles if not pile.full]
    every = slabs(volume, piles[0].order, least=max([pile.chunk for pile in full], default=1))
    begin = min(pile.needs for pile in piles)
    todo = [slab for slab in every if slab[0][slow].stop > begin]
    thick = max(slab[0][slow].stop - slab[0][slow].start for slab in every)
    adder = Adder([pile.grid for pile in means], piles[0].order, [pile.rows_held(thick) for pile in means])
    for pile, total in zip(means, adder.totals, strict=True):
        pile.total = total
    progress.begin(label, sum(map(len, every)))
    progress.step(sum(map(len, every)) - sum(map(len, todo)))
    for slab, pieces in _through(volume, todo, whole_blocks=bool(full)):
        for start, piece in pieces:
            for pile in full:
                pile.copy(start, piece)
            if means:
                adder.add(start, piece, [pile.row for pile in means])
        if slab is not None:
            wrote = [pile.settle(slab[0][slow].stop) for pile in piles]
            if any(wrote):
                ledger.keep()
        progress.step()
    if means and ledger.low == ledger.high:
        raise LeadlineError(
            f"the stack is empty: every voxel is {ledger.low or 0:g}", mend="Choose another channel or file"
        )


def _through(
    volume: Volume, todo: Sequence[Sequence[Block]], *, whole_blocks: bool
) -> Iterator[tuple[Sequence[Block] | None, Iterable[Piece]]]:
    """The pieces of every block, and with those of the last block of a slab that slab."""
    blocks = (block for slab in todo for block in slab)
    pieces = read(volume, blocks, whole_blocks=whole_blocks)
    for slab in todo:
        for k in range(len(slab)):
            yield (slab if k == len(slab) - 1 else None), next(pieces)
