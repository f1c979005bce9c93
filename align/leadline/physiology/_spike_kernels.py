"""Compiled inner loops of spike detection; imported only when wideband samples are read."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit


@njit(cache=True, fastmath=True, nogil=True)  # type: ignore[untyped-decorator]
def less_running_mean(samples: Any, doublings: int, out: Any) -> None:
    """``out[c, t]`` : sample ``t + W / 2`` less the mean of samples ``t`` to ``t + W - 1``, ``W = 2 ** doublings``.

    ``samples`` : (C, T) float32. ``out`` : (C, T - W + 1). Sums of 2, 4, 8 ... samples are made from each other.
    """
    width = 1 << doublings
    total = np.empty(samples.shape[1], np.float32)
    for c in range(samples.shape[0]):
        row, target = samples[c], out[c]
        for t in range(row.size):
            total[t] = row[t]
        step = 1
        count = row.size
        for _ in range(doublings):
            count -= step
            for t in range(count):
                total[t] += total[t + step]
            step *= 2
        for t in range(target.size):
            target[t] = row[t + width // 2] - total[t] / np.float32(width)


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
        for t in range(start, stop):
            value = row[t] - reference[t]
            if value < -threshold[c] and _lowest(signal, reference, threshold, near[c], c, t, value, reach):
                if found == at.size:
                    return found
                at[found] = t
                contact[found] = c
                found += 1
    return found


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
