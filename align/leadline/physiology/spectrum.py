"""Power spectra and cross-spectra of all contacts in one streamed pass."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache, partial
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, Float32Array, FloatArray, IntArray
from leadline.base.progress import SILENT, Progress
from leadline.physiology.chunks import halves

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from leadline.model.recording import Traces
    from leadline.model.settings import ProfileSettings
    from leadline.physiology.chunks import Plan

GROUP = 48  # channels transformed at once: their spectra stay in the cache
CROSS_BINS = 24  # bins of a band that enter the cross-spectra; neighbouring bins say much the same
CROSS_SEGMENTS = 64
CROSS_TOGETHER = 16  # segments that are multiplied at once
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
    read: Callable[[int, int], Float32Array] | None = None,
    progress: Progress = SILENT,
) -> FieldStatistics:
    """Read the segments of ``plan`` once and average their spectra [1]_.

    Segments overlap by half, lose their mean and take a periodic Hann window, as in ``scipy.signal.welch``. Segments
    that most contacts hear louder than usual in some band, by 3 dB and four robust standard deviations of the
    recording's own changes, are left out as artefacts. Samples are float32 throughout.

    Parameters
    ----------
    traces : what is read.
    channels : (C,) traces of the contacts.
    plan : which segments.
    settings : bands and mains.
    read : gives samples ``(stop - start, C)``, asked for in order and none twice; ``traces.read_uv`` without it.
    progress : told how far reading has come.

    References
    ----------
    .. [1] Welch (1967), IEEE Trans. Audio Electroacoust. 15, 70, doi:10.1109/TAU.1967.1161901.
    """
    frequency = np.asarray(np.fft.rfftfreq(plan.segment, 1.0 / traces.sampling_hz), float)
    typical, threshold = _scan(traces, channels, plan, frequency)
    line = line_bins(frequency, typical, settings.mains_hz)
    sums = _Sums(len(channels), frequency, line, settings, plan)
    progress.begin("reading fields", plan.n_segments)
    for before, after in halves(read or partial(traces.read_uv, channels=channels), plan):
        power = _power(before[:: _step(channels)], after[:: _step(channels)])
        sums.add(before, after, bool((_levels(power, frequency) <= threshold).all()))
        progress.step()
    return sums.result(traces.sampling_hz)


class _Sums:
    """Running sums of one pass."""

    def __init__(
        self, n_channels: int, frequency_hz: FloatArray, line: BoolArray, settings: ProfileSettings, plan: Plan
    ) -> None:
        self.frequency_hz, self.line, self.plan = frequency_hz, line, plan
        self.power = np.zeros((n_channels, frequency_hz.size))
        self.recent = np.zeros(self.power.shape, np.float32)
        self.kept = self.seen = self.crossed = 0
        self.every = max(2, -(-plan.n_segments // CROSS_SEGMENTS))
        bins: dict[str, IntArray] = {}
        self.weight: dict[str, float] = {}
        top = USABLE * 2 * frequency_hz[-1]
        for name, (low, high) in bands_hz(settings).items():
            inside = np.flatnonzero((frequency_hz >= low) & (frequency_hz <= min(high, top)) & ~line)
            inside = inside[(inside > 0) & (inside < frequency_hz.size - 1)]
            if name in CROSSED and inside.size and high <= top:
                bins[name] = inside[:: max(1, inside.size // CROSS_BINS)]
                self.weight[name] = inside.size / bins[name].size
        self.cross = {name: np.zeros((n_channels, n_channels), np.complex128) for name in bins}
        self.all_bins = np.concatenate([*bins.values(), np.zeros(0, np.int64)])
        ends = np.cumsum([b.size for b in bins.values()])
        self.places = {name: slice(end - bins[name].size, end) for name, end in zip(bins, ends, strict=True)}
        self.parts: list[AnyArray] = []

    def add(self, before: Float32Array, after: Float32Array, kept: bool) -> None:
        """Add the segment of two halves ``(C, hop)``, or only count it."""
        crossed = kept and self.seen % self.every == 0
        self.seen += 1
        if not kept:
            return
        parts = []
        for first in range(0, len(before), GROUP):
            group = slice(first, first + GROUP)
            spectrum = _spectra(before[group], after[group])
            self._add_power(spectrum, group)
            if crossed:
                parts.append(np.take(spectrum, self.all_bins, axis=1))
        self.kept += 1
        if self.kept % FLUSH_SEGMENTS == 0:
            self._flush()
        if crossed:
            self.crossed += 1
            self.parts.append(np.concatenate(parts))
            if len(self.parts) == CROSS_TOGETHER:
                self._cross()

    def _add_power(self, spectrum: AnyArray, group: slice) -> None:
        from leadline.physiology._kernels import add_power

        add_power(spectrum.view(np.float32), self.recent[group])

    def _cross(self) -> None:
        """Add what has gathered to the cross-spectra."""
        if self.parts:
            gathered = np.stack(self.parts, axis=1)
            for name, place in self.places.items():
                self.cross[name] += _half_outer(gathered[:, :, place].reshape(len(gathered), -1))
            self.parts.clear()

    def _flush(self) -> None:
        self.power += self.recent
        self.recent[:] = 0

    def result(self, sampling_hz: float) -> FieldStatistics:
        """Means in uV^2 and uV^2/Hz."""
        self._flush()
        self._cross()
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


def _spectra(before: Float32Array, after: Float32Array) -> AnyArray:
    """Spectra ``(C, F)`` complex64 of segments of two halves ``(C, hop)``."""
    from scipy.fft import rfft

    from leadline.physiology._kernels import join_and_window

    out = np.empty((len(before), 2 * before.shape[1]), np.float32)
    join_and_window(before, after, _window(out.shape[1]), out)
    spectrum: AnyArray = rfft(out, axis=-1, overwrite_x=True)
    return spectrum


@cache
def _window(segment: int) -> Float32Array:
    """The periodic Hann window."""
    return np.asarray(0.5 - 0.5 * np.cos(2.0 * np.pi * np.arange(segment) / segment), np.float32)


def _power(before: Float32Array, after: Float32Array) -> AnyArray:
    """Windowed power ``(C, F)`` of a segment at a few contacts."""
    spectrum = _spectra(np.ascontiguousarray(before), np.ascontiguousarray(after))
    power: AnyArray = np.square(spectrum.real) + np.square(spectrum.imag)
    return power


def _step(channels: IntArray) -> int:
    """From one watched contact to the next."""
    return max(1, len(channels) // WATCHED_CHANNELS)


def _levels(power: AnyArray, frequency_hz: FloatArray) -> FloatArray:
    """Level ``(B,)`` in dB of a segment ``(C, F)`` in the watched bands: the median over contacts."""
    ends = np.searchsorted(frequency_hz, WATCHED_HZ)
    bands = [power[:, first:last].mean(axis=-1) for first, last in ends.tolist() if last > first]
    return np.asarray(10.0 * np.log10(np.median(bands, axis=-1) + 1e-12), float)


def _scan(traces: Traces, channels: IntArray, plan: Plan, frequency_hz: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Typical spectrum ``(F,)`` and artefact thresholds ``(B,)`` in dB, from a few segments spread evenly."""
    some = channels[:: _step(channels)]
    starts = np.concatenate([start + plan.hop * np.arange(n) for start, _, n in plan.blocks()])
    starts = starts[:: max(1, len(starts) // SCAN_SEGMENTS)]
    logs, levels = [], []
    for start in starts.tolist():
        samples = traces.read_uv(start, start + plan.segment, some).T
        power = _power(samples[:, : plan.hop], samples[:, plan.hop :])
        logs.append(np.log(power + 1e-12).mean(axis=0))
        levels.append(_levels(power, frequency_hz))
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
