"""Contacts to regions: where each sat, how sure that is, and how far the nearest border is."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, FloatArray, IntArray
from leadline.model.channels import MIN_PROBABILITY

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.model.anchor import Anchor
    from leadline.model.atlas import Atlas, Structures
    from leadline.model.posterior import DepthPosterior
    from leadline.model.track import Track

LATERAL_DRAWS = 8
BORDER_STEP_UM = 5.0
BORDER_REACH_UM = 2000.0
TANGENT_STEP_UM = 25.0
INFORMED_FROM = 0.5
TIE = 1e-6


@dataclass(frozen=True, slots=True, eq=False)
class Located:
    """Contacts of one shank, located. All arrays have one entry a contact.

    ``region_id`` is the likeliest structure, ``p_region`` its probability, given all modelled error; ``region_draws``
    (S, n) the structure in every draw. Depth and ``atlas_um`` are the middle of the draws, so that close to a border,
    or where the track grazes one, the atlas may hold another structure there.
    """

    track_depth_um: FloatArray
    track_depth_sd_um: FloatArray
    atlas_um: FloatArray
    region_id: IntArray
    p_region: FloatArray
    p_coarse: FloatArray
    boundary_um: FloatArray
    basis: tuple[str, ...]
    region_draws: IntArray


def locate(
    tip_distance_um: FloatArray,
    track: Track,
    posterior: DepthPosterior,
    atlas: Atlas,
    anchors: Sequence[Anchor],
    *,
    registration_error_um: float,
    seed: int = 1,
) -> Located:
    """Locate contacts at ``tip_distance_um`` (n,) of one shank.

    The depth draws hold every error along the track. Where the posterior also says which structure each draw believes
    in, that is counted. Where it does not, the registration error across the track is added here: each depth draw is
    looked up at eight places drawn about it, ``registration_error_um`` being the standard deviation of one coordinate.
    """
    rows = np.searchsorted(posterior.tip_distance_um, tip_distance_um)
    draws = posterior.depth_um[:, rows]
    depth = np.median(draws, axis=0)
    atlas_um = track.atlas_at(depth)
    here = atlas.label_at(atlas_um)
    if posterior.label_id is None:
        region_draws = atlas.label_at(_with_lateral_error(draws, track, registration_error_um, seed))
    else:
        region_draws = posterior.label_id[:, rows]
    region, p_region = likeliest(region_draws, here)
    coarse_of = _coarse_ids(atlas.structures, np.union1d(region, region_draws))
    return Located(
        track_depth_um=depth,
        track_depth_sd_um=draws.std(axis=0),
        atlas_um=atlas_um,
        region_id=region,
        p_region=p_region,
        p_coarse=(_lookup(coarse_of, region_draws) == _lookup(coarse_of, region)).mean(axis=0),
        boundary_um=border_distance(track, atlas, depth),
        basis=tuple(_basis(float(d), anchors, posterior.informed) for d in tip_distance_um),
        region_draws=region_draws,
    )


def likeliest(region_draws: IntArray, here: IntArray) -> tuple[IntArray, FloatArray]:
    """Structure ``(n,)`` that most draws ``(S, n)`` believe in, and their share; of equal ones ``here`` (n,)."""
    ids = np.unique(region_draws)
    share = np.stack([(region_draws == i).mean(axis=0) for i in ids], axis=1)
    best = np.argmax(share + TIE * (ids == here[:, None]), axis=1)
    return ids[best], np.asarray(share[np.arange(len(best)), best], np.float64)


def border_distance(track: Track, atlas: Atlas, depth_um: FloatArray) -> FloatArray:
    """Distance ``(n,)`` along the track from each depth to the nearest change of structure, at most 2000 um."""
    low, high = depth_um.min() - BORDER_REACH_UM, depth_um.max() + BORDER_REACH_UM
    grid = np.arange(low, high + BORDER_STEP_UM, BORDER_STEP_UM)
    labels = atlas.label_at(track.atlas_at(grid))
    changes = np.flatnonzero(np.diff(labels))
    if not changes.size:
        return np.full(depth_um.shape, BORDER_REACH_UM)
    borders = _bisect(track, atlas, grid[changes], grid[changes + 1], labels[changes])
    nearest = np.abs(depth_um[:, None] - borders[None, :]).min(axis=1)
    return np.asarray(np.minimum(nearest, BORDER_REACH_UM), np.float64)


def probabilities(located: Located) -> list[tuple[int, int, float]]:
    """(contact row, structure id, probability) of everything at least as likely as 0.001, likeliest first."""
    found = []
    for row in range(located.region_draws.shape[1]):
        ids, counts = np.unique(located.region_draws[:, row], return_counts=True)
        share = counts / counts.sum()
        order = np.argsort(-share, kind="stable")
        found += [(row, int(ids[k]), float(share[k])) for k in order if share[k] >= MIN_PROBABILITY]
    return found


def _with_lateral_error(draws: FloatArray, track: Track, error_um: float, seed: int) -> FloatArray:
    """Points ``(S * 8, n, 3)``: each draw's contacts, moved as one across the track by the registration error."""
    from scipy.stats import norm, qmc

    n_draws = draws.shape[0] * LATERAL_DRAWS
    depth = np.repeat(draws, LATERAL_DRAWS, axis=0)
    uniform = qmc.Halton(3, rng=np.random.default_rng(seed)).random(n_draws)
    offset = norm.ppf(np.clip(uniform, 1e-6, 1 - 1e-6))[:, None, :] * error_um
    points = track.atlas_at(depth)
    tangent = track.atlas_at(depth + TANGENT_STEP_UM) - track.atlas_at(depth - TANGENT_STEP_UM)
    tangent /= np.linalg.norm(tangent, axis=-1, keepdims=True)
    across = offset - (offset * tangent).sum(axis=-1, keepdims=True) * tangent
    return np.asarray(points + across, np.float64)


def _coarse_ids(structures: Structures, ids: IntArray) -> dict[int, int]:
    return {int(i): structures.coarse(int(i)).id for i in ids}


def _lookup(table: dict[int, int], ids: IntArray) -> IntArray:
    keys = np.array(sorted(table))
    values = np.array([table[int(k)] for k in keys])
    return np.asarray(values[np.searchsorted(keys, ids)], np.int64)


def _bisect(track: Track, atlas: Atlas, low: FloatArray, high: FloatArray, label: IntArray) -> FloatArray:
    for _ in range(8):
        middle = (low + high) / 2
        same: BoolArray = atlas.label_at(track.atlas_at(middle)) == label
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    return np.asarray((low + high) / 2, np.float64)


def _basis(tip_distance_um: float, anchors: Sequence[Anchor], informed: float) -> str:
    if not anchors:
        return "physiology" if informed >= INFORMED_FROM else "histology"
    ends: AnyArray = np.array([a.tip_distance_um for a in anchors])
    return "between" if ends.min() <= tip_distance_um <= ends.max() else "beyond"
