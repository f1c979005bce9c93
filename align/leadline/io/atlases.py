"""Atlas folders: ``atlas.toml``, a label volume, a template and ``structures.csv``."""

from __future__ import annotations

import tomllib
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.base.atomic import whole_folder
from leadline.base.errors import MALFORMED, Faults, LeadlineError, nearest
from leadline.io.images import IN_ATLAS, SAME_WITHIN, UserSays, settle, volume_of
from leadline.io.stacks import open_image
from leadline.io.structure_tables import LARGEST_ID, read_structures, write_structures
from leadline.model.atlas import Atlas, Structure, Structures
from leadline.model.frames import from_pir, voxel_as_pir
from leadline.model.volume import Volume

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

ATLAS_FILE = "atlas.toml"
_WRITTEN = (ATLAS_FILE, "labels.nrrd", "template.nrrd", "structures.csv")
_REQUIRED = ("name", "labels", "template", "structures")
_KEYS = (*_REQUIRED, "citation", "licence", "orientation", "voxel_um", "bregma_um")
_SLAB_VOXELS = 2**24
_FARTHEST_UM = 1e9


def read_atlas(folder: Path) -> Atlas:
    """Read an atlas folder, labels exact and laid out as PIR.

    ``Atlas.extra["columns"]`` names the optional columns that ``structures.csv`` has.

    Raises LeadlineError when a file or key is missing, the two volumes differ in grid, label ids are not exact, or a
    label has no row.
    """
    stated = _read_toml(folder)
    structures, columns = read_structures(folder / stated["structures"])
    voxel, code = stated.get("voxel_um"), stated.get("orientation")
    labels = read_labels(folder / stated["labels"], voxel_um=voxel, code=code)
    template = read_template(folder / stated["template"], voxel_um=voxel, code=code)
    require_same_grid(labels, template, where=str(folder))
    require_rows(labels, structures, where=str(folder / stated["labels"]))
    bregma = stated.get("bregma_um")
    return Atlas(
        stated["name"],
        labels,
        template,
        structures,
        stated.get("citation", ""),
        stated.get("licence", ""),
        None if bregma is None else np.asarray(bregma, np.float64),
        {"columns": " ".join(columns)},
    )


def _read_toml(folder: Path) -> dict[str, Any]:
    file = folder / ATLAS_FILE
    if not file.is_file():
        raise LeadlineError(
            f"holds no {ATLAS_FILE}" if folder.is_dir() else "the atlas folder is not there",
            where=str(folder),
            mend="Make the folder with `leadline atlas import`, or correct the path",
        )
    try:
        stated = tomllib.loads(file.read_text("utf-8"))
    except MALFORMED as error:
        raise LeadlineError(f"is no valid TOML ({error})", where=str(file), mend="Correct that line") from error
    faults = [
        LeadlineError(f"unknown key {key!r}", where=str(file), mend=nearest(key, _KEYS))
        for key in stated.keys() - set(_KEYS)
    ]
    faults += [
        LeadlineError(f"key {key!r} is missing", where=str(file), mend="Write it as text")
        for key in _REQUIRED
        if not isinstance(stated.get(key), str) or not stated[key]
    ]
    for key in ("voxel_um", "bregma_um"):
        if key in stated and not _three_numbers(stated[key]):
            faults.append(LeadlineError(f"{key} is {stated[key]!r}", where=str(file), mend="Write three numbers in um"))
    for key in ("citation", "licence", "orientation"):
        if not isinstance(stated.get(key, ""), str):
            faults.append(LeadlineError(f"{key} is {stated[key]!r}", where=str(file), mend="Write it as text"))
    if faults:
        raise Faults(faults)
    return stated


def _three_numbers(value: Any) -> bool:
    return (
        isinstance(value, list)
        and len(value) == 3
        and all(isinstance(x, int | float) and not isinstance(x, bool) and abs(x) < _FARTHEST_UM for x in value)
    )


