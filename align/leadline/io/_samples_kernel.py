"""Turns time-major samples into channel-major microvolts in one pass; imported only when samples are read."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

TILE_SAMPLES = 128
TILE_CHANNELS = 32


@njit(cache=True, nogil=True)  # type: ignore[untyped-decorator]
def turn(raw: Any, channels: Any, scale: Any, out: Any) -> None:
    """``out[c, t] = raw[t, channels[c]] * scale`` tile by tile, so that both arrays stay in the cache."""
    samples = raw.shape[0]
    count = channels.size
    for t0 in range(0, samples, TILE_SAMPLES):
        t1 = min(t0 + TILE_SAMPLES, samples)
        for c0 in range(0, count, TILE_CHANNELS):
            for c in range(c0, min(c0 + TILE_CHANNELS, count)):
                source, target = raw[t0:t1, channels[c]], out[c, t0:t1]
                for t in range(t1 - t0):
                    target[t] = source[t] * scale


def as_microvolts(raw: Any, channels: Any, uv_per_bit: float) -> Any:
    """Samples ``(T, N)`` as float32 microvolts ``(T, C)`` of the chosen traces, contiguous along time."""
    out = np.empty((len(channels), len(raw)), np.float32)
    turn(raw, np.ascontiguousarray(channels, np.int64), np.float32(uv_per_bit), out)
    return out.T
