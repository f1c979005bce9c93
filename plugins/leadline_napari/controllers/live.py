"""The answer on the screen: the exact one, or a quick one while an anchor is in the hand."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.anchoring.manual import manual_map, recentred
from leadline.locating.preview import LabelTable, Odds, believed, odds_of, preview_odds, updated
from leadline.pipeline.exact import located

if TYPE_CHECKING:
    from leadline.base.arrays import FloatArray, IntArray
    from leadline.locating.assign import Located
    from leadline.model.anchor import Anchor
    from leadline.model.posterior import DepthPosterior
    from leadline.pipeline.bench import Bench
    from leadline.pipeline.exact import ShankGround


@dataclass(frozen=True, slots=True, eq=False)
class Live:
    """An answer. ``anchors`` : those counted in it; ``contact_region`` : (n,) structure of every contact; ``odds`` by
    row of the posterior; ``seen`` : the track as each draw sees it; ``exact`` : not a preview."""

    posterior: DepthPosterior
    median_um: FloatArray
    sd_um: FloatArray
    odds: Odds
    contact_region: IntArray
    anchors: tuple[Anchor, ...]
    seen: LabelTable
    exact: bool

    def depth_at(self, tip_um: float) -> float:
        """Track depth of a tip distance; slope 1 beyond the rows."""
        tip = self.posterior.tip_distance_um
        inside = min(max(tip_um, float(tip[0])), float(tip[-1]))
        return float(np.interp(inside, tip, self.median_um)) - (tip_um - inside)

    def tip_at(self, depth_um: float) -> float:
        """Tip distance of a track depth; slope 1 beyond the rows."""
        tip, median = self.posterior.tip_distance_um, self.median_um
        inside = min(max(depth_um, float(median[-1])), float(median[0]))
        return float(np.interp(inside, median[::-1], tip[::-1])) - (depth_um - inside)


def live_of(posterior: DepthPosterior, found: Located, shank: ShankGround, anchors: tuple[Anchor, ...]) -> Live:
    """The exact answer, for the screen; ``anchors`` : those of this shank that were counted."""
    _, first = np.unique(shank.contacts.tip_distance_um, return_index=True)
    odds = odds_of(found.region_id[first], found.region_draws[:, first])
    seen = believed(posterior, shank.table)
    return Live(posterior, posterior.median_um, posterior.sd_um, odds, found.region_id, anchors, seen, exact=True)


def stored(
    bench: Bench, posterior: DepthPosterior | None, shank: ShankGround, anchors: tuple[Anchor, ...]
) -> Live | None:
    """What the last run found, while the exact answer is being worked out; None where it fits no more."""
    rows = shank.evidence.tip_distance_um
    if posterior is None or not np.array_equal(posterior.tip_distance_um, rows):
        return None
    found = live_of(posterior, located(bench, shank, posterior, anchors), shank, anchors)
    return replace(found, exact=False)


def quick(base: Live, bench: Bench, shank: ShankGround, anchors: tuple[Anchor, ...]) -> Live:
    """What ``anchors`` would do to an answer, within a frame: regions and odds of the moved draws."""
    if set(anchors) == set(base.anchors):
        return replace(base, anchors=anchors)
    if bench.brain.settings.anchor.physiology and shank.evidence.profile is not None:
        posterior = updated(base.posterior, base.anchors, anchors)
    else:
        posterior = recentred(base.posterior, manual_map(anchors, shank.evidence.end_depth_um))
    median = posterior.median_um
    odds = preview_odds(median, posterior.depth_um, base.seen)
    rows = np.searchsorted(posterior.tip_distance_um, shank.contacts.tip_distance_um)
    return Live(posterior, median, posterior.sd_um, odds, odds.region_id[rows], anchors, base.seen, exact=False)
