"""Power spectra and cross-spectra of all contacts in one streamed pass."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, FloatArray, IntArray
from leadline.base.progress import SILENT, Progress

if TYPE_CHECKING:
    from collections.abc import Mapping

    from leadline.model.recording import Traces
    from leadline.model.settings import ProfileSettings
    from leadline.physiology.chunks import Plan

GROUP = 64  # channels transformed at once: their spectra stay in the cache
CROSS_BINS = 24  # bins of a band that enter the cross-spectra; neighbouring bins say much the same
CROSS_SEGMENTS = 64
FLUSH_SEGMENTS = 64  # segments that are summed in float32 before float64 takes over
USABLE = 0.45  # of the sampling rate; above it anti-alias filters have taken the power away
LINE_EXCESS = 4.0  # 6 dB above its surroundings, and narrow, is pickup
SCAN_SEGMENTS = 24
WATCHED_CHANNELS = 10  # contacts whose median level tells an artefact, which all hear, from a ripple, which few hear
WATCHED_HZ = ((4.0, 12.0), (12.0, 30.0), (30.0, 90.0), (140.0, 220.0), (300.0, 1000.0))
ARTEFACT_DB = 3.0
ARTEFACT_SD = 4.0


@dataclass(frozen=True, slots=True, eq=False)
class FieldStatistics:
    """What the pass keeps of a recording's fields.

    ``frequency_hz`` : (F,). ``power_uv2_per_hz`` : (C, F) one-sided density, mean over segments. ``line`` : (F,) bins
    that hold mains or other narrow pickup. ``cross_uv2`` : band -> (C, C) complex cross-spectrum summed over the band
    (``[i, j]`` is the mean of ``X_i conj(X_j)``). ``seconds`` : time that the segments kept cover. ``artefacts`` :
    share of the segments left out for an artefact.
    """

    frequency_hz: FloatArray
    power_uv2_per_hz: FloatArray
    line: BoolArray
    cross_uv2: Mapping[str, AnyArray]
    seconds: float
    artefacts: float


def bands_hz(settings: ProfileSettings) -> dict[str, tuple[float, float]]:
    """The bands of the settings by the names of their features."""
    return {
        "delta": settings.delta_hz,
        "theta": settings.theta_hz,
        "gamma": settings.gamma_hz,
        "ripple": settings.ripple_hz,
        "high_frequency": settings.high_frequency_hz,
    }


CROSSED = ("delta", "theta", "gamma", "ripple")


def field_statistics(
    traces: Traces,
    channels: IntArray,
    plan: Plan,
    settings: ProfileSettings,
    *,
    progress: Progress = SILENT,
) -> FieldStatistics:
    """Read the segments of ``plan`` once and average their spectra [1]_.

    Segments overlap by half, lose their mean and take a periodic Hann window, as in ``scipy.signal.welch``; the window
    is applied to the spectra, not to the samples. Segments that most contacts hear louder than usual in some band, by
    3 dB and four robust standard deviations of the recording's own changes, are left out as artefacts. Samples are
    float32 throughout.

    References
    ----------
    .. [1] Welch (1967), IEEE Trans. Audio Electroacoust. 15, 70, doi:10.1109/TAU.1967.1161901.
    """
    frequency = np.asarray(np.fft.rfftfreq(plan.segment, 1.0 / traces.sampling_hz), float)
    typical, threshold = _scan(traces, channels, plan, frequency)
    line = line_bins(frequency, typical, settings.mains_hz)
    sums = _Sums(len(channels), frequency, line, settings, plan)
    progress.begin("reading fields", plan.n_segments)
    for start, stop, count in plan.blocks():
        samples = np.ascontiguousarray(traces.read_uv(start, stop, channels).T)
        samples -= samples[:, ::16].mean(axis=1, keepdims=True)  # float32 would round small signals on a large offset
        segments = np.lib.stride_tricks.sliding_window_view(samples, plan.segment, axis=1)[:, :: plan.hop]
        sums.add(segments, np.asarray((_levels(_watched(segments), frequency) <= threshold).all(axis=1), bool))
        progress.step(count)
    return sums.result(traces.sampling_hz)


class _Sums:
    """Running sums of one pass."""

    def __init__(
        self, n_channels: int, frequency_hz: FloatArray, line: BoolArray, settings: ProfileSettings, plan: Plan
    ) -> None:
        self.frequency_hz, self.line, self.plan = frequency_hz, line, plan
        self.power = np.zeros((n_channels, frequency_hz.size))
        self.recent = np.zeros(self.power.shape, np.float32)
        self.kept = self.seen = self.crossed = self.unflushed = 0
        self.every = max(2, -(-plan.n_segments // CROSS_SEGMENTS))
        self.bins: dict[str, IntArray] = {}
        self.weight: dict[str, float] = {}
        top = USABLE * 2 * frequency_hz[-1]
        for name, (low, high) in bands_hz(settings).items():
            inside = np.flatnonzero((frequency_hz >= low) & (frequency_hz <= min(high, top)) & ~line)
            inside = inside[(inside > 0) & (inside < frequency_hz.size - 1)]
            if name in CROSSED and inside.size and high <= top:
                self.bins[name] = inside[:: max(1, inside.size // CROSS_BINS)]
                self.weight[name] = inside.size / self.bins[name].size
        self.cross = {name: np.zeros((n_channels, n_channels), np.complex128) for name in self.bins}

    def add(self, segments: AnyArray, kept: BoolArray) -> None:
        """Add the segments ``(C, S, N)`` that are kept."""
        from scipy.fft import rfft

        from leadline.physiology._kernels import add_hann_power

        chosen = np.flatnonzero(kept & ((self.seen + np.arange(kept.size)) % self.every == 0))
        parts: dict[str, list[AnyArray]] = {name: [] for name in self.bins}
        for first in range(0, len(segments), GROUP):
            spectrum = rfft(segments[first : first + GROUP], axis=-1)
            add_hann_power(spectrum.view(np.float32), kept, self.recent[first : first + GROUP])
            if chosen.size:
                for name, bins in self.bins.items():
                    parts[name].append(_hann(spectrum, chosen, bins))
        for name, pieces in parts.items():
            if pieces:
                self.cross[name] += _half_outer(np.concatenate(pieces).reshape(len(segments), -1))
        self.seen += kept.size
        self.kept += int(kept.sum())
        self.crossed += chosen.size
        self.unflushed += kept.size
        if self.unflushed >= FLUSH_SEGMENTS:
            self._flush()

    def _flush(self) -> None:
        self.power += self.recent
        self.recent[:] = 0
        self.unflushed = 0

    def result(self, sampling_hz: float) -> FieldStatistics:
        """Means in uV^2 and uV^2/Hz."""
        self._flush()
        density = 2.0 / (sampling_hz * 0.375 * self.plan.segment)  # the squares of a periodic Hann window sum to 3/8 N
        power = self.power * density / max(self.kept, 1)
        power[:, [0, -1]] /= 2.0
        step = float(self.frequency_hz[1])
        cross = {
            name: _whole(half) * (density * step * self.weight[name] / max(self.crossed, 1))
            for name, half in self.cross.items()
        }
        seconds = (self.kept + min(self.kept, 1)) * self.plan.hop / sampling_hz
        return FieldStatistics(self.frequency_hz, power, self.line, cross, seconds, 1.0 - self.kept / max(self.seen, 1))


def _half_outer(values: AnyArray) -> AnyArray:
    """Upper half of ``conj(values) @ values^T`` of complex64 (C, K); the lower half, which says the same, is zero."""
    from scipy.linalg.blas import cherk

    half: AnyArray = cherk(1.0, values.T, trans=2)
    return half


def _whole(half: AnyArray) -> AnyArray:
    """``values @ values^H`` from the sum of :func:`_half_outer`."""
    whole: AnyArray = np.conj(half) + np.triu(half, 1).T
    return whole


def _hann(spectrum: AnyArray, segments: IntArray, bins: IntArray) -> AnyArray:
    """The Hann window applied to some bins of some segments of spectra ``(C, S, F)``."""
    at = segments[:, None]
    return 0.5 * spectrum[:, at, bins] - 0.25 * (spectrum[:, at, bins - 1] + spectrum[:, at, bins + 1])


def _watched(segments: AnyArray) -> AnyArray:
    """Windowed power ``(C, S, F)`` of segments of a few contacts."""
    from scipy.fft import rfft

    spectrum = rfft(segments[:: max(1, len(segments) // WATCHED_CHANNELS)], axis=-1)
    spectrum[..., 0] = 0.0
    power = np.empty(spectrum.shape, np.float32)
    inner = 0.5 * spectrum[..., 1:-1] - 0.25 * (spectrum[..., :-2] + spectrum[..., 2:])
    np.add(np.square(inner.real), np.square(inner.imag), out=power[..., 1:-1])
    power[..., 0], power[..., -1] = power[..., 1], power[..., -2]
    return power


def _levels(power: AnyArray, frequency_hz: FloatArray) -> FloatArray:
    """Level ``(S, B)`` in dB of each segment in the watched bands: the median over contacts."""
    levels = []
    for low, high in WATCHED_HZ:
        first, last = np.searchsorted(frequency_hz, (low, high))
        if last > first:
            levels.append(np.median(power[..., first:last].mean(axis=-1), axis=0))
    return np.asarray(10.0 * np.log10(np.stack(levels, axis=-1) + 1e-12), float)


def _scan(traces: Traces, channels: IntArray, plan: Plan, frequency_hz: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Typical spectrum ``(F,)`` and artefact thresholds ``(B,)`` in dB, from a few segments spread evenly."""
    some = channels[:: max(1, len(channels) // WATCHED_CHANNELS)]
    starts = np.concatenate([start + plan.hop * np.arange(n) for start, _, n in plan.blocks()])
    starts = starts[:: max(1, len(starts) // SCAN_SEGMENTS)]
    logs, levels = [], []
    for start in starts.tolist():
        samples = np.ascontiguousarray(traces.read_uv(start, start + plan.segment, some).T)
        power = _watched(samples[:, None])
        logs.append(np.log(power[:, 0] + 1e-12).mean(axis=0))
        levels.append(_levels(power, frequency_hz)[0])
    found = np.array(levels)
    usual = np.median(found, axis=0)
    spread = 1.4826 * np.median(np.abs(found - usual), axis=0)
    return np.asarray(np.exp(np.mean(logs, axis=0)), float), usual + np.maximum(ARTEFACT_DB, ARTEFACT_SD * spread)


def line_bins(frequency_hz: FloatArray, power: FloatArray, mains_hz: float) -> BoolArray:
    """Bins ``(F,)`` of mains harmonics, and of any line at least 6 dB above its surroundings and narrower than 2 Hz."""
    from scipy.ndimage import binary_dilation, median_filter

    step = float(frequency_hz[1])
    reach = 1.0 + 2.0 * step
    line = np.zeros(frequency_hz.size, bool)
    if mains_hz > 0:
        nearest = np.maximum(np.round(frequency_hz / mains_hz), 1.0) * mains_hz
        line |= np.abs(frequency_hz - nearest) <= reach
    width = 2 * int(np.ceil(6.0 / step)) + 1
    logs = np.log(power + 1e-20)
    excess = logs - median_filter(logs, width, mode="nearest")
    narrow = (excess > np.log(LINE_EXCESS)) & (frequency_hz > 15.0)
    line |= binary_dilation(narrow, iterations=int(np.ceil(reach / step)))
    return line


def band_power_db(statistics: FieldStatistics, band_hz: tuple[float, float], *, floor_uv2: float = 1e-6) -> FloatArray:
    """Power ``(C,)`` in a band, dB re 1 uV^2; bins with mains are left out and replaced by the band's mean.

    NaN where less than half of the band lies below 0.45 of the sampling rate, or no clean bin lies in it.
    """
    frequency = statistics.frequency_hz
    top = min(band_hz[1], USABLE * 2 * float(frequency[-1]))
    if top - band_hz[0] < 0.5 * (band_hz[1] - band_hz[0]):
        return np.full(len(statistics.power_uv2_per_hz), np.nan)
    inside = (frequency >= band_hz[0]) & (frequency <= top) & (frequency > 0) & ~statistics.line
    if not inside.any():
        return np.full(len(statistics.power_uv2_per_hz), np.nan)
    density = statistics.power_uv2_per_hz[:, inside].mean(axis=1)
    return np.asarray(10.0 * np.log10(np.maximum(density * (top - band_hz[0]), floor_uv2)), float)
