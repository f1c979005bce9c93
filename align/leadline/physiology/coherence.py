"""Phase and coherence with a reference row, and likeness of neighbouring rows, from cross-spectra."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Mapping

    from leadline.base.arrays import AnyArray, BoolArray, FloatArray, IntArray
    from leadline.model.probe import Probe
    from leadline.physiology.rows import Rows

NEIGHBOUR_UM = 40.0  # how far apart two neighbours are, at the least: finer rows would all be alike
TOGETHER = 0.1  # coherence above which the rhythms of two shanks are one
NEAREST, FARTHEST = 0.75, 1.75  # times that distance, or times the pitch where it is wider; beyond it lies a gap


def reference_row(cross: AnyArray, usable: BoolArray) -> int:
    """The row that carries most of the signal that rows have in common: the largest entry of the main eigenvector.

    ``cross`` : (R, R) cross-spectrum. ``usable`` : (R,) rows to choose from. -1 where none is usable.
    """
    rows = np.flatnonzero(usable & np.isfinite(np.diagonal(cross)))
    if not rows.size:
        return -1
    _, vectors = np.linalg.eigh(cross[np.ix_(rows, rows)])
    return int(rows[np.argmax(np.abs(vectors[:, -1]))])


def phase_and_coherence(cross: AnyArray, reference: int) -> tuple[FloatArray, FloatArray]:
    """Phase in radians and magnitude-squared coherence of every row with the reference row, ``(R,)`` each.

    The phase is positive where a row leads the reference. NaN for rows without signals.
    """
    power = np.real(np.diagonal(cross))
    with_reference = cross[:, reference]
    known = np.isfinite(power) & (power > 0)
    scale = np.where(known, power * power[reference], np.nan)
    phase = np.where(known, np.angle(with_reference), np.nan)
    return phase, np.asarray(np.abs(with_reference) ** 2 / scale, float)


def theta_features(cross: AnyArray, rows: Rows, usable: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Phase and coherence ``(R,)`` of each row with the reference row of its shank.

    Where the references of two shanks beat together (coherence above 0.1), the phases of both count from that of the
    shank with the strongest one.
    """
    phase, coherence = np.full(len(rows), np.nan), np.full(len(rows), np.nan)
    references = {}
    for shank in np.unique(rows.shank):
        members = np.flatnonzero(rows.shank == shank)
        within = reference_row(cross[np.ix_(members, members)], usable[members])
        if within >= 0:
            references[int(shank)] = int(members[within])
            phase[members], coherence[members] = phase_and_coherence(cross[np.ix_(members, members)], within)
    if not references:
        return phase, coherence
    power = np.real(np.diagonal(cross))
    main = max(references.values(), key=lambda row: power[row])
    for shank, row in references.items():
        if row != main and np.abs(cross[row, main]) ** 2 > TOGETHER * power[row] * power[main]:
            phase[rows.shank == shank] += np.angle(cross[row, main])
    return np.angle(np.exp(1j * phase)), coherence


def neighbour_likeness(
    cross: Mapping[str, AnyArray], probe: Probe, rows: Rows, good: BoolArray
) -> tuple[FloatArray, FloatArray]:
    """Correlation and gamma coherence of each row with the rows about 40 um (or one pitch) above and below.

    The correlation is the real part of the coherency, averaged over the bands so that the slow ones, which are alike
    everywhere, do not drown the others. Pairs are taken within one column where the column has such a pair.

    Returns two ``(R,)`` arrays; NaN at rows without a good neighbour, such as those alone between two gaps.
    """
    first, second = _pairs(probe, rows, good)
    count = np.bincount(np.concatenate([rows.row_of_contact[first], rows.row_of_contact[second]]), minlength=len(rows))

    def by_row(values: FloatArray) -> FloatArray:
        total = np.bincount(rows.row_of_contact[first], values, len(rows))
        total += np.bincount(rows.row_of_contact[second], values, len(rows))
        return np.where(count > 0, total / np.maximum(count, 1), np.nan)

    coherency = {}
    for name, matrix in cross.items():
        power = np.real(np.diagonal(matrix))
        coherency[name] = matrix[first, second] / np.sqrt(np.maximum(power[first] * power[second], 1e-30))
    nothing = np.full(len(rows), np.nan)
    if not coherency:
        return nothing, nothing
    correlation = by_row(np.mean([c.real for c in coherency.values()], axis=0))
    coherence = by_row(np.abs(coherency["gamma"]) ** 2) if "gamma" in coherency else nothing
    return correlation, coherence


def _pairs(probe: Probe, rows: Rows, good: BoolArray) -> tuple[IntArray, IntArray]:
    """Contacts ``(P,)`` and ``(P,)`` of neighbouring rows, the second above the first."""
    first: list[int] = []
    second: list[int] = []
    usable = np.zeros(len(rows), bool)
    usable[rows.row_of_contact[good]] = True
    for row in np.flatnonzero(usable):
        shank = int(rows.shank[row])
        above = np.flatnonzero((rows.shank == shank) & usable & (rows.tip_distance_um > rows.tip_distance_um[row]))
        want = max(NEIGHBOUR_UM, rows.pitch_um(shank))
        step = rows.tip_distance_um[above] - rows.tip_distance_um[row]
        above = above[(step >= NEAREST * want) & (step <= FARTHEST * want)]
        if not above.size:
            continue
        partner = above[np.argmin(np.abs(rows.tip_distance_um[above] - rows.tip_distance_um[row] - want))]
        mine = np.flatnonzero((rows.row_of_contact == row) & good)
        theirs = np.flatnonzero((rows.row_of_contact == partner) & good)
        aside = np.abs(probe.x_um[mine][:, None] - probe.x_um[theirs])
        for i, j in np.argwhere(aside <= aside.min() + 1.5):
            first.append(int(mine[i]))
            second.append(int(theirs[j]))
    return np.array(first, np.int64), np.array(second, np.int64)
