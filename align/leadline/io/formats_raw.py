"""NIfTI and NRRD: a header and one block of voxels, the first axis running fastest."""

from __future__ import annotations

import bz2
import gzip
import os
import tempfile
from pathlib import Path
from typing import Any

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.io.images import READ_FAULTS, UNIT_UM, Image, Picked, letters_of, pick, unreadable, whole_level
from leadline.io.one_piece import OnePiece

NIFTI_SUFFIXES = (".nii", ".nii.gz")
NRRD_SUFFIXES = (".nrrd", ".nhdr")
_NRRD_TYPES = {
    **dict.fromkeys(("uchar", "unsigned char", "uint8", "uint8_t"), "u1"),
    **dict.fromkeys(("signed char", "int8", "int8_t"), "i1"),
    **dict.fromkeys(("ushort", "unsigned short", "unsigned short int", "uint16", "uint16_t"), "u2"),
    **dict.fromkeys(("short", "short int", "signed short", "signed short int", "int16", "int16_t"), "i2"),
    **dict.fromkeys(("uint", "unsigned int", "uint32", "uint32_t"), "u4"),
    **dict.fromkeys(("int", "signed int", "int32", "int32_t"), "i4"),
    **dict.fromkeys(("ulonglong", "unsigned long long", "unsigned long long int", "uint64", "uint64_t"), "u8"),
    **dict.fromkeys(("longlong", "long long", "long long int", "signed long long", "int64", "int64_t"), "i8"),
    "float": "f4",
    "double": "f8",
}
_SPACES = {"r": (0, 1), "l": (0, -1), "a": (1, 1), "p": (1, -1), "s": (2, 1), "i": (2, -1)}


class Block:
    """Voxels of one file in Fortran order, read on slicing.

    ``offset`` : bytes before the first voxel. ``packed_at`` : where in the file a packed stream begins that ``opener``
    unpacks and of which ``offset`` then counts; None where nothing is packed. Packed voxels are unpacked into an
    unnamed temporary file, once and no further than the header promises, so that memory and disk stay bounded.
    ``slope``, ``shift`` : stored value to voxel value; with them the voxels are float32.
    """

    def __init__(
        self,
        path: Path,
        dtype: Any,
        shape: tuple[int, ...],
        offset: int,
        *,
        packed_at: int | None = None,
        opener: Any = gzip.open,
        slope: float = 1.0,
        shift: float = 0.0,
    ) -> None:
        self.path, self.shape, self._stored, self._offset = path, shape, np.dtype(dtype), offset
        self._packed_at, self._opener, self._slope, self._shift = packed_at, opener, slope, shift
        self._scaled = (slope, shift) != (1.0, 0.0)
        self.dtype = np.dtype(np.float32) if self._scaled else self._stored
        self._end = offset + int(np.prod(shape, dtype=np.int64)) * self._stored.itemsize
        self._piece: OnePiece | None = None
        self._require_whole()

    def __getitem__(self, key: Any) -> Any:
        block = self._unpacked()[key]
        return block * np.float32(self._slope) + np.float32(self._shift) if self._scaled else block

    def pieces(self, key: Any) -> Any:
        """As those of :class:`OnePiece`; None for voxels that have to be scaled."""
        if self._scaled:
            return None
        return True if key is None else self._unpacked().pieces(key)

    def _unpacked(self) -> OnePiece:
        if self._piece is None:
            file: Any = self.path if self._packed_at is None else self._inflated(self._packed_at)
            self._piece = OnePiece(file, self._stored, self._offset, self.shape, "F")
        return self._piece

    def _inflated(self, packed_at: int) -> Any:
        file = tempfile.TemporaryFile()  # noqa: SIM115 - lives as long as this object
        with self.path.open("rb") as packed:
            packed.seek(packed_at)
            with self._opener(packed) as stream:
                left = self._end
                while left and (piece := stream.read(min(left, 2**20))):
                    file.write(piece)
                    left -= len(piece)
                stream.read(1)  # the checksum is looked at when the end is reached
        file.flush()
        self._require(file.tell())
        return file

    def _require_whole(self) -> None:
        """Raise LeadlineError when the file is cut short. Of a gzip file, the length is read that stands at its end."""
        size = self.path.stat().st_size
        if self._packed_at is None:
            self._require(size)
            return
        with self.path.open("rb") as packed:
            packed.seek(max(0, size - 4))
            length = int.from_bytes(packed.read(4), "little")
        if self._opener is not gzip.open or length != self._end % 2**32:
            try:  # several gzip members, or cut short: only inflating tells
                self._unpacked()
            except LeadlineError:
                raise
            except READ_FAULTS as error:
                raise unreadable(self.path, error) from error

    def _require(self, length: int) -> None:
        if length < self._end:
            raise LeadlineError(
                f"is cut short: its header promises {self._end} bytes, {length} are there",
                where=str(self.path),
                mend="Copy or export it again",
            )


