"""Planned entries against the tracks: do they fit much better mirrored, in another order, or in millimetres?

The two halves of a brain are too alike for an image to tell a mirror; where the experimenter meant to go in is the only
thing in hand that can.
"""

from __future__ import annotations

from itertools import permutations
from typing import TYPE_CHECKING

import numpy as np

from leadline.tracing.assign import PLAN_SD_UM

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from leadline.base.arrays import FloatArray

AXES = ("ap", "dv", "ml")
FAR_SD = 3.0  # of plans: nobody misses by more than that and means it
BETTER = 8.0  # log likelihood by which another reading of the plans must be better


def doubts(plans_um: Mapping[str, Sequence[float]], entries_um: FloatArray, middle_um: float) -> tuple[str, ...]:
    """At most one sentence: the reading of the plans that fits the tracks far better than the plain one.

    Parameters
    ----------
    plans_um : planned entry (ap, dv, ml) of each penetration that states one, atlas um.
    entries_um : (T, 3) where the tracks enter the brain, all that were found or drawn.
    middle_um : ml of the atlas's midline.
    """
    if not plans_um or not len(entries_um):
        return ()
    plans = np.array(list(plans_um.values()), float)
    plain, plain_um = _fit(plans, entries_um)
    readings = _readings(plans, middle_um)
    fits = {words: _fit(moved, entries_um) for words, moved in readings.items()}
    words = max(fits, key=lambda w: fits[w][0])
    best, best_um = fits[words]
    if best - plain < BETTER or np.median(best_um) > FAR_SD * PLAN_SD_UM:
        return ()
    misses = "; ".join(f"'{n}' {a:.0f} um, so {b:.0f}" for n, a, b in zip(plans_um, plain_um, best_um, strict=True))
    return (f"the planned entries fit the tracks far better {words} (from plan to track: {misses}). {_mend(words)}",)


def _readings(plans: FloatArray, middle_um: float) -> dict[str, FloatArray]:
    """Other ways to read the plans, in words."""
    mirrored = np.column_stack([plans[:, :2], 2 * middle_um - plans[:, 2]])
    readings = {"mirrored left to right": mirrored, "as millimetres": 1000.0 * plans}
    for order in permutations(range(3)):
        if order != (0, 1, 2):
            readings["read as " + ", ".join(AXES[k] for k in np.argsort(order))] = plans[:, order]
    return readings


def _mend(words: str) -> str:
    if words.startswith("mirrored"):
        return (
            "Either a letter R or L is wrong in the orientation of the stack or the atlas, and every channel then lies "
            "in the wrong half of the brain, or ml of entry_near_um is given for the other side"
        )
    return "entry_near_um is ap, dv, ml in atlas um"


def _fit(plans: FloatArray, entries_um: FloatArray) -> tuple[float, FloatArray]:
    """Log likelihood of the best pairing of plans and tracks, no miss dearer than three sd, and the misses in um."""
    from scipy.optimize import linear_sum_assignment

    far_um = np.linalg.norm(plans[:, None] - entries_um, axis=2)
    cost = 0.5 * np.minimum(far_um / PLAN_SD_UM, 2 * FAR_SD) ** 2
    rows, columns = linear_sum_assignment(cost)
    alone = np.setdiff1d(np.arange(len(plans)), rows)
    miss = np.empty(len(plans))
    miss[rows], miss[alone] = far_um[rows, columns], far_um[alone].min(axis=1) if alone.size else 0.0
    return -float(cost[rows, columns].sum()), miss
