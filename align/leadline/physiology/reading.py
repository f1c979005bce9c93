"""What one recording says of each row of the probe."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, FloatArray
from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT, Progress
from leadline.physiology.channels import bad_channels, outside_rows
from leadline.physiology.chunks import Plan, Thinned, fields, plan
from leadline.physiology.coherence import neighbour_likeness, theta_features
from leadline.physiology.crossings import LEAST_HZ, Counts, counts_for, crossing_features, detector_for
from leadline.physiology.csd import row_csd_operator
from leadline.physiology.evoked import EvokedRows, evoked_rows, responses, usable_events
from leadline.physiology.order import deaf, order_doubts
from leadline.physiology.rows import Rows
from leadline.physiology.spectrum import USABLE, FieldStatistics, band_power_db, bands_hz, field_statistics
from leadline.physiology.units import unit_features

if TYPE_CHECKING:
    from leadline.model.probe import Probe
    from leadline.model.recording import Events, Recording, Spikes, Traces
    from leadline.model.settings import ProfileSettings

FREQUENCY_HZ = 0.5 * 2.0 ** (np.arange(0, 89) / 8.0)  # 0.5 to 1024 Hz, eight to the octave
ENOUGH_SPIKES, ENDS_EARLY = 500, 0.8  # so many spikes do not stop by chance before that share of a recording
LIMIT_SD = 5.0  # samples around an event count for at most this many standard deviations of their channel
ABSENT = "absent"  # the flag of a row that a recording did not see
CLEAR = 5.5  # standard deviations of the noise; random times reach 3 to 5


@dataclass(slots=True)
class Reading:
    """Features of one recording by row, with what is needed to merge several.

    ``features`` : name -> (R,). ``flags`` : (R,) text. ``power_uv2_per_hz`` : (R, F) at ``FREQUENCY_HZ``. ``field_s``,
    ``unit_s`` : time that fields and spikes were read over. ``read_s``, ``of_s`` : time that samples were read of, and
    that lies outside excluded intervals. ``evoked`` : the response, where there is one.
    """

    rows: Rows
    features: dict[str, FloatArray] = field(default_factory=dict)
    flags: AnyArray = field(default_factory=lambda: np.zeros(0, "U7"))
    power_uv2_per_hz: FloatArray = field(default_factory=lambda: np.zeros((0, 0)))
    field_s: float = 0.0
    unit_s: float = 0.0
    read_s: float = 0.0
    of_s: float = 0.0
    evoked: EvokedRows | None = None
    event_kind: str = ""
    event_count: int = 0
    warnings: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.flags = np.full(len(self.rows), "", "U7")
        self.power_uv2_per_hz = np.full((len(self.rows), FREQUENCY_HZ.size), np.nan)

    def placed(self, rows: Rows) -> Reading:
        """The same in the rows of a larger probe; rows that this recording did not see are missing and absent."""
        apart = np.abs(rows.tip_distance_um[:, None] - self.rows.tip_distance_um)
        to = np.where(rows.shank[:, None] == self.rows.shank, apart, np.inf).argmin(axis=0)

        def spread(values: AnyArray) -> AnyArray:
            out = np.full((len(rows), *values.shape[1:]), np.nan)
            out[to] = values
            return out

        found = replace(self, rows=rows, features={name: spread(v) for name, v in self.features.items()})
        found.flags[:] = ABSENT
        found.flags[to] = self.flags
        found.power_uv2_per_hz = spread(self.power_uv2_per_hz)
        if self.evoked is not None:
            names = ("csd_ua_per_mm3", "amplitude_uv", "latency_s", "sink_latency_s", "map_uv", "map_csd")
            maps: dict[str, Any] = {name: spread(getattr(self.evoked, name)) for name in names}
            found.evoked = replace(self.evoked, **maps)
        return found


def read(
    recording: Recording, probe: Probe, rows: Rows, settings: ProfileSettings, progress: Progress = SILENT
) -> Reading:
    """Read one recording: spikes, fields and responses to events, in that order; ``probe`` holds recorded contacts.

    Raises LeadlineError when the probe is wired to traces that the recording does not have.
    """
    reading = Reading(rows)
    if recording.spikes is not None:
        _add_units(reading, recording, recording.spikes, settings)
    if recording.traces is not None:
        top = int(probe.channel.max())
        if top >= recording.traces.n_channels:
            raise LeadlineError(
                f"the probe is wired to trace {top}, the recording has {recording.traces.n_channels} traces",
                where=recording.name or "recording",
                mend="Correct n_channels, or device_channel_indices in the probe file (traces count from 0)",
            )
        _add_fields(reading, recording, fields(recording.traces), probe, settings, progress)
    return reading


def _add_units(reading: Reading, recording: Recording, spikes: Spikes, settings: ProfileSettings) -> None:
    last = float(spikes.time_s.max(initial=0.0))
    duration = max(last, 1e-3)
    event_s = None
    if recording.traces is not None:
        duration = recording.traces.n_samples / recording.traces.sampling_hz
        late = int((spikes.time_s > duration).sum())
        if late:
            reading.warnings.append(f"spikes after the recording's end at {duration:.0f} s were left out: {late}")
        if len(spikes.time_s) >= ENOUGH_SPIKES and last < ENDS_EARLY * duration:
            reading.warnings.append(
                f"spikes end at {last:.0f} s, the fields at {duration:.0f} s: are they of one recording, is "
                "sampling_hz right, and are spike times in seconds?"
            )
    if recording.events is not None:
        usable = usable_events(
            recording.events, 1000 * int(duration), 1000.0, recording.excluded_s, settings.event_window_s
        )
        event_s = recording.events.time_s[usable]
    reading.unit_s = duration
    reading.features |= unit_features(
        spikes, reading.rows, duration, recording.excluded_s, event_s, settings.event_window_s
    )


def _add_fields(
    reading: Reading,
    recording: Recording,
    traces: Traces,
    probe: Probe,
    settings: ProfileSettings,
    progress: Progress,
) -> None:
    read_plan = plan(traces, recording.excluded_s, settings.fraction)
    if not read_plan.n_segments:
        reading.warnings.append("the excluded intervals leave no stretch of fields to read")
        return
    counts = _listener(recording, traces, probe, read_plan, settings)
    listening = traces if counts is None else replace(traces, hear=counts.hear)  # type: ignore[type-var]
    statistics = field_statistics(
        traces,
        probe.channel,
        read_plan,
        settings,
        read=partial(listening.read_uv, channels=probe.channel),
        progress=progress,
    )
    if read_plan.share < 0.999:
        read_s = read_plan.n_segments * read_plan.hop / traces.sampling_hz
        reading.warnings.append(
            f"{read_s:.0f} s of {read_plan.allowed_s:.0f} s ({read_s / read_plan.allowed_s:.0%}) of the "
            f"{'fields' if counts is None else 'samples'} were read, spread evenly"
        )
    if statistics.artefacts > 0.005:
        reading.warnings.append(f"{statistics.artefacts:.1%} of the time was left out because of artefacts")
    reading.field_s = statistics.seconds
    reading.read_s, reading.of_s = read_plan.n_segments * read_plan.hop / traces.sampling_hz, read_plan.allowed_s
    dead, noisy = bad_channels(statistics, probe)
    good = ~(dead | noisy)
    _note_bad(reading, probe, dead, noisy)
    _flag_rows(reading, statistics, probe, dead, noisy)
    _add_powers(reading, statistics, good, settings)
    _add_likeness(reading, statistics, probe, good)
    if counts is not None:
        reading.unit_s = counts.seconds
        reading.features |= crossing_features(counts, probe, reading.rows, good)
    if recording.events is not None:
        step_hz = float(statistics.frequency_hz[1])
        limit_uv = LIMIT_SD * np.sqrt(statistics.power_uv2_per_hz.sum(axis=1) * step_hz)
        _add_evoked(
            reading,
            recording.events,
            recording.excluded_s,
            traces,
            probe,
            good,
            limit_uv,
            settings,
            progress,
        )


def _listener(
    recording: Recording, traces: Traces, probe: Probe, read_plan: Plan, settings: ProfileSettings
) -> Counts | None:
    """What counts threshold crossings while fields are read; None with sorted spikes or without wideband samples."""
    if recording.spikes is not None or not isinstance(traces, Thinned) or traces.source.sampling_hz < LEAST_HZ:
        return None
    event_s = np.zeros(0)
    if recording.events is not None:
        low, high = settings.event_window_s
        event_s = recording.events.time_s
        read_s = read_plan.spans() / traces.sampling_hz
        inside = (event_s[:, None] + low >= read_s[:, 0]) & (event_s[:, None] + high <= read_s[:, 1])
        event_s = event_s[inside.any(axis=1)]
    detector = detector_for(traces.source, probe, read_plan, traces.factor)
    return counts_for(detector, event_s, settings.event_window_s)


def _note_bad(reading: Reading, probe: Probe, dead: BoolArray, noisy: BoolArray) -> None:
    if dead.all():
        reading.warnings.append("no channel holds a signal; are 'dtype' and 'uv_per_bit' right?")
    for word, which in (("dead", dead), ("noisy", noisy)):
        if which.any():
            names = ", ".join(str(c) for c in np.sort(probe.channel[which])[:12])
            more = f" and {which.sum() - 12} more" if which.sum() > 12 else ""
            reading.warnings.append(f"{which.sum()} {word} channels were left out: {names}{more}")


def _flag_rows(reading: Reading, statistics: FieldStatistics, probe: Probe, dead: BoolArray, noisy: BoolArray) -> None:
    rows = reading.rows
    good = ~(dead | noisy)
    any_good = np.isin(np.arange(len(rows)), rows.row_of_contact[good])
    any_noisy = np.isin(np.arange(len(rows)), rows.row_of_contact[noisy])
    slow = [statistics.cross_uv2[b] for b in ("delta", "theta") if b in statistics.cross_uv2]
    cross = row_cross(np.sum(slow, axis=0), rows, good) if slow else None
    level = rows.mean(band_power_db(statistics, (1.0, min(300.0, USABLE * 2 * statistics.frequency_hz[-1]))), good)
    outside = outside_rows(rows, cross, level, reading.features.get("unit_density_per_100um"))
    reading.flags[outside] = "outside"
    reading.flags[~any_good] = np.where(any_noisy[~any_good], "noisy", "dead")
    if outside.any():
        reading.warnings.append(f"{int(outside.sum())} rows at the upper end look as if they were outside the brain")


def _add_powers(reading: Reading, statistics: FieldStatistics, good: BoolArray, settings: ProfileSettings) -> None:
    rows = reading.rows
    missing = []
    for name, band in bands_hz(settings).items():
        power = rows.mean(band_power_db(statistics, band), good)
        reading.features[f"{name}_power_db"] = power
        if np.isnan(power).all():
            missing.append(name.replace("_", " "))
    if missing:
        reading.warnings.append(
            f"no {', '.join(missing)} band: the sampling rate or the length of undisturbed stretches does not reach it"
        )
    reading.power_uv2_per_hz = rows.mean(even_octaves(statistics), good)


def even_octaves(statistics: FieldStatistics) -> FloatArray:
    """Power density ``(C, F)`` at ``FREQUENCY_HZ``: means over eighths of an octave without the bins of pickup."""
    frequency, clean = statistics.frequency_hz, ~statistics.line
    clean = clean & (frequency > 0)
    out = np.full((len(statistics.power_uv2_per_hz), FREQUENCY_HZ.size), np.nan)
    top = USABLE * 2 * float(frequency[-1])
    for k, centre in enumerate(FREQUENCY_HZ):
        if centre > top or centre < frequency[1] / 2:
            continue
        inside = clean & (np.abs(np.log2(np.maximum(frequency, 1e-9) / centre)) <= 1 / 16)
        if not inside.any():
            nearest = np.flatnonzero(clean)[np.argsort(np.abs(frequency[clean] - centre))[:2]]
            inside[nearest] = True
        out[:, k] = statistics.power_uv2_per_hz[:, inside].mean(axis=1)
    return out


def row_cross(cross: AnyArray, rows: Rows, good: BoolArray) -> AnyArray:
    """Cross-spectrum ``(R, R)`` of the rows' means over good contacts; zero for rows without any."""
    average = np.nan_to_num(rows.averaging(good))
    return average @ cross @ average.T


