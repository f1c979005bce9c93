"""What a volume file says of itself, whatever its format: lazy levels, and the frame where it is written down."""

from __future__ import annotations

import os
import struct
import zlib
from contextlib import suppress
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.base.errors import LeadlineError
from leadline.model.frames import orientation
from leadline.model.volume import Volume, Voxels

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence
    from pathlib import Path

SAME_WITHIN = 0.01
"""Relative difference up to which two statements of a voxel size are the same."""
UNIT_UM = {
    **dict.fromkeys(("nm", "nanometer", "nanometers", "nanometre"), 1e-3),
    **dict.fromkeys(("å", "angstrom"), 1e-4),
    **dict.fromkeys(
        ("um", "µm", "μm", r"\u00b5m", "micron", "microns", "micrometer", "micrometers", "micrometre"), 1.0
    ),
    **dict.fromkeys(("mm", "millimeter", "millimeters", "millimetre"), 1e3),
    **dict.fromkeys(("cm", "centimeter", "centimeters", "centimetre"), 1e4),
    **dict.fromkeys(("m", "meter", "meters", "metre"), 1e6),
    **dict.fromkeys(("in", "inch", "inches"), 25400.0),
}
READ_FAULTS = (
    OSError, EOFError, ValueError, LookupError, ArithmeticError, RuntimeError, TypeError, AssertionError, SystemError,
    MemoryError, struct.error, zlib.error,
)  # fmt: skip
"""What the format libraries raise on a damaged file."""


class Picked:
    """Three axes of a larger array, the others fixed; reads on slicing, in the machine's byte order.

    ``fixed`` : one entry for each axis of ``source``, an index where the axis is left out, None where it stays.
    """

    def __init__(self, source: Any, fixed: Sequence[int | None], where: Path) -> None:
        self._source, self._fixed, self._where = source, tuple(fixed), where
        self.shape: tuple[int, ...] = tuple(
            int(n) for n, at in zip(source.shape, self._fixed, strict=True) if at is None
        )
        self.dtype = np.dtype(source.dtype).newbyteorder("=")

    def __getitem__(self, key: Any) -> Any:
        keys = list(key) if isinstance(key, tuple) else [key]
        keys += [slice(None)] * (3 - len(keys))
        whole = tuple(keys.pop(0) if at is None else at for at in self._fixed)
        try:
            block = np.asarray(self._source[whole])
        except READ_FAULTS as error:
            raise unreadable(self._where, error) from error
        return block.astype(self.dtype, copy=False)

    def pieces(self, block: tuple[slice, slice, slice] | None) -> Any:
        """The voxels of a block in pieces (first index, voxels) that are overwritten by the next; None where the
        source has no cheaper way than to read the block whole. Asked of None: whether it has."""
        offered = getattr(self._source, "pieces", None)
        if offered is None or not offered(None):
            return None
        return True if block is None else self._pieces(offered, iter(block))

    def _pieces(self, offered: Any, keys: Any) -> Any:
        try:
            for start, piece in offered(tuple(next(keys) if at is None else at for at in self._fixed)):
                place = tuple(a for a, at in zip(start, self._fixed, strict=True) if at is None)
                voxels = piece.reshape([n for n, at in zip(piece.shape, self._fixed, strict=True) if at is None])
                yield place, voxels.astype(self.dtype, copy=False)
        except LeadlineError:
            raise
        except READ_FAULTS as error:
            raise unreadable(self._where, error) from error


@dataclass(frozen=True, slots=True, eq=False)
class Level:
    """One resolution. ``factor`` : (3,) its voxels in finest voxels. ``offset`` : (3,) first centre, the same unit."""

    data: Voxels
    factor: FloatArray
    offset: FloatArray
    chunk: tuple[int, int, int]


@dataclass(frozen=True, slots=True, eq=False)
class Image:
    """A volume file as it stands, nothing guessed.

    ``voxel_um`` : of the finest level, None on an axis of which the file does not tell. ``unitless`` : sizes that the
    file gives without a unit. ``letters`` : direction in which each axis grows, None where not told.
    """

    path: Path
    levels: tuple[Level, ...]
    voxel_um: tuple[float | None, float | None, float | None] = (None, None, None)
    letters: tuple[str | None, str | None, str | None] = (None, None, None)
    unitless: tuple[float, float, float] | None = None
    notes: tuple[str, ...] = ()


