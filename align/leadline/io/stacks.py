"""Cleared-brain stacks: any of the formats, opened lazily, in a frame that is known and never guessed."""

from __future__ import annotations

import os
from typing import TYPE_CHECKING

from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT, Progress
from leadline.io.images import READ_FAULTS, Image, settle, unreadable, volume_of
from leadline.io.plausible import require_chain, require_plausible
from leadline.model.volume import Stack

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from pathlib import Path

FORMATS = "OME-Zarr, OME-TIFF, TIFF, a folder of TIFF planes, NIfTI (.nii, .nii.gz), NRRD (.nrrd, .nhdr)"


def open_image(path: Path, channel: int = 0) -> Image:
    """Read the headers of a volume file or folder, whatever its format; no voxel is read.

    Raises LeadlineError when it is missing, damaged, of an unknown format or lacks the channel.
    """
    from leadline.io.formats_planes import open_planes
    from leadline.io.formats_raw import NIFTI_SUFFIXES, NRRD_SUFFIXES, open_nifti, open_nrrd
    from leadline.io.formats_tiff import TIFF_SUFFIXES, open_tiff
    from leadline.io.formats_zarr import is_zarr, open_zarr

    name = path.name.lower()
    if not os.path.exists(path):  # unlike Path.exists it takes any text for a name
        raise LeadlineError("is not there", where=str(path), mend="Correct the path; it is relative to its toml file")
    if path.is_dir():
        zarr = is_zarr(path) or name.endswith(".zarr")
        return _read(open_zarr if zarr else open_planes, path, channel)
    if path.stat().st_size == 0:
        raise LeadlineError("is an empty file", where=str(path), mend="Copy or export it again")
    for suffixes, reader in (
        (TIFF_SUFFIXES, open_tiff),
        (NIFTI_SUFFIXES, open_nifti),
        (NRRD_SUFFIXES, open_nrrd),
    ):
        if name.endswith(suffixes):
            if reader is open_tiff:
                require_chain(path)
            return _read(reader, path, channel)
    raise LeadlineError(f"is of no format that is read here ({path.suffix or 'no suffix'})", where=str(path),
                        mend=f"Give one of {FORMATS}")  # fmt: skip


def _read(reader: Callable[[Path, int], Image], path: Path, channel: int) -> Image:
    """What a reader makes of a file; whatever a damaged header leads it to is one error."""
    try:
        image = reader(path, channel)
    except LeadlineError:
        raise
    except READ_FAULTS as error:
        raise unreadable(path, error) from error
    require_plausible(image)
    return image


def open_stack(
    path: Path,
    *,
    channel: int = 0,
    voxel_um: Sequence[float] | None = None,
    code: str | None = None,
    progress: Progress = SILENT,
) -> Stack:
    """Open one channel of a stack, all its resolutions finest first; only headers are read.

    Parameters
    ----------
    voxel_um, code : what the user wrote, where the file does not carry it.

    Raises
    ------
    LeadlineError : the file is missing, damaged or unknown; size or orientation is nowhere said, or said twice and
        differently.
    """
    image = open_image(path, channel)
    for note in image.notes:
        progress.say(note)
    voxel, letters = settle(image, voxel_um, code)
    return Stack(tuple(volume_of(level, voxel, letters) for level in image.levels))
