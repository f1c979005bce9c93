"""Broken brains: each a good one with one thing wrong, and words that the message about it must hold.

``make(folder)`` spoils a fresh copy of :func:`tests.good_brain.write_good_brain`. They are made, not kept as files, so
that a case says in one line what is wrong with it; ``python -m tests.leadline.io.broken_cases DIR`` writes them all.
"""

from __future__ import annotations

import json
import shutil
import sys
from collections.abc import Callable
from pathlib import Path
from typing import NamedTuple

import numpy as np
from tests.good_brain import N_CONTACTS, STACK_UM, anatomy, probe, write_good_brain

Make = Callable[[Path], None]
Change = Callable[[np.ndarray], np.ndarray]


class Broken(NamedTuple):
    """One case. ``words`` : all must stand in the message."""

    name: str
    make: Make
    words: tuple[str, ...]


def edit(name: str, old: str, new: str) -> Make:
    """Replace text in a file."""

    def make(folder: Path) -> None:
        text = (folder / name).read_text()
        assert old in text, old
        (folder / name).write_text(text.replace(old, new, 1))

    return make


def cut(name: str, share: float = 0.6) -> Make:
    """Cut a file short."""

    def make(folder: Path) -> None:
        whole = (folder / name).read_bytes()
        (folder / name).write_bytes(whole[: int(len(whole) * share)])

    return make


def remove(name: str) -> Make:
    """Remove a file or folder."""

    def make(folder: Path) -> None:
        path = folder / name
        shutil.rmtree(path) if path.is_dir() else path.unlink()

    return make


def both(*makes: Make) -> Make:
    """Do one after the other."""

    def make(folder: Path) -> None:
        for one in makes:
            one(folder)

    return make


# --- stacks


def stack(background: str, voxels: np.ndarray | None = None, more: str = "", **written: object) -> Make:
    """Write the background as another TIFF file and name it in brain.toml."""

    def make(folder: Path) -> None:
        import tifffile

        tifffile.imwrite(folder / background, anatomy().background if voxels is None else voxels, **written)
        edit("brain.toml", '"auto.ome.tif"', f'"{background}"{more}')(folder)

    return make


def ome(**changes: object) -> dict[str, object]:
    """OME metadata of the good stack, changed; None leaves a key out."""
    size: dict[str, object] = {"axes": "ZYX", **{f"PhysicalSize{a}": STACK_UM for a in "XYZ"}}
    return {"metadata": {key: value for key, value in (size | changes).items() if value is not None}}


def planes(spoil: Make) -> Make:
    """Write the background as a folder of planes, then spoil it."""

    def make(folder: Path) -> None:
        import tifffile

        (folder / "planes").mkdir()
        for k, plane in enumerate(anatomy().background):
            tifffile.imwrite(folder / "planes" / f"plane_{k}.tif", plane)
        edit("brain.toml", '"auto.ome.tif"', '"planes"\nvoxel_um = [50, 50, 50]')(folder)
        spoil(folder / "planes")

    return make


def small_plane(folder: Path) -> None:
    """Write one plane smaller than the others."""
    import tifffile

    tifffile.imwrite(folder / "plane_7.tif", anatomy().background[7, :50])


def small_dye(folder: Path) -> None:
    """Write the dye with fewer planes than the background."""
    import tifffile

    tifffile.imwrite(folder / "dye.ome.tif", anatomy().dye[:80], **ome())


def nifti(affine: np.ndarray, unit: str = "mm", more: str = "") -> Make:
    """Write the background as NIfTI (stored x fastest) and name it in brain.toml."""

    def make(folder: Path) -> None:
        import nibabel

        image = nibabel.Nifti1Image(anatomy().background, affine)
        image.header.set_xyzt_units(unit)
        nibabel.save(image, folder / "auto.nii")
        edit("brain.toml", '"auto.ome.tif"', f'"auto.nii"{more}')(folder)

    return make


