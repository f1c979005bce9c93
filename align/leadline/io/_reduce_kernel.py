"""The compiled loop of :mod:`leadline.io.reduce`; imported on first use, because numba is slow to import."""

from __future__ import annotations

from typing import Any

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _add_line(line: Any, offset: float, factor: float, row: Any) -> None:
    """Sum one line of voxels into ``row``; a voxel cut by an output border is split between both sides."""
    n, m = len(line), len(row)
    row[:] = 0.0
    k = 0
    for out in range(m):
        edge = min((out + 1) * factor - offset, float(n))
        whole = int(edge)
        here = 0.0
        while k < whole:
            here += line[k]
            k += 1
        row[out] += here
        rest = edge - whole
        if rest > 0.0 and whole < n:
            row[out] += line[whole] * rest
            if out + 1 < m:
                row[out + 1] += line[whole] * (1.0 - rest)
            k = whole + 1


@numba.njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def add_block(block: Any, offset: Any, factor: Any, share: Any) -> None:
    """Add the sums of ``block`` (n0, n1, n2) to ``share`` (m0, m1, m2), output voxels of ``factor`` input voxels.

    ``offset`` : (3,) start of the block in the first output voxel, in input voxels.
    """
    row = np.zeros(share.shape[2])
    for i in range(block.shape[0]):
        a = int((i + offset[0]) / factor[0])
        first_a = min(1.0, (a + 1) * factor[0] - offset[0] - i)
        for j in range(block.shape[1]):
            b = int((j + offset[1]) / factor[1])
            first_b = min(1.0, (b + 1) * factor[1] - offset[1] - j)
            _add_line(block[i, j], offset[2], factor[2], row)
            for k in range(4):
                weight = (first_a if k < 2 else 1.0 - first_a) * (first_b if k % 2 == 0 else 1.0 - first_b)
                out_a, out_b = a + k // 2, b + k % 2
                if weight > 1e-12 and out_a < share.shape[0] and out_b < share.shape[1]:
                    target = share[out_a, out_b]
                    for out in range(len(row)):
                        target[out] += weight * row[out]