def read_labels(path: Path, *, voxel_um: Sequence[float] | None, code: str | None, user: UserSays = IN_ATLAS) -> Volume:
    """Read a label volume as uint32 in PIR, slab by slab.

    Raises LeadlineError when an id is not a whole number from 0 to 2^32 - 1, or is stored as a float that may have
    been rounded.
    """
    image = open_image(path)
    voxel, letters = settle(image, voxel_um, code, user)
    stored = volume_of(image.levels[0], voxel, letters)
    pir = np.empty(tuple(int(n) for n in voxel_as_pir(stored.shape, letters)), np.uint32)
    view = from_pir(pir, letters)
    for slab in _slabs(stored):
        view[slab] = exact_ids(stored.data[slab], path)
    if not pir.any():
        raise LeadlineError("holds no label: every voxel is 0", where=str(path), mend="Give the label volume")
    return Volume(pir, voxel_as_pir(voxel, letters), "PIR")


def read_template(
    path: Path, *, voxel_um: Sequence[float] | None, code: str | None, user: UserSays = IN_ATLAS
) -> Volume:
    """Read a template volume in PIR, of the type it is stored in."""
    image = open_image(path)
    voxel, letters = settle(image, voxel_um, code, user)
    stored = volume_of(image.levels[0], voxel, letters)
    pir = np.empty(tuple(int(n) for n in voxel_as_pir(stored.shape, letters)), stored.data.dtype)
    view = from_pir(pir, letters)
    for slab in _slabs(stored):
        block = stored.data[slab]
        if not np.isfinite(block).all():
            raise LeadlineError("holds values that are not finite", where=str(path), mend="Replace them by 0")
        view[slab] = block
    if pir.min() == pir.max():
        raise LeadlineError("every voxel is the same", where=str(path), mend="Give the template volume")
    return Volume(pir, voxel_as_pir(voxel, letters), "PIR")


