"""TIFF: one file (OME, ImageJ or plain, with or without a pyramid) or a folder of planes."""

from __future__ import annotations

import logging
import os
import re
import sys
from contextlib import contextmanager
from itertools import pairwise
from typing import TYPE_CHECKING, Any
from xml.etree import ElementTree

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.io.images import READ_FAULTS, UNIT_UM, Image, Level, pick, unreadable, whole_level
from leadline.io.levels import placed
from leadline.io.one_piece import PIECE_BYTES, OnePiece

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

TIFF_SUFFIXES = (".tif", ".tiff", ".btf", ".tf8", ".tf2")
_PHOTOMETRIC_RGB = 2
_NATIVE = "<" if sys.byteorder == "little" else ">"


def open_tiff(path: Path, channel: int) -> Image:
    """Read the headers of a TIFF stack.

    Sizes count as told where OME metadata give PhysicalSizeX/Y/Z or ImageJ metadata name a unit; the resolution tags
    of a plain TIFF are the printer's dots per inch and tell nothing.
    """
    import tifffile

    with _damage_is_an_error(path):
        file = tifffile.TiffFile(path)
        if not (file.is_ome or file.is_imagej) and len(file.series) > 1:
            file = tifffile.TiffFile(path, is_shaped=False)
        series = _only_series(file, path)
        axes = _axis_names(series.axes, path)
        _require_grey(series.keyframe, path)
        sizes = dict(zip("xyz", _sizes(file), strict=True))
        sources = [_source(file, level, series, k) for k, level in enumerate(series.levels)]
    finest = pick(sources[0], axes, channel, path)
    coarser = [source for source in sources[1:] if min(_spatial(source.shape, axes)) > 1]
    levels = tuple(
        _level(pick(source, axes, channel, path), finest.shape, _chunk(source, axes))
        for source in (sources[0], *coarser)
    )
    z, y, x = (sizes[a] for a in axes if a in "xyz")
    return Image(path, placed(levels), (z, y, x))


def _spatial(lengths: Any, axes: str) -> tuple[int, ...]:
    """Those of the lengths that belong to axes of space."""
    return tuple(int(n) for n, a in zip(lengths, axes, strict=True) if a in "xyz")


def _only_series(file: Any, path: Path) -> Any:
    """The series to read: the first of an OME file, else the only one."""
    if file.is_ome or len(file.series) == 1:
        return file.series[0]
    shapes = sorted({str(s.shape) for s in file.series})
    raise LeadlineError(
        f"its planes differ in shape or type: {', '.join(shapes[:4])}",
        where=str(path),
        mend="Export one stack of equal planes",
    )


def _axis_names(axes: str, path: Path) -> str:
    """Axis letters for ``pick``: unnamed planes are z, samples are channels."""
    names = axes.lower().replace("s", "c")
    if "z" not in names and len(names) == 3:
        names = names.replace("i", "z").replace("q", "z")
    if "q" in names or ("i" in names and "z" not in names):
        raise LeadlineError(
            f"has {len(names)} axes and does not name them", where=str(path), mend="Write it as OME-TIFF with axes ZCYX"
        )
    return names


def _require_grey(page: Any, path: Path) -> None:
    if int(page.photometric) == _PHOTOMETRIC_RGB:
        raise LeadlineError(
            "holds colour (RGB) pictures, not measured channels",
            where=str(path),
            mend="Export each channel as grey values",
        )


def _source(file: Any, level: Any, series: Any, k: int) -> Any:
    """A lazy array of one level: read in one piece where the voxels lie so, else chunks by zarr."""
    import zarr

    if level.dataoffset is not None:
        size = file.filehandle.size
        if level.dataoffset + level.nbytes > size:
            raise EOFError(f"{level.nbytes} bytes of voxels promised, {size - level.dataoffset} there")
        dtype = level.dtype.newbyteorder(file.byteorder)
        return OnePiece(file.filehandle.path, dtype, level.dataoffset, tuple(level.shape), "C")
    pages = list(series.pages) if k == 0 else []
    if any(page is None for page in pages):
        raise EOFError(f"plane {[p is None for p in pages].index(True)} of {len(pages)} is missing")
    for page in pages[-1:]:
        last = max((o + n for o, n in zip(page.dataoffsets, page.databytecounts, strict=True)), default=0)
        if last > file.filehandle.size:
            raise EOFError("its last plane is cut short")
    return zarr.open_array(series.aszarr(level=k), mode="r")


def _chunk(source: Any, axes: str) -> tuple[int, ...]:
    chunks = getattr(source, "chunks", None)
    if chunks is None:
        chunks = [1 if a == "z" else n for a, n in zip(axes, source.shape, strict=True)]
    return _spatial(chunks, axes)


def _level(data: Any, finest: tuple[int, ...], chunk: tuple[int, ...]) -> Level:
    """A pyramid level; its voxels are a whole number of finest voxels wherever the shapes allow it."""
    ratio = np.array([n / m for n, m in zip(finest, data.shape, strict=True)])
    whole = np.maximum(np.rint(ratio), 1.0)
    fits = np.abs(np.asarray(finest) / whole - np.asarray(data.shape)) < 1.0
    a, b, c = chunk
    return Level(data, np.where(fits, whole, ratio), np.zeros(3), (a, b, c))


def _sizes(file: Any) -> tuple[float | None, float | None, float | None]:
    """Voxel size in um along x, y, z, None where the file does not tell."""
    if file.is_ome:
        return _ome_sizes(file.ome_metadata)
    if file.is_imagej:
        return _imagej_sizes(file)
    return None, None, None


