"""The sites of a probe and the traces they are wired to."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import FloatArray, IntArray, frozen, frozen_vector
from leadline.base.errors import LeadlineError

NOT_RECORDED = -1


@dataclass(frozen=True, slots=True, eq=False)
class Probe:
    """Contacts of one penetration's probe, one row each.

    ``contact_id`` : names. ``x_um, y_um`` : (n,) in the probe file's plane. ``shank`` : (n,) from 0, in the order in
    which the file first names them. ``channel`` : (n,) trace index, -1 where the contact was not recorded.
    ``tip_offset_um`` : from the tip to y = 0.
    """

    contact_id: tuple[str, ...]
    x_um: FloatArray
    y_um: FloatArray
    shank: IntArray
    channel: IntArray
    tip_offset_um: float = 0.0

    def __post_init__(self) -> None:
        n = len(self.contact_id)
        object.__setattr__(self, "x_um", frozen_vector(self.x_um, "contact x", length=n))
        object.__setattr__(self, "y_um", frozen_vector(self.y_um, "contact y", length=n))
        object.__setattr__(self, "shank", frozen(self.shank, np.int64))
        object.__setattr__(self, "channel", frozen(self.channel, np.int64))
        used, times = np.unique(self.channel[self.channel >= 0], return_counts=True)
        if (times > 1).any():
            raise LeadlineError(
                f"trace {int(used[times > 1][0])} is wired to two contacts",
                where="device_channel_indices",
                mend="Wire every trace to one contact; -1 marks a contact that was not recorded",
            )

    @property
    def tip_distance_um(self) -> FloatArray:
        """Distance ``(n,)`` of each contact from its shank's tip, up the shank."""
        return self.y_um + self.tip_offset_um

    @property
    def recorded(self) -> Probe:
        """Only the contacts that were recorded."""
        return self.take(np.flatnonzero(self.channel != NOT_RECORDED))

    @property
    def shanks(self) -> tuple[int, ...]:
        """Shank numbers present, ascending."""
        return tuple(int(s) for s in np.unique(self.shank))

    def take(self, rows: IntArray) -> Probe:
        """The contacts ``rows``, in that order."""
        return Probe(
            tuple(self.contact_id[int(i)] for i in rows),
            self.x_um[rows],
            self.y_um[rows],
            self.shank[rows],
            self.channel[rows],
            self.tip_offset_um,
        )