def _slabs(volume: Volume) -> list[tuple[slice, slice, slice]]:
    """Slabs across the axis in which the file is laid out, of about 16 million voxels."""
    chunk = volume.chunk or (1, *volume.shape[1:])
    axis = int(np.argmax(np.asarray(volume.shape) / np.asarray(chunk)))
    n = volume.shape[axis]
    step = max(1, _SLAB_VOXELS * n // int(np.prod(volume.shape, dtype=np.int64)))
    step = max(chunk[axis], step // chunk[axis] * chunk[axis])
    slabs = []
    for start in range(0, n, step):
        key = [slice(None)] * 3
        key[axis] = slice(start, min(n, start + step))
        slabs.append((key[0], key[1], key[2]))
    return slabs


def exact_ids(block: AnyArray, path: Path) -> AnyArray:
    """Label ids as uint32, or an error when they are not exact."""
    kind, where = block.dtype.kind, str(path)
    if kind == "f":
        limit = 2.0 ** (np.finfo(block.dtype).nmant + 1)
        if not np.isfinite(block).all() or (block != np.rint(block)).any():
            raise LeadlineError(
                "holds label ids that are not whole numbers",
                where=where,
                mend="Give the label volume as unsigned integers, not resampled with smoothing",
            )
        if float(np.abs(block).max(initial=0)) >= limit:
            raise LeadlineError(
                f"stores label ids as {block.dtype}, which cannot hold ids above {limit:.0f} exactly",
                where=where,
                mend="Export the label volume as 32 bit unsigned integers",
            )
    low, high = block.min(initial=0), block.max(initial=0)
    if low < 0 or high > LARGEST_ID:
        raise LeadlineError(f"holds the label id {int(low if low < 0 else high)}", where=where,
                            mend=f"Ids run from 0 (outside) to {LARGEST_ID}")  # fmt: skip
    return block.astype(np.uint32, copy=False)


def require_same_grid(labels: Volume, template: Volume, *, where: str) -> None:
    """Raise LeadlineError unless both PIR volumes have the same shape and voxel size."""
    same = np.abs(labels.voxel_um / template.voxel_um - 1.0) <= SAME_WITHIN
    if labels.shape != template.shape or not same.all():
        raise LeadlineError(
            f"labels and template differ: laid out as PIR they have {labels.shape} voxels of {labels.voxel_um.tolist()}"
            f" um and {template.shape} voxels of {template.voxel_um.tolist()} um",
            where=where,
            mend="Give both on one grid, in one orientation",
        )


def label_counts(labels: AnyArray) -> dict[int, int]:
    """Voxels of each id, ascending; runs of equal labels are counted at once."""
    counts: dict[int, int] = {}
    for plane in labels:
        flat = plane.ravel()
        starts = np.concatenate([[0], np.flatnonzero(flat[1:] != flat[:-1]) + 1])
        lengths = np.diff(np.append(starts, flat.size))
        ids, which = np.unique(flat[starts], return_inverse=True)
        for k, n in zip(ids.tolist(), np.bincount(which, lengths).tolist(), strict=True):
            counts[k] = counts.get(k, 0) + int(n)
    return dict(sorted(counts.items()))


def require_rows(
    labels: Volume, structures: Structures, *, where: str, table: str = "structures.csv"
) -> dict[int, int]:
    """Count the voxels of each id; raise LeadlineError that lists the ids without a row."""
    counts = label_counts(labels.array())
    lost = {k: n for k, n in counts.items() if k not in structures}
    if lost:
        named = ", ".join(f"{k} ({n} voxels)" for k, n in list(lost.items())[:10])
        raise LeadlineError(
            f"{len(lost)} label{'s have' if len(lost) > 1 else ' has'} no row in the structure table: {named}"
            + (", ..." if len(lost) > 10 else ""),
            where=where,
            mend=f"Add a row for each to {table}, or set these voxels to 0",
        )
    return counts


def require_free(folder: Path) -> None:
    """Raise LeadlineError unless the folder is absent, empty, or an atlas written here, that may be replaced."""
    if not folder.exists():
        return
    others = sorted(p.name for p in folder.iterdir() if p.name not in _WRITTEN) if folder.is_dir() else [folder.name]
    if others:
        raise LeadlineError(
            f"holds other files ({', '.join(others[:3])}{', ...' if len(others) > 3 else ''}), which would be lost",
            where=str(folder),
            mend="Name a new folder for the atlas",
        )


def write_atlas(
    folder: Path,
    *,
    name: str,
    citation: str,
    licence: str,
    labels: AnyArray,
    template: AnyArray,
    voxel_um: Sequence[float] | FloatArray,
    rows: Sequence[Structure],
    bregma_um: Sequence[float] | None = None,
) -> None:
    """Write a whole atlas folder from PIR arrays; an atlas that stood there is replaced only when all is written.

    Raises LeadlineError when the folder holds anything but such an atlas.
    """
    import nrrd
    import tomli_w

    require_free(folder)
    voxel = [float(v) for v in voxel_um]
    header = {
        "space": "left-posterior-superior",
        "space directions": np.array([[0.0, voxel[0], 0.0], [0.0, 0.0, -voxel[1]], [-voxel[2], 0.0, 0.0]]),
        "space units": ["um", "um", "um"],
        "encoding": "gzip",
    }
    stated: dict[str, Any] = {
        "name": name,
        "citation": citation,
        "licence": licence,
        "labels": "labels.nrrd",
        "template": "template.nrrd",
        "structures": "structures.csv",
        "orientation": "PIR",
        "voxel_um": voxel,
    }
    if bregma_um is not None:
        stated["bregma_um"] = [float(v) for v in bregma_um]
    with whole_folder(folder) as part:
        nrrd.write(str(part / "labels.nrrd"), labels.astype(np.uint32, copy=False), header, compression_level=6)
        nrrd.write(str(part / "template.nrrd"), template, header, compression_level=6)
        write_structures(part / "structures.csv", rows)
        (part / ATLAS_FILE).write_text(tomli_w.dumps(stated), "utf-8")
