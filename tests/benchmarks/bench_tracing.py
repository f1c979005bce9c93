"""Finding dye tracks in stacks on disk, against one Gaussian pass.

``LEADLINE_BENCH_MVOX`` sets the largest stack traced, in millions of voxels of 10 um a channel (default 200): a whole
mouse brain has about 1150.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
from tests.benchmarks.frame import Row, in_child, peak_mb, timed

LARGEST_MVOX = float(os.environ.get("LEADLINE_BENCH_MVOX", "200"))
VOXEL_UM = 10.0
BRAIN_UM = (13_000.0, 8_000.0, 11_000.0)
CHUNK = (32, 128, 128)
GAUSSIAN_UM = 30.0


def rows() -> Iterator[Row]:
    """Tracing of stacks of three sizes."""
    for part in (0.25, 0.5, 1.0):
        with TemporaryDirectory() as folder:
            in_child(write, folder=folder, mvox=LARGEST_MVOX * part)
            a = in_child(whole, folder=folder, mvox=LARGEST_MVOX * part).answer
        yield Row(
            "tracing, whole stack", a["mvox"], "Mvox", a["ours_s"], a["theirs_s"], bar=12,
            reference="a Gaussian over both channels", peak_mb=a["peak_mb"], peak_bar_mb=2000, holds=a["same"],
            note=f"{a['found']} of {a['tracks']} tracks found; other blocks, same bytes: {a['same']}",
        )  # fmt: skip


def write(folder: str, mvox: float) -> None:
    """Write the stack of :func:`whole`, in a process of its own whose memory is not looked at."""
    Made.of(Path(folder), mvox).write()


def whole(folder: str, mvox: float) -> dict[str, Any]:
    """Trace an invented stack on disk, twice with different blocks; the reference reads it once and smooths it."""
    from leadline.tracing import grid, ridge
    from leadline.tracing.find import trace

    made = Made.of(Path(folder), mvox)
    trace(*(_corner(volume) for volume in made.channels()))  # compiles
    ours_s, found = timed(lambda: trace(*made.channels()))
    peak = peak_mb()
    theirs_s, _ = timed(lambda: [_smooth(volume) for volume in made.channels()])
    ridge.BLOCK, grid.SLAB_VOXELS = 61, 3_000_000
    again = trace(*made.channels())
    same = len(found) == len(again) and all(
        np.array_equal(a.points_um, b.points_um) for a, b in zip(found, again, strict=False)
    )
    hit = sum(any(_near(trace, track) for trace in found) for track in made.tracks)
    return {
        "mvox": round(float(np.prod(made.shape)) / 1e6), "ours_s": ours_s, "theirs_s": theirs_s, "peak_mb": peak,
        "same": same, "found": hit, "tracks": len(made.tracks),
    }  # fmt: skip


def _near(trace: Any, track: Any) -> bool:
    from scipy.spatial import cKDTree

    return float(np.median(cKDTree(trace.points_um).query(track)[0])) < 40.0


def _corner(volume: Any) -> Any:
    from dataclasses import replace

    return replace(volume, data=np.asarray(volume.data[:200, :200, :200]))


def _smooth(volume: Any) -> None:
    """One separable Gaussian over a channel, slab by slab with the margin that it needs."""
    from scipy.ndimage import gaussian_filter

    sigma = GAUSSIAN_UM / VOXEL_UM
    margin = int(4 * sigma + 0.5)
    for start in range(0, volume.shape[0], 64):
        slab = volume.data[max(0, start - margin) : start + 64 + margin]
        gaussian_filter(np.asarray(slab, np.float32), sigma)


@dataclass(frozen=True)
class Made:
    """An invented brain on disk: an egg of tissue with camera noise, dye tracks in the other channel."""

    folder: Path
    shape: tuple[int, ...]
    tracks: list[Any]

    @classmethod
    def of(cls, folder: Path, mvox: float) -> Made:
        """Its size and its tracks."""
        scale = (mvox * 1e6 / (np.prod(BRAIN_UM) / VOXEL_UM**3)) ** (1 / 3)
        shape = tuple(round(um * scale / VOXEL_UM) for um in BRAIN_UM)
        size = np.array(shape) * VOXEL_UM
        tracks = []
        for a, c in ((0.35, 0.4), (0.5, 0.6), (0.6, 0.35)):
            top = np.array([a, 0.0, c]) * size
            depth = np.arange(0.0, 0.65 * size[1], 5.0)
            tracks.append(top + depth[:, None] * np.array([0.1, 1.0, -0.05]))
        return cls(folder, shape, tracks)

    def channels(self) -> tuple[Any, Any]:
        """Dye and background, opened."""
        from leadline.io.stacks import open_stack

        um = (VOXEL_UM,) * 3
        dye, background = (open_stack(self.folder / n, voxel_um=um, code="PIR").finest for n in ("dye", "background"))
        return dye, background

    def write(self) -> None:
        """Write both channels."""
        import zarr

        rng = np.random.default_rng(3)
        thick = CHUNK[0]
        noise = rng.normal(0, 12, (thick + 16, *self.shape[1:])).astype(np.float32)
        z_all, y, x = (np.linspace(-1, 1, n, dtype=np.float32) for n in self.shape)
        y = y[:, None]
        dye, background = (
            zarr.create_array(
                self.folder / name, shape=self.shape, chunks=CHUNK, dtype=np.uint16,
                compressors=zarr.codecs.BloscCodec(cname="lz4", clevel=5, shuffle="bitshuffle"),
            )
            for name in ("dye", "background")
        )  # fmt: skip
        for start in range(0, self.shape[0], thick):
            stop = min(start + thick, self.shape[0])
            z = z_all[start:stop, None, None]
            depth = 1.0 - np.sqrt((z / 0.95) ** 2 + (y / 0.9) ** 2 + (x / 0.95) ** 2)
            auto = 60 + 400 / (1 + np.exp(-depth * 60)) * (1 + 0.2 * np.sin(9 * x + 7 * z))
            shift = int(rng.integers(16))
            background[start:stop] = auto + noise[shift : shift + stop - start]
            glow = 100 + 0.3 * auto + noise[16 - shift : 16 - shift + stop - start, ::-1, ::-1]
            dye[start:stop] = glow + self._ink(start, stop) * (depth > 0)

    def _ink(self, start: int, stop: int) -> Any:
        from scipy.ndimage import gaussian_filter

        out = np.zeros((stop - start, *self.shape[1:]), np.float32)
        reach = 12
        for track in self.tracks:
            index = np.rint(track / VOXEL_UM).astype(int)
            mine = index[(index[:, 0] >= start - reach) & (index[:, 0] < stop + reach)]
            if not len(mine):
                continue
            low = np.maximum(mine.min(axis=0) - reach, 0)
            high = np.minimum(mine.max(axis=0) + reach + 1, self.shape)
            box = np.zeros(high - low, np.float32)
            box[tuple((mine - low).T)] = 1.0
            box = gaussian_filter(box, 2.5) * (200.0 * 2 * np.pi * 2.5**2)
            a, b = max(low[0], start), min(high[0], stop)
            if a < b:
                out[a - start : b - start, low[1] : high[1], low[2] : high[2]] += box[a - low[0] : b - low[0]]
        return out