def nrrd_stack(**changes: object) -> Make:
    """Write the background as NRRD and name it in brain.toml."""

    def make(folder: Path) -> None:
        import nrrd

        header = {"space": "LPS", "space directions": SAL_MM * [[-1], [-1], [1]], "space units": ["mm"] * 3}
        header["space directions"] = np.asarray(header["space directions"]).T
        header = {key: value for key, value in (header | changes).items() if value is not None}
        nrrd.write(str(folder / "auto.nrrd"), anatomy().background, header)
        edit("brain.toml", '"auto.ome.tif"', '"auto.nrrd"')(folder)

    return make


def zarr_stack(spoil: Callable[[dict], None]) -> Make:
    """Write the background as OME-Zarr 0.4 with spoilt metadata and name it in brain.toml."""

    def make(folder: Path) -> None:
        import zarr

        group = zarr.open_group(folder / "auto.ome.zarr", mode="w", zarr_format=2)
        group.create_array("0", data=anatomy().background, chunks=(44, 64, 56))
        axes = [{"name": n, "type": "space", "unit": "micrometer"} for n in "zyx"]
        steps = [{"type": "scale", "scale": [STACK_UM] * 3}]
        scales = {"version": "0.4", "axes": axes, "datasets": [{"path": "0", "coordinateTransformations": steps}]}
        spoil(scales)
        group.attrs["multiscales"] = [scales]
        edit("brain.toml", '"auto.ome.tif"', '"auto.ome.zarr"')(folder)

    return make


# columns: directions of the stored axes (S, A, L) in RAS mm
SAL_MM = np.array([[0, 0, -0.05], [0, 0.05, 0], [0.05, 0, 0]])
SAL_AFFINE = np.block([[SAL_MM, np.zeros((3, 1))], [np.zeros((1, 3)), np.ones((1, 1))]])


def tilted() -> np.ndarray:
    """The affine of the good stack, turned by 42 degrees."""
    turn = np.eye(4)
    c, s = np.cos(np.deg2rad(42)), np.sin(np.deg2rad(42))
    turn[1:3, 1:3] = [[c, -s], [s, c]]
    return turn @ SAL_AFFINE


def nan_stack() -> np.ndarray:
    """The background with one voxel that is not a number."""
    voxels = anatomy().background.astype(np.float32)
    voxels[40, 60, 50] = np.nan
    return voxels


