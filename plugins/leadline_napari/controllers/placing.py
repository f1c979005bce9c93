"""Where an anchor goes when a person puts it somewhere: onto a contact, onto a border, between its neighbours."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterable

    from leadline.base.arrays import FloatArray
    from leadline.model.anchor import Anchor
    from leadline_napari.states import Strata

GAP_UM = 1.0
SNAP_UM = 25.0


def nearest_row(rows_um: FloatArray, tip_um: float) -> float:
    """The tip distance of the nearest row of contacts."""
    return float(rows_um[int(abs(rows_um - tip_um).argmin())])


def onto_border(strata: Strata, depth_um: float) -> tuple[float, str]:
    """The nearest border of the strata where one is close, and its name."""
    near = [
        (abs(lower.top_um - depth_um), lower.top_um, f"{upper.acronym} / {lower.acronym}")
        for upper, lower in pairwise(strata.runs)
    ]
    away, at, name = min(near, default=(SNAP_UM, depth_um, ""))
    return (at, name) if away < SNAP_UM else (depth_um, "")


def moved(anchor: Anchor, end: str, um: float, others: Iterable[Anchor]) -> Anchor:
    """The anchor with one end ('depth' or 'tip') elsewhere, kept from crossing ``others``."""
    neighbours = [a for a in others if a != anchor]
    if end == "depth":
        above = [a.track_depth_um for a in neighbours if a.tip_distance_um > anchor.tip_distance_um]
        below = [a.track_depth_um for a in neighbours if a.tip_distance_um < anchor.tip_distance_um]
        return replace(anchor, track_depth_um=round(_between(um, above, below), 1))
    lower = [a.tip_distance_um for a in neighbours if a.track_depth_um > anchor.track_depth_um]
    upper = [a.tip_distance_um for a in neighbours if a.track_depth_um < anchor.track_depth_um]
    return replace(anchor, tip_distance_um=round(_between(um, lower, upper), 1))


def _between(um: float, low: list[float], high: list[float]) -> float:
    """``um``, kept a little away from the neighbours on either side."""
    if low:
        um = max(um, max(low) + GAP_UM)
    return min(um, min(high) - GAP_UM) if high else um
