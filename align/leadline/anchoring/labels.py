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
    from leadline.anchoring.features import Column
    from leadline.anchoring.knowledge import Knowledge
    from leadline.model.atlas import Structures

CELL_UM = 2.5
BLUR_UM = {"lfp": 45.0, "units": 20.0}
ACTIVE = 8
MIN_WEIGHT = 0.01
INTERCEPT_SD = 1.0
OWN_INTERCEPT_SD = 0.35
MIN_SPAN_UM = 500.0
NOISE_VARIANCE = 0.4


@dataclass(frozen=True, slots=True, eq=False)
class LabelTable:
    """Blurred label membership along a track, on cells of 2.5 um, and the prior of the features of each label.

    ``start_um`` : depth of cell 0. ``ids`` : (L,) structures. ``active``, ``weight`` : (G, M, 8) labels that a contact
    in the cell records (positions in ``ids``) and their shares, for each group of features, averaged over the lateral
    copies of the track; -1 where there is none.
    """

    start_um: float
    ids: IntArray
    active: IntArray
    weight: FloatArray


def tabulate(shank: ShankEvidence, reach_um: FloatArray) -> LabelTable:
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
    return LabelTable(float(cells[0]), ids.astype(np.int64), active, weight)


def label_prior(
    ids: IntArray,
    columns: dict[str, tuple[Column, ...]],
    shanks: int,
    structures: Structures,
    knowledge: Knowledge,
) -> tuple[dict[str, FloatArray], FloatArray]:
    """What is known beforehand of the features of each label: group -> means (L + S, F), and their covariance.

    ``covariance`` : (L + S, L + S) in units of the noise variance; labels of one type share the animal's departure
    from the type. The last S entries are an intercept of each shank, since the scaling of a feature depends on what
    the probe covers. The two columns of an angle have no mean of their own: the angle is relative.
    """
    types = [knowledge.of(structures, int(i)) for i in ids]
    covariance = np.zeros((ids.size + shanks, ids.size + shanks))
    for a, kind in enumerate(types):
        if kind is None:
            covariance[a, a] = UNKNOWN_SD**2
            continue
        for b, other in enumerate(types):
            if other is not None and other.name == kind.name:
                covariance[a, b] = kind.sd**2 + (kind.instance_sd**2 if a == b else 0.0)
    covariance[ids.size :, ids.size :] = intercepts(shanks)
    mean = {}
    for group in GROUPS:
        rows = [[0.0 if t is None else t.mean.get(key[0], 0.0) for key in columns[group]] for t in types]
        rows += [[0.0] * len(columns[group])] * shanks
        mean[group] = np.array(rows, float).reshape(ids.size + shanks, len(columns[group]))
    return mean, covariance / NOISE_VARIANCE


def intercepts(shanks: int) -> FloatArray:
    """Covariance (S, S) of the intercepts of the shanks of one probe."""
    return np.full((shanks, shanks), INTERCEPT_SD**2 - OWN_INTERCEPT_SD**2) + OWN_INTERCEPT_SD**2 * np.eye(shanks)