def fetch_ahead(files: Iterable[Path]) -> None:
    """Ask the system to read files into memory while we are busy with another, where it can be asked."""
    if hasattr(os, "posix_fadvise"):
        for file in files:
            with suppress(OSError), file.open("rb", buffering=0) as handle:
                os.posix_fadvise(handle.fileno(), 0, 0, os.POSIX_FADV_WILLNEED)


def unreadable(path: Path, error: BaseException) -> LeadlineError:
    """The error for a file that its format's library cannot read."""
    said = str(error).strip().splitlines()
    return LeadlineError(
        f"cannot be read ({type(error).__name__}{': ' + said[0][:120] if said else ''})",
        where=str(path),
        mend="The file is damaged, cut short or not what its name says; copy or export it again",
    )


def whole_level(data: Voxels, chunk: Sequence[int]) -> Level:
    """The only, or the finest, level of a file."""
    a, b, c = (int(n) for n in chunk)
    return Level(data, np.ones(3), np.zeros(3), (a, b, c))


def pick(source: Any, axes: str, channel: int, path: Path) -> Picked:
    """Choose one channel of an array whose axes are named by one letter each.

    ``axes`` : 'x', 'y', 'z' stay; 'c' is the channel; every other axis must have length 1.

    Raises LeadlineError when the array is no stack of numbers, or has no such channel.
    """
    shape = dict(zip(axes, source.shape, strict=True))
    if axes.count("c") > 1:
        raise LeadlineError(
            f"has two axes of channels: shape {tuple(source.shape)}, axes {axes.upper()!r}",
            where=str(path),
            mend="Keep one axis of channels",
        )
    long = {name: int(n) for name, n in shape.items() if name not in "xyzc" and n != 1}
    if long:
        raise LeadlineError(
            f"has more than one point along {', '.join(repr(name) for name in long)} {list(long.values())}",
            where=str(path),
            mend=f"The axes are {axes.upper()}: keep one time point and one view, and name the axis of planes Z",
        )
    if sum(name in "xyz" for name in axes) != 3:
        raise LeadlineError(
            f"holds no three-dimensional stack: shape {tuple(source.shape)}, axes {axes.upper()!r}",
            where=str(path),
            mend="Give a stack of planes",
        )
    n_channels = int(shape.get("c", 1))
    if not 0 <= channel < n_channels:
        has = "only channel 0" if n_channels == 1 else f"channels 0 to {n_channels - 1}"
        raise LeadlineError(
            f"channel {channel} is missing; the file has {has}",
            where=str(path),
            mend="Correct background_channel or dye_channel",
        )
    picked = Picked(source, [None if a in "xyz" else channel if a == "c" else 0 for a in axes], path)
    _require_stack(picked, path)
    return picked


def _require_stack(data: Picked, path: Path) -> None:
    if data.dtype.kind not in "uifb":
        raise LeadlineError(
            f"voxels are of type {data.dtype}, not plain real numbers",
            where=str(path),
            mend="Export one grey channel as 8 or 16 bit integers or as float32",
        )
    if min(data.shape) < 2:
        what = "is empty" if 0 in data.shape else "holds a single plane, not a stack"
        raise LeadlineError(f"{what}: shape {data.shape}", where=str(path), mend="Give the whole stack")


@dataclass(frozen=True, slots=True)
class UserSays:
    """Where and how the user writes voxel size and orientation, for messages."""

    place: str
    voxel: str = "voxel_um = [a, b, c]"
    code: str = 'orientation = "PIR"'


IN_BRAIN = UserSays("brain.toml")
IN_ATLAS = UserSays("atlas.toml")
IN_COMMAND = UserSays("the command", "--voxel-um a,b,c", "--orientation PIR")


def settle(
    image: Image, voxel_um: Sequence[float] | None, code: str | None, user: UserSays = IN_BRAIN
) -> tuple[FloatArray, str]:
    """Join what the file and the user say of voxel size and orientation; nothing is guessed.

    Raises LeadlineError when neither says it, or when they disagree by more than one per cent.
    """
    return _settle_voxel(image, voxel_um, user), _settle_code(image, code, user)


