"""What shines in the dye channel of the invented sample: tracks, pools, vessels; drawn by formula, kept sparsely."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray, IntArray
from leadline.demo.anatomy import surface_depth_um
from leadline.model.track import arc_length

if TYPE_CHECKING:
    from leadline.demo.recipe import Recipe
    from leadline.demo.tracks import Shank
    from leadline.demo.warp import TrueMap

FINE_UM = 5.0
DYE_COUNTS = 1800.0


@dataclass(frozen=True, slots=True, eq=False)
class Grid:
    """The stack laid out as PIR."""

    shape: tuple[int, int, int]
    voxel_um: FloatArray

    @property
    def extent_um(self) -> FloatArray:
        """Edge lengths between the outermost voxel centres."""
        return (np.asarray(self.shape) - 1) * self.voxel_um

    def axes_um(self, planes: slice) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Coordinates along the three axes, some planes of the first."""
        a, b, c = (np.arange(n) * v for n, v in zip(self.shape, self.voxel_um, strict=True))
        return a[planes], b, c

    def near(self, points_um: FloatArray, reach_um: float) -> IntArray:
        """Flat indices, ascending, of all voxels in the boxes of half-width ``reach_um`` about points."""
        half = np.ceil(reach_um / self.voxel_um).astype(int)
        centres = np.unique(np.rint(points_um / self.voxel_um).astype(np.int64), axis=0)
        low = np.clip(centres.min(axis=0) - half, 0, self.shape)
        high = np.clip(centres.max(axis=0) + half + 1, low, self.shape)
        mask = np.zeros(high - low, bool)
        for a, b in zip(np.clip(centres - half - low, 0, None), centres + half + 1 - low, strict=True):
            mask[a[0] : max(b[0], 0), a[1] : max(b[1], 0), a[2] : max(b[2], 0)] = True
        index = np.argwhere(mask) + low
        return np.asarray(np.ravel_multi_index(tuple(index.T), self.shape))

    def points_um(self, flat: IntArray) -> FloatArray:
        """Voxel centres ``(n, 3)`` of flat indices."""
        return np.stack(np.unravel_index(flat, self.shape), axis=1) * self.voxel_um


@dataclass(frozen=True, slots=True, eq=False)
class Glow:
    """Counts to add: ``flat`` (n,) ascending voxel indices, ``counts`` (n,)."""

    flat: IntArray
    counts: AnyArray


def together(glows: list[Glow]) -> Glow:
    """The sum of several glows."""
    if not glows:
        return Glow(np.zeros(0, np.int64), np.zeros(0))
    flat, where = np.unique(np.concatenate([g.flat for g in glows]), return_inverse=True)
    return Glow(flat, np.bincount(where, np.concatenate([g.counts for g in glows]), len(flat)))


def tube(grid: Grid, points_um: FloatArray, counts: FloatArray, radius_um: float) -> Glow:
    """A glowing line of Gaussian cross-section.

    ``points_um`` : (n, 3), about 5 um apart. ``counts`` : (n,) on the axis. ``radius_um`` : standard deviation.
    """
    from scipy.spatial import cKDTree

    lit = counts > 1
    flat = grid.near(points_um[lit][::4], 4 * radius_um + 2 * FINE_UM)
    far, nearest = cKDTree(points_um).query(grid.points_um(flat), distance_upper_bound=5 * radius_um)
    hit = np.isfinite(far)
    return Glow(flat[hit], counts[nearest[hit]] * np.exp(-(far[hit] ** 2) / (2 * radius_um**2)))


