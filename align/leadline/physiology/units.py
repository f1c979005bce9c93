"""Features of sorted or detected spikes by depth."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.physiology.chunks import GUARD_S

if TYPE_CHECKING:
    from leadline.base.arrays import BoolArray, FloatArray, IntArray
    from leadline.model.recording import Spikes
    from leadline.physiology.rows import Rows

KERNEL_SD_UM = 25.0  # how far units reach: they are sorted up to about 50 um away (Henze 2000, from memory)
REACH_SD = 4.0  # beyond it a unit counts for nothing, not for next to nothing
PER_UM = 100.0
RESPONSE_S = (0.01, 0.2)
MIN_SPIKES = 20


def unit_features(
    spikes: Spikes,
    rows: Rows,
    duration_s: float,
    excluded_s: FloatArray,
    event_s: FloatArray | None = None,
    event_window_s: tuple[float, float] = (-0.1, 0.3),
) -> dict[str, FloatArray]:
    """Density, rate, amplitude, width and response of units at each row, by a Gaussian kernel of 25 um.

    Rates and densities count what lies within 100 um of shank; at the ends of a shank and of gaps in its sites they
    are divided by the share of the kernel that the sites cover. Amplitude and width are means over units, each with
    its own median, NaN where hardly any unit is near. A unit of fewer than 20 spikes counts for the rate alone.

    Parameters
    ----------
    spikes : (n,) spikes.
    rows : rows of the probe.
    duration_s : length of the recording.
    excluded_s : (k, 2) intervals left out; their spikes and their time do not count.
    event_s : (m,) times of events to which the response is measured; fewer than ten give none.

    Returns
    -------
    name of feature -> (R,) float64.
    """
    kept, time_s = _outside_intervals(spikes.time_s, duration_s, excluded_s)
    unit = spikes.unit_id[kept]
    n_units = len(spikes.unit_names)
    count = np.bincount(unit, minlength=n_units)
    tip = _by_unit(spikes.tip_distance_um[kept], unit, n_units)
    shank = _by_unit(spikes.shank[kept].astype(float), unit, n_units)
    near = kernel(rows, tip, shank)
    enough = count >= MIN_SPIKES
    cover = coverage(rows)
    features = {
        "unit_density_per_100um": near[:, enough].sum(axis=1) * PER_UM / cover,
        "spike_rate_hz": near @ (count / time_s) * PER_UM / cover,
    }
    weight = near[:, enough]
    for name, values in (("spike_amplitude_uv", spikes.amplitude_uv), ("spike_width_s", spikes.width_s)):
        if values is not None:
            typical = _by_unit(np.abs(values[kept]), unit, n_units)[enough]
            features[name] = _weighted(typical, weight)
    if event_s is not None and event_s.size >= 10:
        change = _response(spikes.time_s[kept], unit, n_units, event_s, event_window_s)
        features["evoked_rate_hz"] = near @ change * PER_UM / cover
    return features


def _outside_intervals(time_s: FloatArray, duration_s: float, excluded_s: FloatArray) -> tuple[BoolArray, float]:
    """Which spikes lie outside the excluded intervals and their guards, and how much time does."""
    kept = time_s <= duration_s
    left = duration_s
    here = 0.0
    for start, stop in sorted((np.asarray(excluded_s, float) + np.array([-GUARD_S, GUARD_S])).tolist()):
        kept &= (time_s < start) | (time_s >= stop)
        start, stop = max(start, here), min(stop, duration_s)
        left -= max(0.0, stop - start)
        here = max(here, stop)
    return kept, max(left, 1e-9)


def _by_unit(values: FloatArray, unit: IntArray, n_units: int) -> FloatArray:
    """Median of the values of each unit, NaN for a unit without any."""
    order = np.lexsort((values, unit))
    ordered = values[order]
    count = np.bincount(unit, minlength=n_units)
    first = np.cumsum(count) - count
    safe = np.clip(first + (count - 1) // 2, 0, max(len(values) - 1, 0))
    upper = np.clip(first + count // 2, 0, max(len(values) - 1, 0))
    if not len(values):
        return np.full(n_units, np.nan)
    return np.where(count > 0, (ordered[safe] + ordered[upper]) / 2.0, np.nan)


def kernel(rows: Rows, tip_um: FloatArray, shank: FloatArray) -> FloatArray:
    """Density ``(R, U)`` per um that each unit contributes to each row of its shank."""
    offset = (rows.tip_distance_um[:, None] - tip_um) / KERNEL_SD_UM
    density = np.where(np.abs(offset) < REACH_SD, np.exp(-0.5 * offset**2), 0.0) / (KERNEL_SD_UM * np.sqrt(2 * np.pi))
    return np.where(rows.shank[:, None] == shank, np.nan_to_num(density), 0.0)


def coverage(rows: Rows, usable: BoolArray | None = None) -> FloatArray:
    """Share ``(R,)`` of the kernel at each row over which sites of its shank pick up units; ``usable`` : (R,) rows."""
    from scipy.special import ndtr

    cover = np.zeros(len(rows))
    for shank in np.unique(rows.shank):
        members = np.flatnonzero((rows.shank == shank) & (True if usable is None else usable))
        if not members.size:
            continue
        tip = rows.tip_distance_um[members]
        reach = min(max(rows.pitch_um(int(shank)) / 2, 10.0), 50.0) if members.size > 1 else 50.0
        edges = np.stack([tip - reach, tip + reach], axis=1)
        starts = np.maximum(edges[:, 0], np.concatenate([[-np.inf], edges[:-1, 1]]))
        z = (edges[:, 1] - tip[:, None]) / KERNEL_SD_UM, (starts - tip[:, None]) / KERNEL_SD_UM
        cover[members] = (ndtr(z[0]) - ndtr(z[1])).sum(axis=1)
    return np.maximum(cover, 0.3)


def _weighted(values: FloatArray, weight: FloatArray) -> FloatArray:
    """Mean of ``values`` (U,) at each row by ``weight`` (R, U); NaN where the weights add up to a tenth of a unit."""
    known = np.isfinite(values)
    total = weight[:, known].sum(axis=1)
    enough = total > 0.1 / (KERNEL_SD_UM * np.sqrt(2 * np.pi))
    return np.where(enough, weight[:, known] @ values[known] / np.where(enough, total, 1.0), np.nan)


def _response(
    time_s: FloatArray,
    unit: IntArray,
    n_units: int,
    event_s: FloatArray,
    window_s: tuple[float, float],
) -> FloatArray:
    """Rate ``(U,)`` from 10 to 200 ms after events minus the rate before them; ``time_s`` ascends."""
    stop = min(RESPONSE_S[1], window_s[1])
    after = _counts(time_s, unit, n_units, event_s + RESPONSE_S[0], event_s + stop) / (stop - RESPONSE_S[0])
    if window_s[0] >= -0.01:
        return np.asarray(after / event_s.size, float)
    before = _counts(time_s, unit, n_units, event_s + window_s[0], event_s) / -window_s[0]
    return np.asarray((after - before) / event_s.size, float)


def _counts(
    time_s: FloatArray,
    unit: IntArray,
    n_units: int,
    start_s: FloatArray,
    stop_s: FloatArray,
) -> FloatArray:
    """Spikes ``(U,)`` of each unit in all the windows together."""
    change = np.zeros(time_s.size + 1)
    np.add.at(change, np.searchsorted(time_s, start_s), 1.0)
    np.add.at(change, np.searchsorted(time_s, stop_s), -1.0)
    return np.asarray(np.bincount(unit, np.cumsum(change)[:-1], n_units), float)