def open_nifti(path: Path, channel: int) -> Image:
    """Read the header of a NIfTI file; a fourth axis holds channels.

    Size and orientation come from the affine, as nibabel reads it; they count as told only where ``xyzt_units`` names
    a unit and a qform or sform code is set.
    """
    import nibabel
    from nibabel.affines import voxel_sizes
    from nibabel.filebasedimages import ImageFileError
    from nibabel.spatialimages import HeaderDataError

    try:
        image: Any = nibabel.load(path)
    except (ImageFileError, HeaderDataError, *READ_FAULTS) as error:
        raise unreadable(path, error) from error
    header = image.header
    shape = tuple(int(n) for n in image.shape)
    stored = image.dataobj
    block = Block(
        path,
        header.get_data_dtype(),
        shape,
        int(stored.offset),
        packed_at=0 if path.name.lower().endswith(".gz") else None,
        slope=float(stored.slope),
        shift=float(stored.inter),
    )
    data = pick(block, _axes(shape, path), channel, path)
    sizes = voxel_sizes(image.affine)
    if not (np.isfinite(image.affine).all() and (sizes > 0).all()):
        raise LeadlineError("its affine is not a proper one", where=str(path), mend="Write a qform or sform")
    letters, notes = _nifti_letters(image, path)
    a, b, c = (float(f"{s:.6g}") for s in sizes)  # the header holds float32
    unit = {1: 1e6, 2: 1e3, 3: 1.0}.get(int(header["xyzt_units"]) & 7)  # metres, mm, um of the NIfTI standard
    return Image(
        path,
        (_level(data),),
        (None, None, None) if unit is None else (a * unit, b * unit, c * unit),
        letters,
        (a, b, c) if unit is None else None,
        notes,
    )


def _nifti_letters(image: Any, path: Path) -> tuple[Any, tuple[str, ...]]:
    _, s_code = image.get_sform(coded=True)
    qform, q_code = image.get_qform(coded=True)
    if s_code <= 0 and q_code <= 0:
        return (None, None, None), ()
    letters, notes = letters_of(np.asarray(image.affine)[:3, :3], path)
    if s_code > 0 and q_code > 0:
        other, _ = letters_of(np.asarray(qform)[:3, :3], path)
        if other != letters:
            raise LeadlineError(
                f"its sform says {''.join(letters)}, its qform says {''.join(other)}",
                where=str(path),
                mend="Write the same orientation into both",
            )
    return letters, notes


def _axes(shape: tuple[int, ...], path: Path) -> str:
    """Names of NIfTI axes: after the three of space, the one that is longer than 1 holds channels."""
    extra = ["c" if n > 1 else "t" for n in shape[3:]]
    if extra.count("c") > 1:
        raise LeadlineError(f"has too many axes: {shape}", where=str(path), mend="Keep one axis of channels")
    if extra and "c" not in extra:
        extra[-1] = "c"
    names = iter("tuvw")
    return ("xyz" + "".join(name if name == "c" else next(names) for name in extra))[: len(shape)]


def open_nrrd(path: Path, channel: int) -> Image:
    """Read the header of an NRRD file; a non-spatial axis holds channels.

    The size counts as told only where ``space units`` or ``units`` name a unit, the orientation only where ``space``
    names an anatomical frame.
    """
    import nrrd

    try:
        with path.open("rb") as handle:
            header = nrrd.read_header(handle)
            offset = handle.tell()
    except (nrrd.NRRDError, *READ_FAULTS) as error:
        raise unreadable(path, error) from error
    missing = [key for key in ("sizes", "type", "encoding") if key not in header]
    if missing:
        raise unreadable(path, KeyError(*missing))
    shape = tuple(int(n) for n in header["sizes"])
    space = _spatial(header, len(shape), path)
    axes, names = "", iter("xyz")
    for is_space in space:
        axes += next(names) if is_space else "c"
    data = pick(_nrrd_block(path, header, shape, offset), axes, channel, path)
    voxel, unitless = _nrrd_sizes(header, space)
    letters, notes = _nrrd_letters(header, space, path)
    return Image(path, (_level(data),), voxel, letters, unitless, notes)


