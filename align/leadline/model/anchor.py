"""Anchors: this contact sat at that point of the track."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from math import isfinite
from typing import TYPE_CHECKING

from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Iterable

ANCHOR_COLUMNS = (
    "penetration",
    "shank",
    "tip_distance_um",
    "track_depth_um",
    "sd_um",
    "landmark",
    "source",
    "note",
)
DEFAULT_SD_UM = 40.0


@dataclass(frozen=True, slots=True, order=True)
class Anchor:
    """A pair (tip distance, track depth) with a standard deviation. ``source`` : 'user', or 'auto' once accepted."""

    penetration: str
    shank: int
    tip_distance_um: float
    track_depth_um: float
    sd_um: float = DEFAULT_SD_UM
    landmark: str = ""
    source: str = "user"
    note: str = ""

    def __post_init__(self) -> None:
        where = f"anchor of {self.penetration}"
        for name in ("tip_distance_um", "track_depth_um", "sd_um"):
            if not isfinite(getattr(self, name)):
                raise LeadlineError(f"{name} is not a finite number", where=where, mend="Write a number in um")
        if self.sd_um <= 0:
            raise LeadlineError(f"sd_um must be positive, is {self.sd_um:g}", where=where, mend="20 to 60 um are usual")
        if self.source not in ("user", "auto"):
            raise LeadlineError(f"source is {self.source!r}", where=where, mend="It is 'user' or 'auto'")


@dataclass(frozen=True, slots=True)
class Suggestion:
    """An anchor that the recording suggests; ``support`` and ``against`` say in words what speaks for and against."""

    anchor: Anchor
    support: str
    against: str


def in_order(anchors: Iterable[Anchor]) -> tuple[Anchor, ...]:
    """Anchors of one shank from the surface down.

    Raises LeadlineError that names both anchors when two of them cross or coincide: a contact nearer the tip must
    lie deeper.
    """
    ordered = sorted(anchors, key=lambda a: -a.tip_distance_um)
    for upper, lower in pairwise(ordered):
        if upper.tip_distance_um == lower.tip_distance_um or upper.track_depth_um >= lower.track_depth_um:
            raise LeadlineError(
                f"anchors cross: {_words(upper)} and {_words(lower)}; the contact nearer the tip must lie deeper",
                where=f"penetration {upper.penetration}, shank {upper.shank}",
                mend="Move or delete one of them",
            )
    return tuple(ordered)


def _words(anchor: Anchor) -> str:
    name = f"'{anchor.landmark or anchor.note}' " if anchor.landmark or anchor.note else ""
    return f"{name}(tip distance {anchor.tip_distance_um:g} um at track depth {anchor.track_depth_um:g} um)"