NO_ORIENTATION = edit("brain.toml", 'orientation = "SAL"\n', "")
STACKS = (
    Broken("stack is gone", remove("auto.ome.tif"), ("auto.ome.tif",)),
    Broken("stack is an empty file", lambda f: (f / "auto.ome.tif").write_bytes(b""), ("auto.ome.tif", "empty file")),
    Broken("stack is cut short", cut("auto.ome.tif"), ("auto.ome.tif", "cannot be read", "cut short")),
    Broken("stack is no TIFF", lambda f: (f / "auto.ome.tif").write_text("x" * 99), ("auto.ome.tif", "cannot be read")),
    Broken("stack has an unknown suffix", both(
        lambda f: (f / "auto.jpg").write_bytes(b"x"), edit("brain.toml", "auto.ome.tif", "auto.jpg")),
        ("auto.jpg", "no format that is read here", "OME-Zarr")),
    Broken("no voxel size", stack("auto.tif"), ("auto.tif", "does not carry its voxel size", "voxel_um = [a, b, c]")),
    Broken("dots per inch are no voxel size", stack("auto.tif", resolution=(300, 300), resolutionunit=2),
           ("auto.tif", "does not carry its voxel size")),
    Broken("no distance of planes", stack("a.ome.tif", **ome(PhysicalSizeZ=None)),
           ("a.ome.tif", "[?, 50, 50] um", "voxel_um")),
    Broken("voxel size disagrees", edit("brain.toml", "orientation =", "voxel_um = [50, 50, 25]\norientation ="),
           ("voxel sizes disagree", "[50, 50, 50] um", "brain.toml says [50.0, 50.0, 25.0]")),
    Broken("axes of voxel_um swapped", both(stack("a.ome.tif", **ome(PhysicalSizeZ=100.0)),
           edit("brain.toml", "orientation =", "voxel_um = [50, 50, 100]\norientation =")),
           ("voxel sizes disagree", "[100, 50, 50]", "first axis first")),
    Broken("voxel size of two numbers", edit("brain.toml", "orientation =", "voxel_um = [50, 50]\norientation ="),
           ("voxel_um", "three sizes in um")),
    Broken("no orientation", NO_ORIENTATION, ("does not carry its orientation", 'orientation = "PIR"')),
    Broken("wrong orientation letters", edit("brain.toml", '"SAL"', '"SAI"'), ("'SAI'", "one letter each of R/L")),
    Broken("orientation disagrees", both(nifti(SAL_AFFINE), edit("brain.toml", '"SAL"', '"SAR"')),
           ("orientations disagree", "the file says 'SAL', brain.toml says 'SAR'")),
    Broken("dye channel is missing", edit("brain.toml", "orientation =", "dye_channel = 3\norientation ="),
           ("dye.ome.tif", "channel 3 is missing", "only channel 0")),
    Broken("colour pictures", stack("a.ome.tif", np.zeros((5, 9, 9, 3), np.uint8), photometric="rgb"), ("colour",)),
    Broken("complex voxels", stack("a.ome.tif", anatomy().background.astype(np.complex64), **ome()), ("complex64",)),
    Broken("a single plane", stack("a.ome.tif", anatomy().background[0]), ("three-dimensional", "stack of planes")),
    Broken("time series", stack("a.ome.tif", anatomy().background[:4, None], **ome(axes="TZYX")),
           ("more than one point along 't'",)),
    Broken("empty stack", stack("a.ome.tif", np.zeros((88, 128, 112), np.uint16), **ome()), ("stack is empty",)),
    Broken("NaN in the stack", stack("a.ome.tif", nan_stack(), **ome()), ("not finite", "NaN")),
    Broken("dye of another shape", small_dye, ("dye", "not on one grid")),
    Broken("a plane is missing", planes(remove("plane_20.tif")), ("missing between number 19 and number 21",)),
    Broken("a plane of another shape", planes(small_plane), ("plane_7.tif", "50 x 112", "128 x 112")),
    Broken("a plane is cut short", planes(cut("plane_9.tif")), ("plane_9.tif", "cannot be read")),
    Broken("planes of two channels in one folder", planes(lambda f: (f / "plane_3.tif").rename(f / "dye_3.tif")),
           ("more than one pattern", "dye_#, plane_#")),
    Broken("a folder without planes", planes(lambda f: [p.unlink() for p in f.iterdir()]), ("holds no TIFF planes",)),
    Broken("NIfTI without unit", nifti(SAL_AFFINE, "unknown"), ("[0.05, 0.05, 0.05] without a unit", "voxel_um")),
    Broken("tilted NIfTI", nifti(tilted()), ("tilted by 42 degrees",)),
    Broken("cut NIfTI", both(nifti(SAL_AFFINE), cut("auto.nii")), ("auto.nii", "cut short")),
    Broken("NRRD without unit", nrrd_stack(**{"space units": None}), ("without a unit",)),
    Broken("cut gzip NRRD", both(nrrd_stack(encoding="gzip"), cut("auto.nrrd")), ("auto.nrrd", "cannot be read")),
    Broken("OME-Zarr without units", zarr_stack(lambda m: [a.pop("unit") for a in m["axes"]]), ("without a unit",)),
    Broken("OME-Zarr without datasets", zarr_stack(lambda m: m.update(datasets=[])), ("no axes or no datasets",)),
    Broken("OME-Zarr with a lost level", zarr_stack(lambda m: m["datasets"].append({**m["datasets"][0], "path": "9"})),
           ("dataset '9'", "not there")),
)  # fmt: skip


