"""The sites of a probe and the traces they are wired to."""

from __future__ import annotations

from collections.abc import Sequence
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


def united(site_maps: Sequence[Probe], n_traces: Sequence[int]) -> Probe:
    """The recorded contacts of several site maps of one insertion, each place once.

    Channels count on through the maps: trace ``k`` of the second is ``k + n_traces[0]``. A place that several maps
    hold keeps the name and the channel of the first; a name that means two places gets its map's number before it.
    """
    maps = [m.recorded for m in site_maps]
    first_trace = np.concatenate([[0], np.cumsum(n_traces)])[:-1]
    place = np.concatenate([np.stack([m.shank, m.x_um.round(1), m.y_um.round(1)], axis=1) for m in maps])
    keep = np.sort(np.unique(place, axis=0, return_index=True)[1])
    number = np.repeat(np.arange(len(maps)), [len(m.contact_id) for m in maps])
    ids = [name for m in maps for name in m.contact_id]
    taken: dict[str, int] = {}
    names = []
    for k in keep.tolist():
        names.append(ids[k] if ids[k] not in taken else f"{number[k] + 1}:{ids[k]}")
        taken[ids[k]] = k
    return Probe(
        tuple(names),
        np.concatenate([m.x_um for m in maps])[keep],
        np.concatenate([m.y_um for m in maps])[keep],
        np.concatenate([m.shank for m in maps])[keep],
        np.concatenate([m.channel + t for m, t in zip(maps, first_trace, strict=True)])[keep],
        maps[0].tip_offset_um,
    )
