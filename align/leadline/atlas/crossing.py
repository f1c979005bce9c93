"""Which structures a track runs through, and where it passes from one to the next."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import FloatArray, IntArray, frozen, frozen_vector
from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Callable

    from leadline.model.atlas import Atlas

STEP_UM = 5.0
EDGE_UM = 0.5


@dataclass(frozen=True, slots=True, eq=False)
class Runs:
    """Label runs along a track, from the surface down, without gaps.

    ``edge_um`` : (k + 1,) track depths, ascending: start of the first run, borders, end of the last. ``structure_id`` :
    (k,).
    """

    edge_um: FloatArray
    structure_id: IntArray

    def __post_init__(self) -> None:
        ids = frozen(self.structure_id, np.int64)
        edges = frozen_vector(self.edge_um, "Runs.edge_um", length=len(ids) + 1)
        if (np.diff(edges) <= 0).any():
            raise LeadlineError("run edges must ascend", where="label runs")
        object.__setattr__(self, "structure_id", ids)
        object.__setattr__(self, "edge_um", edges)

    @property
    def start_um(self) -> FloatArray:
        """Track depth ``(k,)`` at which each run begins."""
        return self.edge_um[:-1]

    @property
    def stop_um(self) -> FloatArray:
        """Track depth ``(k,)`` at which each run ends."""
        return self.edge_um[1:]

    def id_at(self, track_depth_um: FloatArray) -> IntArray:
        """Structure id ``(n,)`` at track depths; beyond the ends, that of the end run."""
        row = np.searchsorted(self.edge_um[1:-1], np.asarray(track_depth_um, float), side="right")
        ids: IntArray = self.structure_id[row]
        return ids

    def boundary_distance(self, track_depth_um: FloatArray) -> FloatArray:
        """Distance ``(n,)`` in um along the track to the nearest border between runs; infinite where there is none."""
        depth = np.asarray(track_depth_um, float)
        borders = self.edge_um[1:-1]
        if not borders.size:
            return np.full(depth.shape, np.inf)
        after = np.clip(np.searchsorted(borders, depth), 0, len(borders) - 1)
        before = np.clip(after - 1, 0, len(borders) - 1)
        return np.asarray(np.minimum(np.abs(depth - borders[after]), np.abs(depth - borders[before])), np.float64)


def runs_along(
    source: Atlas | Callable[[FloatArray], IntArray],
    points_um: FloatArray,
    track_depth_um: FloatArray,
    *,
    step_um: float = STEP_UM,
    edge_um: float = EDGE_UM,
) -> Runs:
    """Label runs along a curve, their borders found by bisection.

    Parameters
    ----------
    source : an atlas, or a function from points ``(n, 3)`` in atlas um to structure ids ``(n,)``.
    points_um, track_depth_um : (n >= 2, 3) and (n,) ascending; the curve is linear between them.
    step_um : every run that is longer is found.
    edge_um : how finely borders are placed.

    Raises
    ------
    LeadlineError : fewer than two points, or depths that do not ascend.
    """
    label_at = source if callable(source) else source.label_at
    points, nodes = np.asarray(points_um, float), np.asarray(track_depth_um, float)
    if len(nodes) < 2 or points.shape != (len(nodes), 3) or (np.diff(nodes) <= 0).any():
        raise LeadlineError("a track needs two points or more at ascending depths", where="label runs")

    def ids_at(depth: FloatArray) -> IntArray:
        found: IntArray = label_at(np.column_stack([np.interp(depth, nodes, points[:, k]) for k in range(3)]))
        return found

    count = max(2, int(np.ceil((nodes[-1] - nodes[0]) / step_um)) + 1)
    depth = np.linspace(nodes[0], nodes[-1], count)
    ids = ids_at(depth)
    while True:
        wide = np.flatnonzero((ids[1:] != ids[:-1]) & (np.diff(depth) > edge_um))
        if not wide.size:
            break
        middle = (depth[wide] + depth[wide + 1]) / 2
        ids = np.insert(ids, wide + 1, ids_at(middle))
        depth = np.insert(depth, wide + 1, middle)
    last = np.flatnonzero(ids[1:] != ids[:-1])
    borders = (depth[last] + depth[last + 1]) / 2
    return Runs(np.concatenate([nodes[:1], borders, nodes[-1:]]), ids[np.append(last, len(ids) - 1)])
