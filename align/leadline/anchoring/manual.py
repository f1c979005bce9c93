"""The depth map that a person's anchors draw, by the rules of the contract, with no physiology."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.model.anchor import Anchor, in_order
from leadline.model.depth_map import DepthMap

if TYPE_CHECKING:
    from collections.abc import Iterable

    from leadline.model.posterior import DepthPosterior


def manual_map(anchors: Iterable[Anchor], end_depth_um: float) -> DepthMap:
    """Depth map through ``anchors`` of one shank.

    With none, 1 probe um is 1 atlas um and the tip sits at the track's end, ``end_depth_um``; one shifts; two or
    more are joined by a monotone cubic; beyond the outermost the slope is 1.

    Raises LeadlineError when two anchors cross, naming both.
    """
    ordered = in_order(anchors)
    if not ordered:
        return DepthMap(np.array([0.0]), np.array([end_depth_um]))
    rising = ordered[::-1]
    return DepthMap(np.array([a.tip_distance_um for a in rising]), np.array([a.track_depth_um for a in rising]))


def recentred(posterior: DepthPosterior, depth_map: DepthMap) -> DepthPosterior:
    """The same spread of draws about ``depth_map`` as their median: what is not known stays as wide as it was."""
    shift = depth_map(posterior.tip_distance_um) - posterior.median_um
    return replace(posterior, depth_um=posterior.depth_um + shift, informed=0.0, label_id=None)
