"""Ridge points to rough curves: lines drawn through pairs of points, the best ones bent to fit."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import BoolArray, FloatArray
from leadline.model.track import arc_length
from leadline.tracing.ridge import Ridges

SEEDS = 1500
PARTNERS = 12
PARTNER_UM = (150.0, 1500.0)
CONE_COS = np.cos(np.radians(14.0))
TOLERANCE_UM = 80.0
BIN_UM = 60.0
REACH_UM = 9000.0
STEP_UM = 20.0
BEND_TOLERANCES_UM = (180.0, 120.0, 80.0, 60.0, 45.0)
BEND_REACH_UM = 500.0


@dataclass(frozen=True, slots=True, eq=False)
class Lines:
    """Straight lines through ridge points. ``origin_um``, ``way`` : (m, 3). ``run`` : (m, 3) score, start, stop um."""

    origin_um: FloatArray
    way: FloatArray
    run: FloatArray


def draw_lines(ridges: Ridges, rng: np.random.Generator) -> Lines:
    """Lines through pairs of ridge points that agree in direction [1]_, scored by the points that lie along them.

    Seeds are drawn by their strength; partners lie 150 to 1500 um away, within 14 degrees of the seed's direction.

    .. [1] Fischler & Bolles (1981). Commun. ACM 24, 381. doi:10.1145/358669.358692
    """
    from scipy.spatial import cKDTree

    weight = np.minimum(ridges.strength, np.percentile(ridges.strength, 80)) if len(ridges) else ridges.strength
    many = min(SEEDS, len(ridges))
    seeds = rng.choice(len(ridges), size=many, replace=False, p=weight / weight.sum()) if many else np.zeros(0, int)
    tree = cKDTree(ridges.points_um)
    origins, ways = [], []
    for seed, near in zip(seeds, tree.query_ball_point(ridges.points_um[seeds], PARTNER_UM[1]), strict=True):
        rows = np.asarray(near, int)
        away = ridges.points_um[rows] - ridges.points_um[seed]
        length = np.linalg.norm(away, axis=1)
        rows, away, length = (v[length > PARTNER_UM[0]] for v in (rows, away, length))
        way = away / length[:, None]
        agree = (np.abs(way @ ridges.axes[seed]) > CONE_COS) & (
            np.abs(np.einsum("nk,nk->n", way, ridges.axes[rows])) > 0.9
        )
        way = way[agree]
        if len(way) > PARTNERS:
            way = way[rng.choice(len(way), PARTNERS, replace=False)]
        origins.append(np.repeat(ridges.points_um[seed][None], len(way), axis=0))
        ways.append(way)
    if not origins:
        return Lines(np.zeros((0, 3)), np.zeros((0, 3)), np.zeros((0, 3)))
    origin, way = np.concatenate(origins), np.concatenate(ways)
    return Lines(origin, way, score(origin, way, ridges, np.ones(len(ridges), bool)))


def score(origin_um: FloatArray, way: FloatArray, ridges: Ridges, alive: BoolArray) -> FloatArray:
    """Rows (score, start um, stop um) of lines against the ridge points that are still alive."""
    from leadline.tracing._kernels import line_scores

    return np.asarray(
        line_scores(origin_um, way, ridges.points_um, ridges.axes, alive, TOLERANCE_UM, BIN_UM, REACH_UM), np.float64
    )


def bend(origin_um: FloatArray, way: FloatArray, run: FloatArray, ridges: Ridges, alive: BoolArray) -> FloatArray:
    """Bend a line into a cubic through the points along it; polyline ``(n, 3)`` every 20 um.

    Least squares with weights that fall to nothing at a tolerance, which shrinks from 180 to 45 um; the curve reaches
    500 um beyond the outermost points that it has taken up.
    """
    side = np.cross(way, np.eye(3)[np.argmin(np.abs(way))])
    side /= np.linalg.norm(side)
    sides = np.stack([side, np.cross(way, side)], axis=1)
    rel = ridges.points_um[alive] - origin_um
    along, off = rel @ way, rel @ sides
    axes = ridges.axes[alive]
    start, stop = float(run[1]), float(run[2])
    coef = np.zeros((4, 2))
    middle, half = (start + stop) / 2, max((stop - start) / 2, 1.0)
    for tolerance in BEND_TOLERANCES_UM:
        u = (along - middle) / half
        gap = np.linalg.norm(off - _cubic(u, coef), axis=1)
        near = (gap < tolerance) & (along > start - BEND_REACH_UM) & (along < stop + BEND_REACH_UM)
        slope = (_cubic(u + 1e-3, coef) - _cubic(u - 1e-3, coef)) / (2e-3 * half)
        tangent = way + slope @ sides.T
        near &= np.abs(np.einsum("nk,nk->n", axes, tangent)) > 0.85 * np.linalg.norm(tangent, axis=1)
        if near.sum() < 6:
            break
        weight = ridges.strength[alive][near] * (1 - (gap[near] / tolerance) ** 2) ** 2
        start, stop = _covered(along[near], middle)
        old_middle, old_half = middle, half
        middle, half = (start + stop) / 2, max((stop - start) / 2, 1.0)
        del old_middle, old_half
        coef = _fit_cubic((along[near] - middle) / half, off[near], weight)
    u = np.arange(start, stop + STEP_UM, STEP_UM)
    return np.asarray(origin_um + u[:, None] * way + _cubic((u - middle) / half, coef) @ sides.T, np.float64)


def _covered(along_um: FloatArray, middle_um: float) -> tuple[float, float]:
    """The part around the middle that points cover without a hole of more than 400 um."""
    order = np.sort(along_um)
    holes = np.flatnonzero(np.diff(order) > 400.0)
    starts = np.concatenate([[order[0]], order[holes + 1]])
    stops = np.concatenate([order[holes], [order[-1]]])
    best = int(np.argmax(np.minimum(stops, middle_um + 9e3) - np.maximum(starts, middle_um - 9e3)))
    return float(starts[best]), float(stops[best])


def _cubic(u: FloatArray, coef: FloatArray) -> FloatArray:
    """Value of the cubic; it goes on straight beyond the fitted range -1 to 1."""
    inside = np.clip(u, -1, 1)
    powers = inside[:, None] ** np.arange(4)
    slopes = np.arange(1, 4) * inside[:, None] ** np.arange(3)
    return np.asarray(powers @ coef + (u - inside)[:, None] * (slopes @ coef[1:]), np.float64)


def _fit_cubic(u: FloatArray, off: FloatArray, weight: FloatArray) -> FloatArray:
    """Weighted cubic with a light hand on bending, so that few points make a straight line."""
    powers = u[:, None] ** np.arange(4)
    normal = powers.T @ (powers * weight[:, None])
    normal += np.diag([0, 0, 0.02, 0.05]) * weight.sum() + 1e-9 * np.eye(4)
    return np.asarray(np.linalg.solve(normal, powers.T @ (off * weight[:, None])), np.float64)


def resampled(points_um: FloatArray, step_um: float, *, before_um: float = 0.0, after_um: float = 0.0) -> FloatArray:
    """A polyline at even steps of arc length, gone on straight before its start and after its end."""
    from leadline.model.track import along

    s = arc_length(points_um)
    keep = np.concatenate([[True], np.diff(s) > 1e-6])
    return along(s[keep], points_um[keep], np.arange(-before_um, s[-1] + after_um + step_um / 2, step_um))


def near_curve(
    points_um: FloatArray, axes: FloatArray, curve_um: FloatArray, radius_um: float, cos: float
) -> BoolArray:
    """Which points lie within a radius of a curve and run along it."""
    from scipy.spatial import cKDTree

    gap, at = cKDTree(curve_um).query(points_um, distance_upper_bound=radius_um)
    tangent = np.gradient(curve_um, axis=0)
    tangent /= np.linalg.norm(tangent, axis=1)[:, None]
    out = np.isfinite(gap)
    out[out] = np.abs(np.einsum("nk,nk->n", tangent[at[out]], axes[out])) > cos
    return np.asarray(out, bool)
