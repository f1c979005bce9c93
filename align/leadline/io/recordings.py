"""Recordings as handles that read on demand: flat binary samples, time-major, little-endian."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.errors import LeadlineError, nearest

if TYPE_CHECKING:
    from pathlib import Path

    from leadline.base.arrays import Float32Array, IntArray
    from leadline.model.brain import RecordingSource
    from leadline.model.recording import Traces

DTYPES = {"int16": "<i2", "float32": "<f4"}
MIN_SECONDS = 1.0
_NEEDED = {
    "sampling_hz": "the samples a second, e.g. sampling_hz = 2500.0",
    "n_channels": "the number of traces in the file, contacts or not, e.g. n_channels = 384",
    "dtype": "dtype = 'int16' or 'float32'",
}


@dataclass(frozen=True, slots=True)
class BinaryTraces:
    """Samples of a flat file. Every read opens the file anew and keeps nothing, so memory does not grow with the file.

    ``uv_per_bit`` : microvolts of one unit of the file.
    """

    path: Path
    sampling_hz: float
    n_samples: int
    n_channels: int
    dtype: str
    uv_per_bit: float

    def read_uv(self, start: int, stop: int, channels: IntArray) -> Float32Array:
        """Samples ``[start, stop)`` of ``channels``, ``(stop - start, len(channels))`` in microvolts.

        Raises LeadlineError where a sample is not a finite number.
        """
        from leadline.io._samples_kernel import as_microvolts

        start, stop = max(0, start), min(stop, self.n_samples)
        if stop <= start:
            return np.zeros((0, len(channels)), np.float32)
        count = (stop - start) * self.n_channels
        raw = np.fromfile(self.path, self.dtype, count, offset=start * self.n_channels * np.dtype(self.dtype).itemsize)
        if raw.size < count:
            raise LeadlineError("ends early; it was whole when opened", where=str(self.path), mend="Copy it again")
        samples: Float32Array = as_microvolts(raw.reshape(-1, self.n_channels), channels, self.uv_per_bit)
        if np.dtype(self.dtype).kind == "f" and not np.isfinite(samples).all():
            row, column = np.argwhere(~np.isfinite(samples))[0]
            raise LeadlineError(
                f"sample {start + int(row)} of trace {int(channels[column])} is not a finite number",
                where=str(self.path),
                mend="Write the file again with finite samples, and list spoilt times in 'exclude'",
            )
        return samples


def open_traces(source: RecordingSource) -> Traces:
    """Open the samples of a flat recording; reads nothing but the file's length and a few samples.

    Raises LeadlineError when the file is missing, empty, truncated or shorter than a second, when a key that a flat
    file needs is missing, or when the samples looked at are not finite.
    """
    if source.lfp is None:
        raise LeadlineError("names no 'lfp' file", where="recording", mend='Add lfp = "FILE", or leave traces out')
    if not source.lfp.is_file():
        raise LeadlineError("there is no such file", where=str(source.lfp), mend="Correct the key 'lfp'")
    return _open_binary(source.lfp, source)


def _open_binary(path: Path, source: RecordingSource) -> BinaryTraces:
    where = str(path)
    for key, meaning in _NEEDED.items():
        if getattr(source, key) is None:
            raise LeadlineError(
                f"'{key}' is missing; a flat file does not carry it", where=where, mend=f"Add {meaning}"
            )
    _check_dtype(str(source.dtype), where)
    sampling_hz, n_channels = float(source.sampling_hz or 0), int(source.n_channels or 0)
    uv_per_bit = source.uv_per_bit
    if uv_per_bit is None:
        if source.dtype == "int16":
            raise LeadlineError(
                "'uv_per_bit' is missing", where=where, mend="Add the microvolts of one bit, e.g. uv_per_bit = 4.69"
            )
        uv_per_bit = 1.0
    for key, value in (("sampling_hz", sampling_hz), ("n_channels", n_channels), ("uv_per_bit", uv_per_bit)):
        if not (np.isfinite(value) and value > 0):
            raise LeadlineError(f"'{key}' must be positive, is {value:g}", where=where, mend="Correct it")
    dtype = DTYPES[str(source.dtype)]
    n_samples = _length(path, n_channels, dtype, sampling_hz)
    traces = BinaryTraces(path, sampling_hz, n_samples, n_channels, dtype, float(uv_per_bit))
    _look_at(traces)
    return traces


def _check_dtype(word: str, where: str) -> None:
    """Raises LeadlineError, which names the nearest known word, unless ``word`` is a sample type that can be read."""
    if word not in DTYPES:
        raise LeadlineError(
            f"dtype '{word}' cannot be read", where=where, mend=f"{nearest(word, DTYPES)} (both little-endian)"
        )


def _length(path: Path, n_channels: int, dtype: str, sampling_hz: float) -> int:
    """Samples of each trace. Raises LeadlineError unless the file holds whole samples, and a second of them."""
    size = path.stat().st_size
    one = n_channels * np.dtype(dtype).itemsize
    if size == 0:
        raise LeadlineError("is empty", where=str(path), mend="Copy the recording again")
    if size % one:
        raise LeadlineError(
            f"holds {size} bytes, which is no whole number of samples of {n_channels} traces of "
            f"{np.dtype(dtype).itemsize} bytes ({size % one} bytes are left over)",
            where=str(path),
            mend=f"The file is truncated, or n_channels or dtype is wrong{_fitting(size, n_channels, dtype)}",
        )
    if size // one < MIN_SECONDS * sampling_hz:
        raise LeadlineError(
            f"holds {size // one} samples, {size / one / sampling_hz:.3g} s at {sampling_hz:g} Hz; a profile needs at "
            f"least {MIN_SECONDS:g} s",
            where=str(path),
            mend="Check sampling_hz and n_channels, or copy the recording again",
        )
    return size // one


def _fitting(size: int, n_channels: int, dtype: str) -> str:
    item = np.dtype(dtype).itemsize
    fits = [n for n in (n_channels + 1, n_channels - 1) if n > 0 and size % (n * item) == 0]
    return f"; {' or '.join(str(n) for n in fits)} traces would fit" if fits else ""


def _look_at(traces: BinaryTraces) -> None:
    """Read a few samples at the start, middle and end, which finds files of the wrong type early."""
    some = max(1, min(traces.n_samples, 256))
    everything = np.arange(traces.n_channels)
    for start in (0, (traces.n_samples - some) // 2, traces.n_samples - some):
        samples = traces.read_uv(start, start + some, everything)
        if np.abs(samples).max() > 1e9:
            raise LeadlineError(
                f"holds {np.abs(samples).max():.3g} uV near sample {start}, which no electrode gives",
                where=str(traces.path),
                mend="Check dtype and uv_per_bit",
            )
