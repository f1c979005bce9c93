"""Which samples are read: excluded intervals left out, long recordings sampled evenly, fast ones thinned."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from math import floor
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import Float32Array, FloatArray, IntArray
from leadline.model.recording import Traces

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

FIELD_HZ = 2500.0  # the rate that fields are thinned to: the high-frequency band reaches 1000 Hz
GUARD_S = 0.1  # left out on either side of an excluded interval: filters and amplifiers ring
SEGMENT_S = 2.0
MIN_SEGMENTS = 8
MAX_READ_S = 1200.0  # more adds nothing: 1200 segments give band powers to 0.2 dB
BLOCK_S = 10.0  # read in one go where a recording is not read whole


@dataclass(frozen=True, slots=True, eq=False)
class Plan:
    """Segments to read, half overlapping, in blocks without a gap.

    ``segment`` : samples of a segment, even. ``start`` : (B,) first sample of each block. ``count`` : (B,) segments of
    each block. ``share`` : of the allowed time that is read. ``allowed_s`` : time outside excluded intervals.
    """

    segment: int
    start: IntArray
    count: IntArray
    share: float
    allowed_s: float

    @property
    def hop(self) -> int:
        """Samples from one segment's start to the next one's."""
        return self.segment // 2

    @property
    def n_segments(self) -> int:
        """Number of segments of all blocks."""
        return int(self.count.sum())

    def spans(self) -> IntArray:
        """Stretches ``(k, 2)`` of samples that are read, joined blocks as one."""
        ends = self.start + (self.count + 1) * self.hop
        first = np.flatnonzero(np.concatenate([[True], self.start[1:] + self.hop != ends[:-1]])[: self.start.size])
        return np.stack([self.start[first], ends[np.append(first[1:], self.start.size) - 1]], axis=1)

    def blocks(self) -> Iterator[tuple[int, int, int]]:
        """First sample, stop and number of segments of each block."""
        for start, count in zip(self.start.tolist(), self.count.tolist(), strict=True):
            yield start, start + (count + 1) * self.hop, count


def allowed_spans(n_samples: int, sampling_hz: float, excluded_s: FloatArray) -> IntArray:
    """Stretches ``(k, 2)`` of samples, start and stop, outside the excluded intervals and their guards.

    Examples
    --------
    >>> allowed_spans(1000, 100.0, np.array([[2.0, 3.0]])).tolist()
    [[0, 190], [310, 1000]]
    """
    spans = []
    here = 0
    for start_s, stop_s in sorted(np.asarray(excluded_s, float).tolist()):
        start = floor((start_s - GUARD_S) * sampling_hz)
        if start > here:
            spans.append((here, min(start, n_samples)))
        here = max(here, int(np.ceil((stop_s + GUARD_S) * sampling_hz)))
        if here >= n_samples:
            break
    if here < n_samples:
        spans.append((here, n_samples))
    return np.array(spans, np.int64).reshape(-1, 2)


def plan(traces: Traces, excluded_s: FloatArray, fraction: float = 1.0) -> Plan:
    """Choose segments and blocks: ``fraction`` of the allowed time, at most 20 minutes, spread evenly.

    Segments last two seconds, less where excluded intervals leave no room for enough of those.
    """
    spans = allowed_spans(traces.n_samples, traces.sampling_hz, excluded_s)
    allowed_s = float((spans[:, 1] - spans[:, 0]).sum() / traces.sampling_hz)
    segment = _segment(spans, traces.sampling_hz)
    hop = segment // 2
    share = min(fraction, MAX_READ_S / allowed_s if allowed_s else 1.0, 1.0)
    longest = max(4, int(BLOCK_S * traces.sampling_hz) // hop)
    starts, counts = [], []
    for start, stop in spans.tolist():
        segments = (stop - start) // hop - 1
        for first in range(0, segments, longest):
            starts.append(start + first * hop)
            counts.append(min(longest, segments - first))
    kept = _evenly(len(starts), share)
    return Plan(segment, np.array(starts, np.int64)[kept], np.array(counts, np.int64)[kept], share, allowed_s)


def _segment(spans: IntArray, sampling_hz: float) -> int:
    """Samples of a segment: the length nearest to two seconds that transforms fast, 2^k or 5 * 2^k."""
    fast = np.sort(np.concatenate([2 ** np.arange(4, 25), 5 * 2 ** np.arange(2, 22)]))
    seconds = SEGMENT_S
    while True:
        segment = int(fast[np.argmin(np.abs(np.log(fast / (seconds * sampling_hz))))])
        found = np.maximum((spans[:, 1] - spans[:, 0]) // (segment // 2) - 1, 0).sum()
        if found >= MIN_SEGMENTS or seconds <= SEGMENT_S / 8:
            return segment
        seconds /= 2


def _evenly(n: int, share: float) -> IntArray:
    """Indices of about ``share`` of ``n``, spread evenly; at least one where there is one."""
    wanted = min(n, max(1, round(n * share)))
    return np.floor((np.arange(wanted) + 0.5) * n / max(wanted, 1)).astype(np.int64)


def halves(read: Callable[[int, int], Float32Array], plan: Plan) -> Iterator[tuple[Float32Array, Float32Array]]:
    """First and second half ``(C, hop)`` of every segment of ``plan``; what two segments share is read once.

    ``read`` gives samples ``(stop - start, C)``; it is asked for half a segment at once, which the cache holds.
    """
    end = -1
    before = np.zeros((0, 0), np.float32)
    for start, stop, _ in plan.blocks():
        joined = start + plan.hop == end
        for at in range(end if joined else start, stop, plan.hop):
            after = np.ascontiguousarray(read(at, at + plan.hop).T)
            if at > start:
                yield before, after
            before = after
        end = stop


def fields(traces: Traces) -> Traces:
    """The same recording thinned to the lowest whole-number rate of at least 2500 Hz; itself where it is not faster."""
    factor = int(traces.sampling_hz // FIELD_HZ)
    return traces if factor < 2 else Thinned(traces, factor)


@dataclass(frozen=True, eq=False)
class Thinned:
    """Traces low-passed and thinned by ``factor`` while they are read.

    A linear-phase Kaiser-window filter passes up to 0.4 of the new rate and takes away 60 dB from 0.6 of it on, so
    that only frequencies above 0.4 of the rate can hold anything folded back. ``hear`` : told of the samples as they
    were, once for each that is read: number of the first, samples (C, T), and how many on either side are only margin.
    """

    source: Traces
    factor: int
    hear: Callable[[int, Float32Array, int], None] | None = None

    @property
    def sampling_hz(self) -> float:
        """Samples a second after thinning."""
        return self.source.sampling_hz / self.factor

    @property
    def n_samples(self) -> int:
        """Samples of each trace after thinning."""
        return self.source.n_samples // self.factor

    @property
    def n_channels(self) -> int:
        """Number of traces."""
        return self.source.n_channels

    @cached_property
    def taps(self) -> Float32Array:
        """The filter, odd and symmetric, sum 1."""
        half = int(np.ceil(9.0 * self.factor))
        at = np.arange(-half, half + 1) / self.factor
        taps = np.sinc(at) * np.kaiser(2 * half + 1, 5.65)
        return np.asarray(taps / taps.sum(), np.float32)

    def read_uv(self, start: int, stop: int, channels: IntArray) -> Float32Array:
        """Samples ``[start, stop)`` after thinning, ``(stop - start, len(channels))``, a fifth of a second at once."""
        start, stop = max(0, start), min(stop, self.n_samples)
        out = np.empty((len(channels), max(0, stop - start)), np.float32)
        step = max(1, int(self.sampling_hz / 5))
        for first in range(start, stop, step):
            last = min(first + step, stop)
            self._fill(first, last, channels, out[:, first - start : last - start])
        return out.T

    def _fill(self, start: int, stop: int, channels: IntArray, out: Float32Array) -> None:
        from leadline.physiology._kernels import filter_and_thin

        half = len(self.taps) // 2
        first, last = start * self.factor - half, stop * self.factor + half
        inside = self.source.read_uv(max(first, 0), min(last, self.source.n_samples), channels).T
        pad = (max(-first, 0), max(last - self.source.n_samples, 0))
        samples = np.pad(inside, ((0, 0), pad), mode="edge") if any(pad) else np.ascontiguousarray(inside)
        filter_and_thin(samples, self.taps, self.factor, out)
        if self.hear is not None:
            self.hear(start * self.factor, samples, half)
