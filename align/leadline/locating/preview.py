"""What an anchor in the hand would do, quickly: draws shifted to it, regions looked up. The exact answer follows."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import Float32Array, FloatArray, IntArray, frozen, frozen_vector
from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.model.anchor import Anchor
    from leadline.model.depth_map import DepthMap
    from leadline.model.posterior import DepthPosterior

MIN_STEP_UM = 1e-3


@dataclass(frozen=True, eq=False)
class LabelTable:
    """Structures along a track and along copies of it moved sideways, evenly spaced in depth.

    ``depth_um`` : (M,). ``label_id`` : (M,). ``lateral_label_id`` : (K, M).
    """

    depth_um: FloatArray
    label_id: IntArray
    lateral_label_id: IntArray
    ids: IntArray = None  # type: ignore[assignment]
    code: IntArray = None  # type: ignore[assignment]
    lateral_code: IntArray = None  # type: ignore[assignment]

    def __post_init__(self) -> None:
        depth = frozen_vector(self.depth_um, "LabelTable.depth_um")
        if depth.size < 2 or not np.allclose(np.diff(depth), depth[1] - depth[0]) or depth[1] <= depth[0]:
            raise LeadlineError("depths must be evenly spaced and ascend", where="label table")
        ids = np.unique(np.concatenate([self.label_id, np.ravel(self.lateral_label_id)]))
        object.__setattr__(self, "depth_um", depth)
        object.__setattr__(self, "ids", frozen(ids, np.int64))
        object.__setattr__(self, "code", frozen(np.searchsorted(ids, self.label_id), np.uint16))
        object.__setattr__(self, "lateral_code", frozen(np.searchsorted(ids, self.lateral_label_id), np.uint16))

    @cached_property
    def mean_cell(self) -> FloatArray:
        """Where along the track each of ``ids`` lies on average, in cells."""
        codes = self.lateral_code.ravel()
        cells = np.tile(np.arange(self.depth_um.size), len(self.lateral_code))
        count = np.bincount(codes, minlength=self.ids.size)
        place = np.bincount(codes, weights=cells, minlength=self.ids.size)
        return np.asarray(np.where(count > 0, place / np.maximum(count, 1), np.inf), np.float64)

    def cell(self, depth_um: FloatArray) -> IntArray:
        """Index of the nearest depth ``(...)``."""
        step = self.depth_um[1] - self.depth_um[0]
        index = ((depth_um - self.depth_um[0]) * (1.0 / step) + 0.5).astype(np.int32)
        return np.asarray(np.clip(index, 0, self.depth_um.size - 1))


@dataclass(frozen=True, slots=True, eq=False)
class Odds:
    """How likely each structure is at each row. ``ids`` : (L,). ``share`` : (R, L), rows sum to 1. ``region_id`` :
    (R,) the structure at the median depth, ``p_region`` : (R,) its share."""

    ids: IntArray
    share: Float32Array
    region_id: IntArray
    p_region: Float32Array


def preview_odds(median_um: FloatArray, draws_um: FloatArray, table: LabelTable) -> Odds:
    """Odds of rows whose depth is ``median_um`` (R,), with draws ``(S, R)``; draw s is looked up on copy s mod K."""
    draws, rows = draws_um.shape
    copies, cells = table.lateral_code.shape
    start = (np.arange(draws, dtype=np.int32) % copies * cells)[:, None]
    codes = table.lateral_code.ravel().take(table.cell(draws_um) + start)
    n = table.ids.size
    counts = np.bincount((codes + np.arange(rows, dtype=np.int32) * n).ravel(), minlength=rows * n).reshape(rows, n)
    share = counts.astype(np.float32) / np.float32(draws)
    here = table.code[table.cell(median_um)].astype(np.int64)
    return Odds(table.ids, share, table.ids[here], share[np.arange(rows), here])


def odds_of(region_id: IntArray, region_draws: IntArray) -> Odds:
    """Odds of located contacts: ``region_id`` (R,), ``region_draws`` (S, R) of :class:`locating.assign.Located`."""
    ids, codes = np.unique(region_draws, return_inverse=True)
    rows, n = region_draws.shape[1], ids.size
    flat = codes.reshape(region_draws.shape) + np.arange(rows) * n
    share = (np.bincount(flat.ravel(), minlength=rows * n).reshape(rows, n) / len(region_draws)).astype(np.float32)
    return Odds(ids, share, region_id, np.asarray((region_draws == region_id).mean(axis=0), np.float32))


def shifted(
    posterior: DepthPosterior,
    before: Sequence[Anchor],
    after: Sequence[Anchor],
    by_hand: DepthMap | None = None,
    *,
    median_um: FloatArray | None = None,
) -> DepthPosterior:
    """The draws of ``posterior``, in which the anchors ``before`` counted, moved so that their median meets ``after``.

    Anchors that stay hold their place; at one that was placed or moved the median goes through it; between them the
    shift is linear in tip distance and beyond the outermost it is constant (slope 1, as for anchors by hand). Taking
    one away moves nothing: only the exact posterior knows where the recording pulls then. With ``by_hand`` the median
    becomes that map instead. The spread stays as it was. ``median_um`` : the posterior's own, where it is known.
    """
    tip = posterior.tip_distance_um
    median = posterior.median_um if median_um is None else median_um
    if by_hand is not None:
        return _moved(posterior, by_hand(tip) - median)
    if not after or set(after) <= set(before):
        return posterior
    held = sorted(after, key=lambda a: a.tip_distance_um)
    at = np.array([a.tip_distance_um for a in held])
    kept = set(before)
    there = np.interp(at, tip, median)
    push = np.array([0.0 if a in kept else a.track_depth_um for a in held])
    shift = np.where([a in kept for a in held], 0.0, push - there)
    return _moved(posterior, np.interp(tip, at, shift))


def _moved(posterior: DepthPosterior, shift_um: FloatArray) -> DepthPosterior:
    """Draws shifted row by row; where a hard pull would fold one, its rows are spread apart just enough."""
    depth = posterior.depth_um + shift_um
    if (np.diff(depth, axis=1) >= 0).any():
        step = MIN_STEP_UM * np.arange(depth.shape[1])
        depth = np.minimum.accumulate(depth + step, axis=1) - step
    return replace(posterior, depth_um=depth)
