"""TIFF in one file: OME, ImageJ or plain, with or without a pyramid."""

from __future__ import annotations

import logging
import re
import sys
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any
from xml.etree import ElementTree

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.io.images import READ_FAULTS, UNIT_UM, Image, Level, pick, unreadable
from leadline.io.levels import placed
from leadline.io.one_piece import OnePiece
from leadline.io.plausible import require_small_pieces

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

TIFF_SUFFIXES = (".tif", ".tiff", ".btf", ".tf8", ".tf2")
_PHOTOMETRIC_RGB = 2
NATIVE = "<" if sys.byteorder == "little" else ">"


def open_tiff(path: Path, channel: int) -> Image:
    """Read the headers of a TIFF stack.

    Sizes count as told where OME metadata give PhysicalSizeX/Y/Z or ImageJ metadata name a unit; the resolution tags
    of a plain TIFF are the printer's dots per inch and tell nothing.
    """
    import tifffile

    with damage_is_an_error(path):
        file = tifffile.TiffFile(path)
        if not (file.is_ome or file.is_imagej) and len(file.series) > 1:
            file = tifffile.TiffFile(path, is_shaped=False)
        series = _only_series(file, path)
        axes = _axis_names(series.axes, path)
        require_grey(series.keyframe, path)
        sizes = dict(zip("xyz", told_sizes(file), strict=True))
        sources = [_source(path, file, level, series, k) for k, level in enumerate(series.levels)]
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


def require_grey(page: Any, path: Path) -> None:
    """Raise LeadlineError for a page of colour pictures."""
    if int(page.photometric) == _PHOTOMETRIC_RGB:
        raise LeadlineError(
            "holds colour (RGB) pictures, not measured channels",
            where=str(path),
            mend="Export each channel as grey values",
        )


def _source(path: Path, file: Any, level: Any, series: Any, k: int) -> Any:
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
    array = zarr.open_array(series.aszarr(level=k), mode="r")
    require_small_pieces(path, array.chunks, array.dtype)
    return array


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


def told_sizes(file: Any) -> tuple[float | None, float | None, float | None]:
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


class _Listener(logging.Handler):
    def __init__(self) -> None:
        super().__init__(logging.ERROR)
        self.said: list[str] = []

    def emit(self, record: logging.LogRecord) -> None:
        self.said.append(record.getMessage())


@contextmanager
def damage_is_an_error(path: Path) -> Iterator[None]:
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
