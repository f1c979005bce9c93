"""Recordings inside NWB files: traces read on demand, spikes, events and excluded intervals."""

from __future__ import annotations

from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import AnyArray, Float32Array, FloatArray, IntArray
from leadline.base.errors import LeadlineError, nearest
from leadline.io.nwb_electrodes import NONE, Electrodes, groups_of, match, need_pynwb, read_electrodes
from leadline.model.recording import Events, Spikes

if TYPE_CHECKING:
    from collections.abc import Iterator

    from leadline.model.probe import Probe

SUFFIX = ".nwb"
MIN_SECONDS = 1.0
JITTER = 0.01
KEPT_BYTES = 128 * 2**20
PEAK_COLUMNS = ("peak_channel_id", "peak_electrode", "max_electrode", "max_channel", "peak_channel")
NOT_EVENTS = ("epochs", "invalid_times")
KIND_COLUMNS = ("kind", "stimulus_name", "stimulus_type", "condition")


def is_nwb(path: Path | None) -> bool:
    """Whether a path names an NWB file."""
    return path is not None and path.suffix.lower() == SUFFIX


@dataclass(frozen=True, slots=True, eq=False)
class NwbTraces:
    """An ``ElectricalSeries``, read lazily; trace *c* is the electrode that contact of channel *c* is.

    ``dataset`` : its path inside ``file``. ``column`` : (n_channels,) column of the data, -1 where a trace is absent.
    ``uv_per_bit``, ``offset_uv`` : of each column. ``kept`` : rows of chunks that were unpacked last.
    """

    file: Path
    dataset: str
    sampling_hz: float
    n_samples: int
    column: IntArray
    uv_per_bit: FloatArray
    offset_uv: float
    kept: dict[int, AnyArray] = field(default_factory=dict, repr=False)

    @property
    def n_channels(self) -> int:
        """Number of traces."""
        return len(self.column)

    def absent(self, channels: IntArray) -> Any:
        """Which of ``channels`` the file does not hold."""
        return self.column[channels] == NONE

    def read_uv(self, start: int, stop: int, channels: IntArray) -> Float32Array:
        """Samples ``[start, stop)`` of ``channels``, ``(stop - start, len(channels))`` in microvolts.

        Raises LeadlineError where a trace is absent or a sample is not a finite number.
        """
        from leadline.io._samples_kernel import as_microvolts

        column = self.column[np.asarray(channels, np.int64)]
        if (column == NONE).any():
            raise LeadlineError(
                f"holds no trace of channel {int(np.asarray(channels)[column == NONE][0])}", where=str(self.file)
            )
        start, stop = max(0, start), min(stop, self.n_samples)
        low, high = (int(column.min()), int(column.max()) + 1) if column.size else (0, 0)
        raw = self._samples(start, max(start, stop))[:, low:high]
        samples: Float32Array
        if np.ptp(self.uv_per_bit) == 0:
            samples = as_microvolts(raw, column - low, float(self.uv_per_bit[0]))
        else:
            samples = raw[:, column - low].astype(np.float32) * self.uv_per_bit[column].astype(np.float32)
        if self.offset_uv:
            samples = samples + np.float32(self.offset_uv)
        if raw.dtype.kind == "f" and not np.isfinite(samples).all():
            row, k = np.argwhere(~np.isfinite(samples))[0]
            raise LeadlineError(
                f"sample {start + int(row)} of trace {int(channels[k])} is not a finite number",
                where=str(self.file),
                mend="List spoilt times in 'exclude'",
            )
        return samples

    def _samples(self, start: int, stop: int) -> AnyArray:
        """Samples ``(stop - start, columns)`` as they are stored.

        Long compressed chunks are unpacked once and kept until the reading has gone past them: reads are short and
        follow each other, and unpacking a minute of recording for every second of it would take all day.
        """
        import h5py

        with h5py.File(self.file, "r") as handle:
            data = handle[self.dataset]
            length = data.chunks[0] if data.chunks else 0
            row_bytes = length * int(np.prod(data.shape[1:], dtype=np.int64)) * data.dtype.itemsize
            if length <= stop - start or row_bytes > KEPT_BYTES:
                found = data[start:stop]
            else:
                first, last = start // length, max(start, stop - 1) // length
                for k in [k for k in self.kept if not first <= k <= last]:
                    del self.kept[k]
                for k in range(first, last + 1):
                    if k not in self.kept:
                        self.kept[k] = data[k * length : (k + 1) * length]
                whole = np.concatenate([self.kept[k] for k in range(first, last + 1)])
                found = whole[start - first * length : stop - first * length]
        return np.asarray(found if found.ndim == 2 else found[:, None])


