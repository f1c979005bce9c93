"""Compiled inner loops of the streaming pass; imported only when samples are read."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit


@njit(cache=True, fastmath=True, nogil=True)  # type: ignore[untyped-decorator]
def join_and_window(before: Any, after: Any, window: Any, out: Any) -> None:
    """Segments of two halves (C, N / 2) each, less their mean and times ``window`` (N,), in ``out`` (C, N) float32."""
    half = before.shape[1]
    for c in range(out.shape[0]):
        first, second, target = before[c], after[c], out[c]
        total = np.float32(0)
        for t in range(half):
            total += first[t] + second[t]
        mean = total / np.float32(2 * half)
        for t in range(half):
            target[t] = (first[t] - mean) * window[t]
        for t in range(half):
            target[half + t] = (second[t] - mean) * window[half + t]


@njit(cache=True, fastmath=True, nogil=True)  # type: ignore[untyped-decorator]
def add_power(spectrum: Any, power: Any) -> None:
    """Add the squared size of spectra, (C, 2 F) pairs of real and imaginary parts, to ``power`` (C, F)."""
    for c in range(spectrum.shape[0]):
        x, total = spectrum[c], power[c]
        for k in range(total.size):
            total[k] += x[2 * k] * x[2 * k] + x[2 * k + 1] * x[2 * k + 1]


@njit(cache=True, fastmath=True, nogil=True)  # type: ignore[untyped-decorator]
def filter_and_thin(samples: Any, taps: Any, factor: int, out: Any) -> None:
    """``out[c, t] = sum_k taps[k] samples[c, t factor + k]``, float32 throughout."""
    length = taps.size
    for c in range(out.shape[0]):
        row = samples[c]
        for t in range(out.shape[1]):
            window = row[t * factor : t * factor + length]
            total = np.float32(0)
            for k in range(length):
                total += taps[k] * window[k]
            out[c, t] = total
