"""Dye without autofluorescence: the dye channel less what the background channel foretells of it, place by place."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from leadline.base.arrays import AnyArray, Float32Array, FloatArray
from leadline.model.volume import Volume
from leadline.tracing.grid import grown, sampled
from leadline.tracing.lazy import Region, region_of

TILE_UM = 320.0
ROUNDS = 5
INLIER_LOW, INLIER_HIGH = -3.5, 2.5
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

    def on(self, grid: Volume, region: Region) -> Float32Array:
        """The maps ``(3, ...)`` on a region of a grid, linear between tile centres."""
        frame = zip(grid.shape, grid.voxel_um, grid.origin_um, self.origin_um, self.tile_um, region, strict=True)
        a, b, c = (((np.arange(n) * v + o - so) / size)[part] for n, v, o, so, size, part in frame)
        return np.asarray(np.moveaxis(grown(self.maps, (a, b, c)), -1, 0), np.float32)


def foretell(dye: Volume, background: Volume, inside: np.ndarray) -> Foretold:
    """Regress dye on background in tiles of 320 um, robust against the dye itself.

    Values more than 2.5 sd above or 3.5 sd below the line are left out and the line is fitted again, five times. Sums
    are smoothed over neighbouring tiles, and slopes of tiles with little contrast lean on the slope of the whole brain.

    Parameters
    ----------
    dye, background : volumes in memory on one grid; a sample of the voxels is enough.
    inside : bool on that grid; only these voxels count.
    """
    shape, y, x = np.asarray(dye.shape), dye.array(), background.array()
    size = np.maximum(1, np.round(TILE_UM / dye.voxel_um)).astype(int)
    labels = [np.arange(n) // s for n, s in zip(shape, size, strict=True)]
    frame = (size * dye.voxel_um, dye.origin_um + (size - 1) / 2 * dye.voxel_um)
    fit = Foretold(_solve(_sums(y, x, None, inside, labels)), *frame)
    left = np.empty(dye.shape, np.float32)
    for _ in range(ROUNDS - 1):
        near = np.empty_like(inside)
        for start in range(0, int(shape[0]), SLAB):
            rows = slice(start, start + SLAB)
            offset, slope, sd = fit.on(dye, (rows, slice(None), slice(None)))
            left[rows] = y[rows] - offset - slope * x[rows]
            near[rows] = inside[rows] & (left[rows] < INLIER_HIGH * sd) & (left[rows] > INLIER_LOW * sd)
        fit = Foretold(_solve(_sums(y, x, left, near, labels)), *frame)
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


class Excess:
    """Dye over what the background foretells, in noise sd, worked out for the voxels that are asked for."""

    dtype = np.dtype(np.float32)

    def __init__(self, dye: Volume, background: Volume, foretold: Foretold) -> None:
        self._dye, self._background, self._foretold = dye, background, foretold
        self.shape = dye.shape

    def __getitem__(self, key: Any) -> Float32Array:
        """Values on a region of slices."""
        region = region_of(key, self.shape)
        offset, slope, sd = self._foretold.on(self._dye, region)
        left = self._dye.data[region] - offset - slope * self._background.data[region]
        return np.asarray(4 * np.arcsinh(left / sd / 4), np.float32)


def excess(dye: Volume, background: Volume, foretold: Foretold) -> Volume:
    """Dye over what the background foretells, in noise sd, on the grid of both; worked out as it is sliced.

    Bright values are compressed, ``4 asinh(z / 4)``, so that a pool does not outshine a faint track.
    """
    return replace(dye, data=Excess(dye, background, foretold), chunk=None)


def excess_at(dye: Volume, background: Volume, foretold: Foretold, points_um: FloatArray) -> FloatArray:
    """Dye over what the background foretells ``(n,)`` at points, in noise sd of the tracing grid; NaN outside."""
    offset, slope, sd = foretold.at(points_um).T
    value = sampled(dye, points_um) - offset - slope * sampled(background, points_um)
    return np.asarray(value / sd, np.float64)
