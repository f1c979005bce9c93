"""The centre line of a track: Gaussians fitted in planes across it, joined by a stiff curve."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import combinations_with_replacement
from math import comb

import numpy as np

from leadline.base.arrays import BoolArray, FloatArray
from leadline.model.track import along
from leadline.tracing.path import resampled

STATION_UM = 20.0
PATCH_UM = 150.0
ALONG_UM = 40.0
CUTOFF_UM = 1500.0
FIT_SD_UM = 8.0
OFF_CENTRE_UM = 80.0
WANDER_UM = (700.0, 2500.0)
ROUNDS = 9

Excess = Callable[[FloatArray], FloatArray]


@dataclass(frozen=True, slots=True, eq=False)
class Stations:
    """Planes across a curve and the dye found in them.

    ``curve_um`` : (n, 3) even steps. ``sides`` : (n, 3, 2) axes of the planes. ``grid_um`` : (p, 2) places in a
    plane. ``values`` : (n, p) dye in noise sd, NaN outside the volume.
    """

    curve_um: FloatArray
    sides: FloatArray
    grid_um: FloatArray
    values: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Centres:
    """Gaussians in the planes. ``offset_um`` : (n, 2). ``peak``, ``sigma_um``, ``error_um`` : (n,)."""

    offset_um: FloatArray
    peak: FloatArray
    sigma_um: FloatArray
    error_um: FloatArray


def frames(curve_um: FloatArray) -> FloatArray:
    """Two axes ``(n, 3, 2)`` across a curve at each of its points, turning as little as it does."""
    tangent = np.gradient(curve_um, axis=0)
    tangent /= np.linalg.norm(tangent, axis=1)[:, None]
    fixed = np.eye(3)[np.argmin(np.abs(tangent.mean(axis=0)))]
    first = np.cross(tangent, fixed)
    first /= np.linalg.norm(first, axis=1)[:, None]
    return np.stack([first, np.cross(tangent, first)], axis=2)


def look(curve_um: FloatArray, excess: Excess, pixel_um: float, *, patch_um: float = PATCH_UM) -> Stations:
    """Sample the dye in planes across a curve, on a disc of ``patch_um``."""
    half = np.arange(-np.floor(patch_um / pixel_um), np.floor(patch_um / pixel_um) + 1) * pixel_um
    grid = np.stack(np.meshgrid(half, half, indexing="ij"), axis=-1).reshape(-1, 2)
    grid = grid[np.linalg.norm(grid, axis=1) <= patch_um]
    sides = frames(curve_um)
    points = curve_um[:, None, :] + np.einsum("nkd,pd->npk", sides, grid)
    return Stations(curve_um, sides, grid, excess(points.reshape(-1, 3)).reshape(len(curve_um), len(grid)))


def smoothed_along(values: FloatArray, sd_stations: float) -> FloatArray:
    """Gaussian average along the curve that leaves out what is not there (NaN)."""
    from scipy.ndimage import gaussian_filter1d

    there = np.isfinite(values).astype(float)
    top = gaussian_filter1d(np.nan_to_num(values), sd_stations, axis=0, mode="nearest")
    bottom = gaussian_filter1d(there, sd_stations, axis=0, mode="nearest")
    return np.asarray(np.where(bottom > 0.05, top / np.maximum(bottom, 0.05), 0.0), np.float64)


def fit_gaussians(stations: Stations, *, voxel_um: float, sigma_um: float = 30.0) -> Centres:
    """Fit height, centre, width and floor of a round Gaussian in every plane at once, by damped Gauss-Newton steps.

    ``voxel_um`` : size of what was sampled; neighbouring places in a plane share voxels, which the error counts.
    """
    values = smoothed_along(stations.values, ALONG_UM / STATION_UM)
    grid = stations.grid_um
    pixel_um = float(np.abs(np.diff(np.unique(grid[:, 0]))).min())
    n = len(values)
    low, high = max(10.0, 0.35 * voxel_um), 90.0
    floor = np.median(values, axis=1)
    near = np.linalg.norm(grid, axis=1) < 1.2 * sigma_um
    theta = np.column_stack(
        [np.maximum(values[:, near].mean(axis=1) - floor, 0.1) * 1.5, np.zeros((n, 2)), np.full(n, sigma_um), floor]
    )
    scale = np.array([1.0, 20.0, 20.0, 20.0, 1.0])
    damp = np.full(n, 0.1)
    cost = np.full(n, np.inf)
    best = theta.copy()
    for _ in range(ROUNDS):
        now = ((values - _gaussian(theta, grid)[0]) ** 2).sum(axis=1)
        better = now < cost
        best[better], cost[better] = theta[better], now[better]
        damp = np.where(better, damp * 0.4, damp * 4).clip(1e-4, 1e4)
        model, slopes = _gaussian(best, grid)
        left = values - model
        normal = (np.swapaxes(slopes, 1, 2) @ slopes) * np.outer(scale, scale)
        right = (left[:, None, :] @ slopes)[:, 0] * scale
        diagonal = np.einsum("nii->ni", normal)
        normal = normal + np.eye(5) * (damp[:, None] * diagonal + 1e-6)[:, None, :]
        step = np.linalg.solve(normal, right[..., None])[..., 0] * scale
        theta = best + step.clip([-50, -25, -25, -12, -20], [50, 25, 25, 12, 20])
        theta[:, 1:3] = theta[:, 1:3].clip(-OFF_CENTRE_UM, OFF_CENTRE_UM)
        theta[:, 3] = theta[:, 3].clip(low, high)
    shared = max((voxel_um / pixel_um) ** 2, 1.0)
    _, slopes = _gaussian(best, grid)
    information = (np.swapaxes(slopes, 1, 2) @ slopes) * np.outer(scale, scale) + 1e-6 * np.eye(5)
    spread = cost / max(values.shape[1] - 5, 1) * shared
    error = np.sqrt(np.linalg.inv(information)[:, [1, 2], [1, 2]].mean(axis=1) * spread) * 20.0
    error = np.where((best[:, 0] <= 0) | ~np.isfinite(error), 1e3, error)
    return Centres(best[:, 1:3], best[:, 0], best[:, 3], np.minimum(error, 1e3))


def _gaussian(theta: FloatArray, grid: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Model ``(n, p)`` and its slopes ``(n, p, 5)``."""
    peak, sigma, floor = theta[:, :1], theta[:, 3:4], theta[:, 4:5]
    du = grid[None, :, 0] - theta[:, 1:2]
    dv = grid[None, :, 1] - theta[:, 2:3]
    r2 = (du**2 + dv**2) / sigma**2
    bell = np.exp(-r2 / 2)
    lobe = peak * bell
    slopes = np.stack([bell, lobe * du / sigma**2, lobe * dv / sigma**2, lobe * r2 / sigma, np.ones_like(bell)], axis=2)
    return lobe + floor, slopes


