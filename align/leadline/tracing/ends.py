"""Where a track begins and ends: the run of dye, the end of the dye and the entry at the brain surface."""

from __future__ import annotations

from dataclasses import dataclass, replace

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
REFERENCE_UM = (40.0, 130.0)
USUAL_UM = 800.0
LEAST_SHARE = 0.13
CLEAR_SD = 2.0
HIDDEN_UM, HIDDEN_SHARE_SD = 60.0, 10.0
WIDER = 2.5
FINE_UM = 4.0
BRIGHT = 3.5
RAY_RADII_UM = (130.0, 200.0, 270.0)
RAYS = 10
RAY_UM = 500.0
RAY_STEP_UM = 10.0


@dataclass(frozen=True, slots=True, eq=False)
class DyeProfile:
    """Dye along a curve, in noise sd of the tracing grid.

    ``amount`` : (n,) height of a Gaussian of the track's width over its surroundings. ``narrow`` : (n,) the same with
    a wider Gaussian beside it that takes up halos; noisier. ``noise``, ``noise_smooth``, ``noise_narrow`` : sd beside
    the track of the amount, and of both smoothed along the track.
    """

    amount: FloatArray
    narrow: FloatArray
    noise: float
    noise_smooth: float
    noise_narrow: float

    @property
    def clearness(self) -> FloatArray:
        """Dye ``(n,)`` smoothed along the track, in its own noise sd."""
        return _along(self.amount) / self.noise_smooth

    def reversed(self) -> DyeProfile:
        """The same dye, read from the other end."""
        return replace(self, amount=self.amount[::-1], narrow=self.narrow[::-1])


def _along(amount: FloatArray) -> FloatArray:
    return smoothed_along(amount[:, None], NOISE_SD_UM / STATION_UM)[:, 0]


def dye_profile(stations: Stations, sigma_um: float) -> DyeProfile:
    """Height of a Gaussian of known width at the centre of every plane, over a floor fitted with it.

    The same measure at eight places around the centre, what was fitted there taken off, tells the noise.
    """
    grid = stations.grid_um
    width = float(np.clip(sigma_um, 12.0, 60.0))
    away2 = (grid**2).sum(axis=1)
    bell, wide = (np.exp(-away2 / (2 * w**2)) for w in (width, min(WIDER * width, 110.0)))
    near = away2 < (3.0 * width) ** 2
    (amount, floor), spread = _heights(stations.values, [bell, np.ones_like(bell)], near)
    (narrow, _, _), spread_narrow = _heights(
        stations.values, [bell, wide, np.ones_like(bell)], np.full(len(bell), True)
    )
    rest = stations.values - floor[:, None] - amount[:, None] * bell
    turn = np.arange(8) * np.pi / 4
    ring = float(min(RING_OUT * width, 110.0)) * np.column_stack([np.cos(turn), np.sin(turn)])
    beside = []
    for middle in ring:
        gap2 = ((grid - middle) ** 2).sum(axis=1)
        shape = np.exp(-gap2 / (2 * width**2))
        beside.append(_heights(rest, [shape, np.ones_like(shape)], gap2 < (3.0 * width) ** 2)[0][0])
    around = np.stack(beside, axis=1)
    noise, smooth = (max(_mad(v), 0.03) for v in (around, smoothed_along(around, NOISE_SD_UM / STATION_UM)))
    return DyeProfile(np.nan_to_num(amount), np.nan_to_num(narrow), noise, smooth, smooth * spread_narrow / spread)


def _mad(values: FloatArray) -> float:
    return 1.4826 * float(np.nanmedian(np.abs(values))) if np.isfinite(values).any() else 1.0


def _heights(values: FloatArray, shapes: list[FloatArray], use: BoolArray) -> tuple[FloatArray, float]:
    """Least-squares heights ``(k, n)`` of shapes in every plane, NaN where too little is seen, and the factor from
    noise of one place to noise of the first height."""
    design = np.stack(shapes, axis=1)[use]
    part = values[:, use]
    there = np.isfinite(part)
    known = np.where(there, part, 0.0)
    whole = design.T @ design + 1e-9 * np.eye(len(shapes))
    heights = np.linalg.solve(whole, design.T @ known.T)
    for i in np.flatnonzero(~there.all(axis=1)):
        mine = design[there[i]]
        heights[:, i] = np.nan
        if len(mine) > 0.6 * len(design):
            heights[:, i] = np.linalg.solve(mine.T @ mine + 1e-9 * np.eye(len(shapes)), mine.T @ part[i, there[i]])
    return np.asarray(heights, np.float64), float(np.sqrt(np.linalg.inv(whole)[0, 0]))


def dye_run(profile: DyeProfile, suspect: BoolArray) -> tuple[int, int]:
    """First and last station (inclusive) of the run with the most evidence of dye; it bridges gaps [1]_.

    Suspect stations (off centre, or far brighter than the track) may not add evidence, nor do they take any: a
    crossing track must not end this one, a vessel beyond the tip must not lengthen it.

    .. [1] Bentley (1984). Commun. ACM 27, 865. doi:10.1145/358234.381162 (maximum sub-array)
    """
    evidence = np.clip(profile.clearness, -1.0, EVIDENCE_CAP) - EVIDENCE_COST
    clear = profile.amount[profile.clearness > 3]
    suspect = suspect | (profile.amount > BRIGHT * np.median(clear)) if len(clear) > 10 else suspect
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

    Dye around the end of a blurred line falls to half of what it was just before. Coming from beyond, the end is the
    first place with 0.45 of the median over the 40-130 um before it, provided that this median is dye: clear of the
    noise, and not less than a share of the track's usual amount (a halo or a vessel's flank is; a faint tip is not).
    The sd grows where noise could hide a faint tip, and where traces of dye went on beyond the end.
    """
    amount, first, last = _along(profile.narrow), run[0], run[1]
    usual = float(np.median(amount[max(first, last - round(USUAL_UM / step_um)) : last + 1]))
    least = max(LEAST_SHARE * usual, CLEAR_SD * profile.noise_narrow)
    s = np.arange(len(amount)) * step_um
    at = np.arange(s[min(last + 3, len(s) - 1)], s[first] + REFERENCE_UM[1], -FINE_UM)
    window = np.arange(REFERENCE_UM[0], REFERENCE_UM[1] + 1, 10.0)
    before = np.median(np.interp(at[:, None] - window, s, amount), axis=1)
    here = np.interp(at, s, amount)
    good = np.flatnonzero((before > least) & (here > LEVEL * before))
    end, reference = (at[good[0]], before[good[0]]) if len(good) else (s[last], profile.noise_narrow)
    noise = profile.noise_narrow
    jitter = max(2.5 * sigma_um, step_um) * noise / max(float(reference), noise)  # the fall is about that long
    hidden = HIDDEN_UM * min(HIDDEN_SHARE_SD * noise / max(usual, noise), 1.5) ** 2  # a faint tip that noise may hide
    doubtful = 0.4 * max(s[last] - float(end) - 2 * sigma_um, 0.0)  # evidence of dye went on, the level did not
    return float(end / step_um), float(np.linalg.norm([16.0, 0.3 * sigma_um, jitter, hidden, doubtful]))


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
