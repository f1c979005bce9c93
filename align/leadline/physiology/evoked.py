"""Mean responses to events, which of them are real, and when they come."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import BoolArray, FloatArray, IntArray
from leadline.base.progress import SILENT, Progress
from leadline.physiology.chunks import allowed_spans

if TYPE_CHECKING:
    from leadline.model.recording import Events, Traces

MAX_EVENTS = 600
MAX_KINDS = 6
REST = ""  # events of rarer kinds
MIN_EVENTS = 10
SMOOTH_S = 0.008
ARTEFACT_S = 0.004  # of the response that the event itself may spoil
CLEAR_ROWS = 3  # rows that must show a response
FIRST_PEAK = 0.35  # of the largest power that the first peak must reach
FIRST_S = 0.008


@dataclass(frozen=True, slots=True, eq=False)
class Response:
    """Mean response of each contact to one kind of event.

    ``time_s`` : (T,) from the event. ``mean_uv`` : (C, T), the mean before the event taken away, smoothed over 8 ms.
    ``noise_uv`` : (C, T) half the difference between the means of odd and even events, treated likewise: what the mean
    would look like without any response. ``kind`` : '' for all kinds together. ``count`` : events averaged.
    """

    time_s: FloatArray
    mean_uv: FloatArray
    noise_uv: FloatArray
    kind: str
    count: int


def usable_events(
    events: Events, n_samples: int, sampling_hz: float, excluded_s: FloatArray, window_s: tuple[float, float]
) -> BoolArray:
    """Which events ``(n,)`` have their whole window inside the recording and outside excluded intervals."""
    spans = allowed_spans(n_samples, sampling_hz, excluded_s) / sampling_hz
    usable = np.zeros(events.time_s.size, bool)
    for start_s, stop_s in spans:
        usable |= (events.time_s + window_s[0] >= start_s) & (events.time_s + window_s[1] <= stop_s)
    return usable


def responses(
    traces: Traces,
    channels: IntArray,
    events: Events,
    excluded_s: FloatArray,
    window_s: tuple[float, float],
    *,
    limit_uv: FloatArray | None = None,
    progress: Progress = SILENT,
) -> tuple[Response, ...]:
    """Average the samples around events: all kinds together, and each of the six most frequent kinds.

    Only windows around at most 600 events, spread evenly, are read; kinds with fewer than ten events are not shown
    alone. Events near excluded intervals are dropped. Samples beyond ``limit_uv`` (C,) of the window's own mean are
    cut to it, which bounds what an artefact can do.
    """
    usable = np.flatnonzero(usable_events(events, traces.n_samples, traces.sampling_hz, excluded_s, window_s))
    usable = usable[np.unique(events.time_s[usable], return_index=True)[1]]
    if usable.size < MIN_EVENTS:
        return ()
    usable = usable[np.floor(np.linspace(0, usable.size - 1, min(usable.size, MAX_EVENTS))).astype(int)]
    kinds = [kind for kind, n in Counter(events.kind[i] for i in usable).most_common(MAX_KINDS) if n >= MIN_EVENTS]
    before, after = round(window_s[0] * traces.sampling_hz), round(window_s[1] * traces.sampling_hz)
    time_s = np.arange(before, after) / traces.sampling_hz
    sums = {kind: np.zeros((2, len(channels), time_s.size)) for kind in [*kinds, REST]}
    counts = {kind: np.zeros(2, np.int64) for kind in sums}
    progress.begin("reading events", usable.size)
    for index in usable.tolist():
        middle = round(float(events.time_s[index]) * traces.sampling_hz)
        samples = traces.read_uv(middle + before, middle + after, channels).T
        if samples.shape[1] == time_s.size:
            kind = events.kind[index] if events.kind[index] in kinds else REST
            side = counts[kind].sum() % 2
            if limit_uv is not None:
                samples = samples - samples.mean(axis=1, keepdims=True)
                samples = np.clip(samples, -limit_uv[:, None], limit_uv[:, None])
            sums[kind][side] += samples
            counts[kind][side] += 1
        progress.step()
    alone = [_response(time_s, sums[kind], counts[kind], kind) for kind in kinds]
    total, count = np.sum(list(sums.values()), axis=0), np.sum(list(counts.values()), axis=0)
    together = _response(time_s, total, count, kinds[0] if len(set(events.kind)) == 1 and kinds else "")
    found = [together, *(alone if len(set(events.kind)) > 1 else [])]
    return tuple(r for r in found if r is not None)


def _response(time_s: FloatArray, sums: FloatArray, count: IntArray, kind: str) -> Response | None:
    if count.min() < MIN_EVENTS // 2:
        return None
    half = sums / count[:, None, None]
    base = time_s < -ARTEFACT_S
    if base.sum() >= 5:
        half = half - half[..., base].mean(axis=-1, keepdims=True)
    else:
        half = half - half.mean(axis=-1, keepdims=True)
    half = _smooth(half, time_s)
    return Response(time_s, half.mean(axis=0), (half[0] - half[1]) / 2.0, kind, int(count.sum()))


def _smooth(values: FloatArray, time_s: FloatArray) -> FloatArray:
    """Hann-weighted running mean of 8 ms along the last axis."""
    from scipy.ndimage import convolve1d

    step = float(time_s[1] - time_s[0])
    width = 2 * round(SMOOTH_S / step / 2) + 1
    if width < 3:
        return values
    weights = np.hanning(width + 2)[1:-1]
    return np.asarray(convolve1d(values, weights / weights.sum(), axis=-1, mode="nearest"), float)


@dataclass(frozen=True, slots=True, eq=False)
class EvokedRows:
    """Features ``(R,)`` of a response by row, and the maps ``(R, T)`` that they were read from.

    ``clarity`` : how many standard deviations of the noise the response reaches in the three rows that show it best.
    """

    csd_ua_per_mm3: FloatArray
    amplitude_uv: FloatArray
    latency_s: FloatArray
    sink_latency_s: FloatArray
    time_s: FloatArray
    map_uv: FloatArray
    map_csd: FloatArray
    clarity: float


def evoked_rows(response: Response, potential: FloatArray, density: FloatArray) -> EvokedRows:
    """Read the features of each row off a response.

    Density and potential are means over 16 ms around the first peak of the current sources, which marks where the
    answer enters; later sinks speak through their latencies. Latencies are those of the largest potential and of the
    deepest sink of the row, NaN where these stand less than four times above the noise.

    Parameters
    ----------
    response : mean response by contact.
    potential : (R, C) matrix that averages good contacts by row.
    density : (R, C) matrix from contacts to current source density by row.
    """
    uv, uv_noise = _apply(potential, response.mean_uv), _apply(potential, response.noise_uv)
    csd, csd_noise = _apply(density, response.mean_uv), _apply(density, response.noise_uv)
    after = response.time_s > ARTEFACT_S
    base = csd if np.isfinite(csd).any() else uv
    noise = csd_noise if np.isfinite(csd).any() else uv_noise
    score = np.abs(np.nan_to_num(base / _spread(noise[:, after])[:, None])) * after
    power = np.square(score).mean(axis=0)
    span = np.abs(response.time_s - response.time_s[_first_peak(power)]) <= FIRST_S
    clarity = float(np.sort(score.max(axis=1))[-CLEAR_ROWS:][0])
    uv_sd, csd_sd = _spread(uv_noise[:, after]), _spread(csd_noise[:, after])
    return EvokedRows(
        csd[:, span].mean(axis=1),
        uv[:, span].mean(axis=1),
        _latency(np.abs(uv), uv_sd, response.time_s),
        _latency(-csd, csd_sd, response.time_s),
        response.time_s,
        uv,
        csd,
        clarity,
    )


def _first_peak(power: FloatArray) -> int:
    """Index of the first local maximum of ``power`` (T,) that reaches a good part of the largest."""
    inner = (power[1:-1] >= power[:-2]) & (power[1:-1] > power[2:]) & (power[1:-1] >= FIRST_PEAK * power.max())
    return int(np.flatnonzero(inner)[0]) + 1 if inner.any() else int(power.argmax())


def _spread(noise: FloatArray) -> FloatArray:
    """Standard deviation ``(R,)`` of the noise ``(R, T)`` of each row; at least half of the median row's."""
    sd = np.sqrt(np.square(noise).mean(axis=1))
    known = sd[np.isfinite(sd)]
    least = 0.5 * float(np.median(known)) if known.size else 0.0
    return np.asarray(np.maximum(sd, max(least, 1e-9)), float)


def _apply(matrix: FloatArray, values: FloatArray) -> FloatArray:
    return np.asarray(matrix @ values, float)


def _latency(size: FloatArray, sd: FloatArray, time_s: FloatArray) -> FloatArray:
    """Time ``(R,)`` at which ``size`` (R, T) is largest after the event; NaN where that is below four ``sd``."""
    late = np.flatnonzero(time_s > ARTEFACT_S)
    known = np.asarray(np.isfinite(size).all(axis=1), bool)
    part = np.where(known[:, None], size, 0.0)[:, late]
    at = part.argmax(axis=1)
    clear = known & (part.max(axis=1) > 4.0 * sd) & (at > 0) & (at < late.size - 1)
    return np.where(clear, time_s[late[at]], np.nan)
