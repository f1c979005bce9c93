"""Writes where every electrode sat into an NWB file: into a copy, or in place behind a backup; never half."""

from __future__ import annotations

import fcntl
import os
import shutil
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.atomic import whole_file
from leadline.base.errors import LeadlineError
from leadline.io.nwb import opened
from leadline.io.nwb_electrodes import need_pynwb, read_electrodes

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from leadline.base.arrays import AnyArray, IntArray
    from leadline.io.nwb_electrodes import Electrodes

TABLE = "/general/extracellular_ephys/electrodes"
BACKUP = ".backup"
UNKNOWN = "unknown"
ROOM = 1.05


@dataclass(frozen=True, slots=True, eq=False)
class Column:
    """New values of a column for the electrodes that are known. ``values`` : (n,) text (object) or float64."""

    description: str
    values: AnyArray

    @property
    def is_text(self) -> bool:
        """Whether it holds words."""
        return self.values.dtype == object


@dataclass(frozen=True, slots=True)
class Change:
    """What one column would become: how many electrodes change, and the first of them, before and after."""

    column: str
    is_new: bool
    changed: int
    example: str


def electrodes_of(path: Path) -> Electrodes:
    """The electrodes of a file that could be written to.

    Raises LeadlineError when the file is no NWB file or cannot be edited safely.
    """
    require_safe(path)
    with opened(path) as nwb:
        return read_electrodes(nwb.electrodes)


def require_safe(path: Path) -> None:
    """Raise LeadlineError, saying why, when a file is not one that electrode columns can be written to safely."""
    need_pynwb(path)
    if path.is_dir():
        raise LeadlineError("is a folder", where=str(path), mend="Only NWB files in HDF5 can be written to")
    if not path.is_file():
        raise LeadlineError("there is no such file", where=str(path), mend="Correct --source")
    with _held(path, fcntl.LOCK_SH):
        _require_nwb(path)


def _require_nwb(path: Path) -> None:
    import h5py

    try:
        handle = h5py.File(path, "r")
    except OSError as error:
        raise LeadlineError(f"is no HDF5 file ({error})", where=str(path), mend="Give an NWB file in HDF5") from error
    with handle:
        if "nwb_version" not in handle.attrs:
            raise LeadlineError("is HDF5, but no NWB file", where=str(path), mend="Give an NWB file")
        linked = _first_external(handle)
        if linked:
            raise LeadlineError(
                f"'{linked}' is kept in another file; a copy could lose it",
                where=str(path),
                mend="Export it whole first (pynwb's NWBHDF5IO.export with link_data=False)",
            )
        if TABLE not in handle or not len(handle[TABLE].get("id", ())):
            raise LeadlineError("has no electrode table", where=str(path), mend="Add the electrodes first")


def _first_external(group: Any, prefix: str = "") -> str:
    import h5py

    for name in group:
        link = group.get(name, getlink=True)
        path = f"{prefix}/{name}"
        if isinstance(link, h5py.ExternalLink):
            return path
        if not isinstance(link, h5py.HardLink):
            continue
        item = group[name]
        if isinstance(item, h5py.Dataset) and item.external:
            return path
        found = _first_external(item, path) if isinstance(item, h5py.Group) else ""
        if found:
            return found
    return ""


def changes(path: Path, rows: IntArray, columns: Mapping[str, Column]) -> list[Change]:
    """What writing would change; nothing is written.

    Raises LeadlineError when a column that is there cannot take the new values.
    """
    import h5py

    found = []
    with h5py.File(path, "r") as handle:
        table = handle[TABLE]
        for name, column in columns.items():
            if name not in table:
                found.append(Change(name, True, len(rows), _show(column.values[0])))
                continue
            _require_fit(name, table[name], column, path)
            before = _values(table[name])[rows]
            differ = np.flatnonzero(~_same(before, column.values))
            first = int(differ[0]) if differ.size else 0
            example = f"{_show(before[first])} -> {_show(column.values[first])}" if differ.size else "as it is"
            found.append(Change(name, False, int(differ.size), example))
    return found


def _require_fit(name: str, data: Any, column: Column, path: Path) -> None:
    import h5py

    if data.ndim != 1:
        raise LeadlineError(f"column '{name}' has {data.ndim} dimensions", where=str(path), mend="Rename that column")
    text = h5py.check_string_dtype(data.dtype)
    if text is not None and text.length is not None:
        raise LeadlineError(
            f"column '{name}' holds text of a fixed length ({text.length} bytes), into which other words do not fit",
            where=str(path),
            mend="Write the file again with pynwb, which keeps text of any length",
        )
    is_float = data.dtype.kind == "f"
    if column.is_text != (text is not None) or (not column.is_text and not is_float):
        kind = "text" if column.is_text else "floating point numbers"
        raise LeadlineError(
            f"column '{name}' holds {data.dtype}, Leadline writes {kind} there",
            where=str(path),
            mend="Rename that column",
        )


def _values(data: Any) -> AnyArray:
    values = data[:]
    if values.dtype.kind in "OS":
        return np.array(
            [v.decode("utf-8", "replace") if isinstance(v, bytes) else str(v) for v in values], dtype=object
        )
    return np.asarray(values)


