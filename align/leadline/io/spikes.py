"""Spikes, events and excluded intervals from CSV or Parquet tables."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.errors import LeadlineError, nearest
from leadline.io.images import READ_FAULTS
from leadline.io.tables import numbers, read_csv
from leadline.model.recording import Events, Spikes

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    import pandas as pd

    from leadline.base.arrays import FloatArray, IntArray
    from leadline.model.probe import Probe

OPTIONAL = ("amplitude_uv", "width_s")
KNOWN = ("time_s", "unit_id", "tip_distance_um", "channel", "shank", *OPTIONAL)
MAX_WIDTH_S = 0.02
MANY_ROWS, ROWS_A_BYTE = 2**22, 8
"""A Parquet file of equal rows packs them without end; times that differ take a byte or more each."""


def read_spikes(path: Path, probe: Probe) -> Spikes:
    """Spikes of a ``.csv`` or ``.parquet`` table: ``time_s``, ``unit_id`` and ``tip_distance_um`` or ``channel``.

    ``shank``, ``amplitude_uv`` and ``width_s`` are optional; unit ids may be numbers or words. Where both places are
    given, ``tip_distance_um`` says the depth and ``channel`` the shank. ``probe`` is wired: its ``channel`` is the
    trace index. Spikes come back in the order of time.

    Raises LeadlineError naming the row and column at fault.
    """
    table = _read(path, ("time_s", "unit_id"), "spikes")
    time_s = _times(table, "time_s", path)
    tip, shank = _places(table, probe, path)
    names, unit = _units(table["unit_id"], path)
    extra = {name: numbers(table, [name], path)[:, 0] for name in OPTIONAL if name in table.columns}
    if "width_s" in extra:
        wide = np.flatnonzero((extra["width_s"] < 0) | (extra["width_s"] > MAX_WIDTH_S))
        if wide.size:
            raise _fault(path, int(wide[0]), "width_s", f"{extra['width_s'][wide[0]]:g} s is no spike width", "in s")
    order = np.argsort(time_s, kind="stable")
    return Spikes(
        time_s[order],
        unit[order],
        tip[order],
        shank[order],
        names,
        **{name: values[order] for name, values in extra.items()},
    )


def read_events(path: Path) -> Events:
    """Events of a table: ``time_s`` and ``kind`` (optional; one kind without), in the order of time.

    Raises LeadlineError naming the row and column at fault.
    """
    table = _read(path, ("time_s",), "events")
    time_s = _times(table, "time_s", path)
    kind = table["kind"].fillna("").astype(str).to_numpy() if "kind" in table.columns else np.full(len(table), "event")
    order = np.argsort(time_s, kind="stable")
    return Events(time_s[order], tuple(str(kind[i]).strip() for i in order))


def read_excluded(path: Path) -> FloatArray:
    """Intervals ``(k, 2)`` to leave out: ``start_s`` and ``stop_s``, in order, overlapping ones joined.

    Raises LeadlineError naming the row and column at fault.
    """
    table = _read(path, ("start_s", "stop_s"), "excluded intervals")
    spans = numbers(table, ["start_s", "stop_s"], path)
    for row in np.flatnonzero(spans[:, 1] <= spans[:, 0]):
        raise _fault(
            path, int(row), "stop_s", f"{spans[row, 1]:g} s does not lie after start_s {spans[row, 0]:g} s", ""
        )
    for row in np.flatnonzero(spans[:, 1] < 0):
        raise _fault(path, int(row), "stop_s", f"{spans[row, 1]:g} s lies before the recording", "from its start")
    joined: list[list[float]] = []
    for start, stop in sorted(spans.tolist()):
        if joined and start <= joined[-1][1]:
            joined[-1][1] = max(joined[-1][1], stop)
        else:
            joined.append([start, stop])
    return np.array(joined, float).reshape(-1, 2)


def _read(path: Path, needed: Sequence[str], what: str) -> pd.DataFrame:
    if not path.is_file():
        raise LeadlineError("there is no such file", where=str(path), mend=f"Correct the key that names the {what}")
    suffix = path.suffix.lower()
    if suffix == ".csv":
        return read_csv(path, needed, what=what)
    if suffix == ".parquet":
        return _read_parquet(path, needed, what)
    if suffix == ".nwb":
        raise LeadlineError(
            f"{what} inside NWB files cannot be read by this version", where=str(path), mend="Write CSV or Parquet"
        )
    raise LeadlineError(f"'{suffix}' is no table of {what}", where=str(path), mend="Write it as .csv or .parquet")


def _read_parquet(path: Path, needed: Sequence[str], what: str) -> pd.DataFrame:
    import pandas as pd
    from pyarrow import ArrowException
    from pyarrow.parquet import read_metadata

    try:
        rows = read_metadata(path).num_rows
        if rows > MANY_ROWS and rows > ROWS_A_BYTE * path.stat().st_size:
            raise LeadlineError(
                f"promises {rows} {what}, more than its {path.stat().st_size} bytes can tell apart",
                where=str(path),
                mend="Write it again",
            )
        table = pd.read_parquet(path)
    except LeadlineError:
        raise
    except (ArrowException, AttributeError, *READ_FAULTS) as error:
        first = (str(error).splitlines() or [type(error).__name__])[0]
        raise LeadlineError(
            f"cannot be read as a Parquet table of {what} ({first})", where=str(path), mend="Write it again"
        ) from error
    for column in needed:
        if column not in table.columns:
            raise _missing(path, column, table, what)
    return table


def _missing(path: Path, column: str, table: pd.DataFrame, what: str) -> LeadlineError:
    return LeadlineError(
        f"column '{column}' is missing",
        where=str(path),
        mend=f"{nearest(column, map(str, table.columns))} ({what} may hold {', '.join(KNOWN)})",
    )


def _times(table: pd.DataFrame, column: str, path: Path) -> FloatArray:
    times: FloatArray = numbers(table, [column], path)[:, 0]
    early = np.flatnonzero(times < 0)
    if early.size:
        raise _fault(path, int(early[0]), column, f"{times[early[0]]:g} s lies before the recording", "from its start")
    return times


def _places(table: pd.DataFrame, probe: Probe, path: Path) -> tuple[FloatArray, IntArray]:
    """Tip distance and shank of every spike."""
    rows = _contacts(table, probe, path) if "channel" in table.columns else None
    if "tip_distance_um" in table.columns:
        tip = numbers(table, ["tip_distance_um"], path)[:, 0]
        _check_reach(tip, probe, path)
    elif rows is None:
        raise _missing(path, "tip_distance_um", table, "spikes, which need tip_distance_um or channel,")
    else:
        tip = probe.tip_distance_um[rows]
    if "shank" in table.columns:
        shank = _shanks(table, probe, path)
    elif rows is not None:
        shank = probe.shank[rows]
    elif len(probe.shanks) > 1:
        raise LeadlineError(
            f"the probe has {len(probe.shanks)} shanks and the table does not say which one a spike is from",
            where=str(path),
            mend="Add a column 'shank' or 'channel'",
        )
    else:
        shank = np.full(len(table), probe.shanks[0])
    return tip, np.asarray(shank, np.int64)


def _contacts(table: pd.DataFrame, probe: Probe, path: Path) -> IntArray:
    """Row in ``probe`` of every spike's channel."""
    channel = numbers(table, ["channel"], path)[:, 0]
    order = np.argsort(probe.channel)
    found = order[np.clip(np.searchsorted(probe.channel[order], channel), 0, len(order) - 1)]
    wrong = np.flatnonzero((probe.channel[found] != channel) | (channel < 0))
    if wrong.size:
        wired = probe.channel[probe.channel >= 0]
        raise _fault(
            path,
            int(wrong[0]),
            "channel",
            f"{channel[wrong[0]]:g} is no recorded channel of the probe",
            f"channels are trace indices from {wired.min()} to {wired.max()}",
        )
    return np.asarray(found, np.int64)