def _ome_sizes(xml: str) -> tuple[float | None, float | None, float | None]:
    """PhysicalSizeX/Y/Z with their units.

    An absent unit is um by the OME schema, unless another axis names another unit: a unit written for one axis only
    is a known fault of writers, so the axis counts as not told.
    """
    pixels = next((e for e in ElementTree.fromstring(xml).iter() if e.tag.rsplit("}", 1)[-1] == "Pixels"), None)
    if pixels is None:
        return None, None, None
    units = {axis: pixels.get(f"PhysicalSize{axis}Unit") for axis in "XYZ"}
    foreign = any(unit is not None and UNIT_UM.get(unit.strip().lower()) != 1.0 for unit in units.values())
    sizes = []
    for axis, unit in units.items():
        text = pixels.get(f"PhysicalSize{axis}")
        scale = UNIT_UM.get(unit.strip().lower()) if unit is not None else None if foreign else 1.0
        size = _number(text)
        sizes.append(size * scale if size and scale else None)
    x, y, z = sizes
    return x, y, z


def _number(text: object) -> float | None:
    try:
        value = float(str(text))
    except ValueError:
        return None
    return value if np.isfinite(value) and value > 0 else None


def _imagej_sizes(file: Any) -> tuple[float | None, float | None, float | None]:
    """ImageJ: pixels for each unit in the resolution tags, ``spacing`` between planes, ``unit`` (``yunit``, ``zunit``
    where they differ from it)."""
    said = file.imagej_metadata or {}
    tags = file.pages[0].tags

    def unit_um(key: str) -> float | None:
        return UNIT_UM.get(str(said.get(key, said.get("unit", ""))).strip().lower())

    def along(tag: str, unit: float | None) -> float | None:
        if tag not in tags or unit is None:
            return None
        pixels, units = tags[tag].value
        return unit * units / pixels if pixels and units else None

    spacing, zunit = _number(abs(float(said["spacing"]))) if "spacing" in said else None, unit_um("zunit")
    return (
        along("XResolution", unit_um("unit")),
        along("YResolution", unit_um("yunit")),
        spacing * zunit if spacing and zunit else None,
    )


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
        """Whole rows of a run of planes, about 1 MiB at a time into one buffer; of None: whether this can be done."""
        if key is None:
            return self._offsets is not None
        return self._rows(key[0], key[2])

    def _rows(self, planes: slice, rows: slice) -> Iterator[Any]:
        assert self._offsets is not None
        columns, size = self.shape[3], self.shape[3] * self.dtype.itemsize
        at_once = max(1, min(rows.stop - rows.start, PIECE_BYTES // size))
        buffer = np.empty((at_once, columns), self.dtype)
        for number in range(planes.start, planes.stop):
            file = self._files[number]
            with file.open("rb", buffering=0) as handle:
                _fetch_ahead(self._files[number + 1 : number + 2])
                handle.seek(self._offsets[number] + rows.start * size)
                for row in range(rows.start, rows.stop, at_once):
                    piece = buffer[: min(at_once, rows.stop - row)]
                    if handle.readinto(piece.data.cast("B")) != piece.nbytes:
                        raise unreadable(file, EOFError("the plane is cut short"))
                    yield (number, 0, row, 0), piece[None, None]


def _fetch_ahead(files: list[Path]) -> None:
    """Ask the system to read files into memory while we are busy with another, where it can be asked."""
    if hasattr(os, "posix_fadvise"):
        for file in files:
            with file.open("rb", buffering=0) as handle:
                os.posix_fadvise(handle.fileno(), 0, 0, os.POSIX_FADV_WILLNEED)


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

    with _damage_is_an_error(file), tifffile.TiffFile(file) as tiff:
        page = tiff.pages[0]
        _require_grey(page, file)
        pages = len(tiff.pages)
        samples = int(page.samplesperpixel)
        if pages > 1 and samples > 1:
            raise LeadlineError("has several pages of several samples", where=str(file), mend="Export grey planes")
        end = max((o + n for o, n in zip(page.dataoffsets, page.databytecounts, strict=True)), default=0)
        if end > tiff.filehandle.size:
            raise EOFError("the plane is cut short")
        dtype = np.dtype(page.dtype if page.dtype is not None else "V1").newbyteorder("=")
        plain = pages == samples == 1 and page.is_contiguous and tiff.byteorder == _NATIVE
        offset = int(page.dataoffsets[0]) if plain else None
        return max(pages, samples), int(page.imagelength), int(page.imagewidth), dtype, _sizes(tiff), offset


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


class _Listener(logging.Handler):
    def __init__(self) -> None:
        super().__init__(logging.ERROR)
        self.said: list[str] = []

    def emit(self, record: logging.LogRecord) -> None:
        self.said.append(record.getMessage())


@contextmanager
def _damage_is_an_error(path: Path) -> Iterator[None]:
    """tifffile logs damage and reads on with what is left: here it is an error."""
    import tifffile

    logger, listener = tifffile.logger(), _Listener()
    logger.addHandler(listener)
    try:
        yield
    except LeadlineError:
        raise
    except (tifffile.TiffFileError, ElementTree.ParseError, *READ_FAULTS) as error:
        raise unreadable(path, error) from error
    finally:
        logger.removeHandler(listener)
    if listener.said:
        raise unreadable(path, EOFError(re.sub(r"^<.*?> ", "", listener.said[-1])))