def _same(before: AnyArray, after: AnyArray) -> Any:
    if before.dtype == object:
        return before == after
    rounded = after.astype(before.dtype)
    return (before == rounded) | (np.isnan(before) & np.isnan(rounded))


def _show(value: Any) -> str:
    return f"'{value}'" if isinstance(value, str) else f"{float(value):.6g}"


def write_copy(source: Path, output: Path, rows: IntArray, columns: Mapping[str, Column]) -> None:
    """Copy ``source`` to ``output`` with ``columns`` written for the electrodes ``rows`` (n,) of its table.

    Raises LeadlineError when the copy cannot be made safely, or does not validate; then there is no ``output``.
    """
    if output.exists():
        same = output.samefile(source)
        mend = "Say --in-place to change the file itself" if same else "Delete it or name another file"
        raise LeadlineError("is there already", where=str(output), mend=mend)
    require_safe(source)
    with _held(source, fcntl.LOCK_SH):
        _write(source, output, rows, columns)


def write_in_place(path: Path, rows: IntArray, columns: Mapping[str, Column]) -> None:
    """Change ``path`` itself. A backup stands beside it until the changed file has been read back and validated.

    The change is made on a copy, which then takes the file's name in one step, so that a kill at any moment leaves
    either the old file or the new one, whole.
    """
    path = path.resolve()  # of a link, the file itself is changed and the link stays one
    require_safe(path)
    backup = path.with_name(path.name + BACKUP)
    if backup.exists():
        raise LeadlineError(
            "a backup of an earlier export is still there",
            where=str(backup),
            mend=f"Compare it with {path.name}; keep the good one under that name and delete the other",
        )
    with _held(path, fcntl.LOCK_EX):
        _keep_backup(path, backup)
        try:
            _write(path, path, rows, columns)
            _require_written(path, rows, columns)
        except BaseException:
            os.replace(backup, path)
            raise
        backup.unlink()


def _keep_backup(path: Path, backup: Path) -> None:
    """A second name for the old content where the file system can give one, else a copy."""
    try:
        os.link(path, backup)
    except OSError:
        with whole_file(backup) as part:
            shutil.copyfile(path, part)


@contextmanager
def _held(path: Path, how: int) -> Iterator[None]:
    """Hold the lock that HDF5 itself takes; refuse when another program has the file open for writing (to copy it)
    or at all (to replace it)."""
    with path.open("rb") as handle:
        try:
            fcntl.flock(handle, how | fcntl.LOCK_NB)
        except BlockingIOError as error:
            raise LeadlineError(
                "another program has this file open", where=str(path), mend="Close it there, then export again"
            ) from error
        fcntl.flock(handle, fcntl.LOCK_SH)  # from here on we only read it, and HDF5 asks for a share of its own
        yield


def _write(source: Path, output: Path, rows: IntArray, columns: Mapping[str, Column]) -> None:
    changes(source, rows, columns)
    output.parent.mkdir(parents=True, exist_ok=True)
    need, free = source.stat().st_size * ROOM, shutil.disk_usage(output.parent).free
    if need > free:
        raise LeadlineError(
            f"the copy needs {need / 1e9:.1f} GB, {free / 1e9:.1f} GB are free", where=str(output.parent)
        )
    with whole_file(output) as part:
        shutil.copyfile(source, part)
        _edit(part, rows, columns)
        _require_written(part, rows, columns)
        _require_valid(part, source)


def _edit(path: Path, rows: IntArray, columns: Mapping[str, Column]) -> None:
    import h5py
    from pynwb import NWBHDF5IO

    with NWBHDF5IO(str(path), "r+") as io:
        nwb = io.read()
        table = nwb.electrodes
        fresh = [name for name in columns if name not in table.colnames]
        for name in fresh:
            column = columns[name]
            filled: AnyArray = np.full(len(table), UNKNOWN if column.is_text else np.nan, column.values.dtype)
            filled[rows] = column.values
            nwb.add_electrode_column(name=name, description=column.description, data=filled.tolist())
        io.write(nwb)
    with h5py.File(path, "r+") as handle:
        for name, column in columns.items():
            data = handle[TABLE][name]
            data.attrs["description"] = column.description
            if name not in fresh:
                values = data[:]
                values[rows] = column.values
                data[:] = values


def _require_written(path: Path, rows: IntArray, columns: Mapping[str, Column]) -> None:
    """Read the file back through pynwb and compare."""
    with opened(path) as nwb:
        table = nwb.electrodes
        for name, column in columns.items():
            found = _values(table[name].data)[rows]
            if not _same(found, column.values).all():
                raise LeadlineError(
                    f"column '{name}' did not come back as it was written", where=str(path), mend="Report this fault"
                )


def _require_valid(part: Path, source: Path) -> None:
    """Refuse a copy of which pynwb says something that it did not already say of the source."""
    new = _complaints(part)
    if new:
        new = [c for c in new if c not in _complaints(source)]
    if new:
        raise LeadlineError(f"the copy would not be valid NWB: {new[0]}", where=str(source), mend="Nothing was written")


def _complaints(path: Path) -> list[str]:
    from pynwb import validate

    return [str(error) for error in validate(path=str(path))]
