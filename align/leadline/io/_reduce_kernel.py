"""The compiled loop of :mod:`leadline.io.reduce`; imported on first use, because numba is slow to import."""

from __future__ import annotations

from typing import Any

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _sum_lines(plane: Any, low: float, high: float, line: Any) -> None:
    """Sum lines ``low`` to ``high`` of a plane into ``line``, those that a border cuts by the part inside.

    All work on single voxels is done here, over contiguous memory, so that the compiler can do eight at a time.
    """
    line[:] = 0
    for j in range(int(low), int(np.ceil(high))):
        weight = min(j + 1.0, high) - max(float(j), low)
        if weight > 1.0 - 1e-9:
            for k in range(len(line)):
                line[k] += line.dtype.type(plane[j, k])
        elif weight > 1e-9:
            part = line.dtype.type(weight)
            for k in range(len(line)):
                line[k] += part * line.dtype.type(plane[j, k])


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _add_line(line: Any, offset: float, factor: float, weight: float, row: Any) -> None:
    """Add the sums of a line to ``row``, times ``weight``; a value cut by an output border is split between both."""
    n, m = len(line), len(row)
    k = 0
    for out in range(m):
        edge = min((out + 1) * factor - offset, float(n))
        whole = int(edge)
        here = 0.0
        while k < whole:
            here += line[k]
            k += 1
        rest = edge - whole
        if rest > 0.0 and whole < n:
            here += line[whole] * rest
            if out + 1 < m:
                row[out + 1] += line[whole] * (1.0 - rest) * weight
            k = whole + 1
        row[out] += here * weight


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def add_block(block: Any, offset: Any, factor: Any, line: Any, share: Any) -> None:
    """Add the sums of ``block`` (n0, n1, n2) to ``share`` (m0, m1, m2), output voxels of ``factor`` input voxels.

    ``offset`` : (3,) start of the block in the first output voxel, in input voxels. ``line`` : (n2,) to work in; its
    type is that of the sums.
    """
    for i in range(block.shape[0]):
        a = int((i + offset[0]) / factor[0])
        first = min(1.0, (a + 1) * factor[0] - offset[0] - i)
        for b in range(share.shape[1]):
            low = max(0.0, b * factor[1] - offset[1])
            high = min(float(block.shape[1]), (b + 1) * factor[1] - offset[1])
            _sum_lines(block[i], low, high, line)
            if a < share.shape[0]:
                _add_line(line, offset[2], factor[2], first, share[a, b])
            if first < 1.0 - 1e-9 and a + 1 < share.shape[0]:
                _add_line(line, offset[2], factor[2], 1.0 - first, share[a + 1, b])
