"""Voxels that lie unpacked in one piece of a file, read on slicing."""

from __future__ import annotations

import os
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import product
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from leadline.base.arrays import AnyArray

PIECE_BYTES = 2**20
"""Read at once where a block is handed over in pieces: what fits into a processor's cache beside the sums."""


@dataclass(frozen=True, slots=True, eq=False)
class OnePiece:
    """Three or more axes of voxels in a file.

    They are read, not mapped into memory: a file that somebody cuts short meanwhile is an error then, where a map
    would end the process.

    ``file`` : a path or an open file. ``offset`` : bytes before the first voxel. ``order`` : 'C' where the last axis
    runs fastest, 'F' where the first does.
    """

    file: Any
    dtype: np.dtype[Any]
    offset: int
    shape: tuple[int, ...]
    order: Literal["C", "F"]

    def __getitem__(self, key: Any) -> Any:
        keys = self._turned(key if isinstance(key, tuple) else (key,), slice(None))
        spans = [_span(k, n) for k, n in zip(keys, self._turned(self.shape), strict=True)]
        out = np.empty([len(span) for span in spans], self.dtype)
        with self._open() as handle:
            self._fill(handle, spans, out)
        block = out[tuple(slice(None) if isinstance(k, slice) else 0 for k in keys)]
        return block if self.order == "C" else block.T

    def pieces(self, key: tuple[Any, ...] | None) -> Any:
        """A block in pieces of about 1 MiB (first index, voxels), each overwritten by the next; of None: True."""
        return True if key is None else self._pieces(key)

    def _pieces(self, key: tuple[Any, ...]) -> Iterator[tuple[tuple[int, ...], AnyArray]]:
        spans = [_span(k, n) for k, n in zip(self._turned(key), self._turned(self.shape), strict=True)]
        *outer, rows = spans[:-1]
        at_once = max(1, PIECE_BYTES // max(1, len(spans[-1]) * self.dtype.itemsize))
        buffer = np.empty(min(at_once, len(rows)) * len(spans[-1]), self.dtype)
        with self._open() as handle:
            for index in product(*outer):
                for k in range(0, len(rows), at_once):
                    box = [*(range(i, i + 1) for i in index), rows[k : k + at_once], spans[-1]]
                    shape = [len(span) for span in box]
                    piece = buffer[: int(np.prod(shape))].reshape(shape)
                    self._fill(handle, box, piece)
                    start = tuple(span.start for span in box)
                    yield (start, piece) if self.order == "C" else (start[::-1], piece.T)

    def _turned(self, values: tuple[Any, ...], rest: Any = None) -> tuple[Any, ...]:
        """One value for each axis, the axis that runs slowest first."""
        values = (*values, *(rest,) * (len(self.shape) - len(values)))
        return values if self.order == "C" else values[::-1]

    @contextmanager
    def _open(self) -> Iterator[int]:
        if not isinstance(self.file, Path | str):
            yield self.file.fileno()
            return
        with open(self.file, "rb", buffering=0) as handle:
            yield handle.fileno()

    def _fill(self, handle: int, spans: Sequence[range], out: AnyArray) -> None:
        """Read the voxels at the product of ``spans`` into ``out`` (C order, the same shape), run by run.

        A run is rows of whole lines, or more where the axes below are taken whole.
        """
        if not out.size:
            return
        shape = self._turned(self.shape)
        whole = [span == range(n) for span, n in zip(spans, shape, strict=True)]
        split = len(shape) - 2
        while split > 0 and all(whole[split:]):
            split -= 1
        first, last = spans[split].start, spans[split][-1] + 1
        run = (last - first, *shape[split + 1 :])
        taken = (slice(0, None, spans[split].step), *(slice(s.start, s.stop, s.step) for s in spans[split + 1 :]))
        plain = spans[split].step == 1 and all(whole[split + 1 :])
        scratch = np.empty(0 if plain else run, self.dtype)
        strides = np.cumprod((1, *shape[:0:-1]))[::-1].tolist()
        for index in product(*(enumerate(span) for span in spans[:split])):
            target = out[tuple(k for k, _ in index)]
            at = first * strides[split] + sum(i * stride for (_, i), stride in zip(index, strides, strict=False))
            _read(handle, target if plain else scratch, self.offset + at * self.dtype.itemsize)
            if not plain:
                target[...] = scratch[taken]


def _span(key: Any, n: int) -> range:
    span = range(*key.indices(n)) if isinstance(key, slice) else range(key % n, key % n + 1)
    if span.step < 0:
        raise IndexError("voxels are read forward only")
    return span


def _read(handle: int, out: AnyArray, at: int) -> None:
    """Fill an array from a place in a file. Raises EOFError where the file has become too short."""
    left = memoryview(out.data).cast("B")
    while left.nbytes:
        count = os.preadv(handle, [left], at)
        if not count:
            raise EOFError(f"the file ends at byte {at}; it was longer when it was opened")
        left, at = left[count:], at + count
