"""Bringing a stack to 10 and 25 um against reading the same voxels once: TIFF planes plain and packed, and OME-Zarr.

``LEADLINE_BENCH_GB`` sets the largest size of the plain planes and of the Zarr (default 2): the bars are meant at 8 and
more.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
from tests.benchmarks.frame import Row, best, in_child

LARGEST_GB = float(os.environ.get("LEADLINE_BENCH_GB", "2"))
ROWS, COLUMNS = 2500, 3000
PLANE_GB = ROWS * COLUMNS * 2 / 1e9
WHOLE_UM, FRACTION_UM = (5.0, 2.0, 2.0), (4.4, 1.83, 1.83)
TARGETS_UM = (10.0, 25.0)
PACKED = {"planes, zlib": "zlib", "planes, zstd": "zstd"}
ZARR_CHUNK = (32, 256, 256)


def rows() -> Iterator[Row]:
    """One row for each kind of stack and size."""
    for part in (0.25, 0.5, 1.0):
        for kind, voxel_um, reference, bar in (
            ("planes, whole factors", WHOLE_UM, "tifffile into one buffer", 3.0),
            ("planes, fractional factors", FRACTION_UM, "tifffile into one buffer", 4.0),
            ("planes, zlib", WHOLE_UM, "tifffile decodes", 1.3),
            ("planes, zstd", WHOLE_UM, "tifffile decodes", 1.3),
            ("OME-Zarr, zstd", WHOLE_UM, "zarr, slab by slab", 1.25),
        ):
            share = 0.25 if kind in PACKED else 1.0
            with TemporaryDirectory() as folder:
                gb = in_child(write, folder=folder, kind=kind, size_gb=LARGEST_GB * part * share).answer
                a = in_child(measure, folder=folder, kind=kind, voxel_um=voxel_um).answer
            yield Row(
                f"ingest: {kind}", round(gb, 3), "GB", a["ours_s"], a["theirs_s"], bar=bar, reference=reference,
                peak_mb=a["peak_mb"], peak_bar_mb=1500, holds=a["equal"],
            )  # fmt: skip


def write(folder: str, kind: str, size_gb: float) -> float:
    """Write a stack, in a process of its own whose memory is not looked at; returns its size in GB as it is read."""
    planes, stack = max(8, round(size_gb / PLANE_GB)), Path(folder) / "stack"
    if kind.startswith("planes"):
        write_planes(stack, planes, PACKED.get(kind))
    else:
        write_zarr(stack, planes)
    return planes * PLANE_GB


def measure(folder: str, kind: str, voxel_um: list[float]) -> dict[str, Any]:
    """Read a stack, and bring it in, the best of three of each in turn; code compiled, files in the system's cache."""
    from tests.benchmarks.frame import peak_mb

    from leadline.io.pyramid import open_pyramid, write_pyramid
    from leadline.io.stacks import open_stack

    stack, copy = Path(folder) / "stack", Path(folder) / "copy"
    files = sorted(stack.glob("*.tif"))
    read = (lambda: read_planes(files)) if kind.startswith("planes") else (lambda: read_zarr(stack))
    source = open_stack(stack, voxel_um=tuple(voxel_um), code="PIR").finest
    write_pyramid(_few(source), Path(folder) / "warm", "", TARGETS_UM)
    ours, theirs, peak = [], [], 0.0
    for key in "123":
        ours.append(best(lambda: write_pyramid(source, copy, key, TARGETS_UM), 1))  # noqa: B023
        peak = peak or peak_mb()
        read()
        theirs.append(best(read, 1))
    level = open_pyramid(copy, "3")[0]
    return {"ours_s": min(ours), "theirs_s": min(theirs), "peak_mb": peak, "equal": _equal(source, level)}


def _few(volume: Any) -> Any:
    """The first voxels of a volume, to compile on."""
    from dataclasses import replace

    return replace(volume, data=np.asarray(volume.data[0:16, 0:256, 0:256]), chunk=None)


