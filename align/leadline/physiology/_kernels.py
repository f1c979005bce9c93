"""Compiled inner loops of the streaming pass; imported only when samples are read."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

HALF = np.float32(0.5)
QUARTER = np.float32(0.25)


@njit(cache=True, fastmath=True, nogil=True)  # type: ignore[untyped-decorator]
def add_hann_power(spectrum: Any, kept: Any, power: Any) -> None:
    """Add the power of every kept segment, mean removed and Hann window applied, to ``power``.

    ``spectrum`` : (C, S, 2 F) float32, the real FFT of the bare segments as pairs of real and imaginary parts; its
    first bin is set to zero, which removes the mean. The periodic Hann window is the convolution
    ``X[k] / 2 - (X[k - 1] + X[k + 1]) / 4`` of the spectrum. ``kept`` : (S,) bool. ``power`` : (C, F) float32.
    """
    channels, segments, width = spectrum.shape
    bins = width // 2
    square = np.zeros(width - 4, np.float32)
    for c in range(channels):
        total = power[c]
        for s in range(segments):
            x = spectrum[c, s]
            x[0] = 0
            x[1] = 0
            if not kept[s]:
                continue
            before, here, after = x[: width - 4], x[2 : width - 2], x[4:]
            for k in range(width - 4):
                y = HALF * here[k] - QUARTER * (before[k] + after[k])
                square[k] = y * y
            inner = total[1 : bins - 1]
            for k in range(bins - 2):
                inner[k] += square[2 * k] + square[2 * k + 1]
            first = HALF * x[2]
            last = HALF * (x[width - 2] - x[width - 4])
            total[0] += first * first
            total[bins - 1] += last * last


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
