"""The electrode table of an NWB file, and which electrode each contact of a probe is: by identity, never by order."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray, IntArray
from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from leadline.model.probe import Probe

TOUCH_UM = 0.5
NONE = -1
NAME_COLUMNS = ("contact_id", "contact_ids", "channel_name", "electrode_name", "channel_id", "channel", "label")


@dataclass(frozen=True, slots=True, eq=False)
class Electrodes:
    """Rows of an electrode table. ``id`` : (n,). ``group`` : (n,) group names. ``rel_um`` : (n, 2) place in the group,
    NaN where not given. ``names`` : column -> (n,) texts, of the columns that may name a channel."""

    id: IntArray
    group: AnyArray
    rel_um: FloatArray
    names: dict[str, AnyArray]

    @property
    def groups(self) -> tuple[str, ...]:
        """Group names, sorted."""
        return tuple(sorted(set(self.group.tolist())))


@dataclass(frozen=True, slots=True, eq=False)
class Match:
    """``row`` : (contacts,) row of the electrode table, -1 where a contact has none. ``by`` : what they were matched
    by. ``groups`` : the groups they were found in."""

    row: IntArray
    by: str
    groups: tuple[str, ...]


def need_pynwb(where: Path) -> None:
    """Raises LeadlineError, which says how to install it, where pynwb is missing."""
    from importlib.util import find_spec

    if find_spec("pynwb") is None:
        raise LeadlineError(
            "NWB files need the package pynwb, which is not installed",
            where=str(where),
            mend="Install it with: pip install 'leadline[nwb]'",
        )


def read_electrodes(table: Any) -> Electrodes:
    """Read what tells electrodes apart from a pynwb electrode table; other columns are not touched."""
    n, columns = len(table), set(table.colnames)
    rel = np.full((n, 2), np.nan)
    for k, name in enumerate(("rel_x", "rel_y")):
        if name in columns:
            rel[:, k] = np.asarray(table[name].data[:], float)
    if "group_name" in columns:
        group = [_text(v) for v in table["group_name"].data[:]]
    else:
        group = [str(g.name) for g in table["group"].data[:]] if n else []
    names = {
        name: np.array([_text(v) for v in table[name].data[:]], dtype=object)
        for name in NAME_COLUMNS
        if name in columns and np.ndim(table[name].data) == 1
    }
    return Electrodes(np.asarray(table.id[:], np.int64), np.array(group, dtype=object), rel, names)


def _text(value: object) -> str:
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    if isinstance(value, float | np.floating) and float(value).is_integer():
        return str(int(value))
    return str(value)


def match(probe: Probe, electrodes: Electrodes, groups: Sequence[str], *, where: str) -> Match:
    """Find the electrode of each contact.

    Within ``groups``, contacts are electrodes at the same place (``rel_x, rel_y`` within 0.5 um of the probe file's
    plane); where the table gives no places, those of the same name (contact id, or channel number).

    Raises LeadlineError when a group is not there, when one contact fits two electrodes or two contacts one
    electrode, or when nothing matches.
    """
    here = np.flatnonzero(np.isin(electrodes.group, _known(groups, electrodes, where)))
    row, by = _by_place(probe, electrodes, here, where), "rel_x, rel_y"
    if (row == NONE).all():
        row, by = _by_name(probe, electrodes, here, where)
    if (row == NONE).all():
        raise LeadlineError(
            f"no contact of the probe is an electrode of group {_words(groups)}: {_why(probe, electrodes, here)}",
            where=where,
            mend="Write rel_x and rel_y (um, as in the probe file), or a column 'channel' (the trace of the contact)",
        )
    found, times = np.unique(row[row != NONE], return_counts=True)
    if (times > 1).any():
        raise LeadlineError(
            f"electrode {int(electrodes.id[found[times > 1][0]])} fits two contacts by {by}",
            where=where,
            mend="Places and names must tell electrodes apart",
        )
    return Match(row, by, tuple(sorted(set(electrodes.group[row[row != NONE]].tolist()))))


def groups_of(penetration: str, electrodes: Electrodes, chosen: Sequence[str] = ()) -> tuple[str, ...]:
    """The groups of a penetration: those chosen, else the one that bears its name, else the only one there is."""
    if chosen:
        return tuple(chosen)
    return electrodes.groups if len(electrodes.groups) == 1 else (penetration,)


def _known(groups: Sequence[str], electrodes: Electrodes, where: str) -> list[str]:
    for group in groups:
        if group not in electrodes.groups:
            raise LeadlineError(
                f"there is no electrode group '{group}'; groups are {_words(electrodes.groups)}",
                where=where,
                mend="Give the group the penetration's name, or say --group PENETRATION=GROUP",
            )
    return list(groups)


def _by_place(probe: Probe, electrodes: Electrodes, here: IntArray, where: str) -> IntArray:
    from scipy.spatial import cKDTree

    row = np.full(len(probe.contact_id), NONE)
    here = here[np.isfinite(electrodes.rel_um[here]).all(axis=1)]
    if not here.size:
        return row
    near = cKDTree(electrodes.rel_um[here]).query_ball_point(np.column_stack([probe.x_um, probe.y_um]), TOUCH_UM)
    for contact, found in enumerate(near):
        if len(found) > 1:
            raise LeadlineError(
                f"contact {probe.contact_id[contact]} at ({probe.x_um[contact]:g}, {probe.y_um[contact]:g}) um fits "
                f"{len(found)} electrodes (ids {', '.join(str(i) for i in electrodes.id[here[found]][:4])})",
                where=where,
                mend="Write rel_x, rel_y in um; give each probe its group, or places of their own to its shanks",
            )
        if found:
            row[contact] = here[found[0]]
    return row


def _by_name(probe: Probe, electrodes: Electrodes, here: IntArray, where: str) -> tuple[IntArray, str]:
    """The column of names that knows most contacts, by contact id or by trace."""
    best, by = np.full(len(probe.contact_id), NONE), ""
    for column, texts in electrodes.names.items():
        of = dict(zip(texts[here].tolist(), here.tolist(), strict=True))
        if len(of) < len(here):
            continue  # a column that repeats itself names nothing
        for wanted in (probe.contact_id, [str(c) for c in probe.channel]):
            row = np.array([of.get(name, NONE) for name in wanted], np.int64)
            if (row != NONE).sum() > (best != NONE).sum():
                best, by = row, column
    return best, by


def _why(probe: Probe, electrodes: Electrodes, here: IntArray) -> str:
    known = electrodes.rel_um[here][np.isfinite(electrodes.rel_um[here]).all(axis=1)]
    first = f"({probe.x_um[0]:g}, {probe.y_um[0]:g})"
    if len(known):
        return f"its first contact is at {first} um, the group's first electrode at ({known[0, 0]:g}, {known[0, 1]:g})"
    named = list(electrodes.names)
    return f"the table has no rel_x and rel_y, and {_words(named)} name{'s' if len(named) == 1 else ''} no contact"


def _words(names: Sequence[str]) -> str:
    return ", ".join(f"'{name}'" for name in names) or "no column"
