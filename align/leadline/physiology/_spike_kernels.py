"""Compiled inner loops of spike detection; imported only when wideband samples are read."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

TILE = 2048  # samples whose sums stay in the cache
STRETCH = 64


@njit(cache=True, fastmath=True, nogil=True)  # type: ignore[untyped-decorator]
def less_running_mean(samples: Any, fourfolds: int, out: Any) -> None:
    """``out[c, t]`` : sample ``t + W / 2`` less the mean of samples ``t`` to ``t + W - 1``, ``W = 4 ** fourfolds``.

    ``samples`` : (C, T) float32. ``out`` : (C, T - W + 1). Sums of 4, 16, 64 ... samples are made from each other.
    """
    width = 4**fourfolds
    scale = np.float32(1.0 / width)
    sums = np.empty((2, TILE + width), np.float32)
    for c in range(samples.shape[0]):
        row = samples[c]
        for start in range(0, out.shape[1], TILE):
            target = out[c, start : start + TILE]
            count = target.size + width - 1
            sums[0, :count] = row[start : start + count]
            step = 1
            for k in range(fourfolds):
                count -= 3 * step
                _add_four(sums[k % 2], step, count, sums[(k + 1) % 2])
                step *= 4
            middle, mean = row[start + width // 2 :], sums[fourfolds % 2]
            for t in range(target.size):
                target[t] = middle[t] - mean[t] * scale


@njit(cache=True, fastmath=True, nogil=True)  # type: ignore[untyped-decorator]
def _add_four(values: Any, step: int, count: int, out: Any) -> None:
    first, second, third, fourth = values, values[step:], values[2 * step :], values[3 * step :]
    for t in range(count):
        out[t] = (first[t] + second[t]) + (third[t] + fourth[t])


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def find_peaks(
    signal: Any, reference: Any, threshold: Any, near: Any, start: int, stop: int, reach: int, at: Any, contact: Any
) -> int:
    """Negative peaks of ``signal`` (C, T) less ``reference`` (T,) from ``start`` to ``stop``; returns how many.

    A peak lies below minus the ``threshold`` (C,) of its contact, and no contact among ``near`` (C, K; -1 is none)
    crosses its own threshold deeper within ``reach`` samples. Sample and contact are put into ``at`` and ``contact``;
    peaks beyond their length are not counted.
    """
    found = 0
    for c in range(signal.shape[0]):
        row = signal[c]
        for begin in range(start, stop, STRETCH):
            end = min(begin + STRETCH, stop)
            if not _crosses(row[begin:end], reference[begin:end], -threshold[c]):
                continue
            for t in range(begin, end):
                value = row[t] - reference[t]
                if value < -threshold[c] and _lowest(signal, reference, threshold, near[c], c, t, value, reach):
                    if found == at.size:
                        return found
                    at[found] = t
                    contact[found] = c
                    found += 1
    return found


@njit(cache=True, fastmath=True, nogil=True)  # type: ignore[untyped-decorator]
def _crosses(row: Any, reference: Any, low: float) -> bool:
    """Whether any sample lies below ``low``; most stretches hold none, and this is asked of many samples at once."""
    count = 0
    for t in range(row.size):
        count += row[t] - reference[t] < low
    return count > 0


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def _lowest(signal: Any, reference: Any, threshold: Any, near: Any, c: int, t: int, value: float, reach: int) -> bool:
    row = signal[c]
    if row[t - 1] - reference[t - 1] <= value or row[t + 1] - reference[t + 1] < value:
        return False
    for u in range(t - reach, t + reach + 1):
        other = row[u] - reference[u]
        if other < value or (other == value and u < t):
            return False
    for j in near:
        if j < 0:
            break
        for u in range(t - reach, t + reach + 1):
            other = signal[j, u] - reference[u]
            if other < -threshold[j] and (other < value or (other == value and j < c)):
                return False
    return True
