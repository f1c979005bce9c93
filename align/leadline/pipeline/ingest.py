"""The working copy of a stack, for stacks that are not at hand at the resolutions of the stages: made once, on need."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.fingerprint import fingerprint_path, fingerprint_value
from leadline.model.volume import Stack

if TYPE_CHECKING:
    from pathlib import Path

    from leadline.model.brain import Brain
    from leadline.model.volume import Volume
    from leadline.pipeline.bench import Bench

LOOK_UM = 25.0
"""What screens and reports show whole brains at."""
SMALL_VOXELS = 100e6
"""A level of so few voxels is read whole in seconds and fits into memory."""
WASTE = 8.0
"""So many times the voxels that are needed may be read, that is twice as fine along every axis."""
THICK = 4
"""Chunks at least so thick along every axis can be read around a track."""


@dataclass(frozen=True, slots=True)
class Channel:
    """One of the two channels. ``number`` : in its file."""

    name: str
    path: Path
    number: int


@dataclass(frozen=True, slots=True)
class Ingested:
    """What was done for a channel. ``made`` : a working copy was written, else the stack is used as it is or a copy was
    there. ``levels_um`` : voxel sizes that the stages now find."""

    channel: str
    folder: Path | None
    made: bool
    levels_um: tuple[tuple[float, float, float], ...]


def channels(brain: Brain) -> tuple[Channel, ...]:
    """Background, and dye where there is one."""
    stack = brain.stack
    found = [Channel("background", stack.background, stack.background_channel)]
    if stack.dye is not None:
        found.append(Channel("dye", stack.dye, stack.dye_channel))
    return tuple(found)


def opened(brain: Brain, channel: Channel) -> Stack:
    """A channel with all its resolutions, those of a working copy included, finest first.

    Raises LeadlineError when it cannot be read.
    """
    return _joined(_source(brain, channel), *_copy(brain, channel))


def ingest(bench: Bench, *, on_need: bool = True, keep_full: bool = False) -> tuple[Ingested, ...]:
    """Bring each channel once to the resolutions that the stages need, as an OME-Zarr in the brain's cache.

    Multiscale OME-Zarr files that have fitting levels are used as they are. Work that was stopped is gone on with.

    Parameters
    ----------
    on_need : leave small stacks as they are too; they are read directly.
    keep_full : store the full resolution as well.

    Raises
    ------
    LeadlineError : a stack cannot be read, or the disk is too small.
    """
    done = tuple(_ingest(bench, channel, on_need, keep_full) for channel in channels(bench.brain))
    if any(one.made for one in done):
        bench.reopen()
    return done


def _ingest(bench: Bench, channel: Channel, on_need: bool, keep_full: bool) -> Ingested:
    from leadline.io.pyramid import write_pyramid

    brain, folder = bench.brain, folder_of(bench.brain, channel)
    source, (copy, has_full) = _source(brain, channel), _copy(brain, channel)
    stack, wanted = _joined(source, copy, has_full), targets_um(brain)
    small = SMALL_VOXELS if on_need else 0.0
    if all(at_hand(stack, um, small) for um in wanted) and (has_full or not keep_full):
        return Ingested(channel.name, folder if copy else None, False, _sizes(stack))
    full = keep_full or has_full
    write_pyramid(
        source.finest if full else source.fitting(wanted[0]),
        folder,
        _key(brain, channel),
        wanted,
        keep_full=full,
        progress=bench.progress,
        label=f"reading {channel.name}",
    )
    return Ingested(channel.name, folder, True, _sizes(opened(brain, channel)))


def targets_um(brain: Brain) -> tuple[float, ...]:
    """Voxel sizes that the stages and the screens read, finest first."""
    settings = brain.settings
    return tuple(sorted({settings.trace.resolution_um, LOOK_UM, settings.register.resolution_um / 2}))


def at_hand(stack: Stack, target_um: float, small: float = SMALL_VOXELS) -> bool:
    """Whether a stack can be read at about ``target_um`` without reading much more, and in places."""
    level = stack.fitting(target_um)
    voxels = float(np.prod(level.shape, dtype=float))
    needed = float(np.prod(level.extent_um / np.maximum(level.voxel_um, target_um)))
    return voxels <= small or (_in_blocks(level) and voxels <= WASTE * 1.001 * needed)


def _in_blocks(level: Volume) -> bool:
    return level.chunk is not None and all(c >= min(THICK, n) for c, n in zip(level.chunk, level.shape, strict=True))


def _source(brain: Brain, channel: Channel) -> Stack:
    from leadline.io.stacks import open_stack

    return open_stack(channel.path, channel=channel.number, voxel_um=brain.stack.voxel_um, code=brain.stack.code)


def folder_of(brain: Brain, channel: Channel) -> Path:
    """Where the working copy of a channel is, or would be."""
    return brain.cache / "stack" / f"{channel.name}.ome.zarr"


def _copy(brain: Brain, channel: Channel) -> tuple[tuple[Volume, ...], bool]:
    """Levels of the working copy of this very stack, if there is one, and whether the stack itself is among them."""
    from leadline.io.pyramid import made_from, open_pyramid

    folder = folder_of(brain, channel)
    said = made_from(folder)
    levels = open_pyramid(folder, _key(brain, channel)) if said else ()
    return levels, bool(levels) and bool(said["full"])


def _joined(source: Stack, copy: tuple[Volume, ...], has_full: bool) -> Stack:
    """All levels, finest first; where both have one, that of the copy, which can be read in places."""
    ours = [level.voxel_um for level in copy]
    others = [] if has_full else [v for v in source.levels if not any(np.allclose(v.voxel_um, um) for um in ours)]
    return Stack(tuple(sorted((*others, *copy), key=lambda level: float(level.voxel_um.prod()))))


def _key(brain: Brain, channel: Channel) -> str:
    """What a working copy is made from: the file's content and what the user says of it."""
    told = (brain.stack.voxel_um, brain.stack.code)
    return fingerprint_value([fingerprint_path(channel.path), channel.number, told])


def _sizes(stack: Stack) -> tuple[tuple[float, float, float], ...]:
    return tuple((float(a), float(b), float(c)) for a, b, c in (level.voxel_um for level in stack.levels))
