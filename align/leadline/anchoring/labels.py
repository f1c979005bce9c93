"""Which structures a contact at a given track depth records, and what is known of their features beforehand."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.anchoring.features import GROUPS
from leadline.anchoring.knowledge import UNKNOWN_SD
from leadline.base.arrays import FloatArray, IntArray

if TYPE_CHECKING:
    from leadline.anchoring.evidence import ShankEvidence
    from leadline.anchoring.features import FeatureSet
    from leadline.anchoring.knowledge import Knowledge
    from leadline.model.atlas import Structures

CELL_UM = 2.5
BLUR_UM = {"lfp": 45.0, "units": 20.0}
ACTIVE = 8
MIN_WEIGHT = 0.01
INTERCEPT_SD = 1.0
MIN_SPAN_UM = 500.0
NOISE_VARIANCE = 0.4


@dataclass(frozen=True, slots=True, eq=False)
class LabelTable:
    """Blurred label membership along a track, on cells of 2.5 um, and the prior of the features of each label.

    ``start_um`` : depth of cell 0. ``ids`` : (L,) structures. ``active``, ``weight`` : (G, M, 8) labels that a contact
    in the cell records and their shares, for each group of features, averaged over the lateral copies of the track; -1
    where there is none.
    ``mean`` : group -> (L + 1, F) prior means; ``covariance`` : (L + 1, L + 1) in units of the noise variance. The
    last entry is an intercept, since the scaling of a feature depends on what the shank covers.
    """

    start_um: float
    ids: IntArray
    active: IntArray
    weight: FloatArray
    mean: dict[str, FloatArray]
    covariance: FloatArray


def tabulate(
    shank: ShankEvidence, features: FeatureSet, structures: Structures, knowledge: Knowledge, reach_um: FloatArray
) -> LabelTable:
    """Membership tables for depths between ``reach_um[0]`` and ``reach_um[1]``."""
    from scipy.ndimage import gaussian_filter1d

    ends = shank.depth_um[[0, -1]]
    low, high = np.clip(reach_um, *ends)
    if high - low < MIN_SPAN_UM:  # an anchor far off the track: keep the whole of it
        low, high = ends
    cells = np.arange(low, high + CELL_UM, CELL_UM)
    copies = shank.lateral_label_id[:, np.searchsorted((shank.depth_um[1:] + shank.depth_um[:-1]) / 2, cells)]
    ids = np.unique(copies)
    share = np.zeros((cells.size, ids.size))
    for row in copies:
        share[np.arange(cells.size), np.searchsorted(ids, row)] += 1.0 / len(copies)
    active, weight = (
        np.full((len(GROUPS), cells.size, ACTIVE), -1, np.int64),
        np.zeros((len(GROUPS), cells.size, ACTIVE)),
    )
    for g, group in enumerate(GROUPS):
        blurred = gaussian_filter1d(share, BLUR_UM[group] / CELL_UM, axis=0, mode="nearest", truncate=3.0)
        order = np.argsort(-blurred, axis=1, kind="stable")[:, :ACTIVE]
        most = np.take_along_axis(blurred, order, axis=1)
        most[most < MIN_WEIGHT] = 0.0
        most /= most.sum(axis=1, keepdims=True)
        active[g, :, : order.shape[1]] = np.where(most > 0, order, -1)
        weight[g, :, : order.shape[1]] = most
    mean, covariance = _prior(ids, features, structures, knowledge)
    return LabelTable(float(cells[0]), ids.astype(np.int64), active, weight, mean, covariance)


def _prior(
    ids: IntArray, features: FeatureSet, structures: Structures, knowledge: Knowledge
) -> tuple[dict[str, FloatArray], FloatArray]:
    """Prior means by group, and the covariance: labels of one type share the animal's departure from the type."""
    types = [knowledge.of(structures, int(i)) for i in ids]
    covariance = np.zeros((ids.size + 1, ids.size + 1))
    for a, kind in enumerate(types):
        if kind is None:
            covariance[a, a] = UNKNOWN_SD**2
            continue
        for b, other in enumerate(types):
            if other is not None and other.name == kind.name:
                covariance[a, b] = kind.sd**2 + (kind.instance_sd**2 if a == b else 0.0)
    covariance[-1, -1] = INTERCEPT_SD**2
    mean = {}
    for group in GROUPS:
        table = [[0.0 if t is None else t.mean.get(f, 0.0) for f in features.names[group]] for t in types]
        table.append([0.0] * len(features.names[group]))
        mean[group] = np.array(table, float).reshape(ids.size + 1, len(features.names[group]))
        # an angle's two columns have no prior mean of their own: the angle is relative
    return mean, covariance / NOISE_VARIANCE
