"""A stack brought once to the resolutions that the stages need: an OME-Zarr 0.5 pyramid, written slab by slab.

References
----------
OME-NGFF specification 0.5 (multiscales, axes, coordinateTransformations); RFC-4 (anatomical orientation of an axis).
"""

from __future__ import annotations

import json
import os
import shutil
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.atomic import PART, in_words
from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT, Progress
from leadline.io.reduce import Grid, course, reduce_to
from leadline.io.slabs import Ledger, Pile, stream
from leadline.model.volume import Volume

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

FORMAT = 1
CHUNK = (32, 128, 128)
"""Voxels stored together, the axis along which the stack is walked first."""
FULL_CHUNK = (4, 512, 512)
NESTED_VOXELS = 100e6
"""A level that is a whole multiple of another and not larger than this is made from that one, in memory."""
SLACK_BYTES = 64 * 2**20
_WRITTEN = {"write_empty_chunks": True}
"""Looking for empty chunks costs more than writing those that there are."""
_AGAINST = {
    "R": "left-to-right", "L": "right-to-left", "P": "anterior-to-posterior", "A": "posterior-to-anterior",
    "S": "inferior-to-superior", "I": "superior-to-inferior",
}  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False)
class Level:
    """One array of a pyramid over a volume. ``full`` : the volume's own voxels, not means."""

    name: str
    grid: Grid
    dtype: np.dtype[Any]
    chunk: tuple[int, int, int]
    full: bool = False

    @property
    def nbytes(self) -> int:
        """Bytes before compression."""
        return int(np.prod(self.grid.shape, dtype=np.int64)) * self.dtype.itemsize


def open_pyramid(folder: Path, key: str) -> tuple[Volume, ...]:
    """The levels of a finished pyramid that was made from what ``key`` says, finest first; none where there is none.

    Raises LeadlineError when it is damaged.
    """
    from leadline.io.formats_zarr import open_zarr

    said = made_from(folder)
    if said.get("key") != key or said.get("format") != FORMAT:
        return ()
    image = open_zarr(folder, 0)
    voxel, origin = np.asarray(image.voxel_um, float), np.asarray(said["origin_um"], float)
    return tuple(
        Volume(level.data, voxel * level.factor, said["code"], origin + level.offset * voxel, level.chunk)
        for level in image.levels
    )


def made_from(folder: Path) -> dict[str, Any]:
    """What a pyramid says of how it was made; nothing where there is none of ours."""
    file = folder / "zarr.json"
    try:
        return dict(json.loads(file.read_text(encoding="utf-8"))["attributes"]["leadline"])
    except (OSError, ValueError, KeyError, TypeError):
        return {}


def write_pyramid(
    volume: Volume,
    folder: Path,
    key: str,
    targets_um: Sequence[float],
    *,
    keep_full: bool = False,
    progress: Progress = SILENT,
    label: str = "working copy",
) -> None:
    """Write the levels at ``targets_um``, by exact area mean, reading the volume once; the volume stays as it is.

    Levels of 16 bit stacks are 16 bit (means rounded to the nearest), all others float32. What is finished of a
    pyramid that was stopped or killed is kept and gone on from; one of another ``key`` makes way. Memory: a few blocks
    of 16 MiB and a slab of each level.

    Parameters
    ----------
    folder : of the pyramid; until it is finished, what is there stands beside it in ``NAME.unfinished``.
    key : says what the pyramid is made from.
    targets_um : voxel edges; an axis that is coarser already stays as it is.
    keep_full : store the volume itself as well.

    Raises
    ------
    LeadlineError : the disk is too small (said before anything is written), a voxel is not finite, or all are equal.
    """
    unfinished = folder.with_name(folder.name + ".unfinished")
    levels = levels_over(volume, targets_um, keep_full=keep_full)
    ledger = Ledger.of(unfinished / "state.json", key, {level.name: level.grid.shape for level in levels})
    if not any(ledger.rows.values()):
        _remove(unfinished)
    _require_room(levels, unfinished)
    _remove(folder)
    with in_words(folder):
        unfinished.mkdir(parents=True, exist_ok=True)
        order = course(volume)
        piles = [
            Pile(_array(unfinished, level), level.grid, order, ledger, level.name, full=level.full) for level in levels
        ]
        stream(volume, piles, ledger, progress, label)
        _describe(unfinished, volume, levels + _nest(volume, levels, unfinished, targets_um), key)
    os.replace(unfinished, folder)
    (folder / "state.json").unlink(missing_ok=True)


def levels_over(volume: Volume, targets_um: Sequence[float], *, keep_full: bool = False) -> list[Level]:
    """The levels that are made from the volume itself, finest first.

    Those that are whole multiples of one of them are left out: they are made from that one, for next to nothing.
    """
    order = course(volume)
    kept = volume.data.dtype.name in ("uint16", "int16")
    dtype = np.dtype(volume.data.dtype if kept else np.float32)
    levels: list[Level] = []
    if keep_full:
        blocks = volume.chunk is not None and min(volume.chunk) >= FULL_CHUNK[0]
        chunk = volume.chunk if blocks and volume.chunk else _turned(FULL_CHUNK, order, volume.shape)
        levels.append(Level("0", Grid.over(volume, 0.0), np.dtype(volume.data.dtype), chunk, full=True))
    for target in sorted(targets_um):
        grid = Grid.over(volume, target)
        if any(np.array_equal(grid.factor, other.grid.factor) for other in levels):
            continue
        means = [other for other in levels if not other.full]
        if not any(_multiple(grid, other.grid) for other in means) or np.prod(grid.shape) > NESTED_VOXELS:
            levels.append(Level(str(len(levels)), grid, dtype, _turned(CHUNK, order, grid.shape)))
    return levels