def _shanks(table: pd.DataFrame, probe: Probe, path: Path) -> IntArray:
    shank = numbers(table, ["shank"], path)[:, 0]
    wrong = np.flatnonzero(~np.isin(shank, probe.shanks))
    if wrong.size:
        known = ", ".join(map(str, probe.shanks))
        raise _fault(path, int(wrong[0]), "shank", f"{shank[wrong[0]]:g} is no shank of the probe", f"known: {known}")
    return np.asarray(shank, np.int64)


def _check_reach(tip: FloatArray, probe: Probe, path: Path) -> None:
    """A unit may lie a little beyond the outermost contacts, not a millimetre."""
    low, high = probe.tip_distance_um.min() - 1000.0, probe.tip_distance_um.max() + 1000.0
    far = np.flatnonzero((tip < low) | (tip > high))
    if far.size:
        raise _fault(
            path,
            int(far[0]),
            "tip_distance_um",
            f"{tip[far[0]]:g} um is more than 1 mm beyond the contacts ({low + 1000:g} to {high - 1000:g} um)",
            "distances in um from the tip, tip_offset_um included",
        )


def _units(column: Any, path: Path) -> tuple[tuple[str, ...], IntArray]:
    """Names of the units and, for every spike, the index of its unit; numbers are ordered as numbers."""
    import pandas as pd

    if column.isna().any():
        raise _fault(path, int(np.flatnonzero(column.isna())[0]), "unit_id", "is empty", "every spike has a unit")
    if not pd.api.types.is_numeric_dtype(column):
        column = column.astype(str).str.strip()
    elif (column % 1 == 0).all():
        column = column.astype(np.int64)
    codes, names = pd.factorize(column, sort=True)
    return tuple(str(name) for name in names), np.asarray(codes, np.int64)


def _fault(path: Path, row: int, column: str, what: str, hint: str) -> LeadlineError:
    unit = "line" if path.suffix.lower() == ".csv" else "row"
    number = row + 2 if unit == "line" else row
    mend = f"Correct or remove it ({hint})" if hint else "Correct or remove it"
    return LeadlineError(f"{unit} {number}, column '{column}': {what}", where=str(path), mend=mend)
