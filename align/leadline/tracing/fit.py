"""Hand-traced points to a track: a smooth curve, begun at the brain surface, ended at the last point."""

from __future__ import annotations

import numpy as np

from leadline.base.arrays import FloatArray, frozen_points
from leadline.base.errors import LeadlineError
from leadline.model.track import Trace, arc_length
from leadline.model.volume import Volume
from leadline.tracing import centre, ends, path
from leadline.tracing.grid import sampled
from leadline.tracing.tissue import find_tissue

STEP_UM = centre.STATION_UM
CUTOFF_UM = 1000.0
HAND_SD_UM = 30.0  # common practice, no source: how well a hand marks the end of dye
UNSEEN_SD_UM = 150.0
BEFORE_UM = 1500.0
MERGE_UM = 1.0


def from_points(
    points_um: FloatArray, background: Volume, dye: Volume | None = None, *, entry_set: bool = False
) -> Trace:
    """Make a track of points that a person has traced, instead of tracing the dye.

    The points are put in order along their main direction (a shank is nearly straight), turned so that the one nearer
    to the brain surface comes first, and joined by a stiff curve. The curve is extended or cropped to the brain
    surface, as the autofluorescence shows it, and ends at the last point.

    Parameters
    ----------
    points_um : (n >= 2, 3) stack um, any order.
    background : autofluorescence.
    dye : where given, the width and the contrast of the dye along the curve are measured; the curve stays.
    entry_set : the first point is the entry, by the person's word: the order of the two ends is theirs, and the curve
        begins there, wherever the surface is found.

    Returns
    -------
    The trace; radius and contrast are NaN without a dye volume.

    Raises
    ------
    LeadlineError
        For fewer than two different points, or points that lie outside the stack.
    """
    points = _ordered(frozen_points(points_um, "points", min_rows=2))
    _check_inside(points, background)
    if entry_set:
        first = np.asarray(points_um, float)[0]
        if np.linalg.norm(points[-1] - first) < np.linalg.norm(points[0] - first):
            points = points[::-1]
        return _traced(_joined(points), HAND_SD_UM, dye)
    tissue = find_tissue(background)
    depth = tissue.depth_at(points)
    if depth[0] > depth[-1]:
        points, depth = points[::-1], depth[::-1]
    curve = _joined(points)
    before = BEFORE_UM + 1.5 * float(depth[0])
    long = path.resampled(curve, STEP_UM, before_um=before)
    first = round(before / STEP_UM)
    outside = np.flatnonzero(tissue.depth_at(long) <= 0)
    outside = outside[outside < len(long) - 3]
    enter = ends.entry(long, STEP_UM, int(outside[-1]) if len(outside) else first, background, tissue.level)
    if enter is None:
        enter = ends.Entry(first * STEP_UM, UNSEEN_SD_UM)
    s = np.append(np.arange(len(long)) * STEP_UM, arc_length(curve)[-1] + before)
    nodes = np.vstack([long, curve[-1]])
    order = np.argsort(s, kind="stable")
    stop = float(s[-1])
    at = np.append(np.arange(min(enter.at_um, stop - 2 * STEP_UM), stop - STEP_UM / 2, STEP_UM), stop)
    line = np.column_stack([np.interp(at, s[order], nodes[order, k]) for k in range(3)])
    return _traced(line, enter.sd_um, dye)


def _traced(line: FloatArray, entry_sd_um: float, dye: Volume | None) -> Trace:
    radius, contrast, coverage = _dye_along(line, dye) if dye is not None else (np.nan, np.nan, 1.0)
    return Trace(line, np.full(len(line), radius), entry_sd_um, HAND_SD_UM, contrast, coverage)


def _ordered(points: FloatArray) -> FloatArray:
    """Points in order along their main direction, near-coincident ones merged.

    Raises LeadlineError when fewer than two different ones are left.
    """
    middle = points.mean(axis=0)
    main = np.linalg.svd(points - middle, full_matrices=False)[2][0]
    place = (points - middle) @ main
    if (place[-1] - place[0]) < 0:
        place = -place
    order = np.argsort(place, kind="stable")
    points, place = points[order], place[order]
    keep = np.concatenate([[True], np.diff(place) > MERGE_UM])
    if keep.sum() < 2:
        raise LeadlineError(
            f"the {len(points)} points lie at one place", where="points", mend="Trace the track with at least two"
        )
    return np.asarray(points[keep], np.float64)


def _check_inside(points: FloatArray, volume: Volume) -> None:
    index = volume.index(points)
    outside = ((index < -1) | (index > np.asarray(volume.shape))).any(axis=1)
    if outside.any():
        worst = points[np.flatnonzero(outside)[0]].round(1).tolist()
        raise LeadlineError(
            f"{int(outside.sum())} of {len(points)} points lie outside the stack, e.g. {worst} um; the stack reaches "
            f"from {volume.origin_um.round(1).tolist()} to {(volume.origin_um + volume.extent_um).round(1).tolist()}",
            where="points",
            mend="Write points in stack um, in the order of the stored axes",
        )


def _joined(points: FloatArray) -> FloatArray:
    """A stiff curve past the points, every 20 um, from the first to the last."""
    s = arc_length(points)
    n = max(round(s[-1] / STEP_UM), 4)
    at = np.linspace(0, s[-1], n + 1)
    step = float(at[1])
    nearest = np.rint(s / step).astype(int)
    # each point stands for the stretch around it
    share = np.gradient(s) / step if len(s) > 2 else np.full(len(s), s[-1] / step / 2)
    weight, total = np.zeros(n + 1), np.zeros((n + 1, 3))
    chord = points[0] + (s / s[-1])[:, None] * (points[-1] - points[0])
    np.add.at(weight, nearest, share / centre.FIT_SD_UM**2)
    np.add.at(total, nearest, (points - chord) * (share / centre.FIT_SD_UM**2)[:, None])
    mean = total / np.maximum(weight, 1e-12)[:, None]
    straight = points[0] + (at / s[-1])[:, None] * (points[-1] - points[0])
    return np.asarray(straight + centre.stiff(mean, weight, step, CUTOFF_UM, order=2), np.float64)


def _dye_along(line: FloatArray, dye: Volume) -> tuple[float, float, float]:
    """Width um, contrast and coverage of the dye along a curve that stays where it is."""
    voxel = float(np.cbrt(dye.voxel_um.prod()))
    stations = centre.look(line, lambda points: sampled(dye, points), max(12.0, voxel / 2))
    centres = centre.fit_gaussians(stations, voxel_um=voxel)
    sigma = float(np.median(centres.sigma_um))
    clear = ends.dye_profile(stations, sigma).clearness
    return sigma, float(np.median(clear)), float((clear > 2).mean())
