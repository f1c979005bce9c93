"""Compiled loops: pulling an image through a transform."""

from __future__ import annotations

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def pull(image, matrix, shift, u0, u1, u2, wanted):  # type: ignore[no-untyped-def]
    """Read ``image`` linearly at ``matrix @ (node + u) + shift`` (node, u and result in index units), 0 outside.

    image (a, b, c) float32; u0, u1, u2, wanted (n0, n1, n2); only nodes that are ``wanted`` are read.
    """
    n0, n1, n2 = u0.shape
    a, b, c = image.shape
    out = np.zeros((n0, n1, n2), np.float32)
    m = matrix.astype(np.float32)
    for i in range(n0):
        for j in range(n1):
            for k in range(n2):
                if not wanted[i, j, k]:
                    continue
                p = i + u0[i, j, k]
                q = j + u1[i, j, k]
                r = k + u2[i, j, k]
                x = m[0, 0] * p + m[0, 1] * q + m[0, 2] * r + shift[0]
                y = m[1, 0] * p + m[1, 1] * q + m[1, 2] * r + shift[1]
                z = m[2, 0] * p + m[2, 1] * q + m[2, 2] * r + shift[2]
                if not (0 <= x < a - 1 and 0 <= y < b - 1 and 0 <= z < c - 1):
                    continue
                ix, iy, iz = int(x), int(y), int(z)
                fx, fy, fz = x - ix, y - iy, z - iz
                low = (1 - fy) * ((1 - fz) * image[ix, iy, iz] + fz * image[ix, iy, iz + 1])
                low += fy * ((1 - fz) * image[ix, iy + 1, iz] + fz * image[ix, iy + 1, iz + 1])
                high = (1 - fy) * ((1 - fz) * image[ix + 1, iy, iz] + fz * image[ix + 1, iy, iz + 1])
                high += fy * ((1 - fz) * image[ix + 1, iy + 1, iz] + fz * image[ix + 1, iy + 1, iz + 1])
                out[i, j, k] = (1 - fx) * low + fx * high
    return out
