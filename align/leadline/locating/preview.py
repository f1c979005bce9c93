"""What an anchor in the hand would do, quickly: draws bound to it, regions looked up. The exact answer follows."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import Float32Array, FloatArray, IntArray, frozen, frozen_vector
from leadline.base.errors import LeadlineError
from leadline.locating.assign import TIE

if TYPE_CHECKING:
    from collections.abc import Iterable

    from leadline.model.anchor import Anchor
    from leadline.model.posterior import DepthPosterior

MIN_STEP_UM = 1e-3
CEILING = 0.95  # a release never takes more than this share of the precision for the anchor's doing


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
    (R,) the likeliest structure, ``p_region`` : (R,) its share."""

    ids: IntArray
    share: Float32Array
    region_id: IntArray
    p_region: Float32Array


def believed(posterior: DepthPosterior, table: LabelTable) -> LabelTable:
    """The track as each draw sees it: copy s of the result holds the structures that draw s believes in.

    Where draw s has a row, it says which structure lies at that depth, displaced borders and all; that is kept, so
    that rows moved along it meet the borders where the draw has them. Above and below its rows copy s mod K of
    ``table`` goes on. Without labels in ``posterior`` the table itself is returned.
    """
    if posterior.label_id is None:
        return table
    draws, rows = posterior.depth_um.shape
    grid, copies = table.depth_um, table.lateral_label_id
    seen = np.asarray(copies)[np.arange(draws) % len(copies)]
    rising, labels = posterior.depth_um[:, ::-1], posterior.label_id[:, ::-1]
    middle = (rising[:, 1:] + rising[:, :-1]) / 2
    reach = np.diff(rising[:, [0, -1]], axis=1)[:, 0] / max(rows - 1, 1) / 2
    for s in range(draws):
        low, high = np.searchsorted(grid, [rising[s, 0] - reach[s], rising[s, -1] + reach[s]])
        seen[s, low:high] = labels[s, np.searchsorted(middle[s], grid[low:high])]
    return LabelTable(grid, table.label_id, seen)


def preview_odds(median_um: FloatArray, draws_um: FloatArray, table: LabelTable) -> Odds:
    """Odds of rows with draws ``(S, R)``; draw s is looked up on copy s mod K. Of structures equally likely the one at
    ``median_um`` (R,) is named."""
    draws, rows = draws_um.shape
    copies, cells = table.lateral_code.shape
    start = (np.arange(draws, dtype=np.int32) % copies * cells)[:, None]
    codes = table.lateral_code.ravel().take(table.cell(draws_um) + start)
    n = table.ids.size
    counts = np.bincount((codes + np.arange(rows, dtype=np.int32) * n).ravel(), minlength=rows * n).reshape(rows, n)
    share = counts.astype(np.float32) / np.float32(draws)
    leaning = share.copy()
    leaning[np.arange(rows), table.code[table.cell(median_um)]] += TIE
    best = leaning.argmax(axis=1)
    return Odds(table.ids, share, table.ids[best], share[np.arange(rows), best])


def odds_of(region_id: IntArray, region_draws: IntArray) -> Odds:
    """Odds of located contacts: ``region_id`` (R,), ``region_draws`` (S, R) of :class:`locating.assign.Located`."""
    ids, codes = np.unique(region_draws, return_inverse=True)
    rows, n = region_draws.shape[1], ids.size
    flat = codes.reshape(region_draws.shape) + np.arange(rows) * n
    share = (np.bincount(flat.ravel(), minlength=rows * n).reshape(rows, n) / len(region_draws)).astype(np.float32)
    return Odds(ids, share, region_id, np.asarray((region_draws == region_id).mean(axis=0), np.float32))


def updated(posterior: DepthPosterior, before: Iterable[Anchor], after: Iterable[Anchor]) -> DepthPosterior:
    """The draws of ``posterior``, in which the anchors ``before`` counted, as they would be under ``after``.

    Every anchor that is gone releases the draws and every one that is new binds them, one after the other, by the
    deterministic ensemble update (Whitaker & Hamill 2002, Mon. Weather Rev. 130, 1913); an anchor is released by the
    same formula with a negative variance. Exact where the draws are Gaussian; what the recording would say where it
    is pulled far from where it was is left to the exact answer.
    """
    old, new = set(before), set(after)
    if old == new:
        return posterior
    draws = np.array(posterior.depth_um)
    for anchor in sorted(old - new):
        _weigh(draws, posterior.tip_distance_um, anchor, -(anchor.sd_um**2))
    for anchor in sorted(new - old):
        _weigh(draws, posterior.tip_distance_um, anchor, anchor.sd_um**2)
    if (draws[:, 1:] >= draws[:, :-1]).any():
        draws = -np.sort(-draws, axis=1) - MIN_STEP_UM * np.arange(draws.shape[1])
    return replace(posterior, depth_um=draws, label_id=None)


def _weigh(draws: FloatArray, tip_um: FloatArray, anchor: Anchor, variance: float) -> None:
    """Take one anchor into ``draws`` (S, R), in place (``variance`` > 0), or let go of it (< 0)."""
    here = _at(draws, tip_um, anchor.tip_distance_um)
    centre = float(here.mean())
    away = here - centre
    own = float(away @ away) / len(draws)
    if variance < 0:
        own = min(own, CEILING * -variance)
    gain = (away @ draws) / len(draws) / (own + variance)
    damp = 1.0 / (1.0 + np.sqrt(variance / (own + variance)))
    draws += ((anchor.track_depth_um - centre) - damp * away)[:, None] * gain


def _at(draws: FloatArray, tip_um: FloatArray, at_um: float) -> FloatArray:
    """Depth of each draw at one tip distance; 1 to 1 beyond the rows."""
    inside = float(np.clip(at_um, tip_um[0], tip_um[-1]))
    right = int(np.clip(np.searchsorted(tip_um, inside), 1, tip_um.size - 1)) if tip_um.size > 1 else 0
    left = max(right - 1, 0)
    share = (inside - tip_um[left]) / (tip_um[right] - tip_um[left]) if right else 0.0
    return np.asarray((1 - share) * draws[:, left] + share * draws[:, right] - (at_um - inside), np.float64)
