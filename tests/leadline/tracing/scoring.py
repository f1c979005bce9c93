"""Found tracks against true ones."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import linear_sum_assignment
from scipy.spatial import cKDTree

from leadline.model.track import Trace, along, arc_length

SAME_UM = 70.0
STEP_UM = 4.0


@dataclass(frozen=True)
class Match:
    """One found track. ``gap_um`` : distances of the true line from the found one, end to end of the truth.
    Errors of the ends are along the track, positive when too deep."""

    gap_um: np.ndarray
    entry_error_um: float
    end_error_um: float
    entry_sd_um: float
    end_sd_um: float


@dataclass(frozen=True)
class Score:
    matched: tuple[Match, ...]
    missed: tuple[int, ...]
    invented: tuple[int, ...]
    remarks: tuple[str, ...]


def score(true, found: Sequence[Trace], *, seed: int = 0, remark_um: float = 100.0) -> Score:
    """Pair tracks one to one by the median distance between them."""
    lines = [dense(t.points_um) for t in found]
    middle = np.array([[np.median(cKDTree(g).query(t.points_um[::5])[0]) for g in lines] for t in true])
    middle = middle.reshape(len(true), len(lines))
    rows, cols = linear_sum_assignment(np.minimum(middle, 1e4))
    pairs = {r: c for r, c in zip(rows, cols, strict=True) if middle[r, c] < SAME_UM}
    matched, remarks = [], []
    for i, t in enumerate(true):
        if i not in pairs:
            remarks.append(f"seed {seed}: missed {t.points_um[0].round()} to {t.points_um[-1].round()}")
            continue
        trace, line = found[pairs[i]], lines[pairs[i]]
        gap, _ = cKDTree(line).query(t.points_um[::3])
        entry, end = beyond(line[0], t.points_um, -1), beyond(line[-1], t.points_um, 1)
        matched.append(Match(gap, -entry, end, trace.entry_sd_um, trace.end_sd_um))
        if abs(end) > remark_um or abs(entry) > remark_um or np.quantile(gap, 0.95) > 40:
            remarks.append(
                f"seed {seed} track {i}: entry {-entry:+.0f} end {end:+.0f} (sd {trace.end_sd_um:.0f}) gap p95 "
                f"{np.quantile(gap, 0.95):.0f}, sigma {trace.radius_um[0]:.0f}, contrast {trace.contrast:.0f}"
            )
    invented = tuple(i for i in range(len(found)) if i not in pairs.values())
    remarks += [
        f"seed {seed}: invented {found[i].points_um[0].round()} to {found[i].points_um[-1].round()}, "
        f"contrast {found[i].contrast:.0f}"
        for i in invented
    ]
    return Score(tuple(matched), tuple(i for i in range(len(true)) if i not in pairs), invented, tuple(remarks))


def dense(points_um: np.ndarray) -> np.ndarray:
    """The polyline every 4 um, its last point included."""
    s = arc_length(points_um)
    return along(s, points_um, np.append(np.arange(0, s[-1], STEP_UM), s[-1]))


def beyond(point: np.ndarray, line: np.ndarray, which: int) -> float:
    """How far a point lies beyond the first (-1) or last (1) point of a line, along its end."""
    if which < 0:
        line = line[::-1]
    way = line[-1] - line[-min(len(line), 60)]
    return float((point - line[-1]) @ way / np.linalg.norm(way))