def open_nwb(path: Path, probe: Probe, group: str, series_name: str | None = None) -> NwbTraces:
    """Open the LFP of a penetration; reads nothing but the electrode table.

    ``probe`` : as its file says, wired or not (then contact *i* is channel *i*). ``group`` : the penetration's name,
    which its electrode group bears where the file has several. ``series_name`` : of the series, where one group has
    several.

    Raises LeadlineError when the file has no such series or more than one, is unevenly sampled or too short, or its
    electrodes are not the probe's.
    """
    with opened(path) as nwb:
        series = _series(nwb, group, series_name, path)
        rows = np.asarray(series.electrodes.data[:], np.int64)
        electrodes = _electrodes(nwb, path)
        data = series.data
        n_samples, n_columns = int(data.shape[0]), int(data.shape[1]) if len(data.shape) > 1 else 1
        if len(rows) != n_columns:
            raise LeadlineError(
                f"series '{series.name}' has {n_columns} columns for {len(rows)} electrodes",
                where=str(path),
                mend="Correct its electrodes region",
            )
        found = match(probe, electrodes, groups_of(group, electrodes), where=str(path))
        sampling = _sampling_hz(series, path)
        if n_samples < MIN_SECONDS * sampling:
            raise LeadlineError(
                f"series '{series.name}' holds {n_samples / sampling:.3g} s, a profile needs {MIN_SECONDS:g} s",
                where=str(path),
            )
        factor = 1.0 if series.channel_conversion is None else np.asarray(series.channel_conversion[:], float)
        return NwbTraces(
            Path(data.file.filename),
            str(data.name),
            sampling,
            n_samples,
            _columns(probe, found.row, rows),
            _rounded(np.broadcast_to(np.asarray(series.conversion * factor) * 1e6, (n_columns,))),
            float(series.offset or 0.0) * 1e6,
        )


def _columns(probe: Probe, contact_row: IntArray, series_rows: IntArray) -> IntArray:
    """Column of the data for every channel: contact -> row of the electrode table -> column of the series."""
    column_of = {int(row): k for k, row in enumerate(series_rows)}
    channel = probe.channel if (probe.channel >= 0).any() else np.arange(len(contact_row))
    column = np.full(int(channel.max()) + 1, NONE)
    for contact, row in enumerate(contact_row):
        if channel[contact] >= 0:
            column[channel[contact]] = column_of.get(int(row), NONE)
    return column


def _rounded(values: FloatArray) -> FloatArray:
    """Volts a bit become microvolts a bit without the last bit's noise: 4.69e-6 V is 4.69 uV."""
    return np.array([float(f"{v:.12g}") for v in values])


@contextmanager
def opened(path: Path) -> Iterator[Any]:
    """An NWB file as pynwb reads it, closed at the end; raises LeadlineError when it cannot be read."""
    need_pynwb(path)
    from hdmf.build import ConstructError
    from pynwb import NWBHDF5IO

    if not path.is_file():
        raise LeadlineError("there is no such file", where=str(path), mend="Only NWB files in HDF5 can be read")
    try:
        io = NWBHDF5IO(str(path), "r")
        nwb = io.read()
    except (OSError, TypeError, KeyError, ValueError, ConstructError) as error:
        raise LeadlineError(f"cannot be read as NWB ({error})", where=str(path), mend="Check it with pynwb") from error
    try:
        yield nwb
    finally:
        io.close()


def _electrodes(nwb: Any, path: Path) -> Electrodes:
    if nwb.electrodes is None or not len(nwb.electrodes):
        raise LeadlineError("has no electrode table", where=str(path), mend="Add one, or export from flat files")
    return read_electrodes(nwb.electrodes)


