"""OME-Zarr 0.4 and 0.5: metadata read by hand, voxels by zarr.

References
----------
OME-NGFF specification 0.4 and 0.5 (multiscales, axes, coordinateTransformations); RFC-4 (anatomical orientation of
an axis).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.io.images import READ_FAULTS, UNIT_UM, Image, Level, pick, unreadable
from leadline.io.levels import placed
from leadline.io.plausible import require_small_pieces
from leadline.io.zarr_chunks import chunked

if TYPE_CHECKING:
    from pathlib import Path

_TOWARD = {
    "right": "R", "left": "L", "anterior": "A", "rostral": "A", "posterior": "P", "caudal": "P",
    "superior": "S", "dorsal": "S", "inferior": "I", "ventral": "I",
}  # fmt: skip


def is_zarr(folder: Path) -> bool:
    """Whether a folder is a Zarr group or array."""
    return any((folder / name).is_file() for name in (".zgroup", ".zarray", ".zattrs", "zarr.json"))


def open_zarr(path: Path, channel: int) -> Image:
    """Read the metadata of an OME-Zarr image, or of a bare array of three axes.

    Scales count as voxel sizes only where the axis names a unit of length. Level offsets come from
    translations, or from the voxels where there are none.
    """
    import zarr

    try:
        node: Any = zarr.open(str(path), mode="r")
    except (zarr.errors.BaseZarrError, *READ_FAULTS) as error:
        raise unreadable(path, error) from error
    if isinstance(node, zarr.Array):
        require_small_pieces(path, node.shards or node.chunks, node.dtype)
        data = pick(chunked(node), "zyx" if node.ndim == 3 else "?" * node.ndim, channel, path)
        return Image(path, (Level(data, np.ones(3), np.zeros(3), _three(node.chunks)),))
    try:
        return _image(path, node, channel)
    except LeadlineError:
        raise
    except (AttributeError, *READ_FAULTS) as error:
        raise LeadlineError(
            f"its OME-Zarr metadata are not as 0.4 or 0.5 wants them ({type(error).__name__}: {error})",
            where=str(path),
            mend="Check 'multiscales': axes, datasets and coordinateTransformations",
        ) from error


def _image(path: Path, group: Any, channel: int) -> Image:
    group, scales = _multiscales(path, group)
    axes = [axis if isinstance(axis, dict) else {"name": axis} for axis in scales["axes"]]
    names = _letters(axes)
    keep = [k for k, name in enumerate(names) if name in "xyz"]
    scaled = [_scale(path, dataset, scales, len(axes)) for dataset in scales["datasets"]]
    levels: list[Level] = []
    for dataset, (scale, shift) in zip(scales["datasets"], scaled, strict=True):
        array = _array(path, group, dataset["path"])
        if array.ndim != len(axes):
            raise LeadlineError(f"level {dataset['path']} has {array.ndim} axes, its metadata name {len(axes)}",
                                where=str(path), mend="Write one entry of 'axes' for each axis")  # fmt: skip
        if levels and min(array.shape[k] for k in keep) < 2:
            continue  # the tip of a pyramid is no stack
        factor, offset = scale / scaled[0][0], (shift - scaled[0][1]) / scaled[0][0]
        source = chunked(array)
        # shards that can be read chunk by chunk are
        chunks = array.chunks if source is not array else array.shards or array.chunks
        chunk = _three([chunks[k] for k in keep])
        levels.append(Level(pick(source, names, channel, path), factor[keep], offset[keep], chunk))
    order = sorted(range(len(levels)), key=lambda k: float(levels[k].factor.prod()))
    if order[0] != 0:
        raise LeadlineError("its first dataset is not the finest", where=str(path), mend="List datasets finest first")
    told = any(step["type"] == "translation" for d in scales["datasets"] for step in d["coordinateTransformations"])
    units = [UNIT_UM.get(str(axes[k].get("unit", "")).lower()) for k in keep]
    sizes = [float(scaled[0][0][k]) for k in keep]
    a, b, c = (size * unit if unit else None for size, unit in zip(sizes, units, strict=True))
    letters = [_direction(axes[k]) for k in keep]
    return Image(
        path,
        tuple(levels[k] for k in order) if told else placed(tuple(levels[k] for k in order)),
        (a, b, c),
        (letters[0], letters[1], letters[2]),
        (sizes[0], sizes[1], sizes[2]) if not any(units) and sizes != [1.0, 1.0, 1.0] else None,
    )


def _multiscales(path: Path, group: Any) -> tuple[Any, Any]:
    attributes = dict(group.attrs)
    attributes = attributes.get("ome", attributes)
    if "multiscales" not in attributes and "bioformats2raw.layout" in attributes and "0" in group:
        return _multiscales(path, group["0"])
    if not attributes.get("multiscales"):
        raise LeadlineError("carries no 'multiscales' metadata", where=str(path), mend="Give an OME-Zarr 0.4 or 0.5")
    scales = attributes["multiscales"][0]
    if not scales.get("axes") or not scales.get("datasets"):
        raise LeadlineError("its 'multiscales' name no axes or no datasets", where=str(path), mend="Write both")
    return group, scales


def _letters(axes: list[Any]) -> str:
    """One letter for each axis: 'z', 'y', 'x' for those of space as they come, 'c' for channels, 't' for others."""
    usual = {"x": "space", "y": "space", "z": "space", "c": "channel"}
    kinds = [axis.get("type") or usual.get(str(axis["name"]).lower(), "other") for axis in axes]
    space = iter("zyx")
    return "".join(next(space, "t") if kind == "space" else "c" if kind == "channel" else "t" for kind in kinds)


def _scale(path: Path, dataset: Any, scales: Any, n: int) -> tuple[Any, Any]:
    """Scale and translation of a dataset, its own first, then those of the whole image."""
    scale, shift = np.ones(n), np.zeros(n)
    for step in (*dataset["coordinateTransformations"], *scales.get("coordinateTransformations", ())):
        kind = step["type"]
        if kind not in ("scale", "translation", "identity") or (kind != "identity" and kind not in step):
            raise LeadlineError(f"uses a coordinate transformation of type {kind!r} that is not read",
                                where=str(path), mend="Write 'scale' and 'translation' as lists")  # fmt: skip
        if kind == "scale":
            scale, shift = scale * np.asarray(step["scale"], float), shift * np.asarray(step["scale"], float)
        elif kind == "translation":
            shift = shift + np.asarray(step["translation"], float)
    if scale.shape != (n,) or not np.isfinite(scale).all() or (scale <= 0).any():
        raise LeadlineError(f"its scale is {scale.tolist()}", where=str(path), mend="Write one positive number an axis")
    return scale, shift


def _array(path: Path, group: Any, name: str) -> Any:
    import zarr

    try:
        array = group[name]
    except (zarr.errors.BaseZarrError, *READ_FAULTS) as error:
        raise LeadlineError(
            f"dataset {name!r} is named in its metadata but is not there",
            where=str(path),
            mend="Copy the whole folder again",
        ) from error
    if not isinstance(array, zarr.Array):
        raise LeadlineError(f"dataset {name!r} is a group, not an array", where=str(path), mend="Correct 'datasets'")
    require_small_pieces(path, array.shards or array.chunks, array.dtype)
    return array


def _direction(axis: Any) -> str | None:
    """Letter of RFC-4's 'left-to-right' and the like; None where the axis carries none or one that a brain lacks."""
    said = axis.get("orientation", axis.get("anatomicalOrientation"))
    text = said.get("value") if isinstance(said, dict) else said
    return _TOWARD.get(str(text).lower().rsplit("-to-", 1)[-1]) if text and "-to-" in str(text) else None


def _three(chunk: Any) -> tuple[int, int, int]:
    a, b, c = (int(n) for n in chunk)
    return a, b, c
