"""Current source density along a shank, down one column at a time."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.physiology.rows import rows_of, same_column

if TYPE_CHECKING:
    from leadline.base.arrays import BoolArray, FloatArray
    from leadline.model.probe import Probe

SIGMA_S_PER_M = 0.3  # grey matter; Ranck 1963, Exp. Neurol. 7, 144, and common practice since (from memory)
HALF_WIDTH_UM = 85.0  # finer differences amplify noise faster than they resolve layers
SMOOTH_SD_UM = 25.0
A_PER_M3_TO_UA_PER_MM3 = 1e-3


def csd_operator(
    probe: Probe,
    good: BoolArray | None = None,
    *,
    half_width_um: float = HALF_WIDTH_UM,
    sigma_s_per_m: float = SIGMA_S_PER_M,
) -> FloatArray:
    """Matrix that turns potentials of the contacts into current source density at the contacts [1]_.

    At each contact a parabola is fitted to the potentials of the good contacts of its own column within
    ``half_width_um`` (within one pitch, where the pitch is wider); minus sigma times its curvature is the density.
    Three contacts give the classical second difference exactly, more of them lower the noise, unequal steps and
    missing contacts need no special case. Contacts in different columns are never differenced with each other,
    unless no column of the shank has three contacts; then the row means are taken as one column.

    Parameters
    ----------
    probe : contacts, one row each.
    good : (C,) contacts to use; all without it.
    half_width_um : reach of the fit to either side.
    sigma_s_per_m : conductivity of the tissue.

    Returns
    -------
    (C, C) float64 in uA/mm^3 per uV, sinks negative; a row is NaN where the contact has no good contact of its
    column to one of its sides, as at the ends of the shank and of every gap.

    References
    ----------
    .. [1] Nicholson & Freeman (1975), J. Neurophysiol. 38, 356, doi:10.1152/jn.1975.38.2.356.

    Examples
    --------
    >>> from leadline.model.probe import Probe
    >>> line = Probe(("a", "b", "c"), [0, 0, 0], [0, 100, 200], [0, 0, 0], [0, 1, 2])
    >>> (csd_operator(line)[1] * 1e4 / 300).round(6).tolist()
    [-1.0, 2.0, -1.0]
    """
    use = np.ones(len(probe.contact_id), bool) if good is None else np.asarray(good, bool)
    column = same_column(probe)
    operator = np.full(column.shape, np.nan)
    for shank in probe.shanks:
        members = np.flatnonzero(probe.shank == shank)
        together = column[np.ix_(members, members)]
        if together.sum(axis=1).max(initial=0) < 3:
            together = np.ones_like(together)
        for k, contact in enumerate(members):
            others = members[together[k] & use[members]]
            weights = _curvature(probe.tip_distance_um[others] - probe.tip_distance_um[contact], half_width_um)
            if weights is not None:
                operator[contact] = 0.0
                operator[contact, others] = weights
    return operator * (-sigma_s_per_m * 1e6 * A_PER_M3_TO_UA_PER_MM3)


def _curvature(offset_um: FloatArray, half_width_um: float) -> FloatArray | None:
    """Weights ``(n,)`` of the second derivative, per um^2, at offset 0 of a parabola fitted to values at ``offset_um``.

    None where the contacts in reach do not stand on both sides.
    """
    distance = np.unique(np.round(np.abs(offset_um[np.abs(offset_um) > 0.5]), 3))
    if not distance.size:
        return None
    near = np.abs(offset_um) <= max(half_width_um, 1.05 * float(distance[0]))
    x = offset_um[near]
    if (x > 0.5).sum() == 0 or (x < -0.5).sum() == 0 or len(np.unique(np.round(x, 1))) < 3:
        return None
    scale = np.abs(x).max()
    design = np.stack([np.ones_like(x), x / scale, (x / scale) ** 2], axis=1)
    weights = np.zeros(offset_um.shape)
    weights[near] = 2.0 * np.linalg.pinv(design)[2] / scale**2
    return weights


def row_csd_operator(probe: Probe, good: BoolArray | None = None) -> FloatArray:
    """Matrix ``(R, C)`` from contact potentials to the current source density of each row (uA/mm^3 per uV).

    Densities of the contacts of a row are averaged, and rows within 50 um of each other smoothed by a Gaussian of
    25 um, which costs no resolution that the parabola had and takes away half of what unequal gains add.
    """
    rows = rows_of(probe)
    operator: FloatArray = rows.mean(csd_operator(probe, good))
    known = np.asarray(np.isfinite(operator).all(axis=1), bool)
    offset = (rows.tip_distance_um[:, None] - rows.tip_distance_um) / SMOOTH_SD_UM
    weight = np.where(
        (np.abs(offset) <= 2.0) & (rows.shank[:, None] == rows.shank) & known, np.exp(-0.5 * offset**2), 0
    )
    smooth = weight @ np.nan_to_num(operator) / np.maximum(weight.sum(axis=1, keepdims=True), 1e-12)
    return np.where(known[:, None], smooth, np.nan)
