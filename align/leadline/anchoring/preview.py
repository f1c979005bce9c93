"""What an edited anchor would do to stored draws, at once; the exact answer is inferred afterwards."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.model.anchor import Anchor, in_order

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.anchoring.evidence import ShankEvidence
    from leadline.base.arrays import FloatArray
    from leadline.model.posterior import DepthPosterior

FLOOR_UM = 1e-3
CEILING = 0.95


def preview(posterior: DepthPosterior, shank: ShankEvidence, anchors: Sequence[Anchor]) -> DepthPosterior:
    """Draws as they would be with ``anchors`` in place of those of ``shank``, under which they were drawn.

    Every anchor that is new binds the draws and every one that is gone releases them, one after the other, by the
    deterministic ensemble update (Whitaker & Hamill 2002, Mon. Weather Rev. 130, 1913); an anchor is released by
    the same formula with a negative variance. Exact where the draws are Gaussian. Raises LeadlineError when anchors
    cross.
    """
    in_order(anchors)
    old, new = set(shank.anchors), set(anchors)
    draws = np.array(posterior.depth_um)
    for anchor in sorted(old - new):
        draws = _updated(draws, shank.tip_distance_um, anchor, -(anchor.sd_um**2))
    for anchor in sorted(new - old):
        draws = _updated(draws, shank.tip_distance_um, anchor, anchor.sd_um**2)
    ordered = -np.sort(-draws, axis=1) - FLOOR_UM * np.arange(draws.shape[1])
    return replace(posterior, depth_um=ordered, label_id=shank.label_at(ordered))


def _updated(draws: FloatArray, tip_um: FloatArray, anchor: Anchor, variance: float) -> FloatArray:
    """Draws ``(S, R)`` after one anchor is taken in (``variance`` > 0) or released (< 0)."""
    here = _at(draws, tip_um, anchor.tip_distance_um)
    mean = draws.mean(axis=0)
    spread, centre = draws - mean, float(here.mean())
    own = float(here.var())
    if variance < 0:
        own = min(own, CEILING * -variance)
    gain = spread.T @ (here - centre) / len(draws) / (own + variance)
    damp = 1.0 / (1.0 + np.sqrt(variance / (own + variance)))
    moved = mean + gain * (anchor.track_depth_um - centre)
    return np.asarray(moved + spread - damp * np.outer(here - centre, gain), np.float64)


def _at(draws: FloatArray, tip_um: FloatArray, at_um: float) -> FloatArray:
    """Depth of each draw at one tip distance; 1 to 1 beyond the rows."""
    inside = float(np.clip(at_um, tip_um[0], tip_um[-1]))
    right = int(np.clip(np.searchsorted(tip_um, inside), 1, max(1, tip_um.size - 1)))
    if tip_um.size == 1:
        return np.asarray(draws[:, 0] - (at_um - inside), np.float64)
    share = (inside - tip_um[right - 1]) / (tip_um[right] - tip_um[right - 1])
    return np.asarray((1 - share) * draws[:, right - 1] + share * draws[:, right] - (at_um - inside), np.float64)
