"""Spikes that nobody sorted: threshold crossings of wideband recordings, counted while fields are read."""

from __future__ import annotations

from dataclasses import dataclass
from math import log
from typing import TYPE_CHECKING

import numpy as np

from leadline.physiology.units import KERNEL_SD_UM, MIN_SPIKES, PER_UM, RESPONSE_S, coverage, kernel

if TYPE_CHECKING:
    from leadline.base.arrays import BoolArray, Float32Array, FloatArray, IntArray
    from leadline.model.probe import Probe
    from leadline.model.recording import Traces
    from leadline.physiology.chunks import Plan
    from leadline.physiology.rows import Rows

LEAST_HZ = 10_000.0  # a spike's trough lasts some 0.2 ms
HIGH_PASS_S = 0.0021  # running mean that is taken away: half power at 0.76 / 2.1 ms = 360 Hz
THRESHOLD_SD = 5.0  # four to five are usual; Gaussian noise crosses five hardly twice a minute
REACH_S = 0.0004  # a spike is one peak within this time
REACH_UM = 75.0  # and within this distance
REFERENCE_CONTACTS = 48  # the median of these tells the common noise to a fifth of one contact's own
LEAST_FOR_REFERENCE = 16  # the median of a few would take the spikes themselves away
SCAN_PIECES, SCAN_S, SCAN_EVERY = 20, 0.1, 4  # 1.5e4 values of each contact tell its noise to a hundredth
STORM_S, STORM_SHARE = 0.001, 0.1  # what that many contacts cross within a millisecond is no spike


@dataclass(frozen=True, slots=True, eq=False)
class Detector:
    """What is looked for: thresholds ``(C,)`` in uV below zero, ``near`` (C, K) neighbours of each contact, -1 none."""

    sampling_hz: float
    threshold_uv: Float32Array
    near: IntArray

    @property
    def fourfolds(self) -> int:
        """Of the running mean: its length is the power of four nearest to 2.1 ms, 64 samples at 30 kHz."""
        return max(1, round(log(HIGH_PASS_S * self.sampling_hz, 4)))

    @property
    def reach(self) -> int:
        """Samples to either side in which a spike is one peak."""
        return max(1, round(REACH_S * self.sampling_hz))


@dataclass(slots=True, eq=False)
class Counts:
    """Running counts of one recording. ``seconds`` : time heard. ``count``, ``sum_uv`` : (C,) crossings, depths.

    ``after``, ``before`` : (C,) crossings in the windows ``after_s``, ``before_s`` (n, 2) of the events.
    """

    detector: Detector
    after_s: FloatArray
    before_s: FloatArray
    count: FloatArray
    sum_uv: FloatArray
    after: FloatArray
    before: FloatArray
    seconds: float = 0.0

    def hear(self, first: int, samples: Float32Array, margin: int) -> None:
        """Count the crossings of samples ``(C, T)``, of which ``margin`` on either side only help to judge.

        ``first`` : number of the first sample after the margin.
        """
        at, contact, depth_uv = peaks(self.detector, samples, margin)
        time_s = (first + at) / self.detector.sampling_hz
        n = self.count.size
        self.seconds += (samples.shape[1] - 2 * margin) / self.detector.sampling_hz
        self.count += np.bincount(contact, minlength=n)
        self.sum_uv += np.bincount(contact, depth_uv, n)
        self.after += np.bincount(contact, _windows(time_s, self.after_s), n)
        self.before += np.bincount(contact, _windows(time_s, self.before_s), n)


def counts_for(detector: Detector, event_s: FloatArray, window_s: tuple[float, float]) -> Counts:
    """Empty counts; the response to events is the rate from 10 to 200 ms after them against the rate before."""
    stop = min(RESPONSE_S[1], window_s[1])
    nothing = np.zeros((4, len(detector.threshold_uv)))
    return Counts(
        detector,
        np.sort(event_s)[:, None] + np.array([RESPONSE_S[0], stop]),
        np.sort(event_s)[:, None] + np.array([min(window_s[0], 0.0), 0.0]),
        nothing[0],
        nothing[1],
        nothing[2],
        nothing[3],
    )


def detector_for(traces: Traces, probe: Probe, plan: Plan, factor: int) -> Detector:
    """Thresholds from twenty short pieces spread over ``plan``, which counts samples thinned by ``factor``.

    The noise of a contact is the median size of its signal over 0.6745, which spikes hardly touch [1]_.

    References
    ----------
    .. [1] Quian Quiroga et al. (2004), Neural Comput. 16, 1661, doi:10.1162/089976604774201631.
    """
    bare = Detector(traces.sampling_hz, np.zeros(len(probe.channel), np.float32), _near(probe))
    starts = np.concatenate([start + plan.hop * np.arange(n) for start, _, n in plan.blocks()]) * factor
    starts = starts[np.unique(np.linspace(0, starts.size - 1, SCAN_PIECES).astype(int))]
    pieces = []
    for start in starts.tolist():
        piece = traces.read_uv(start, start + round(SCAN_S * traces.sampling_hz), probe.channel).T
        signal, reference = _referenced(bare, np.ascontiguousarray(piece))
        pieces.append(np.abs(signal[:, ::SCAN_EVERY] - reference[::SCAN_EVERY]))
    noise = np.median(np.concatenate(pieces, axis=1), axis=1) / 0.6745
    return Detector(traces.sampling_hz, np.asarray(THRESHOLD_SD * noise + 1e-3, np.float32), bare.near)