def _settle_voxel(image: Image, given: Sequence[float] | None, says: UserSays) -> FloatArray:
    told = image.voxel_um
    where = str(image.path)
    if given is None:
        if None not in told:
            return np.asarray(told, np.float64)
        raise LeadlineError(
            f"the file does not carry its voxel size ({_known_sizes(image)})",
            where=where,
            mend=f"Write {says.voxel} in {says.place}: micrometres along the stored axes, first axis first",
        )
    user = np.asarray(given, np.float64)
    if user.shape != (3,) or not np.isfinite(user).all() or (user <= 0).any():
        raise LeadlineError(
            f"the voxel size must be three positive numbers, is {list(given)}",
            where=says.place,
            mend=f"Write {says.voxel} in um",
        )
    file = np.array([np.nan if size is None else size for size in told])
    clash = np.abs(file / user - 1.0) > SAME_WITHIN
    if clash.any() or _clashes_unitless(image, user):
        raise LeadlineError(
            f"voxel sizes disagree: {_known_sizes(image)}, {says.place} says {user.tolist()} um",
            where=where,
            mend=f"Correct {says.place} (the order is that of the stored axes, first axis first) or the file",
        )
    return np.where(np.isnan(file), user, file)


def _clashes_unitless(image: Image, user: FloatArray) -> bool:
    """Sizes without a unit must at least be the user's sizes in some unit of length, the same on all axes."""
    if image.unitless is None:
        return False
    ratio = user / np.asarray(image.unitless)
    return not any((np.abs(ratio / unit - 1.0) <= SAME_WITHIN).all() for unit in (1e-3, 1.0, 1e3, 1e4, 1e6))


def _known_sizes(image: Image) -> str:
    if image.unitless is not None:
        return f"the file says {[round(x, 6) for x in image.unitless]} without a unit"
    if all(size is None for size in image.voxel_um):
        return "the file says nothing"
    return "the file says [" + ", ".join("?" if s is None else f"{s:g}" for s in image.voxel_um) + "] um"


def _settle_code(image: Image, given: str | None, says: UserSays) -> str:
    told = "".join(letter or "?" for letter in image.letters)
    if given is None:
        if "?" not in told:
            return orientation(told, where=str(image.path))
        said = "" if told == "???" else f" (it says {told})"
        raise LeadlineError(
            f"the file does not carry its orientation{said}",
            where=str(image.path),
            mend=f"Write {says.code} (or another code) in {says.place}: the directions in which the stored axes grow, "
            "one letter each of R/L, A/P and S/I",
        )
    user = orientation(given, where=f"orientation in {says.place}")
    if any(a not in ("?", b) for a, b in zip(told, user, strict=True)):
        raise LeadlineError(
            f"orientations disagree: the file says {told!r}, {says.place} says {user!r}",
            where=str(image.path),
            mend=f"Correct {says.place} or the file; a mirrored brain cannot be told from the image",
        )
    return user


def volume_of(level: Level, voxel_um: FloatArray, code: str) -> Volume:
    """A level as a volume, in a frame that has been settled."""
    return Volume(level.data, voxel_um * level.factor, code, level.offset * voxel_um, level.chunk)


def letters_of(columns: FloatArray, path: Path) -> tuple[tuple[str, str, str], tuple[str, ...]]:
    """Orientation letters of three index axes from their directions in RAS+ space, one column each.

    A tilt of the axes is not an orientation: up to 35 degrees the nearest letters are taken and, above 2 degrees, a
    note says so. Raises LeadlineError for steeper or skewed axes.
    """
    unit = columns / np.linalg.norm(columns, axis=0)
    if np.abs(unit.T @ unit - np.eye(3)).max() > np.sin(np.deg2rad(2.0)):
        raise LeadlineError(
            "its axes are not at right angles", where=str(path), mend="Resample the stack onto a rectangular grid"
        )
    main = np.abs(unit).argmax(axis=0)
    tilt = float(np.rad2deg(np.arccos(np.clip(np.abs(unit[main, range(3)]).min(), 0, 1))))
    if len(set(main.tolist())) < 3 or tilt > 35.0:
        raise LeadlineError(
            f"its axes are tilted by {tilt:.0f} degrees, so no axis has an anatomical direction",
            where=str(path),
            mend="Resample it along the anatomical axes or write an untilted affine",
        )
    names = ("LR", "PA", "IS")
    a, b, c = (names[axis][int(unit[axis, k] > 0)] for k, axis in enumerate(main))
    note = f"{path.name}: the header tilts the axes by {tilt:.0f} degrees; only their nearest directions are used"
    return (a, b, c), ((note,) if tilt > 2.0 else ())


def as_native(array: AnyArray) -> AnyArray:
    """The array in the machine's byte order."""
    return array.astype(array.dtype.newbyteorder("="), copy=False)