def stiff(
    points_um: FloatArray, weight: FloatArray, step_um: float, cutoff_um: float = CUTOFF_UM, *, order: int = 3
) -> FloatArray:
    """Smooth points ``(n, k)`` at even steps against differences of an order [1]_; waves shorter than the cut-off go.

    ``weight`` is one over the squared error in um; at the reference error of 8 um the gain is a half at the cut-off.
    Order 2 makes straight ends and straight bridges, order 3 leaves arcs alone.

    .. [1] Eilers (2003). Anal. Chem. 75, 3631. doi:10.1021/ac034173t
    """
    from scipy.linalg import solveh_banded

    n = len(points_um)
    if n <= order + 1:
        return points_um
    stiffness = (cutoff_um / (2 * np.pi * step_um)) ** (2 * order) / FIT_SD_UM**2
    parts = np.array([(-1.0) ** k * comb(order, k) for k in range(order + 1)])
    bands = np.zeros((order + 1, n))
    for k, j in combinations_with_replacement(range(order + 1), 2):
        bands[order - (j - k), j : n - order + j] += stiffness * parts[k] * parts[j]
    bands[order] += weight + 1e-11 * stiffness
    # a straight part costs nothing: fitted beforehand, it is safe from the small number that steadies the solution
    ramp = np.column_stack([np.ones(n), np.linspace(-1, 1, n)])
    normal = ramp.T @ (ramp * weight[:, None]) + 1e-12 * np.eye(2)
    straight = ramp @ np.linalg.solve(normal, ramp.T @ (points_um * weight[:, None]))
    rest = solveh_banded(bands, (points_um - straight) * weight[:, None])
    return np.asarray(straight + rest, np.float64)


def join(stations: Stations, centres: Centres, counts: BoolArray) -> tuple[FloatArray, FloatArray]:
    """A stiff curve through the centres of the stations that count, robust against single ones; straight on beyond.

    Returns the curve ``(n, 3)`` and the distances ``(n,)`` of the centres from it.
    """
    # a centre at the edge of what it may reach, or much wider than a track, tells nothing
    sure = counts & (np.abs(centres.offset_um).max(axis=1) < OFF_CENTRE_UM - 1) & (centres.sigma_um < 85)
    weight = np.where(sure, 1.0 / (centres.error_um**2 + FIT_SD_UM**2), 0.0)
    if (weight > 0).sum() < 4:
        return stations.curve_um, np.linalg.norm(centres.offset_um, axis=1)
    robust = np.ones(len(weight))
    centre = stations.curve_um + np.einsum("nkd,nd->nk", stations.sides, centres.offset_um)
    first, last = np.flatnonzero(weight > 0)[[0, -1]]
    s = np.arange(len(weight), dtype=np.float64) * STATION_UM
    for _ in range(4):
        part = slice(first, last + 1)
        inner = stiff(centre[part], (weight * robust)[part], STATION_UM)
        curve = along(s[part], np.asarray(inner, np.float64), s)
        gap = np.linalg.norm(centre - curve, axis=1)
        usual = max(float(np.median(gap[weight > 0])) * 1.5, 4.0)
        robust = 1.0 / (1.0 + (gap / (2 * usual)) ** 2) ** 2
    return curve, gap


def wander(stations: Stations, centres: Centres, counts: BoolArray) -> float:
    """How much the centres wind at lengths of 0.7 to 2.5 mm, um (square root of a difference of squares).

    What coarse voxels and noise do to a centre is as large at every length and falls out of the difference; a vessel
    winds the more the longer one looks, a shank does not.
    """
    sure = counts & (np.abs(centres.offset_um).max(axis=1) < OFF_CENTRE_UM - 1) & (centres.sigma_um < 85)
    if sure.sum() < 8:
        return 0.0
    first, last = np.flatnonzero(sure)[[0, -1]]
    part = slice(first, last + 1)
    weight = np.where(sure, 1.0 / (centres.error_um**2 + 4.0), 0.0)[part] * 4.0 / FIT_SD_UM**2
    places = (stations.curve_um + np.einsum("nkd,nd->nk", stations.sides, centres.offset_um))[part]
    short, long = (
        float(np.median(((places - stiff(places, weight, STATION_UM, cutoff)) ** 2).sum(axis=1)[weight > 0]))
        for cutoff in WANDER_UM
    )
    return float(np.sqrt(max(long - short, 0.0)))


def even(curve_um: FloatArray) -> FloatArray:
    """The curve at even steps of a station."""
    return resampled(curve_um, STATION_UM)
