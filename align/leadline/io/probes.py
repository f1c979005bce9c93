"""Probe files (probeinterface JSON) and the wiring of contacts to traces."""

from __future__ import annotations

import json
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import FloatArray, IntArray
from leadline.base.errors import MALFORMED, LeadlineError
from leadline.model.probe import NOT_RECORDED, Probe

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

_UNIT_UM = {"um": 1.0, "mm": 1000.0}
_LONGEST_UM = 100_000.0
_TIP_SLACK_UM = 1.0
_MOST_TRACES = 2**20


def read_probe(
    path: Path,
    *,
    tip_offset_um: float = 0.0,
    probe_index: int | None = None,
    shank_names: Sequence[str] = (),
    connected: bool = True,
) -> Probe:
    """Read one probe from a probeinterface file.

    ``channel`` holds ``device_channel_indices``; where the file has none, -1 throughout, to be filled by :func:`wire`.

    Parameters
    ----------
    tip_offset_um : from the tip to y = 0 of the file.
    probe_index : which probe, where the file holds several.
    shank_names : shanks that are numbered already, in order: those of the insertion's other site maps.
    connected : whether a file that says of every contact that it was not connected is an error.

    Raises
    ------
    LeadlineError : the file is no probe file, holds several probes and none is chosen, or its contacts are not
        finite, double, of unequal number or all unconnected.

    References
    ----------
    The probeinterface format specification, version 0.3 and 0.4.
    """
    content = _content(path)
    chosen = _choose(content["probes"], probe_index, str(path))
    where = str(path) if len(content["probes"]) == 1 else f"{path}, probe {probe_index or 0}"
    x_um, y_um = _plane_um(chosen, where)
    n = len(x_um)
    ids = _ids(chosen, n, where)
    shank = _shanks(chosen, n, where, shank_names)
    _require_apart(ids, x_um, y_um, shank, where)
    return Probe(ids, x_um, y_um, shank, _channels(chosen, n, where, connected), float(tip_offset_um))


def read_shank_names(path: Path, *, probe_index: int | None = None) -> tuple[str, ...]:
    """Names of a probe's shanks in the order in which the file first gives them; none where it names none.

    Raises LeadlineError as :func:`read_probe` does.
    """
    chosen = _choose(_content(path)["probes"], probe_index, str(path))
    return tuple(dict.fromkeys(str(v) for v in chosen.get("shank_ids") or ()))


def is_wired(probe: Probe) -> bool:
    """Whether the probe says which trace each contact is."""
    return bool((probe.channel != NOT_RECORDED).any())


def wire(probe: Probe, n_channels: int, skip_channels: Sequence[int] = ()) -> Probe:
    """Tie contacts to the traces of a recording.

    Where the probe is wired, contact *i* is the trace that it names, and other traces are left out
    (:func:`unreferenced` lists them). Where it is not, the traces less ``skip_channels`` are the contacts in the file's
    order.

    Parameters
    ----------
    n_channels : traces of the recording.

    Raises
    ------
    LeadlineError : numbers do not agree, a contact is wired to a trace that the recording lacks or that is skipped, or
        a contact lies beyond the tip.
    """
    _require_above_tip(probe)
    skipped = sorted({int(k) for k in skip_channels})
    beyond = [k for k in skipped if not 0 <= k < n_channels]
    if beyond:
        raise LeadlineError(
            f"skip_channels names trace {beyond[0]}, the recording has traces 0 to {n_channels - 1}",
            where="skip_channels",
            mend="Count traces from 0",
        )
    if not is_wired(probe):
        return replace(probe, channel=_in_order(probe, n_channels, skipped))
    _require_traces(probe, n_channels, skipped)
    return probe


def unreferenced(probe: Probe, n_channels: int, skip_channels: Sequence[int] = ()) -> IntArray:
    """Traces that are neither a contact of a wired probe nor skipped by the user, ascending."""
    known = np.concatenate([probe.channel, np.asarray(skip_channels, np.int64)])
    return np.setdiff1d(np.arange(n_channels), known)


def in_words(values: IntArray) -> str:
    """Ascending numbers in words.

    Examples
    --------
    >>> in_words(np.array([0, 1, 2, 7]))
    '0 to 2, 7'
    """
    runs = np.split(values, np.flatnonzero(np.diff(values) > 1) + 1)
    words = [f"{run[0]}" if len(run) == 1 else f"{run[0]} to {run[-1]}" for run in runs]
    return ", ".join(words[:8]) + (", ..." if len(words) > 8 else "")


