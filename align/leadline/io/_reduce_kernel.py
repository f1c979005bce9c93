"""The compiled loop of :mod:`leadline.io.reduce`; imported on first use, because numba is slow to import."""

from __future__ import annotations

from typing import Any

import numba
import numpy as np

EDGE = 1e-9
"""Borders nearer than this, in input voxels, are one."""


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _sum_lines(plane: Any, low: float, high: float, line: Any) -> None:  # pragma: no cover - compiled
    """Sum lines ``low`` to ``high`` of a plane into ``line``, those that a border cuts by the part inside.

    All work on single voxels is done here, over contiguous memory, so that the compiler can do eight at a time.
    """
    number, n = line.dtype.type, len(line)
    j, stop = int(np.ceil(low - EDGE)), int(np.floor(high + EDGE))
    if stop < j:
        only, part = plane[stop], number(high - low)
        for k in range(n):
            line[k] = part * number(only[k])
        return
    line[:] = 0
    if j - low > EDGE:
        cut, part = plane[j - 1], number(j - low)
        for k in range(n):
            line[k] = part * number(cut[k])
    while j + 1 < stop:
        one, two = plane[j], plane[j + 1]
        for k in range(n):
            line[k] += number(one[k]) + number(two[k])
        j += 2
    if j < stop:
        one = plane[j]
        for k in range(n):
            line[k] += number(one[k])
    if high - stop > EDGE:
        cut, part = plane[stop], number(high - stop)
        for k in range(n):
            line[k] += part * number(cut[k])


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _runs(n: int, offset: float, factor: float, most: int, stops: Any, shares: Any) -> int:  # pragma: no cover
    """Where the output voxels that a line of ``n`` touches stop, and which share of their last voxel is theirs.

    Returns how many there are; ``stops[0]`` is 0. The rest of a cut voxel belongs to the next one.
    """
    first, many = int(np.floor(offset / factor + EDGE)), 0
    stops[0], edge = 0, 0.0
    while edge < n - EDGE and first + many < most:
        edge = min((first + many + 1) * factor - offset, float(n))
        stop = int(np.ceil(edge - EDGE))
        many += 1
        stops[many], shares[many] = stop, 1.0 - (stop - edge)
    return many


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _sum_runs(line: Any, many: int, stops: Any, shares: Any, row: Any) -> None:  # pragma: no cover - compiled
    """Sums of the line over each of ``many`` output voxels, into ``row``; two sums at a time are faster."""
    number = line.dtype.type
    rest = number(0)
    for c in range(many):
        k, last = stops[c], stops[c + 1] - 1
        if last < k:  # the end of the line cuts a voxel's rest off
            row[c] = rest
            continue
        one, two = rest, number(0)
        while k + 1 < last:
            one += line[k]
            two += line[k + 1]
            k += 2
        if k < last:
            one += line[k]
        part = number(shares[c + 1]) * line[last]
        row[c] = one + two + part
        rest = line[last] - part


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _add_row(totals: Any, place: int, weight: float, row: Any, many: int) -> None:  # pragma: no cover - compiled
    share, into = totals.dtype.type(weight), totals[place : place + many]
    for k in range(many):
        into[k] += share * row[k]


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def add_block(block: Any, offset: Any, factor: Any, shapes: Any, totals: Any, sums: Any) -> None:  # pragma: no cover
    """Add the sums of ``block`` (n0, n1, n2) to several coarser grids at once; every voxel is read once.

    ``offset``, ``factor`` : (grids, 3) start of the block in the first output voxel, and size of an output voxel (not
    below 1), both in input voxels. ``shapes`` : (grids, 3). ``totals`` : the grids' voxels, one grid after the other,
    in one dimension; what lies outside is dropped. ``sums`` : (2 + grids, n2 + 1) to work in; its type is that of the
    sums.
    """
    grids, n1, n2 = len(factor), block.shape[1], block.shape[2]
    line, row = sums[0, :n2], sums[1]
    first, many, cell = np.zeros(grids, np.int64), np.zeros(grids, np.int64), np.zeros(grids, np.int64)
    stops, shares = np.zeros((grids, n2 + 2), np.int64), np.zeros((grids, n2 + 2))
    for g in range(grids):
        first[g] = int(np.floor(offset[g, 2] / factor[g, 2] + EDGE))
        many[g] = _runs(n2, offset[g, 2], factor[g, 2], shapes[g, 2], stops[g], shares[g])
    begun = np.zeros(grids, np.bool_)
    for i in range(block.shape[0]):
        low = 0.0
        for g in range(grids):
            cell[g] = int(np.floor(offset[g, 1] / factor[g, 1] + EDGE))
        while low < n1 - EDGE:
            # the next border of any grid: up to it, all of them take the same lines
            high = float(n1)
            for g in range(grids):
                high = min(high, (cell[g] + 1) * factor[g, 1] - offset[g, 1])
            _sum_lines(block[i], low, high, line)
            begin = 0
            for g in range(grids):
                own = sums[2 + g, :n2]
                ends = high > n1 - EDGE or (cell[g] + 1) * factor[g, 1] - offset[g, 1] < high + EDGE
                if begun[g]:
                    _add_row(sums[2 + g], 0, 1.0, line, n2)
                elif not ends:
                    own[:] = line
                if ends and cell[g] < shapes[g, 1]:
                    _sum_runs(own if begun[g] else line, many[g], stops[g], shares[g], row)
                    at = i + offset[g, 0]
                    a = int(np.floor(at / factor[g, 0] + EDGE))
                    here = min(1.0, (a + 1) * factor[g, 0] - at)
                    place = begin + (a * shapes[g, 1] + cell[g]) * shapes[g, 2] + first[g]
                    if 0 <= a < shapes[g, 0]:
                        _add_row(totals, place, here, row, many[g])
                    if 0 <= a + 1 < shapes[g, 0] and here < 1.0 - EDGE:
                        _add_row(totals, place + shapes[g, 1] * shapes[g, 2], 1.0 - here, row, many[g])
                begun[g] = not ends
                cell[g] += ends
                begin += shapes[g, 0] * shapes[g, 1] * shapes[g, 2]
            low = high