def dye(recipe: Recipe, chart: TrueMap, grid: Grid, shank: Shank) -> Glow:
    """One shank's dye: from the surface to the dye's end, uneven, with gaps and a halo at the end."""
    from scipy.ndimage import gaussian_filter1d

    rng = np.random.default_rng([recipe.seed, 50, ord(shank.penetration[0]), shank.number])
    depth = np.arange(-300.0, shank.dye_end_um + 300.0, FINE_UM)
    line = chart.inverse(shank.at(depth))
    # Dye soaks into the tissue unevenly: its middle wanders some um about the shank.
    line = line + 5.0 * np.column_stack([_wander(rng, depth, 180.0) for _ in range(3)])
    radius = rng.uniform(14.0, 24.0)
    level = DYE_COUNTS * rng.uniform(0.6, 1.4) * np.exp(0.25 * _wander(rng, depth, 600.0))
    level *= np.interp(depth, [0, 0.6 * shank.dye_end_um, shank.dye_end_um], [1.3, 1.0, 1 - 0.9 * recipe.faint])
    level[(depth < 0) | (depth > shank.dye_end_um)] = 0
    for _ in range(recipe.gaps):
        start = rng.uniform(0.15, 0.75) * shank.dye_end_um
        level[(depth > start) & (depth < start + rng.uniform(80, 260))] *= 0.08
    level = gaussian_filter1d(level, radius / FINE_UM)
    parts = [tube(grid, line, level, radius)]
    end = int(np.argmin(np.abs(depth - shank.dye_end_um)))
    parts.append(_ball(grid, line[end], 0.12 * DYE_COUNTS * rng.uniform(0.3, 1.5), rng.uniform(40, 80)))
    if recipe.pools:
        entry = int(np.argmin(np.abs(depth)))
        parts.append(_pool(grid, chart, line[entry], DYE_COUNTS * rng.uniform(0.4, 1.2), rng.uniform(90, 220)))
    return together(parts)


def _wander(rng: np.random.Generator, at_um: FloatArray, length_um: float) -> FloatArray:
    """A smooth random function of unit size."""
    knots = np.arange(at_um[0] - length_um, at_um[-1] + 2 * length_um, length_um)
    from scipy.interpolate import CubicSpline

    return np.asarray(CubicSpline(knots, rng.standard_normal(len(knots)))(at_um))


def _ball(grid: Grid, centre_um: FloatArray, counts: float, radius_um: float) -> Glow:
    flat = grid.near(centre_um[None], 3 * radius_um)
    far2 = ((grid.points_um(flat) - centre_um) ** 2).sum(axis=1)
    return Glow(flat, counts * np.exp(-far2 / (2 * radius_um**2)))


def _pool(grid: Grid, chart: TrueMap, centre_um: FloatArray, counts: float, spread_um: float) -> Glow:
    """Dye that spread over the brain's surface about a point of it."""
    flat = grid.near(centre_um[None], 3 * spread_um)
    points = grid.points_um(flat)
    axes = tuple(np.unique(points[:, k]) for k in range(3))
    depth = surface_depth_um(chart.on_grid(axes).reshape(-1, 3))
    sheet = np.exp(-np.where(depth > 0, depth / 35.0, -depth / 18.0))
    far2 = ((points - centre_um) ** 2).sum(axis=1)
    return Glow(flat, counts * sheet * np.exp(-far2 / (2 * spread_um**2)))


def vessels(recipe: Recipe, chart: TrueMap, grid: Grid) -> list[Glow]:
    """Winding bright tubes that dive in from the surface, and patches of bright meninges."""
    rng = np.random.default_rng([recipe.seed, 51])
    glows = []
    for k in range(recipe.vessels):
        line = _vessel(rng, chart, grid)
        pulse = DYE_COUNTS * rng.uniform(0.25, 0.9) * np.exp(0.3 * _wander(rng, arc_length(line), 300.0))
        inside = surface_depth_um(chart(line)) > -60
        glows.append(tube(grid, line, pulse * inside, rng.uniform(9.0, 26.0)))
        if recipe.pools and k % 3 == 0:
            glows.append(_pool(grid, chart, line[0], DYE_COUNTS * rng.uniform(0.1, 0.5), rng.uniform(150, 350)))
    return glows


def _vessel(rng: np.random.Generator, chart: TrueMap, grid: Grid) -> FloatArray:
    """Points 5 um apart of a winding line from the surface inward."""
    middle = grid.extent_um / 2
    out = rng.normal(size=3)
    out[1] = -abs(out[1])
    out /= np.linalg.norm(out)
    ray = middle + np.arange(0, 7000.0, 20.0)[:, None] * out
    start = ray[np.flatnonzero(surface_depth_um(chart(ray)) > 0)[-1]]
    steps = int(rng.uniform(700, 2600) / FINE_UM)
    turn = np.cumsum(rng.normal(0, 0.035, (steps, 3)), axis=0)
    heading = -out + 0.5 * rng.normal(size=3) + turn
    heading /= np.linalg.norm(heading, axis=1)[:, None]
    return np.asarray(start + np.cumsum(heading * FINE_UM, axis=0))