def _spatial(header: Any, n_axes: int, path: Path) -> list[bool]:
    """Which axes are of space: those with a direction, else those whose kind says so, else all of three."""
    directions = header.get("space directions")
    if directions is not None:
        space = [row is not None and bool(np.isfinite(np.asarray(row, float)).all()) for row in directions]
    elif header.get("kinds") is not None and n_axes > 3:
        space = [kind.lower() in ("domain", "space") for kind in header["kinds"]]
    else:
        space = [True] * n_axes
    if sum(space) != 3 or len(space) != n_axes:
        raise LeadlineError(
            f"has {n_axes} axes, {sum(space)} of them of space",
            where=str(path),
            mend="Give three axes a direction in 'space directions', and 'none' to the axis of channels",
        )
    kinds = header.get("kinds") or []
    if any("color" in kind.lower() or kind.lower() == "complex" for kind in kinds):
        raise LeadlineError("holds colour or complex voxels", where=str(path), mend="Export one grey channel")
    return space


def _nrrd_block(path: Path, header: Any, shape: tuple[int, ...], offset: int) -> Any:
    import nrrd

    encoding = str(header.get("encoding", "raw")).lower()
    name = header.get("data file") or header.get("datafile")
    file = path if name is None else path.parent / str(name)
    if name is not None and not os.path.isfile(file):
        raise LeadlineError(f"its voxels are to be in {name!r}, which is no file", where=str(path),
                            mend="Keep header and data file together; lists of data files are not read")  # fmt: skip
    plain = not header.get("byte skip") and not header.get("line skip")
    opener = {"gzip": gzip.open, "gz": gzip.open, "bzip2": bz2.open, "bz2": bz2.open}.get(encoding)
    if opener is not None and not plain:
        raise LeadlineError("skips bytes or lines before packed voxels", where=str(path), mend="Write it without skips")
    if (encoding == "raw" or opener is not None) and plain:
        if str(header["type"]) not in _NRRD_TYPES:
            raise LeadlineError(
                f"voxels are of type {header['type']!r}", where=str(path), mend="Export one grey channel"
            )
        order = ">" if str(header.get("endian", "little")) == "big" else "<"
        dtype = np.dtype(order + _NRRD_TYPES[str(header["type"])])
        start = offset if name is None else 0
        if opener is None:
            return Block(file, dtype, shape, start)
        return Block(file, dtype, shape, 0, packed_at=start, opener=opener)
    try:
        return nrrd.read(str(path), index_order="F")[0]
    except (nrrd.NRRDError, *READ_FAULTS) as error:
        raise unreadable(path, error) from error


def _nrrd_sizes(header: Any, space: list[bool]) -> tuple[Any, Any]:
    keep = np.flatnonzero(space)
    if header.get("space directions") is not None:
        rows = [header["space directions"][k] for k in keep]
        sizes = [float(np.linalg.norm(row)) for row in rows]
        units = header.get("space units")
    elif header.get("spacings") is not None:
        sizes = [float(header["spacings"][k]) for k in keep]
        units = header.get("units")
        units = None if units is None else [units[k] for k in keep]
    else:
        return (None, None, None), None
    if not (np.isfinite(sizes).all() and min(sizes) > 0):
        return (None, None, None), None
    known = [UNIT_UM.get(str(unit).strip().lower()) for unit in units] if units is not None else [None]
    if len(known) != 3 or None in known:
        return (None, None, None), tuple(sizes)
    return tuple(size * (unit or 1.0) for size, unit in zip(sizes, known, strict=True)), None


def _nrrd_letters(header: Any, space: list[bool], path: Path) -> tuple[Any, tuple[str, ...]]:
    words = str(header.get("space", "")).lower()
    initials = words if len(words) == 3 else "".join(word[0] for word in words.split("-") if word and word != "time")
    if header.get("space directions") is None or len(initials) != 3 or any(i not in _SPACES for i in initials):
        return (None, None, None), ()
    directions = np.array([header["space directions"][k] for k in np.flatnonzero(space)], float)
    ras = np.zeros((3, 3))
    for column, initial in enumerate(initials):
        axis, sign = _SPACES[initial]
        ras[axis] = sign * directions[:, column]
    return letters_of(ras, path)


def _level(data: Picked) -> Any:
    return whole_level(data, (data.shape[0], data.shape[1], 1))