def _add_likeness(reading: Reading, statistics: FieldStatistics, probe: Probe, good: BoolArray) -> None:
    rows, cross = reading.rows, statistics.cross_uv2
    correlation, coherence = neighbour_likeness(cross, probe, rows, good)
    reading.features["neighbour_correlation"] = correlation
    reading.features["neighbour_coherence"] = coherence
    heard = np.isin(np.arange(len(rows)), rows.row_of_contact[good])
    bands = [row_cross(cross[b], rows, good) for b in ("theta", "gamma", "ripple") if b in cross]
    if bands:
        told = deaf(bands[0], rows, heard)
        reading.warnings += told or order_doubts(bands[-1], rows, rows.mean(probe.x_um), heard)
    if "theta" in cross:
        phase, likeness = theta_features(row_cross(cross["theta"], rows, good), rows, reading.flags == "")
        reading.features["theta_phase_rad"] = phase
        reading.features["theta_coherence"] = likeness


def _add_evoked(
    reading: Reading,
    events: Events,
    excluded_s: FloatArray,
    traces: Traces,
    probe: Probe,
    good: BoolArray,
    limit_uv: FloatArray,
    settings: ProfileSettings,
    progress: Progress,
) -> None:
    found = responses(
        traces, probe.channel, events, excluded_s, settings.event_window_s, limit_uv=limit_uv, progress=progress
    )
    if not found:
        reading.warnings.append("too few events lie in usable stretches for a response")
        return
    average = reading.rows.averaging(good)
    density = row_csd_operator(probe, good)
    candidates = [(evoked_rows(r, average, density), r) for r in found]
    best, response = max(candidates, key=lambda pair: pair[0].clarity)
    if best.clarity < CLEAR:
        reading.warnings.append("no response to the events stands clearly above the noise")
        return
    reading.evoked, reading.event_kind, reading.event_count = best, response.kind, response.count
    reading.features |= {
        "evoked_csd_ua_per_mm3": best.csd_ua_per_mm3,
        "evoked_amplitude_uv": best.amplitude_uv,
        "evoked_latency_s": best.latency_s,
        "sink_latency_s": best.sink_latency_s,
    }