def _series(nwb: Any, group: str, name: str | None, path: Path) -> Any:
    """The one series that :func:`_fitting` finds."""
    mine = _fitting(nwb, group, name)
    if len(mine) == 1:
        return mine[0]
    held = sorted({s.name for s in _all_series(nwb)})
    names = ", ".join(f"'{n}'" for n in held) or "none"
    if name is not None and name not in held:
        what, mend = f"has no electrical series '{name}'", nearest(name, held) if held else "Name another file"
    elif not mine:
        what = f"has no electrical series that fits '{group}'"
        mend = 'Name the electrode group as the penetration, or name the series: lfp_series = "…"'
    else:
        what = f"{len(mine)} of its electrical series fit '{group}'"
        mend = f'Say which with lfp_series = "…": {", ".join(s.name for s in mine)}'
    raise LeadlineError(f"{what}; it holds {names}", where=str(path), mend=mend)


def _fitting(nwb: Any, group: str, name: str | None) -> list[Any]:
    """The series that may be the penetration's LFP: those of the name that was asked for, else those inside an LFP
    container, else raw data; of several, those on electrodes of ``group``."""
    from pynwb.ecephys import LFP

    series = _all_series(nwb)
    if name is not None:
        candidates = [s for s in series if s.name == name]
    else:
        inside = [s for s in series if isinstance(s.parent, LFP)]
        candidates = inside or [s for s in series if s.name in nwb.acquisition]
    return [s for s in candidates if group in _series_groups(s)] if len(candidates) > 1 else candidates


def _all_series(nwb: Any) -> list[Any]:
    from pynwb.ecephys import ElectricalSeries

    return [o for o in nwb.objects.values() if isinstance(o, ElectricalSeries)]


def _series_groups(series: Any) -> set[str]:
    table = read_electrodes(series.electrodes.table)
    return set(table.group[np.asarray(series.electrodes.data[:], np.int64)].tolist())


def _sampling_hz(series: Any, path: Path) -> float:
    if series.rate is not None:
        return float(series.rate)
    times = np.asarray(series.timestamps[: min(len(series.timestamps), 100_000)], float)
    step = np.diff(times)
    if not step.size or (np.abs(step / np.median(step) - 1) > JITTER).any():
        raise LeadlineError(
            f"series '{series.name}' is sampled unevenly", where=str(path), mend="Resample it, or write it in pieces"
        )
    return float(f"{1.0 / step.mean():.9g}")


def _span_s(nwb: Any, group: str, name: str | None, path: Path) -> tuple[float, float]:
    """When the LFP began and ended, in the session's time; from 0 without end where the file holds none that fits."""
    mine = _fitting(nwb, group, name)
    if len(mine) != 1:
        return 0.0, np.inf
    (series,) = mine
    start = float(series.timestamps[0]) if series.rate is None else float(series.starting_time or 0.0)
    return start, start + series.data.shape[0] / _sampling_hz(series, path)


def read_nwb_spikes(path: Path, probe: Probe, group: str, series_name: str | None = None) -> Spikes:
    """Sorted units of a penetration: every unit sits at the contact where it is largest.

    That contact is named by a column such as ``peak_channel_id`` (ids of electrodes), else it is the electrode where
    ``waveform_mean`` is largest, else the unit's only electrode. Units of other probes are left out.

    Raises LeadlineError when the file has no units or does not say where they are.
    """
    with opened(path) as nwb:
        units, electrodes = nwb.units, _electrodes(nwb, path)
        if units is None or "spike_times" not in units.colnames:
            raise LeadlineError("has no table of units with spike times", where=str(path), mend="Correct 'spikes'")
        found = match(probe, electrodes, groups_of(group, electrodes), where=str(path))
        contact_of = {int(row): contact for contact, row in enumerate(found.row) if row != NONE}
        home = _home_rows(units, electrodes, path)
        mine = [k for k, row in enumerate(home) if row in contact_of]
        if not mine:
            raise LeadlineError(
                f"none of its {len(home)} units sits on a contact of the probe",
                where=str(path),
                mend="Check the groups",
            )
        start, stop = _span_s(nwb, group, series_name, path)
        times = [np.asarray(units["spike_times"][k], float) for k in mine]
        amplitude = _amplitudes_uv(units)
        names = [str(i) for i in np.asarray(units.id[:])[mine]]
    count = [len(t) for t in times]
    contact = np.repeat([contact_of[home[k]] for k in mine], count).astype(np.int64)
    time_s = np.concatenate(times) - start
    order = np.argsort(time_s, kind="stable")
    order = order[(time_s[order] >= 0) & (time_s[order] < stop - start)]  # there is nothing else to set them against
    return Spikes(
        time_s[order],
        np.repeat(np.arange(len(mine)), count)[order],
        probe.tip_distance_um[contact][order],
        probe.shank[contact][order],
        tuple(names),
        None if amplitude is None else np.repeat(amplitude[mine], count)[order],
    )


