"""Rows of a probe: contacts of one shank at one tip distance, whatever column they stand in."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, FloatArray, IntArray

if TYPE_CHECKING:
    from leadline.model.probe import Probe

SAME_ROW_UM = 1.0
SAME_COLUMN_UM = 1.5


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """Rows of a probe, sorted by shank, then from the tip upward.

    ``shank``, ``tip_distance_um`` : (R,). ``row_of_contact`` : (C,) row of each contact of the probe.
    """

    shank: IntArray
    tip_distance_um: FloatArray
    row_of_contact: IntArray

    def __len__(self) -> int:
        return len(self.shank)

    def averaging(self, good: BoolArray) -> FloatArray:
        """Matrix ``(R, C)`` that averages the good contacts of each row; a row without any is NaN throughout."""
        member = (self.row_of_contact == np.arange(len(self))[:, None]) & good
        count = member.sum(axis=1, keepdims=True)
        return np.where(count > 0, member / np.maximum(count, 1), np.nan)

    def mean(self, values: AnyArray, good: BoolArray | None = None) -> AnyArray:
        """Mean over the contacts of each row that are good and finite, ``(C, ...)`` to ``(R, ...)``; else NaN."""
        table = np.asarray(values)
        use = np.isfinite(table)
        if good is not None:
            use &= good.reshape((-1,) + (1,) * (table.ndim - 1))
        total = np.zeros((len(self), *table.shape[1:]), table.dtype)
        count = np.zeros(total.shape, np.int64)
        np.add.at(total, self.row_of_contact, np.where(use, table, 0))
        np.add.at(count, self.row_of_contact, use)
        return np.where(count > 0, total / np.maximum(count, 1), np.nan)

    def pitch_um(self, shank: int) -> float:
        """Usual distance between neighbouring rows of a shank; NaN for a single row."""
        steps = np.diff(self.tip_distance_um[self.shank == shank])
        return float(np.median(steps)) if steps.size else float("nan")


def rows_of(probe: Probe) -> Rows:
    """Rows of a probe's contacts; contacts of one shank within 1 um of tip distance share one."""
    order = np.lexsort((probe.tip_distance_um, probe.shank))
    shank, tip = probe.shank[order], probe.tip_distance_um[order]
    new = np.ones(len(order), bool)
    new[1:] = (np.diff(shank) != 0) | (np.diff(tip) > SAME_ROW_UM)
    row = np.cumsum(new) - 1
    row_of_contact = np.empty(len(order), np.int64)
    row_of_contact[order] = row
    count = np.bincount(row)
    return Rows(shank[new], np.bincount(row, tip) / count, row_of_contact)


def same_column(probe: Probe) -> BoolArray:
    """Whether two contacts stand in one column of one shank, ``(C, C)``."""
    near = np.abs(probe.x_um[:, None] - probe.x_um) <= SAME_COLUMN_UM
    same: BoolArray = near & (probe.shank[:, None] == probe.shank)
    return same