def _equal(source: Any, level: Any) -> bool:
    """A block in the middle against numpy's own weighted mean, to the rounding of a level of integers."""
    factor = level.voxel_um / source.voxel_um
    start = [(n - 1) // 2 for n in level.shape]
    fine = [(int(np.floor(s * f)), int(np.ceil((s + 1) * f))) for s, f in zip(start, factor, strict=True)]
    mean = np.asarray(source.data[tuple(slice(a, b) for a, b in fine)], float)
    for s, f, (a, b) in zip(start, factor, fine, strict=True):
        at = np.arange(a, min(b, a + len(mean)))
        weight = np.clip(np.minimum(at + 1, (s + 1) * f) - np.maximum(at, s * f), 0, None)
        mean = np.tensordot(weight / weight.sum(), mean, (0, 0))
    here = float(level.data[tuple(slice(s, s + 1) for s in start)].squeeze())
    return bool(abs(here - mean) <= 0.5 + 1e-2)


def _plane(number: int) -> Any:
    rng = np.random.default_rng(number % 4)
    y, x = np.mgrid[:ROWS, :COLUMNS].astype(np.float32)
    tissue = 400 + 300 * np.exp(-8 * ((y / ROWS - 0.5) ** 2 + (x / COLUMNS - 0.5) ** 2)) * (1 + 0.3 * np.sin(y / 40))
    return (tissue + rng.normal(0, 12, tissue.shape)).astype(np.uint16)


def write_planes(folder: Path, planes: int, packed: str | None) -> list[Path]:
    """Numbered planes of smooth tissue with camera noise; four of them in turn, rolled."""
    import tifffile

    folder.mkdir()
    four, files = [_plane(k) for k in range(4)], []
    for k in range(planes):
        files.append(folder / f"plane_{k:05d}.tif")
        tifffile.imwrite(files[-1], np.roll(four[k % 4], 7 * k, axis=0), compression=packed)
    return files


def read_planes(files: list[Path]) -> None:
    """Every plane into one buffer."""
    import tifffile

    buffer = np.empty((ROWS, COLUMNS), np.uint16)
    for file in files:
        tifffile.imread(file, out=buffer, maxworkers=1)


def write_zarr(folder: Path, planes: int) -> None:
    """One level, chunks of 32 x 256 x 256, zstd."""
    import zarr

    group = zarr.open_group(folder, mode="w", zarr_format=3)
    array = group.create_array(
        "0", shape=(planes, ROWS, COLUMNS), chunks=ZARR_CHUNK, dtype=np.uint16, dimension_names=("z", "y", "x"),
        compressors=zarr.codecs.ZstdCodec(level=3),
    )  # fmt: skip
    four = [_plane(k) for k in range(4)]
    for start in range(0, planes, ZARR_CHUNK[0]):
        stop = min(start + ZARR_CHUNK[0], planes)
        array[start:stop] = np.stack([np.roll(four[k % 4], 7 * k, axis=0) for k in range(start, stop)])
    axes = [{"name": name, "type": "space"} for name in "zyx"]
    steps = [{"type": "scale", "scale": [1.0, 1.0, 1.0]}]
    scales = {"axes": axes, "datasets": [{"path": "0", "coordinateTransformations": steps}]}
    group.attrs["ome"] = {"version": "0.5", "multiscales": [scales]}


def read_zarr(folder: Path) -> None:
    """Slab after slab of whole chunks, tile by tile so that memory stays small."""
    import zarr

    array = zarr.open_array(folder / "0", mode="r")
    for start in range(0, array.shape[0], ZARR_CHUNK[0]):
        for row in range(0, array.shape[1], 2 * ZARR_CHUNK[1]):
            array[start : start + ZARR_CHUNK[0], row : row + 2 * ZARR_CHUNK[1]]