# --- atlases


def labels(change: Change, name: str = "labels", **header: object) -> Make:
    """Write the labels (or the template) again, changed."""

    def make(folder: Path) -> None:
        import nrrd

        path = str(folder / "atlas" / f"{name}.nrrd")
        voxels, old = nrrd.read(path)
        kept = {key: old[key] for key in ("space", "space directions", "space units", "encoding")}
        kept = {key: value for key, value in (kept | header).items() if value is not None}
        nrrd.write(path, change(voxels), kept)

    return make


def some(value: int, n: int = 5) -> Change:
    """Set a few voxels in the middle to a value."""

    def change(voxels: np.ndarray) -> np.ndarray:
        voxels = voxels.astype(np.int64) if value < 0 else voxels
        voxels[30, 20, 20 : 20 + n] = value
        return voxels

    return change


TABLE, TOML = "atlas/structures.csv", "atlas/atlas.toml"
ATLASES = (
    Broken("atlas is gone", remove("atlas"), ("atlas",)),
    Broken("atlas.toml is gone", remove(TOML), ("holds no atlas.toml", "leadline atlas import")),
    Broken("atlas.toml is no TOML", edit(TOML, "name =", "name"), ("atlas.toml", "no valid TOML")),
    Broken("atlas.toml has an unknown key", edit(TOML, "licence", "license"), ("'license'", "'licence'")),
    Broken("atlas.toml lacks a key", edit(TOML, 'template = "template.nrrd"\n', ""), ("'template' is missing",)),
    Broken("bregma of two numbers", edit(TOML, "[2600.0, 200.0, 2750.0]", "[2600.0, 200.0]"), ("bregma_um", "three")),
    Broken("labels are gone", remove("atlas/labels.nrrd"), ("labels.nrrd", "not there")),
    Broken("labels are cut short", cut("atlas/labels.nrrd"), ("labels.nrrd",)),
    Broken("a label is not in the table", labels(some(777)),
           ("1 label has no row", "777 (5 voxels)", "structures.csv")),
    Broken("float labels", labels(lambda v: v.astype(np.float32)), ("float32", "above 16777216", "unsigned integers")),
    Broken("smoothed labels", labels(lambda v: v / 3.0), ("not whole numbers",)),
    Broken("negative labels", labels(some(-4)), ("label id -4",)),
    Broken("no label at all", labels(lambda v: v * 0), ("every voxel is 0",)),
    Broken("atlas orientation disagrees", edit(TOML, "name =", 'orientation = "PIL"\nname ='),
           ("'PIR'", "atlas.toml says 'PIL'")),
    Broken("atlas without voxel size", labels(lambda v: v, **{"space directions": None, "space units": None}),
           ("labels.nrrd", "does not carry its voxel size", "atlas.toml")),
    Broken("template on another grid", labels(lambda v: v[:-2], "template"), ("labels and template differ",)),
    Broken("template is empty", labels(lambda v: v * 0, "template"), ("template.nrrd", "every voxel is the same")),
    Broken("table lacks a column", edit(TABLE, "parent_id", "mother"), ("lacks the column parent_id",)),
    Broken("an id has two rows", edit(TABLE, '"12",', '"13",'), ("id 13 has two rows",)),
    Broken("an acronym is used twice", edit(TABLE, '"DGY"', '"THL"'), ("'THL' names both id 32 and id 50",)),
    Broken("a parent has no row", edit(TABLE, '"CCB","Corpus callosum","20"', '"CCB","Corpus callosum","23"'),
           ("parent 23, which has no row",)),
    Broken("a structure is its own ancestor", edit(TABLE, '"FT","Fibre tracts","997"', '"FT","Fibre tracts","21"'),
           ("own ancestor",)),
    Broken("a colour is none", edit(TABLE, "#e07070", "reddish"), ("line 16", "'reddish'", "hexadecimal")),
    Broken("an id is negative", edit(TABLE, '"50",', '"-50",'), ("id is '-50'",)),
    Broken("an id is a fraction", edit(TABLE, '"50",', '"50.5",'), ("id is '50.5'",)),
)  # fmt: skip


