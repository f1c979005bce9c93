"""Where a track begins and ends: the run of dye, the end of the dye and the entry at the brain surface."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import BoolArray, FloatArray
from leadline.model.volume import Volume
from leadline.tracing.centre import STATION_UM, Stations, frames, smoothed_along
from leadline.tracing.grid import sampled

EVIDENCE_CAP = 4.0
EVIDENCE_COST = 1.6
RING_OUT = 3.2
NOISE_SD_UM = 30.0
LEVEL = 0.45
REFERENCE_UM = (70.0, 320.0)
RAY_RADII_UM = (130.0, 200.0, 270.0)
RAYS = 10
RAY_UM = 500.0
RAY_STEP_UM = 10.0


@dataclass(frozen=True, slots=True, eq=False)
class DyeProfile:
    """Dye along a curve.

    ``amount`` : (n,) height of a Gaussian of the track's width over its surroundings, in noise sd of the tracing grid.
    ``noise``, ``noise_smooth`` : sd of that height beside the track, as it is and smoothed along the track.
    """

    amount: FloatArray
    noise: float
    noise_smooth: float

    @property
    def clearness(self) -> FloatArray:
        """Dye ``(n,)`` smoothed along the track, in its own noise sd."""
        smooth = smoothed_along(self.amount[:, None], NOISE_SD_UM / STATION_UM)[:, 0]
        return np.asarray(smooth / self.noise_smooth, np.float64)

    def reversed(self) -> DyeProfile:
        """The same dye, read from the other end."""
        return DyeProfile(self.amount[::-1], self.noise, self.noise_smooth)


def dye_profile(stations: Stations, sigma_um: float) -> DyeProfile:
    """Height of a Gaussian of known width at the centre of every plane, over a floor fitted with it.

    A broad halo goes into the floor. The same measure at eight places around the centre, what was fitted there taken
    off, tells the noise.
    """
    grid = stations.grid_um
    width = float(np.clip(sigma_um, 12.0, 60.0))
    amount, floor, bell = _height(stations.values, grid, np.zeros(2), width)
    rest = stations.values - floor[:, None] - amount[:, None] * bell
    turn = np.arange(8) * np.pi / 4
    ring = float(min(RING_OUT * width, 110.0)) * np.column_stack([np.cos(turn), np.sin(turn)])
    beside = np.stack([_height(rest, grid, middle, width)[0] for middle in ring], axis=1)
    inner = smoothed_along(beside, NOISE_SD_UM / STATION_UM)
    noise, noise_smooth = (1.4826 * float(np.nanmedian(np.abs(v))) for v in (beside, inner))
    return DyeProfile(np.nan_to_num(amount), max(noise, 0.05), max(noise_smooth, 0.03))


def _height(
    values: FloatArray, grid: FloatArray, middle: FloatArray, width: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Least-squares height and floor ``(n,)`` of a Gaussian at one place (NaN: too little is seen), and its shape."""
    away2 = ((grid - middle) ** 2).sum(axis=1)
    bell = np.exp(-away2 / (2 * width**2))
    there = np.isfinite(values) & (away2 < (3.0 * width) ** 2)
    many = there.sum(axis=1).clip(1)
    mean_bell = (there * bell).sum(axis=1) / many
    known = np.where(there, values, 0.0)
    mean_value = known.sum(axis=1) / many
    centred = (bell - mean_bell[:, None]) * there
    height = (centred * known).sum(axis=1) / np.maximum((centred**2).sum(axis=1), 1e-9)
    enough = there.sum(axis=1) > 0.6 * (away2 < (3.0 * width) ** 2).sum()
    height = np.where(enough, height, np.nan)
    return height, mean_value - np.nan_to_num(height) * mean_bell, bell


def dye_run(profile: DyeProfile, suspect: BoolArray) -> tuple[int, int]:
    """First and last station (inclusive) of the run with the most evidence of dye; it bridges gaps [1]_.

    Suspect stations (off centre, or far brighter than the track) may not add evidence, nor do they take any: a
    crossing track must not end this one, a vessel beyond the tip must not lengthen it.

    .. [1] Bentley (1984). Commun. ACM 27, 865. doi:10.1145/358234.381162 (maximum sub-array)
    """
    evidence = np.clip(profile.clearness, -1.0, EVIDENCE_CAP) - EVIDENCE_COST
    evidence = np.where(suspect, np.minimum(evidence, 0.0), evidence)
    best, total, start, out = 0.0, 0.0, 0, (0, 0)
    for i, value in enumerate(evidence):
        total += float(value)
        if total <= 0:
            total, start = 0.0, i + 1
        elif total > best:
            best, out = total, (start, i)
    return out


def dye_end(profile: DyeProfile, run: tuple[int, int], step_um: float, sigma_um: float) -> tuple[float, float]:
    """Place of the end of the dye, in stations (fractional), and its sd in um.

    The amount of dye around the end of a blurred line is half the amount before it. The end is the last crossing of
    0.45 of the median over 70-320 um before it, found by going to and fro until it stays.
    """
    amount, first, last = profile.amount, run[0], run[1]
    near, far = (round(v / step_um) for v in REFERENCE_UM)
    end = float(last)
    reference = 1.0
    for _ in range(8):
        lo, hi = max(first, int(end) - far), max(first + 1, int(end) - near)
        before = amount[lo : hi + 1]
        seen = before[before > 2 * profile.noise]
        reference = float(np.median(seen if len(seen) >= 3 else before))
        level = LEVEL * max(reference, 1.5 * profile.noise)
        above = np.flatnonzero(amount[first : last + 2] > level) + first
        if not len(above):
            break
        k = int(above[-1])
        after = amount[k + 1] if k + 1 < len(amount) else 0.0
        new = k + float(np.clip((amount[k] - level) / max(amount[k] - after, 1e-9), 0, 1))
        if abs(new - end) < 0.05:
            end = new
            break
        end = new
    slope_um = max(2.5 * sigma_um, step_um)  # over about this length the dye goes from all to none
    jitter = slope_um * profile.noise / max(reference, profile.noise)
    return end, float(np.hypot(np.hypot(20.0, 0.4 * sigma_um), jitter))


