"""Dye without autofluorescence: the dye channel less what the background channel foretells of it, place by place."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import AnyArray, Float32Array, FloatArray
from leadline.model.volume import Volume
from leadline.tracing.grid import grown, sampled

TILE_UM = 320.0
ROUNDS = 5
INLIER_LOW, INLIER_HIGH = -3.5, 2.5
THIN = 2
SLAB = 32


@dataclass(frozen=True, slots=True, eq=False)
class Foretold:
    """Local regression ``dye = offset + slope * background`` with noise sd, on a grid of tiles.

    ``maps`` : (t0, t1, t2, 3) offset, slope, noise sd. ``tile_um``, ``origin_um`` : (3,) frame of the tile centres.
    """

    maps: Float32Array
    tile_um: FloatArray
    origin_um: FloatArray

    def at(self, points_um: FloatArray) -> FloatArray:
        """Offset, slope and noise sd ``(n, 3)`` at points, linear between tile centres."""
        from scipy.ndimage import map_coordinates

        index = ((np.asarray(points_um, float) - self.origin_um) / self.tile_um).T
        columns = [map_coordinates(self.maps[..., k], index, order=1, mode="nearest") for k in range(3)]
        return np.asarray(np.column_stack(columns), np.float64)

    def planes(self, grid: Volume, rows: slice) -> Float32Array:
        """The maps ``(3, rows, n1, n2)`` on planes of a grid, linear between tile centres."""
        frame = zip(grid.shape, grid.voxel_um, grid.origin_um, self.origin_um, self.tile_um, strict=True)
        a, b, c = ((np.arange(n) * v + o - so) / size for n, v, o, so, size in frame)
        return np.asarray(np.moveaxis(grown(self.maps, (a[rows], b, c)), -1, 0), np.float32)


def foretell(dye: Volume, background: Volume, inside: np.ndarray) -> Foretold:
    """Regress dye on background in tiles of 320 um, robust against the dye itself.

    Values more than 2.5 sd above or 3.5 sd below the line are left out and the line is fitted again, five times. Sums
    over every second voxel of each axis are smoothed over neighbouring tiles, and slopes of tiles with little contrast
    lean on the slope of the whole brain.

    Parameters
    ----------
    dye, background : volumes in memory on one grid.
    inside : bool on that grid; only these voxels count.
    """
    thin = tuple(slice(None, None, THIN if n > 2 * THIN else 1) for n in dye.shape)
    y, x = (
        Volume(v.array()[thin], v.voxel_um * [s.step for s in thin], v.code, v.origin_um) for v in (dye, background)
    )
    keep, shape = inside[thin], np.asarray(y.shape)
    size = np.maximum(1, np.round(TILE_UM / y.voxel_um)).astype(int)
    labels = [np.arange(n) // s for n, s in zip(shape, size, strict=True)]
    frame = (size * y.voxel_um, y.origin_um + (size - 1) / 2 * y.voxel_um)
    fit = Foretold(_solve(_sums(y.array(), x.array(), None, keep, labels)), *frame)
    left = np.empty(y.shape, np.float32)
    for _ in range(ROUNDS - 1):
        near = np.empty_like(keep)
        for start in range(0, int(shape[0]), SLAB):
            rows = slice(start, start + SLAB)
            offset, slope, sd = fit.planes(y, rows)
            left[rows] = y.array()[rows] - offset - slope * x.array()[rows]
            near[rows] = keep[rows] & (left[rows] < INLIER_HIGH * sd) & (left[rows] > INLIER_LOW * sd)
        fit = Foretold(_solve(_sums(y.array(), x.array(), left, near, labels)), *frame)
    return fit


def _sums(y: AnyArray, x: AnyArray, left: AnyArray | None, keep: AnyArray, labels: list[AnyArray]) -> FloatArray:
    """Counts, moments and squares of what an earlier fit left ``(t0, t1, t2, 7)`` of the kept voxels of every tile."""
    shape = tuple(int(at[-1]) + 1 for at in labels)
    i, j, k = np.nonzero(keep)
    flat = np.ravel_multi_index((labels[0][i], labels[1][j], labels[2][k]), shape)
    yy, xx = y[i, j, k].astype(np.float64), x[i, j, k].astype(np.float64)
    rest = np.zeros_like(yy) if left is None else left[i, j, k].astype(np.float64) ** 2
    moments = (None, xx, yy, xx * xx, xx * yy, yy * yy, rest)
    return np.stack([np.bincount(flat, v, minlength=int(np.prod(shape))).reshape(shape) for v in moments], axis=-1)


def _solve(sums: FloatArray) -> Float32Array:
    """Offset, slope and sd of every tile from its smoothed sums.

    The sd is that of what an earlier fit left, where there was one: the sums of a tile and its neighbours also hold
    how the line itself changes from place to place, which is no noise.
    """
    from scipy.ndimage import gaussian_filter

    whole = sums.sum(axis=(0, 1, 2))
    _, slope_all, _ = _line(whole[:6], 0.0, 0.0)
    smooth = np.stack([gaussian_filter(sums[..., m], 0.8, mode="constant") for m in range(7)], axis=-1)
    # every tile sees a little of the whole brain, so that empty tiles have a value too
    smooth = smooth + whole * (1.0 / max(whole[0], 1.0))
    ridge = 0.25 * max(whole[3] / max(whole[0], 1.0) - (whole[1] / max(whole[0], 1.0)) ** 2, 0.0)
    offset, slope, sd = _line(np.moveaxis(smooth[..., :6], -1, 0), float(slope_all), ridge)
    if whole[6] > 0:  # cutting the tails made the spread smaller: the sd of a normal cut at -3.5 and +2.5 is 0.95
        sd = np.sqrt(smooth[..., 6] / np.maximum(smooth[..., 0], 1e-9)) * 1.06
    floor = max(float(np.median(sd)) * 0.2, 1e-6)
    return np.stack([offset, slope, np.maximum(sd, floor)], axis=-1).astype(np.float32)


def _line(moments: FloatArray, slope_all: float, ridge: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    n, sx, sy, sxx, sxy, syy = moments
    n = np.maximum(n, 1e-9)
    mx, my = sx / n, sy / n
    vx, vy, cov = sxx / n - mx**2, syy / n - my**2, sxy / n - mx * my
    slope = (cov + ridge * slope_all) / np.maximum(vx + ridge, 1e-12)
    left = np.maximum(vy - 2 * slope * cov + slope**2 * vx, 0.0)
    return my - slope * mx, slope, np.sqrt(left)


def excess(dye: Volume, background: Volume, foretold: Foretold) -> Volume:
    """Dye over what the background foretells, in noise sd, on the grid of both (in memory).

    Bright values are compressed, ``4 asinh(z / 4)``, so that a pool does not outshine a faint track.
    """
    out = np.empty(dye.shape, np.float32)
    y, x = dye.array(), background.array()
    for start in range(0, dye.shape[0], SLAB):
        rows = slice(start, min(start + SLAB, dye.shape[0]))
        offset, slope, sd = foretold.planes(dye, rows)
        out[rows] = 4 * np.arcsinh((y[rows] - offset - slope * x[rows]) / sd / 4)
    return Volume(out, dye.voxel_um, dye.code, dye.origin_um)


def excess_at(dye: Volume, background: Volume, foretold: Foretold, points_um: FloatArray) -> FloatArray:
    """Dye over what the background foretells ``(n,)`` at points, in noise sd of the tracing grid; NaN outside."""
    offset, slope, sd = foretold.at(points_um).T
    value = sampled(dye, points_um) - offset - slope * sampled(background, points_um)
    return np.asarray(value / sd, np.float64)
