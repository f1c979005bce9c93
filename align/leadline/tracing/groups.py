"""Sets of parallel tracks that could be the shanks of one probe."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np

from leadline.base.arrays import FloatArray
from leadline.model.frames import direction
from leadline.model.track import along, arc_length

ANGLE_SD_DEG = 4.0
SCALE_SD = 0.12  # log of tissue spacing over probe spacing: clearing shrinks and swells, registration undoes most
PLACE_SD_UM = 40.0
MAX_ANGLE_DEG = 15.0
MAX_SCALE = 1.6
MAX_COST = 14.0
DECIDED = 2.0
LETTERS = {"P": "A", "A": "P", "I": "S", "S": "I", "R": "L", "L": "R"}


@dataclass(frozen=True, slots=True, eq=False)
class Group:
    """Traces by shank position, None where one is missing.

    ``cost`` : half the sum of squared deviations of angle, scale and place, in sd. ``way`` : (3,) atlas direction in
    which shank numbers grow. ``decided`` : whether uneven spacing alone says so.
    """

    slots: tuple[int | None, ...]
    cost: float
    way: FloatArray
    decided: bool


def opposite(letter: str) -> str:
    """The opposite anatomical letter."""
    return LETTERS[letter]


def toward_letter(way: FloatArray) -> str:
    """The anatomical letter nearest to a direction in atlas axes; near a tie ap and ml go before dv."""
    axis = int(np.argmax(np.abs(way) * [1.0, 0.9, 1.0]))
    return "PIR"[axis] if way[axis] > 0 else "ASL"[axis]


def shank_groups(paths_um: Sequence[FloatArray], x_um: Sequence[float], toward: str | None) -> list[Group]:
    """All sets of at least two traces that could be shanks at ``x_um`` (in order of shank number).

    For every set the order of shank numbers is the one that ``toward`` names; without it the one that the spacing
    prefers, and if it does not, the one that grows to the posterior or to the right.
    """
    out: list[Group] = []
    near = _neighbours(paths_um, float(np.ptp(x_um)))
    for size in range(2, len(x_um) + 1):
        for rows in combinations(range(len(paths_um)), size):
            if all(near[i, j] for i, j in combinations(rows, 2)):
                group = _group([paths_um[i] for i in rows], rows, np.asarray(x_um, float), toward)
                if group is not None and group.cost < MAX_COST:
                    out.append(group)
    return out


def _neighbours(paths_um: Sequence[FloatArray], span_um: float) -> FloatArray:
    """Which pairs are parallel and near enough to be two shanks of one probe."""
    ways = np.array([_way(p) for p in paths_um]).reshape(-1, 3)
    middles = np.array([_at(p, 0.5) for p in paths_um]).reshape(-1, 3)
    away = middles[:, None] - middles[None]
    mean = ways[:, None] + ways[None]
    mean = mean / np.maximum(np.linalg.norm(mean, axis=-1, keepdims=True), 1e-9)
    across = away - (away * mean).sum(-1, keepdims=True) * mean
    parallel = ways @ ways.T > np.cos(np.radians(MAX_ANGLE_DEG))
    return np.asarray(parallel & (np.linalg.norm(across, axis=-1) < MAX_SCALE * span_um + 100.0))


def _way(path_um: FloatArray) -> FloatArray:
    chord = path_um[-1] - path_um[0]
    return np.asarray(chord / max(np.linalg.norm(chord), 1e-9), np.float64)


def _at(path_um: FloatArray, share: float) -> FloatArray:
    s = arc_length(path_um)
    return np.asarray(along(s, path_um, np.array([share * s[-1]]))[0], np.float64)


def _group(paths: Sequence[FloatArray], rows: Sequence[int], x: FloatArray, toward: str | None) -> Group | None:
    """The best way to put a set of traces to shank positions."""
    ways = np.array([_way(p) for p in paths])
    mean = ways.mean(axis=0)
    mean /= np.linalg.norm(mean)
    angles = np.degrees(np.arccos(np.clip(ways @ mean, -1, 1)))
    reach = 0.5 * min(arc_length(p)[-1] for p in paths)
    places = np.array([along(arc_length(p), p, np.array([reach]))[0] for p in paths])
    flat = places - places.mean(axis=0)
    flat = flat - np.outer(flat @ mean, mean)
    line = np.linalg.svd(flat, full_matrices=False)[2][0]
    beside = np.linalg.norm(flat - np.outer(flat @ line, line), axis=1)
    base = 0.5 * float((angles**2).sum() / ANGLE_SD_DEG**2 + (beside**2).sum() / PLACE_SD_UM**2)
    if base > MAX_COST:
        return None
    best = [_placed(flat @ (sign * line), x, sign * line) for sign in (1.0, -1.0)]
    best.sort(key=lambda item: item[0])
    if not np.isfinite(best[0][0]):
        return None  # no spacing of the probe fits these traces, either way round
    decided = best[1][0] - best[0][0] > DECIDED
    if toward is not None:
        best.sort(key=lambda item: -float(item[2] @ direction(toward)))
    elif not decided:
        best.sort(key=lambda item: toward_letter(item[2]) not in "PRI")
    cost, slots, way = best[0]
    if not np.isfinite(cost):
        return None  # they fit the probe only the other way round
    numbers: list[int | None] = [None] * len(x)
    for k, row in zip(slots, rows, strict=True):
        numbers[k] = row
    return Group(tuple(numbers), base + cost, way, decided)


def _placed(q: FloatArray, x: FloatArray, line: FloatArray) -> tuple[float, tuple[int, ...], FloatArray]:
    """Put traces at ``q`` (um along a line) to shank positions ``x`` in order; cost, position of each, and the
    direction in which shank numbers grow when x grows along the line."""
    order = np.argsort(q)
    by_x = np.argsort(x)
    best: tuple[float, tuple[int, ...]] = (np.inf, ())
    for picked in combinations(by_x, len(q)):
        target = x[list(picked)]
        middle = target - target.mean()
        scale = float(middle @ (q[order] - q.mean()) / max(middle @ middle, 1e-9))
        if not 1 / MAX_SCALE < scale < MAX_SCALE:
            continue
        left = q[order] - q.mean() - scale * middle
        cost = 0.5 * ((np.log(scale) / SCALE_SD) ** 2 + float((left**2).sum()) / PLACE_SD_UM**2)
        if cost < best[0] - 1e-9:
            slots = np.empty(len(q), int)
            slots[order] = picked
            best = (cost, tuple(int(k) for k in slots))
    trend = float(np.corrcoef(np.arange(len(x)), x)[0, 1]) if len(x) > 1 else 1.0
    return best[0], best[1], line * (1.0 if trend >= 0 else -1.0)