def _require_above_tip(probe: Probe) -> None:
    row = int(np.argmin(probe.tip_distance_um))
    if probe.tip_distance_um[row] < -_TIP_SLACK_UM:
        raise LeadlineError(
            f"contact {probe.contact_id[row]!r} would lie {-probe.tip_distance_um[row]:g} um beyond the tip "
            f"(y = {probe.y_um[row]:g} um, tip_offset_um = {probe.tip_offset_um:g})",
            where="tip_offset_um",
            mend="y must grow up the shank; write tip_offset_um, the distance from the tip to y = 0 of the probe file",
        )


def _require_traces(probe: Probe, n_channels: int, skipped: list[int]) -> None:
    beyond = np.flatnonzero(probe.channel >= n_channels)
    if beyond.size:
        row = int(beyond[0])
        raise LeadlineError(
            f"contact {probe.contact_id[row]!r} is wired to trace {int(probe.channel[row])}, "
            f"the recording has {n_channels} traces (0 to {n_channels - 1})",
            where="device_channel_indices",
            mend="Correct device_channel_indices in the probe file or n_channels",
        )
    both = np.intersect1d(probe.channel, skipped)
    if both.size:
        raise LeadlineError(
            f"trace {int(both[0])} is in skip_channels and is wired to a contact",
            where="skip_channels",
            mend="Take it out of skip_channels, or write -1 for that contact in device_channel_indices",
        )


def _in_order(probe: Probe, n_channels: int, skipped: list[int]) -> IntArray:
    traces = np.setdiff1d(np.arange(n_channels), skipped)
    n = len(probe.contact_id)
    if len(traces) == n:
        return traces
    less = f" less {len(skipped)} in skip_channels" if skipped else ""
    surplus = len(traces) - n
    if surplus > 0:
        last = list(range(n_channels - surplus, n_channels))
        example = f", e.g. skip_channels = {last} where they are the last" if surplus < 10 and not skipped else ""
        mend = f"Name the {surplus} that {'is' if surplus == 1 else 'are'} no contact in skip_channels{example}"
    else:
        mend = "Correct n_channels or skip_channels, or mark contacts that were not recorded by -1 in "
        mend += "device_channel_indices of the probe file"
    raise LeadlineError(
        f"the recording has {n_channels} traces{less}, the probe has {n} contacts and no device_channel_indices",
        where="wiring",
        mend=mend,
    )


def _content(path: Path) -> Any:
    if not path.is_file():
        raise LeadlineError("the probe file is not there", where=str(path), mend="Correct the path")
    try:
        content = json.loads(path.read_text("utf-8"))
    except MALFORMED as error:
        raise LeadlineError(f"is no valid JSON ({error})", where=str(path), mend="Export the probe again") from error
    if not isinstance(content, dict) or content.get("specification") != "probeinterface":
        said = content.get("specification") if isinstance(content, dict) else type(content).__name__
        raise LeadlineError(
            f"is no probeinterface file (specification {said!r})",
            where=str(path),
            mend="Write the probe with probeinterface.write_probeinterface",
        )
    probes = content.get("probes")
    if not isinstance(probes, list) or not probes or not all(isinstance(p, dict) for p in probes):
        raise LeadlineError("holds no probes", where=str(path), mend="Export the probe again")
    return content


def _choose(probes: list[Any], index: int | None, where: str) -> Any:
    if index is None and len(probes) == 1:
        return probes[0]
    names = "; ".join(f"{k}: {_name(probe)}" for k, probe in enumerate(probes))
    if index is None or not 0 <= index < len(probes):
        what = f"holds {len(probes)} probes" if index is None else f"has no probe {index}"
        raise LeadlineError(f"{what} ({names})", where=where, mend="Choose one with probe_index in its [[penetration]]")
    return probes[index]


def _name(probe: Any) -> str:
    notes = probe.get("annotations") if isinstance(probe.get("annotations"), dict) else {}
    name = notes.get("name") or notes.get("model_name") or "unnamed"
    contacts = probe.get("contact_positions")
    return f"{name!s}, {len(contacts) if isinstance(contacts, list) else 0} contacts"