@dataclass(frozen=True, slots=True)
class Entry:
    """``at_um`` : arc length along the curve, from its first point. ``sd_um`` : its standard deviation."""

    at_um: float
    sd_um: float


def entry(curve_um: FloatArray, step_um: float, near: int, background: Volume, level: float) -> Entry | None:
    """Where a curve crosses the brain surface; None where no surface is seen.

    Autofluorescence is read along rays parallel to the curve, 130 to 270 um beside it, where neither dye nor the
    hole of the insertion disturbs it. Each ray crosses the surface half-way between its own inner and outer grey
    values. A plane through the crossings, robust against single ones, meets the curve at the entry.

    Parameters
    ----------
    curve_um : (n, 3) even steps, going inward, begun outside the brain.
    near : station near the surface.
    level : half-way grey value of the whole brain, where a ray shows no outside.
    """
    from scipy.ndimage import gaussian_filter1d

    at = int(np.clip(near, 1, len(curve_um) - 2))
    reach = round(300.0 / step_um)
    a, b = curve_um[max(at - reach, 0)], curve_um[min(at + reach, len(curve_um) - 1)]
    way = (b - a) / np.linalg.norm(b - a)
    side = frames(np.stack([curve_um[at] - way, curve_um[at], curve_um[at] + way]))[1]
    turn = np.arange(RAYS) * 2 * np.pi / RAYS
    places = np.concatenate([[(r * np.cos(t), r * np.sin(t)) for t in turn + 0.3 * r] for r in RAY_RADII_UM])
    t = np.arange(-RAY_UM, RAY_UM + 1, RAY_STEP_UM)
    points = curve_um[at] + (places @ side.T)[:, None, :] + t[None, :, None] * way
    grey = sampled(background, points.reshape(-1, 3)).reshape(len(places), len(t))
    grey = gaussian_filter1d(grey, 1.0, axis=1, mode="nearest")
    cross = np.array([_crossing(ray, t, level) for ray in grey])
    seen = np.isfinite(cross)
    if seen.sum() < 8:
        return None
    plane, sd = _plane(places[seen], cross[seen])
    # the plane c0 + c1 u + c2 v met by the curve itself, which may bend away from the middle ray
    rel = curve_um - curve_um[at]
    ahead = rel @ way - plane[0] - (rel @ side) @ plane[1:]
    window = slice(max(at - 2 * reach, 0), min(at + 2 * reach, len(curve_um) - 1))
    signs = np.flatnonzero((ahead[window][:-1] < 0) & (ahead[window][1:] >= 0)) + window.start
    if not len(signs):
        return None
    k = int(signs[np.argmin(np.abs(signs - at))])
    part = ahead[k] / (ahead[k] - ahead[k + 1])
    return Entry((k + part) * step_um, sd)


def _crossing(ray: FloatArray, t: FloatArray, level: float) -> float:
    """Where a ray last rises through half-way between outside and inside, going inward; NaN if it does not."""
    there = np.isfinite(ray)
    if there.sum() < 20:
        return np.nan
    rough = np.flatnonzero(there[:-1] & there[1:] & (ray[:-1] < level) & (ray[1:] >= level))
    if not len(rough):
        return np.nan
    k = int(rough[np.argmin(np.abs(t[rough]))])
    step = t[1] - t[0]
    inner = ray[k + int(60 / step) : k + int(260 / step)]
    outer = ray[max(k - int(260 / step), 0) : max(k - int(60 / step), 0)]
    inner, outer = inner[np.isfinite(inner)], outer[np.isfinite(outer)]
    own = (np.median(inner) + np.median(outer)) / 2 if len(inner) > 3 and len(outer) > 3 else level
    near = slice(max(k - int(80 / step), 0), min(k + int(80 / step), len(ray) - 1))
    piece = ray[near]
    rise = np.flatnonzero((piece[:-1] < own) & (piece[1:] >= own)) + near.start
    if not len(rise):
        return float(t[k])
    m = int(rise[np.argmin(np.abs(rise - k))])
    return float(t[m] + step * (own - ray[m]) / (ray[m + 1] - ray[m]))


def _plane(places: FloatArray, height: FloatArray) -> tuple[FloatArray, float]:
    """Robust plane ``c0 + c1 u + c2 v`` and the sd of where it meets the middle."""
    design = np.column_stack([np.ones(len(places)), places])
    weight = np.ones(len(height))
    coef = np.array([np.median(height), 0.0, 0.0])
    for _ in range(12):
        left = height - design @ coef
        usual = max(1.4826 * float(np.median(np.abs(left))), 4.0)
        weight = 1.0 / (1.0 + (left / (2 * usual)) ** 2) ** 2
        coef = np.linalg.solve(design.T @ (design * weight[:, None]) + 1e-6 * np.eye(3), design.T @ (weight * height))
    left = height - design @ coef
    spread = np.sqrt((weight * left**2).sum() / weight.sum())
    # rays are neighbours of one another: count one in three as a witness of its own
    return coef, float(np.hypot(8.0, spread / np.sqrt(max(weight.sum() / 3, 1.0))) * np.sqrt(1 + (coef[1:] ** 2).sum()))
