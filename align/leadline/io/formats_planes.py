"""A folder of TIFF planes as one stack."""

from __future__ import annotations

import re
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.io.formats_tiff import NATIVE, TIFF_SUFFIXES, damage_is_an_error, require_grey, told_sizes
from leadline.io.images import READ_FAULTS, Image, fetch_ahead, pick, unreadable, whole_level
from leadline.io.one_piece import PIECE_BYTES
from leadline.io.plausible import require_small_pieces

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path


class Planes:
    """A folder of TIFF planes as one array ``(planes, channels, rows, columns)``; reads the planes asked for.

    ``offsets`` : where the voxels of each file begin, when all of them lie there in one piece, unpacked; else None.
    """

    def __init__(
        self, files: list[Path], channels: int, shape: tuple[int, int], dtype: Any, offsets: list[int] | None = None
    ) -> None:
        self._files, self._offsets = files, offsets
        self.shape = (len(files), channels, *shape)
        self.dtype = np.dtype(dtype)

    def __getitem__(self, key: Any) -> Any:
        planes, channel, rows, columns = key
        if not isinstance(planes, slice):
            return _read_plane(self._files[planes], channel)[rows, columns]
        numbers = range(*planes.indices(len(self._files)))
        rows, columns = (slice(*s.indices(n)) for s, n in zip((rows, columns), self.shape[2:], strict=True))
        lines, places = (len(range(s.start, s.stop, s.step)) for s in (rows, columns))
        out = np.empty((len(numbers), lines, places), self.dtype)
        whole = (lines, places) == self.shape[2:]
        for k, number in enumerate(numbers):
            here = out[k]
            plane = _read_plane(self._files[number], channel, here if whole else None)
            if not np.may_share_memory(plane, here):
                here[...] = plane[rows, columns]
        return out

    def pieces(self, key: Any) -> Any:
        """A run of whole planes, about 1 MiB of rows at a time into one buffer; of None: whether this can be done."""
        return True if key is None else self._pieces(key[0], key[1])

    def _pieces(self, planes: slice, channel: int) -> Iterator[Any]:
        lines, columns = self.shape[2:]
        buffer = np.empty((min(lines, max(1, PIECE_BYTES // (columns * self.dtype.itemsize))), columns), self.dtype)
        for number in range(planes.start, planes.stop):
            file = self._files[number]
            fetch_ahead(self._files[number + 1 : number + 2])
            if self._offsets is not None:
                rows = _rows(file, self._offsets[number], lines, buffer)
            else:
                rows = _unpacked(file, channel, lines, buffer)
            for row, piece in rows:
                yield (number, channel, row, 0), piece[None, None]


def _rows(file: Path, offset: int, lines: int, buffer: Any) -> Iterator[tuple[int, Any]]:
    """First row and rows of a plane whose voxels lie in one piece, as many as the buffer holds."""
    with file.open("rb", buffering=0) as handle:
        handle.seek(offset)
        for row in range(0, lines, len(buffer)):
            piece = buffer[: min(len(buffer), lines - row)]
            if handle.readinto(piece.data.cast("B")) != piece.nbytes:
                raise unreadable(file, EOFError("the plane is cut short"))
            yield row, piece


def _unpacked(file: Path, channel: int, lines: int, buffer: Any) -> Iterator[tuple[int, Any]]:
    """The same of a packed plane, unpacked strip by strip; whole where a strip or tile is higher than the buffer."""
    import tifffile

    try:
        with tifffile.TiffFile(file) as tiff:
            page = tiff.pages[channel if tiff.pages[0].samplesperpixel == 1 else 0]
            high = page.tilelength if page.is_tiled else page.rowsperstrip
            alike = page.shape == (lines, buffer.shape[1]) and page.dtype == buffer.dtype
            if alike and high <= len(buffer):
                yield from _strips(page, lines, buffer[: len(buffer) // high * high])
                return
        plane = np.empty((lines, buffer.shape[1]), buffer.dtype)
        plane[...] = _read_plane(file, channel)
    except (tifffile.TiffFileError, *READ_FAULTS) as error:
        raise unreadable(file, error) from error
    yield 0, plane


def _strips(page: Any, lines: int, buffer: Any) -> Iterator[tuple[int, Any]]:
    first = 0
    for voxels, (_, _, row, column, _), (_, length, width, _) in page.segments(maxworkers=1):
        if row >= first + len(buffer):
            yield first, buffer
            first = row
        here = buffer[row - first :, column:][: min(length, lines - row), :width]
        here[...] = page.nodata if voxels is None else voxels[0, : here.shape[0], : here.shape[1], 0]
    yield first, buffer[: lines - first]


def _read_plane(file: Path, channel: int, out: Any = None) -> Any:
    """One channel of a plane, into ``out`` where that can be done without a copy."""
    import tifffile

    try:
        with tifffile.TiffFile(file) as tiff:
            page = tiff.pages[0]
            if page.samplesperpixel == 1:
                page = tiff.pages[channel]
                fits = out is not None and page.shape == out.shape and page.dtype == out.dtype
                return page.asarray(out=out if fits else None, maxworkers=1)
            samples = page.asarray(maxworkers=1)
            return samples[channel] if page.planarconfig == 2 else samples[..., channel]
    except (tifffile.TiffFileError, *READ_FAULTS) as error:
        raise unreadable(file, error) from error


def open_planes(folder: Path, channel: int) -> Image:
    """Read the headers of a folder of TIFF planes, in the natural order of their numbers.

    The size of a pixel is told where the planes carry it; the distance of the planes only where their metadata do.
    Raises LeadlineError when a number is missing, or planes differ in shape or type.
    """
    files = in_order(
        [f for f in folder.iterdir() if f.suffix.lower() in TIFF_SUFFIXES and not f.name.startswith(".")], folder
    )
    first = _header(files[0])
    offsets = [first[5]]
    for file in files[1:]:
        here = _header(file)
        offsets.append(here[5])
        if here[:4] != first[:4]:
            raise LeadlineError(
                f"is {_words(here)}, the plane {files[0].name} is {_words(first)}",
                where=str(file),
                mend="Give planes of one shape and type",
            )
    channels, rows, columns, dtype, (x, y, z), _ = first
    planes = Planes(files, channels, (rows, columns), dtype, None if None in offsets else offsets)
    data = pick(planes, "zcyx", channel, folder)
    return Image(folder, (whole_level(data, (1, rows, columns)),), (z, y, x))


def _words(header: Any) -> str:
    return f"{header[1]} x {header[2]} of {header[3]}, {header[0]} channel{'s' if header[0] > 1 else ''}"


def _header(file: Path) -> Any:
    import tifffile

    with damage_is_an_error(file), tifffile.TiffFile(file) as tiff:
        page = tiff.pages[0]
        require_grey(page, file)
        pages = len(tiff.pages)
        samples = int(page.samplesperpixel)
        if pages > 1 and samples > 1:
            raise LeadlineError("has several pages of several samples", where=str(file), mend="Export grey planes")
        end = max((o + n for o, n in zip(page.dataoffsets, page.databytecounts, strict=True)), default=0)
        if end > tiff.filehandle.size:
            raise EOFError("the plane is cut short")
        dtype = np.dtype(page.dtype if page.dtype is not None else "V1").newbyteorder("=")
        plain = pages == samples == 1 and page.is_contiguous and tiff.byteorder == NATIVE
        offset = int(page.dataoffsets[0]) if plain else None
        if not page.is_contiguous:
            require_small_pieces(file, page.chunks, dtype)
        return max(pages, samples), int(page.imagelength), int(page.imagewidth), dtype, told_sizes(tiff), offset


def in_order(files: list[Path], folder: Path) -> list[Path]:
    """Planes by number: plane_2 before plane_10.

    Raises LeadlineError when there are none, when the names follow two patterns, or when a number is missing.

    Examples
    --------
    >>> from pathlib import Path
    >>> [f.name for f in in_order([Path("p_10.tif"), Path("p_9.tif")], Path("."))]
    ['p_9.tif', 'p_10.tif']
    """
    if not files:
        raise LeadlineError(
            "holds no TIFF planes and no OME-Zarr metadata",
            where=str(folder),
            mend="Give a folder of .tif planes or an .ome.zarr folder",
        )
    names = {file: re.split(r"(\d+)", file.stem) for file in files}
    patterns = sorted({re.sub(r"\d+", "#", file.stem) for file in files})
    if len(patterns) > 1:
        raise LeadlineError(
            f"its files are named by more than one pattern: {', '.join(patterns[:4])}",
            where=str(folder),
            mend="Keep one channel's planes to a folder",
        )
    ordered = sorted(files, key=lambda f: [int(part) for part in names[f][1::2]])
    columns = list(zip(*([int(part) for part in names[f][1::2]] for f in ordered), strict=True))
    number = next((column for column in columns if len(set(column)) == len(files)), None)
    if number is None:
        raise LeadlineError(
            "no number in the file names tells all planes apart",
            where=str(folder),
            mend="Keep one channel's planes to a folder, numbered from top to bottom",
        )
    _require_all(sorted(number), folder)
    return sorted(files, key=lambda f: int(names[f][1::2][columns.index(number)]))


def _require_all(number: list[int], folder: Path) -> None:
    steps = np.diff(number)
    if len(steps) and (steps > 1.5 * np.median(steps)).any():
        gap = next((a, b) for a, b in pairwise(number) if b - a > 1.5 * np.median(steps))
        raise LeadlineError(
            f"planes are missing between number {gap[0]} and number {gap[1]}",
            where=str(folder),
            mend="Copy the missing planes, or renumber if none is missing",
        )