def _plane_um(probe: Any, where: str) -> tuple[FloatArray, FloatArray]:
    """Contact positions in the plane of the probe, in um: x across, y up the shank.

    A three-dimensional file is read through ``contact_plane_axes``: the contacts of one planar probe share the two
    axes, and their coordinates in them are x and y.
    """
    unit = _UNIT_UM.get(str(probe.get("si_units", "um")))
    if unit is None:
        raise LeadlineError(f"si_units is {probe['si_units']!r}", where=where, mend="It is 'um' or 'mm'")
    try:
        positions = np.asarray(probe["contact_positions"], np.float64)
    except (KeyError, TypeError, ValueError, OverflowError) as error:
        raise LeadlineError("contact_positions are not rows of numbers", where=where, mend="Export it again") from error
    if positions.ndim != 2 or positions.shape[1] not in (2, 3) or not len(positions):
        raise LeadlineError(
            f"contact_positions have shape {positions.shape}",
            where=where,
            mend="Write one row of 2 or 3 for each contact",
        )
    bad = np.flatnonzero(~np.isfinite(positions).all(axis=1))
    if bad.size:
        raise LeadlineError(
            f"contact {int(bad[0])} has no finite position: {positions[bad[0]].tolist()}",
            where=where,
            mend="Correct contact_positions",
        )
    if positions.shape[1] == 3:
        positions = _flatten(probe, positions, where)
    positions = positions * unit
    if np.ptp(positions, axis=0).max() > _LONGEST_UM:
        raise LeadlineError(
            f"contacts span {np.ptp(positions, axis=0).max() / 1000:.0f} mm", where=where, mend="Correct si_units"
        )
    return positions[:, 0], positions[:, 1]


def _flatten(probe: Any, positions: FloatArray, where: str) -> FloatArray:
    try:
        axes = np.asarray(probe["contact_plane_axes"], np.float64)
        if axes.shape != (len(positions), 2, 3):
            raise ValueError(axes.shape)
    except (KeyError, TypeError, ValueError, OverflowError) as error:
        raise LeadlineError(
            "three-dimensional contacts need contact_plane_axes, two vectors for each contact",
            where=where,
            mend="Export the probe in its own plane (ndim 2)",
        ) from error
    if not np.allclose(axes, axes[0], atol=1e-3):
        raise LeadlineError(
            "its contacts do not lie in one plane", where=where, mend="Give each shank plane as a probe"
        )
    flat: FloatArray = positions @ axes[0].T
    return flat


def _column(probe: Any, key: str, n: int, where: str) -> list[Any] | None:
    values = probe.get(key)
    if values is None or (isinstance(values, list) and not values):
        return None
    if not isinstance(values, list) or len(values) != n:
        raise LeadlineError(f"{key} has {len(values) if isinstance(values, list) else 'no'} entries for {n} contacts",
                            where=where, mend="Write one for each contact")  # fmt: skip
    return values


def _ids(probe: Any, n: int, where: str) -> tuple[str, ...]:
    values = _column(probe, "contact_ids", n, where)
    if values is None or all(str(v) == "" for v in values):
        return tuple(str(k) for k in range(n))
    ids = tuple(str(v) for v in values)
    seen: dict[str, int] = {}
    for k, name in enumerate(ids):
        if name in seen:
            raise LeadlineError(
                f"contacts {seen[name]} and {k} are both named {name!r}",
                where=where,
                mend="Give each a name of its own",
            )
        seen[name] = k
    return ids


def _shanks(probe: Any, n: int, where: str, known: Sequence[str]) -> IntArray:
    values = _column(probe, "shank_ids", n, where)
    if values is None:
        return np.zeros(n, np.int64)
    order = {name: k for k, name in enumerate(dict.fromkeys([*known, *(str(v) for v in values)]))}
    return np.array([order[str(v)] for v in values], np.int64)


def _require_apart(ids: tuple[str, ...], x_um: FloatArray, y_um: FloatArray, shank: IntArray, where: str) -> None:
    seen: dict[tuple[float, float, int], int] = {}
    for k, place in enumerate(zip(x_um.round(3).tolist(), y_um.round(3).tolist(), shank.tolist(), strict=True)):
        if place in seen:
            raise LeadlineError(
                f"contacts {ids[seen[place]]!r} and {ids[k]!r} share the place ({place[0]:g}, {place[1]:g}) um",
                where=where,
                mend="Correct contact_positions",
            )
        seen[place] = k


def _channels(probe: Any, n: int, where: str, connected: bool) -> IntArray:
    values = _column(probe, "device_channel_indices", n, where)
    if values is None:
        return np.full(n, NOT_RECORDED)
    bad = [v for v in values if not isinstance(v, int) or isinstance(v, bool) or not NOT_RECORDED <= v < _MOST_TRACES]
    if bad:
        raise LeadlineError(
            f"device_channel_indices hold {bad[0]!r}",
            where=where,
            mend="Write trace indices from 0; -1 is not recorded",
        )
    if connected and all(v == NOT_RECORDED for v in values):
        raise LeadlineError(
            "no contact is connected: device_channel_indices is -1 throughout",
            where=where,
            mend="Write the trace of each contact, or leave device_channel_indices out where they are in order",
        )
    return np.asarray(values, np.int64)
