"""Planned entries against the tracks: do they fit much better mirrored, in another order, or in millimetres?

The two halves of a brain are too alike for an image to tell a mirror; where the experimenter meant to go in is the only
thing in hand that can.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import permutations
from typing import TYPE_CHECKING

import numpy as np

from leadline.tracing.assign import least_cost

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.base.arrays import FloatArray
    from leadline.tracing.assign import TracedPath, Wanted

AXES = ("ap", "dv", "ml")
BETTER = 6.0  # log likelihood by which another reading of the plans must be better
ASTRAY_UM = 1000.0


def doubts(wanted: Sequence[Wanted], tracks: Sequence[TracedPath], middle_um: float) -> tuple[str, ...]:
    """At most one sentence: the reading of the plans that fits the tracks far better than the plain one.

    Parameters
    ----------
    wanted : every penetration; those that state no plan take up tracks of their own number of shanks and length.
    tracks : all that were found or drawn, whosever they are.
    middle_um : ml of the atlas's midline.
    """
    planned = [w for w in wanted if w.entry_near_um is not None]
    if not planned or not tracks:
        return ()
    # which way shanks grow says nothing of which side they went in
    others = [replace(w, shank_toward=None) for w in wanted if w.entry_near_um is None]
    plans = np.array([w.entry_near_um for w in planned], float)
    plain = least_cost(tracks, [*_moved(planned, plans), *others])
    if plain < BETTER:
        return ()
    readings, cost = _readings(plans, middle_um), {}
    for words, moved in readings.items():
        cost[words] = least_cost(tracks, [*_moved(planned, moved), *others])
        if cost[words] < BETTER:  # nothing can fit far better than that
            break
    words = min(cost, key=lambda w: cost[w])
    entries = np.array([t.atlas_um[0] for t in tracks])
    before, after = _nearest(plans, entries), _nearest(readings[words], entries)
    if plain - cost[words] < BETTER or np.median(after) > ASTRAY_UM:
        return ()
    misses = "; ".join(f"'{w.name}' {a:.0f} um, so {b:.0f}" for w, a, b in zip(planned, before, after, strict=True))
    return (
        f"the planned entries fit the tracks far better {words} (log likelihood higher by {plain - cost[words]:.0f}; "
        f"from plan to nearest track: {misses}). {_mend(words)}",
    )


def _readings(plans: FloatArray, middle_um: float) -> dict[str, FloatArray]:
    """Other ways to read the plans, in words."""
    mirrored = np.column_stack([plans[:, :2], 2 * middle_um - plans[:, 2]])
    readings = {"mirrored left to right": mirrored, "as millimetres": 1000.0 * plans}
    for order in permutations(range(3)):
        if order != (0, 1, 2):
            readings["read as " + ", ".join(AXES[k] for k in np.argsort(order))] = plans[:, order]
    return readings


def _moved(planned: Sequence[Wanted], plans: FloatArray) -> list[Wanted]:
    places = ((float(ap), float(dv), float(ml)) for ap, dv, ml in plans)
    return [replace(w, shank_toward=None, entry_near_um=place) for w, place in zip(planned, places, strict=True)]


def _nearest(plans: FloatArray, entries: FloatArray) -> FloatArray:
    return np.asarray(np.linalg.norm(plans[:, None] - entries, axis=2).min(axis=1), np.float64)


def _mend(words: str) -> str:
    if words.startswith("mirrored"):
        return (
            "Either a letter R or L is wrong in the orientation of the stack or the atlas, and every channel then lies "
            "in the wrong half of the brain, or ml of entry_near_um is given for the other side"
        )
    return "entry_near_um is ap, dv, ml in atlas um"