def peaks(detector: Detector, samples: Float32Array, margin: int) -> tuple[IntArray, IntArray, FloatArray]:
    """Crossings of samples ``(C, T)``: sample after the margin, contact and depth in uV (positive) of each.

    A running mean of 2.1 ms and the median over contacts are taken away; a spike is the deepest crossing within 0.4 ms
    and 75 um. ``margin`` must exceed half the running mean and the 0.4 ms.
    """
    from leadline.physiology._spike_kernels import find_peaks

    signal, reference = _referenced(detector, samples)
    lead = margin - 4**detector.fourfolds // 2
    core = samples.shape[1] - 2 * margin
    most = 1000 + core * len(samples) // 1000
    at, contact = np.empty(most, np.int64), np.empty(most, np.int64)
    found = find_peaks(
        signal, reference, detector.threshold_uv, detector.near, lead, lead + core, detector.reach, at, contact
    )
    at, contact = at[:found], contact[:found]
    depth_uv = reference[at].astype(float) - signal[contact, at]
    at -= lead
    order = np.sort(at)
    width = STORM_S * detector.sampling_hz
    together = np.searchsorted(order, at + width, "right") - np.searchsorted(order, at - width)
    calm = together <= max(10.0, STORM_SHARE * len(samples))
    return at[calm], contact[calm], np.asarray(depth_uv[calm], float)


def crossing_features(counts: Counts, probe: Probe, rows: Rows, good: BoolArray) -> dict[str, FloatArray]:
    """Density, depth and response of crossings at each row, by the kernel of units; NaN at rows without a good contact.

    The depth is the mean over the crossings near a row, NaN where there were fewer than twenty.
    """
    usable = np.isin(np.arange(len(rows)), rows.row_of_contact[good])
    near = kernel(rows, probe.tip_distance_um, probe.shank.astype(float)) * good
    scale = np.where(usable, PER_UM / coverage(rows, usable), np.nan)
    seconds = max(counts.seconds, 1e-9)
    weight = near @ counts.count
    enough = usable & (weight * KERNEL_SD_UM * np.sqrt(2 * np.pi) >= MIN_SPIKES)
    features = {
        "crossing_density_hz_per_100um": weight / seconds * scale,
        "crossing_amplitude_uv": np.where(enough, near @ counts.sum_uv / np.where(enough, weight, 1.0), np.nan),
    }
    n_events = len(counts.after_s)
    if n_events >= 10:
        change = counts.after / np.ptp(counts.after_s[0])
        if np.ptp(counts.before_s[0]) > 0.01:
            change = change - counts.before / np.ptp(counts.before_s[0])
        features["evoked_rate_hz"] = near @ change / n_events * scale
    return features


def _referenced(detector: Detector, samples: Float32Array) -> tuple[Float32Array, Float32Array]:
    """Signal ``(C, T - W + 1)`` less its running mean, and the median ``(T - W + 1,)`` of up to 48 contacts of it."""
    from leadline.physiology._spike_kernels import less_running_mean

    signal = np.empty((len(samples), samples.shape[1] - 4**detector.fourfolds + 1), np.float32)
    less_running_mean(samples, detector.fourfolds, signal)
    if len(samples) < LEAST_FOR_REFERENCE:
        return signal, np.zeros(signal.shape[1], np.float32)
    some = np.ascontiguousarray(signal[:: -(-len(samples) // REFERENCE_CONTACTS)].T)
    middle = some.shape[1] // 2
    return signal, np.ascontiguousarray(np.partition(some, middle, axis=1)[:, middle])


def _near(probe: Probe) -> IntArray:
    """Other contacts ``(C, K)`` of the shank within 75 um, nearest first, -1 beyond the last."""
    aside = probe.x_um[:, None] - probe.x_um
    along = probe.tip_distance_um[:, None] - probe.tip_distance_um
    distance = np.where(probe.shank[:, None] == probe.shank, np.hypot(aside, along), np.inf)
    np.fill_diagonal(distance, np.inf)
    order = np.argsort(distance, axis=1, kind="stable")
    close = np.take_along_axis(distance, order, axis=1) <= REACH_UM
    return np.where(close, order, -1)[:, : max(1, int(close.sum(axis=1).max()))]


def _windows(time_s: FloatArray, windows_s: FloatArray) -> FloatArray:
    """How many of the windows ``(n, 2)``, in the order of time, each time lies in."""
    opened = np.searchsorted(windows_s[:, 0], time_s, "right")
    return np.asarray(opened - np.searchsorted(windows_s[:, 1], time_s, "right"), float)