def _turned(chunk: tuple[int, int, int], order: tuple[int, int, int], shape: Sequence[int]) -> tuple[int, int, int]:
    a, b, c = (min(chunk[order.index(axis)], shape[axis]) for axis in range(3))
    return a, b, c


def _multiple(coarse: Grid, fine: Grid) -> bool:
    ratio = coarse.factor / fine.factor
    return bool(np.allclose(ratio, np.rint(ratio), rtol=0, atol=1e-6) and ratio.max() > 1.5)


def _nest(volume: Volume, levels: list[Level], folder: Path, targets_um: Sequence[float]) -> list[Level]:
    """Make the levels that ``levels_over`` left out, each from the coarsest that it is a whole multiple of."""
    done = [level for level in levels if not level.full]
    made: list[Level] = []
    for target in sorted(targets_um):
        grid = Grid.over(volume, target)
        below = [level for level in (*done, *made) if _multiple(grid, level.grid)]
        if not below or any(np.array_equal(grid.factor, level.grid.factor) for level in (*done, *made)):
            continue
        source = below[-1]
        seen = Volume(
            _opened(folder, source.name), source.grid.voxel_um(volume), volume.code, source.grid.origin_um(volume),
            source.chunk,
        )  # fmt: skip
        small = reduce_to(seen, target)
        grid = Grid(grid.factor, small.shape, volume.shape)
        chunk = _turned(CHUNK, course(volume), small.shape)
        level = Level(str(len(levels) + len(made)), grid, source.dtype, chunk)
        _array(folder, level)[:] = np.rint(small.array()) if level.dtype.kind in "iu" else small.array()
        made.append(level)
    return made


def _array(folder: Path, level: Level) -> Any:
    """The Zarr array of a level, made where it is not there yet."""
    import zarr

    if (folder / level.name / "zarr.json").is_file():
        return zarr.open_array(folder / level.name, mode="r+", config=_WRITTEN)
    return zarr.create_array(
        folder / level.name,
        shape=level.grid.shape,
        chunks=level.chunk,
        dtype=level.dtype,
        fill_value=0,
        compressors=zarr.codecs.BloscCodec(cname="lz4", clevel=5, shuffle="bitshuffle"),
        dimension_names=("z", "y", "x"),
        zarr_format=3,
        config=_WRITTEN,
    )


def _opened(folder: Path, name: str) -> Any:
    import zarr

    return zarr.open_array(folder / name, mode="r")


def _describe(folder: Path, volume: Volume, levels: Sequence[Level], key: str) -> None:
    """Write the metadata that make a folder of arrays an OME-Zarr."""
    import zarr

    axes = [
        {
            "name": name, "type": "space", "unit": "micrometer",
            "orientation": {"type": "anatomical", "value": _AGAINST[letter]},
        }
        for name, letter in zip("zyx", volume.code, strict=True)
    ]  # fmt: skip
    datasets = [
        {
            "path": level.name,
            "coordinateTransformations": [
                {"type": "scale", "scale": level.grid.voxel_um(volume).tolist()},
                {"type": "translation", "translation": level.grid.origin_um(volume).tolist()},
            ],
        }
        for level in levels
    ]
    ours = {
        "format": FORMAT,
        "key": key,
        "code": volume.code,
        "origin_um": levels[0].grid.origin_um(volume).tolist(),
        "targets_um": [float(level.grid.voxel_um(volume).max()) for level in levels],
        "full": levels[0].full,
    }
    scales = [{"name": "stack", "type": "area mean", "axes": axes, "datasets": datasets}]
    zarr.open_group(
        folder, mode="a", zarr_format=3, attributes={"ome": {"version": "0.5", "multiscales": scales}, "leadline": ours}
    )


def _require_room(levels: Sequence[Level], unfinished: Path) -> None:
    place = unfinished.parent
    with in_words(place):
        place.mkdir(parents=True, exist_ok=True)
    there = sum(f.stat().st_size for f in unfinished.rglob("*") if f.is_file())
    needed = int(1.2 * sum(level.nbytes for level in levels)) + SLACK_BYTES - there
    free = shutil.disk_usage(place).free
    if needed > free:
        raise LeadlineError(
            f"the working copy of the stack needs up to {needed / 1e9:.2f} GB, {free / 1e9:.2f} GB are free",
            where=str(place),
            mend="Free space, or move the brain's folder to a larger disk",
        )


def _remove(folder: Path) -> None:
    """Take a folder away; it is never seen half removed under its name."""
    if folder.exists():
        old = folder.with_name(PART + folder.name)
        shutil.rmtree(old, ignore_errors=True)
        os.replace(folder, old)
        shutil.rmtree(old)
