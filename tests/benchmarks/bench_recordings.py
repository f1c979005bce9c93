"""Recordings: spectra against scipy.signal.welch, wideband against one sequential read, memory against length."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import TYPE_CHECKING, Any

import numpy as np
from tests.benchmarks.frame import Row, best, in_child

if TYPE_CHECKING:
    from collections.abc import Iterator

N_CHANNELS = 384
UV_PER_BIT = 0.6
LFP_HZ, WIDE_HZ = 2500.0, 30_000.0


def write_samples(path: Path, sampling_hz: float, seconds: float, seed: int = 1) -> None:
    """Noise that falls as 1/f^2 on a floor, spikes where it is fast; a second is made once and repeated ten ways."""
    rng = np.random.default_rng(seed)
    n = int(sampling_hz)
    pieces = []
    for _ in range(3):
        slow = np.cumsum(rng.standard_normal((n, 8)), axis=0) / np.sqrt(sampling_hz)
        slow -= slow.mean(axis=0) + np.linspace(-0.5, 0.5, n)[:, None] * (slow[-1] - slow[0])
        block = 150.0 * slow @ rng.standard_normal((8, N_CHANNELS)) + 8.0 * rng.standard_normal((n, N_CHANNELS))
        if sampling_hz >= 10_000:
            for at, k in zip(rng.integers(50, n - 50, 1500), rng.integers(0, N_CHANNELS, 1500), strict=True):
                block[at : at + 24, k] -= 120.0 * np.hanning(24)
        pieces.append(np.rint(block / UV_PER_BIT).astype("<i2"))
    with path.open("wb") as handle:
        for second in range(int(seconds)):
            pieces[second % len(pieces)].tofile(handle)


def _traces(path: Path, sampling_hz: float) -> Any:
    from leadline.io.recordings import open_traces
    from leadline.model.brain import RecordingSource

    return open_traces(RecordingSource(path, sampling_hz, N_CHANNELS, "int16", UV_PER_BIT))


def spectra(path: str) -> dict[str, float]:
    """Spectra and band powers of an LFP file against welch on the same blocks, float32 along the time axis."""
    from scipy.signal import welch

    from leadline.model.settings import ProfileSettings
    from leadline.physiology.chunks import plan
    from leadline.physiology.spectrum import band_power_db, bands_hz, field_statistics

    settings = ProfileSettings()
    traces = _traces(Path(path), LFP_HZ)
    channels = np.arange(N_CHANNELS)
    chosen = plan(traces, np.zeros((0, 2)))
    found: dict[str, Any] = {}

    def ours() -> None:
        found["ours"] = field_statistics(traces, channels, chosen, settings)
        found["bands"] = [band_power_db(found["ours"], band) for band in bands_hz(settings).values()]

    def theirs() -> None:
        raw = np.memmap(path, "<i2", "r").reshape(-1, N_CHANNELS)
        total, segments = 0.0, 0
        for start, stop, count in chosen.blocks():
            block = raw[start:stop] * np.float32(UV_PER_BIT)
            total = total + count * welch(block, LFP_HZ, nperseg=chosen.segment, axis=0)[1]
            segments += count
        found["theirs"] = total / segments

    ours()
    times = [(best(ours, 1), best(theirs, 1)) for _ in range(3 if traces.n_samples < 300 * LFP_HZ else 1)]
    apart = np.abs(found["ours"].power_uv2_per_hz[:, 1:] / found["theirs"].T[:, 1:] - 1).max()
    return {"ours_s": min(t[0] for t in times), "theirs_s": min(t[1] for t in times), "apart": float(apart)}


def wideband(path: str) -> dict[str, float]:
    """A wideband file to profile (fields and threshold crossings) against one read of it from end to end."""
    from leadline.model.probe import Probe
    from leadline.model.recording import Recording
    from leadline.model.settings import ProfileSettings
    from leadline.physiology import profile_of

    traces = _traces(Path(path), WIDE_HZ)
    place = np.arange(N_CHANNELS)
    names = tuple(map(str, place))
    probe = Probe(names, 32.0 * (place % 2), 20.0 * (place // 2), np.zeros(N_CHANNELS), place, 175.0)
    found: dict[str, Any] = {}

    def profile(seconds: float) -> None:
        begun = replace(traces, n_samples=int(seconds * WIDE_HZ))
        found["profile"] = profile_of("A", probe, [Recording(begun)], settings=ProfileSettings())[0]

    def theirs() -> None:
        buffer = np.empty(2**24, np.uint8)
        with Path(path).open("rb", buffering=0) as handle:
            while handle.readinto(buffer):
                pass

    profile(5.0)  # compiled
    seconds = traces.n_samples / WIDE_HZ
    times = [(best(lambda: profile(seconds), 1), best(theirs, 1)) for _ in range(3 if seconds < 100 else 1)]
    density = float(np.nanmedian(found["profile"].features["crossing_density_hz_per_100um"]))
    return {"ours_s": min(t[0] for t in times), "theirs_s": min(t[1] for t in times), "density": density}


def rows() -> Iterator[Row]:
    """LFP of 1, 4 and 16 lengths, wideband likewise; memory against that of the shortest."""
    with TemporaryDirectory() as folder:
        path = Path(folder) / "samples.bin"
        least_mb = None
        for seconds in (60.0, 240.0, 960.0):
            write_samples(path, LFP_HZ, seconds)
            cost = in_child(spectra, path=str(path))
            a = cost.answer
            yield Row(
                "spectra and band powers", seconds, "s of 384-channel LFP", a["ours_s"], a["theirs_s"], 6.0, True,
                "scipy.signal.welch", note=f"at most {a['apart']:.0e} apart", holds=a["apart"] < 1e-4,
            )  # fmt: skip
        for seconds in (15.0, 60.0, 240.0):
            write_samples(path, WIDE_HZ, seconds)
            cost = in_child(wideband, path=str(path))
            a, least_mb = cost.answer, least_mb or cost.peak_mb
            yield Row(
                "wideband to LFP and spike density", seconds, "s of 384 channels at 30 kHz", a["ours_s"], a["theirs_s"],
                reference="reading the file once", peak_mb=cost.peak_mb, peak_bar_mb=1.1 * least_mb,
                note=f"{seconds / a['ours_s']:.0f}x real time", holds=seconds / a["ours_s"] >= 10.0,
            )  # fmt: skip