# --- probes


def probe_file(**changes: object) -> Make:
    """Write the probe file with changes to the first probe."""

    def make(folder: Path) -> None:
        content = probe()
        content["probes"][0].update(changes)  # type: ignore[index]
        (folder / "probe_a.json").write_text(json.dumps(content))

    return make


def moved(row: int, place: list[float]) -> list[list[float]]:
    """Contact positions with one contact elsewhere."""
    positions = probe()["probes"][0]["contact_positions"]  # type: ignore[index]
    positions[row] = place
    return positions


def two_probes(folder: Path) -> None:
    """Write the probe twice into one file."""
    content = probe()
    content["probes"] *= 2  # type: ignore[operator]
    (folder / "probe_a.json").write_text(json.dumps(content))


ANY = list(range(N_CONTACTS))
PROBES = (
    Broken("probe file is gone", remove("probe_a.json"), ("probe_a.json",)),
    Broken("probe file is no JSON", cut("probe_a.json"), ("probe_a.json", "no valid JSON")),
    Broken("probe file is another JSON", lambda f: (f / "probe_a.json").write_text("{}"), ("no probeinterface file",)),
    Broken("two probes in one file", two_probes, ("holds 2 probes", "probe_index")),
    Broken("a contact is not finite", probe_file(contact_positions=moved(3, [0.0, float("nan")])),
           ("contact 3", "no finite position")),
    Broken("two contacts in one place", probe_file(contact_positions=moved(4, [0.0, 0.0])),
           ("'c0' and 'c4' share the place",)),
    Broken("two contacts of one name", probe_file(contact_ids=["c0", *[f"c{k}" for k in ANY[:-1]]]), ("named 'c0'",)),
    Broken("metres for micrometres", probe_file(si_units="mm"), ("contacts span 1550 mm", "si_units")),
    Broken("y grows down the shank", probe_file(contact_positions=[[0.0, -50.0 * k] for k in ANY]),
           ("'c31' would lie 1450 um beyond the tip", "y must grow up the shank")),
    Broken("an unknown unit", probe_file(si_units="inch"), ("si_units is 'inch'",)),
    Broken("too few shank names", probe_file(shank_ids=["0"]), ("shank_ids has 1 entries for 32 contacts",)),
    Broken("a trace wired to two contacts", probe_file(device_channel_indices=[0, *ANY[:-1]]),
           ("trace 0 is wired to two contacts",)),
    Broken("wired beyond the recording", probe_file(device_channel_indices=[*ANY[:-1], 40]),
           ("'c31' is wired to trace 40", "33 traces")),
    Broken("wired to a skipped trace", probe_file(device_channel_indices=[*ANY[:-1], 32]),
           ("trace 32 is in skip_channels",)),
    Broken("33 traces for 32 contacts", edit("brain.toml", "skip_channels = [32]\n", ""),
           ("33 traces", "32 contacts", "skip_channels = [32]")),
    Broken("a skipped trace that is none", edit("brain.toml", "skip_channels = [32]", "skip_channels = [33]"),
           ("trace 33", "0 to 32")),
)  # fmt: skip

BROKEN = (*STACKS, *ATLASES, *PROBES)


def write_all(folder: Path) -> None:
    """Write every broken brain into a folder of its own."""
    for case in BROKEN:
        here = folder / case.name.replace(" ", "-")
        write_good_brain(here)
        case.make(here)


if __name__ == "__main__":
    write_all(Path(sys.argv[1]))
