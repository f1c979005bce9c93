"""The inner loops of tracing, compiled: smoothing, the tube test over voxels, lines counted against ridge points."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit

FLATNESS = 0.25
STEP_VOX = 0.75
SLOPE = 0.7
COLUMNS = 7
TILE = 512


@njit(cache=True)  # type: ignore[untyped-decorator]
def correlate_rows(values: Any, weights: Any, out: Any) -> None:  # pragma: no cover - compiled
    """``out[a, i, :]`` : sum of ``weights[t]`` times rows ``i - t`` and ``i + t`` of ``values[a]``, the last repeated.

    ``values``, ``out`` : (A, N, K) float32, summed in float64 like ``scipy.ndimage.correlate1d``, to the same bits,
    but over neighbours in memory, so that the processor can do several at once.
    """
    sums = np.empty(TILE)
    rows = values.shape[1]
    for a in range(values.shape[0]):
        for begin in range(0, values.shape[2], TILE):
            many = min(TILE, values.shape[2] - begin)
            for i in range(rows):
                row = values[a, i, begin : begin + many]
                for k in range(many):
                    sums[k] = row[k] * weights[0]
                for t in range(len(weights) - 1, 0, -1):
                    one = values[a, max(i - t, 0), begin : begin + many]
                    two = values[a, min(i + t, rows - 1), begin : begin + many]
                    weight = weights[t]
                    for k in range(many):
                        sums[k] += (np.float64(one[k]) + np.float64(two[k])) * weight
                target = out[a, i, begin : begin + many]
                for k in range(many):
                    target[k] = sums[k]


@njit(cache=True)  # type: ignore[untyped-decorator]
def correlate_lines(values: Any, weights: Any) -> None:  # pragma: no cover - compiled
    """The same along the lines of ``values`` (A, N) float32, in place."""
    reach, many = len(weights) - 1, values.shape[1]
    line, sums = np.empty(many + 2 * reach), np.empty(many)
    for a in range(values.shape[0]):
        row = values[a]
        line[:reach] = row[0]
        line[reach + many :] = row[many - 1]
        for k in range(many):
            line[reach + k] = row[k]
        for k in range(many):
            sums[k] = line[reach + k] * weights[0]
        for t in range(reach, 0, -1):
            one, two, weight = line[reach - t :], line[reach + t :], weights[t]
            for k in range(many):
                sums[k] += (one[k] + two[k]) * weight
        for k in range(many):
            row[k] = sums[k]


@njit(cache=True)  # type: ignore[untyped-decorator]
def ridge_points(  # pragma: no cover - compiled
    smooth: Any, inside: Any, base: Any, lo: Any, hi: Any, voxel_um: Any, scale_um: float, threshold: float
) -> Any:
    """Rows (index 3, axis 3, strength) of ridge points of one block.

    The Hessian is formed only where the Laplacian says tube. ``smooth`` : float32 block that begins at voxel
    ``base`` of the volume. ``lo``, ``hi`` : (3,) the voxels of it to look at; the rest is margin.
    """
    room = 1024
    rows = np.empty((room, COLUMNS))
    many = 0
    w0, w1, w2 = 1 / voxel_um[0] ** 2, 1 / voxel_um[1] ** 2, 1 / voxel_um[2] ** 2
    norm = scale_um * scale_um
    least = 1.6 * threshold
    hessian = np.empty((3, 3))
    for i in range(max(lo[0], 1), min(hi[0], smooth.shape[0] - 1)):
        for j in range(max(lo[1], 1), min(hi[1], smooth.shape[1] - 1)):
            for k in range(max(lo[2], 1), min(hi[2], smooth.shape[2] - 1)):
                if not inside[i, j, k]:
                    continue
                c = 2.0 * smooth[i, j, k]
                a = (smooth[i - 1, j, k] + smooth[i + 1, j, k] - c) * w0
                b = (smooth[i, j - 1, k] + smooth[i, j + 1, k] - c) * w1
                d = (smooth[i, j, k - 1] + smooth[i, j, k + 1] - c) * w2
                if -norm * (a + b + d) < least:
                    continue
                hessian[0, 0], hessian[1, 1], hessian[2, 2] = a, b, d
                m01 = smooth[i + 1, j + 1, k] - smooth[i + 1, j - 1, k] - smooth[i - 1, j + 1, k]
                m01 = (m01 + smooth[i - 1, j - 1, k]) * 0.25 / (voxel_um[0] * voxel_um[1])
                m02 = smooth[i + 1, j, k + 1] - smooth[i + 1, j, k - 1] - smooth[i - 1, j, k + 1]
                m02 = (m02 + smooth[i - 1, j, k - 1]) * 0.25 / (voxel_um[0] * voxel_um[2])
                m12 = smooth[i, j + 1, k + 1] - smooth[i, j + 1, k - 1] - smooth[i, j - 1, k + 1]
                m12 = (m12 + smooth[i, j - 1, k - 1]) * 0.25 / (voxel_um[1] * voxel_um[2])
                hessian[0, 1] = hessian[1, 0] = m01
                hessian[0, 2] = hessian[2, 0] = m02
                hessian[1, 2] = hessian[2, 1] = m12
                value, vector = np.linalg.eigh(hessian)
                l1, l2, l3 = value[0], value[1], value[2]
                if l2 >= 0 or l2 / l1 < FLATNESS:
                    continue
                # a ball falls off along all three axes: take its third off
                strength = norm * (math.sqrt(l1 * l2) - max(-l3, 0.0))
                if strength < threshold:
                    continue
                g0 = (smooth[i + 1, j, k] - smooth[i - 1, j, k]) * 0.5 / voxel_um[0]
                g1 = (smooth[i, j + 1, k] - smooth[i, j - 1, k]) * 0.5 / voxel_um[1]
                g2 = (smooth[i, j, k + 1] - smooth[i, j, k - 1]) * 0.5 / voxel_um[2]
                # the flank of a ball looks like a tube that points at it, but grows along it; a tube does not
                if abs(g0 * vector[0, 2] + g1 * vector[1, 2] + g2 * vector[2, 2]) * scale_um > SLOPE * strength:
                    continue
                s1 = -(g0 * vector[0, 0] + g1 * vector[1, 0] + g2 * vector[2, 0]) / l1
                s2 = -(g0 * vector[0, 1] + g1 * vector[1, 1] + g2 * vector[2, 1]) / l2
                o0 = (s1 * vector[0, 0] + s2 * vector[0, 1]) / voxel_um[0]
                o1 = (s1 * vector[1, 0] + s2 * vector[1, 1]) / voxel_um[1]
                o2 = (s1 * vector[2, 0] + s2 * vector[2, 1]) / voxel_um[2]
                if max(abs(o0), abs(o1), abs(o2)) > STEP_VOX:
                    continue
                if many == room:
                    room *= 2
                    grown = np.empty((room, COLUMNS))
                    grown[:many] = rows[:many]
                    rows = grown
                rows[many, 0], rows[many, 1], rows[many, 2] = base[0] + i + o0, base[1] + j + o1, base[2] + k + o2
                rows[many, 3], rows[many, 4], rows[many, 5] = vector[0, 2], vector[1, 2], vector[2, 2]
                rows[many, 6] = strength
                many += 1
    return rows[:many].copy()


@njit(cache=True)  # type: ignore[untyped-decorator]
def line_scores(  # pragma: no cover - compiled
    origins: Any, ways: Any, points: Any, axes: Any, alive: Any, tolerance_um: float, bin_um: float, reach_um: float
) -> Any:
    """Rows (score, start um, stop um) of each line: its best run of bins that hold ridge points along it.

    A bin counts 1 when a point lies within the tolerance and runs along the line, less 0.3 when one lies in the shell
    of 1.5 to 2 tolerances (a line through a cloud is no track), less 0.28 for every bin (a gap costs).
    """
    bins = int(2 * reach_um / bin_um) + 1
    out = np.zeros((len(origins), 3))
    core = np.zeros(bins, np.uint8)
    shell = np.zeros(bins, np.uint8)
    near2, from2, to2 = tolerance_um**2, (1.5 * tolerance_um) ** 2, (2 * tolerance_um) ** 2
    for h in range(len(origins)):
        core[:] = 0
        shell[:] = 0
        o0, o1, o2 = origins[h, 0], origins[h, 1], origins[h, 2]
        d0, d1, d2 = ways[h, 0], ways[h, 1], ways[h, 2]
        for p in range(len(points)):
            if not alive[p]:
                continue
            r0, r1, r2 = points[p, 0] - o0, points[p, 1] - o1, points[p, 2] - o2
            t = r0 * d0 + r1 * d1 + r2 * d2
            off2 = r0 * r0 + r1 * r1 + r2 * r2 - t * t
            if off2 > to2 or abs(t) >= reach_um:
                continue
            b = int((t + reach_um) / bin_um)
            if off2 <= near2:
                if abs(axes[p, 0] * d0 + axes[p, 1] * d1 + axes[p, 2] * d2) > 0.9:
                    core[b] = 1
            elif off2 >= from2:
                shell[b] = 1
        total, start = 0.0, 0
        for b in range(bins):
            total += core[b] - 0.3 * shell[b] - 0.28
            if total <= 0:
                total, start = 0.0, b + 1
            elif total > out[h, 0]:
                out[h, 0] = total
                out[h, 1] = start * bin_um - reach_um
                out[h, 2] = (b + 1) * bin_um - reach_um
    return out