def _home_rows(units: Any, electrodes: Electrodes, path: Path) -> list[int]:
    """Row of the electrode table where each unit is largest."""
    row_of = {int(i): row for row, i in enumerate(electrodes.id)}
    for column in PEAK_COLUMNS:
        if column in units.colnames:
            return [row_of.get(int(i), NONE) for i in units[column].data[:]]
    if "electrodes" not in units.colnames:
        raise LeadlineError(
            "does not say where its units are",
            where=str(path),
            mend="Add a column 'electrodes', or 'peak_channel_id' with ids of electrodes",
        )
    index = units["electrodes"]
    ends = np.asarray(index.data[:], np.int64)
    rows = np.asarray(index.target.data[:], np.int64)
    homes = []
    for k, (start, stop) in enumerate(zip(np.concatenate([[0], ends[:-1]]), ends, strict=True)):
        own = rows[start:stop]
        if len(own) > 1 and "waveform_mean" in units.colnames:
            wave = np.asarray(units["waveform_mean"][k], float)
            wave = wave if wave.ndim == 2 and wave.shape[1] == len(own) else wave.reshape(-1, 1)
            own = own[[int(np.ptp(wave, axis=0).argmax())]] if wave.shape[1] == len(own) else own
        if len(own) != 1:
            raise LeadlineError(
                f"unit {int(units.id[k])} lies on {len(own)} electrodes and nothing says where it is largest",
                where=str(path),
                mend="Add a column 'peak_channel_id', or waveform_mean over the unit's electrodes",
            )
        homes.append(int(own[0]))
    return homes


def _amplitudes_uv(units: Any) -> FloatArray | None:
    """Peak to peak of each unit's mean waveform, which NWB keeps in volts."""
    if "waveform_mean" not in units.colnames:
        return None
    waves = (np.asarray(units["waveform_mean"][k], float) for k in range(len(units)))
    return np.array([float(np.ptp(w, axis=0).max()) * 1e6 for w in waves])


def read_nwb_events(path: Path, group: str, series_name: str | None = None) -> Events:
    """Events from the tables of intervals: their starts, from the first sample of the LFP on.

    ``kind`` is the column of that name (or ``stimulus_name`` …) where there is one, else the table's name. Epochs and
    invalid times are no events.

    Raises LeadlineError when there is no such table.
    """
    with opened(path) as nwb:
        start, _ = _span_s(nwb, group, series_name, path)
        tables = [t for name, t in (nwb.intervals or {}).items() if name not in NOT_EVENTS]
        tables += [nwb.trials] if nwb.trials is not None and nwb.trials not in tables else []
        if not tables:
            raise LeadlineError("has no table of intervals", where=str(path), mend="Name a CSV of events")
        time_s = np.concatenate([np.asarray(t["start_time"].data[:], float) for t in tables]) - start
        kind = [word for t in tables for word in _kinds(t)]
    order = np.argsort(time_s, kind="stable")
    return Events(time_s[order], tuple(kind[i] for i in order))


def _kinds(table: Any) -> list[str]:
    column = next((c for c in KIND_COLUMNS if c in table.colnames), None)
    return [str(table.name)] * len(table) if column is None else [str(v) for v in table[column].data[:]]


def read_nwb_excluded(path: Path, group: str, series_name: str | None = None) -> FloatArray:
    """``invalid_times`` of the session as intervals ``(k, 2)`` from the first sample of the LFP on."""
    with opened(path) as nwb:
        table, (start, _) = nwb.invalid_times, _span_s(nwb, group, series_name, path)
        if table is None:
            return np.zeros((0, 2))
        spans = [np.asarray(table[name].data[:], float) for name in ("start_time", "stop_time")]
        return np.asarray(np.column_stack(spans) - start, np.float64)
