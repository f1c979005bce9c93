"""Every reader of files that come from outside, each with good files to begin with and what it may name.

A case is one file's bytes: they are written into a folder in which all else is right, and the reader must give a value
or raise one LeadlineError.
"""

from __future__ import annotations

import gzip
import io
import json
import shutil
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
from tests.good_brain import BRAIN_TOML, probe, write_good_brain

VOXELS_READ = 2**22


@dataclass(frozen=True)
class Reader:
    """``file`` : the one that is spoilt, below the folder. ``make`` : lays the folder out and returns good contents of
    ``file``. ``read`` : reads it, given the folder."""

    name: str
    file: str
    make: Callable[[Path], list[bytes]]
    read: Callable[[Path], object]


def _alone(*contents: bytes | str) -> Callable[[Path], list[bytes]]:
    return lambda _: [c.encode() if isinstance(c, str) else c for c in contents]


# -- text ------------------------------------------------------------------------------------------------------------

BRAIN_MORE = """\
format = 1
brain = { name = "two" }
atlas = { path = "atlas" }
stack = { background = "s.tif", dye = "s.tif", background_channel = 0, dye_channel = 1, voxel_um = [8.0, 4, 4] }
knowledge = { path = "k.toml" }
[[penetration]]
name = "A"
probe = "p.json"
probe_index = 0
entry_near_um = [7900, 300, 8100]
points = "t.csv"
inserted_um = 3800.0
shank_toward = "P"
unit_table = "t.csv"
recording = [{ lfp = "r.nwb", spikes = "t.csv", events = "t.csv", exclude = "t.csv" }]
[settings.register]
resolution_um = 100.0
[settings.profile]
ripple_hz = [140, 220.0]
[settings.anchor]
seed = 1
"""


def _brain(folder: Path) -> list[bytes]:
    (folder / "atlas").mkdir(exist_ok=True)
    for name in ("auto.ome.tif", "dye.ome.tif", "s.tif", "probe_a.json", "p.json", "a_points.csv", "a_lfp.bin",
                 "a_spikes.csv", "a_events.csv", "a_exclude.csv", "t.csv", "k.toml", "r.nwb"):  # fmt: skip
        (folder / name).write_bytes(b"x")
    return [BRAIN_TOML.encode(), BRAIN_MORE.encode()]


def _read_brain(folder: Path) -> object:
    from leadline.io.brainfile import read_brain

    return read_brain(folder)


def _knowledge(folder: Path) -> list[bytes]:
    from importlib.resources import files

    whole = (files("leadline.anchoring") / "knowledge.toml").read_text()
    tables = whole.split("\n[")
    return [whole.encode(), *("\n[".join(["", *tables[k : k + 3]]).encode() for k in range(1, len(tables) - 3, 3))]


def _read_knowledge(folder: Path) -> object:
    from leadline.model.brain import Brain, StackSource
    from leadline.pipeline.bench import Bench

    brain = Brain(folder / "brain.toml", "x", folder, StackSource(folder), (), (), folder / "k.toml")
    return Bench(brain).knowledge


STRUCTURES = """\
id,acronym,name,parent_id,colour,layer,coarse,tissue
997,root,Whole brain,,#808080,,false,grey
10,CTX,Cerebral cortex,997,#70b060,,true,grey
11,"V,1",Primary visual area,10,70c060,1,false,grey
20,FT,Fibre tracts,997,,,true,white
"""
_LEAF = {"id": 2, "acronym": "a", "name": "Area, layer 5", "rgb_triplet": [1, 2, 3], "children": []}
TREE = {"id": 1, "acronym": "root", "name": "root", "parent_structure_id": None, "color_hex_triplet": "FFFFFF",
        "children": [_LEAF]}  # fmt: skip


def _read_structures(folder: Path) -> object:
    from leadline.io.structure_tables import read_structures

    return read_structures(folder / "structures.csv")


def _foreign(name: str) -> Callable[[Path], object]:
    def read(folder: Path) -> object:
        from leadline.atlas.importing import structures_from
        from leadline.atlas.structures import derive
        from leadline.io.structure_tables import read_foreign_table

        found = structures_from(read_foreign_table(folder / name), where=name)
        return derive(found.rows, given=found.given)

    return read


def _probe_files(_: Path) -> list[bytes]:
    small = probe()
    one = small["probes"][0]  # type: ignore[index]
    for key, value in list(one.items()):
        if isinstance(value, list):
            one[key] = value[:3]
    wired = {**small, "probes": [{**one, "device_channel_indices": [2, 0, -1]}, {**one, "si_units": "mm"}]}
    solid = {**one, "ndim": 3, "contact_positions": [[0, k, 0] for k in range(3)],
             "contact_plane_axes": [[[1, 0, 0], [0, 1, 0]]] * 3}  # fmt: skip
    return [json.dumps(v).encode() for v in (small, wired, {**small, "probes": [solid]})]


def _read_probe(folder: Path) -> object:
    from leadline.io.probes import read_probe, wire

    return wire(read_probe(folder / "p.json", tip_offset_um=100.0, probe_index=0), 3)


@cache
def _good_probe() -> object:
    from leadline.io.probes import read_probe, wire

    with TemporaryDirectory() as scratch:
        (Path(scratch) / "p.json").write_text(json.dumps(probe()))
        return wire(read_probe(Path(scratch) / "p.json", tip_offset_um=100.0), 33, (32,))


def _read_spikes(name: str) -> Callable[[Path], object]:
    def read(folder: Path) -> object:
        from leadline.io.spikes import read_spikes

        return read_spikes(folder / name, _good_probe())  # type: ignore[arg-type]

    return read


def _by(module: str, function: str, name: str, *more: object) -> Callable[[Path], object]:
    """A reader of one file by a function of ``leadline.io``."""

    def read(folder: Path) -> object:
        from importlib import import_module

        return getattr(import_module(f"leadline.{module}"), function)(folder / name, *more)

    return read


def _both(*reads: Callable[[Path], object]) -> Callable[[Path], object]:
    """Several readers of one file; the first error counts for all that would say the same."""
    from leadline.base.errors import LeadlineError

    def read(folder: Path) -> object:
        found = []
        for one in reads:
            try:
                found.append(one(folder))
            except LeadlineError as error:
                found.append(error)
        return found

    return read


SPIKES = ("time_s,unit_id,tip_distance_um,amplitude_uv\n0.1,u1,150,40\n0.25,u2,1200.5,80\n",
          "time_s,unit_id,channel,width_s,shank\n0.1,1,0,0.0004,0\n0.2,2,31,0.001,0\n")  # fmt: skip
ANCHORS = ("penetration,shank,tip_distance_um,track_depth_um,sd_um,landmark,source,note\nA,0,1140,600,40,,user,x\n",
           "penetration,shank,tip_distance_um,track_depth_um,sd_um,landmark,source,note,support,against\n"
           "A,0,700.0,1020.5,35,CA1,auto,,\"peak, here\",'=x\n")  # fmt: skip
POINTS = "s0_um,s1_um,s2_um,shank\n1.5,2,3,0\n4,5,6,0\n7,8,9,1\n1,1,1,1\n"
EDITS = "penetration,shank,s0_um,s1_um,s2_um,order\nA,0,1,2,3,0\nA,0,4,5,6,1\n"
PAIRS = "s0_um,s1_um,s2_um,ap_um,dv_um,ml_um\n1,2,3,4,5,6\n"
UNITS = "unit_id,recording,cell_type,latency_ms\nu0,1,wide,20\nu1,2,=narrow,\n"


def _steps(_: Path) -> list[bytes]:
    done = {"key": "k", "outputs": {"out/a.csv": "f"}, "warnings": ["w"], "inputs": {}, "extra": {"a": [1]}}
    return [json.dumps({"format": 1, "steps": {"register": done, "anchor": done}}).encode()]


def _read_steps(folder: Path) -> object:
    from leadline.pipeline.record import Record

    record = Record(folder, folder / ".leadline")
    return [done.intact(folder) and done.product for done in record.steps.values()]


# -- recordings ------------------------------------------------------------------------------------------------------


def _flat(_: Path) -> list[bytes]:
    rng = np.random.default_rng(1)
    return [bytes([2, 10, 0, 0]) + rng.normal(0, 90, (30, 2)).astype("<i2").tobytes(),
            bytes([3, 4, 1, 0]) + rng.normal(0, 90, (9, 3)).astype("<f4").tobytes()]  # fmt: skip


def _read_traces(folder: Path) -> object:
    from leadline.io.recordings import open_traces
    from leadline.model.brain import RecordingSource

    file = folder / "r.bin"
    data = file.read_bytes()
    n, hz, kind, scale = (*data[:4], 0, 0, 0, 0)[:4]
    file.write_bytes(data[4:])
    dtype = ("int16", "float32")[kind % 2]
    source = RecordingSource(file, float(hz), n, dtype, 10.0 ** (scale % 40 - 20))
    traces = open_traces(source)
    return traces.read_uv(0, min(traces.n_samples, 500), np.arange(traces.n_channels))


def _parquet(_: Path) -> list[bytes]:
    import pandas as pd

    found = []
    for text in SPIKES:
        out = io.BytesIO()
        pd.read_csv(io.StringIO(text)).to_parquet(out, index=False)
        found.append(out.getvalue())
    return found


# -- volumes ---------------------------------------------------------------------------------------------------------


def _stack(name: str) -> Callable[[Path], object]:
    """Open as a stack, look at both ends of the pyramid, and read it whole where it is small."""

    def read(folder: Path) -> object:
        from leadline.base.errors import LeadlineError
        from leadline.io.images import settle, volume_of
        from leadline.io.reduce import reduce_to
        from leadline.io.stacks import open_image
        from leadline.model.volume import Stack

        image = open_image(folder / name)
        try:
            voxel, code = settle(image, None, None)
        except LeadlineError:
            told = image.voxel_um
            given = [8.0 if size is None else size for size in told]
            missing = iter("PIR")
            code = "".join(next(missing) if letter is None else letter for letter in image.letters)
            voxel, code = settle(image, given, code)
        stack = Stack(tuple(volume_of(level, voxel, code) for level in image.levels))
        for volume in (stack.levels[0], stack.levels[-1]):
            np.asarray(volume.data[0:1, 0:8, 0:8])
        if np.prod([float(n) for n in stack.finest.shape]) <= VOXELS_READ:
            reduce_to(stack.levels[0], float(stack.finest.voxel_um.max()) * 2)
        return stack

    return read


def _cube(dtype: str = "<u2", shape: tuple[int, ...] = (5, 6, 7)) -> np.ndarray:
    return np.random.default_rng(2).integers(0, 200, shape).astype(dtype)


def _tiffs(folder: Path) -> list[bytes]:
    import tifffile

    found = []
    size = {"axes": "ZYX", "PhysicalSizeX": 8.0, "PhysicalSizeY": 8.0, "PhysicalSizeZ": 8.0}
    for options in (
        {"metadata": size, "ome": True},
        {"metadata": size, "ome": True, "compression": "zlib", "tile": (16, 16)},
        {"imagej": True, "resolution": (0.1, 0.1), "metadata": {"spacing": 8.0, "unit": "um"}},
        {"photometric": "minisblack", "byteorder": ">", "bigtiff": True},
        {"photometric": "minisblack", "compression": "lzw", "predictor": True},
    ):
        tifffile.imwrite(folder / "a.tif", _cube(), **options)
        found.append((folder / "a.tif").read_bytes())
    with tifffile.TiffWriter(folder / "a.tif", ome=True) as out:
        out.write(_cube("u1", (4, 16, 16)), subifds=1, metadata=size)
        out.write(_cube("u1", (4, 8, 8)), subfiletype=1)
    found.append((folder / "a.tif").read_bytes())
    (folder / "a.tif").unlink()
    return found


def _planes(folder: Path) -> list[bytes]:
    import tifffile

    for k in range(3):
        tifffile.imwrite(folder / f"p_{k}.tif", _cube()[k])
    return [(folder / "p_1.tif").read_bytes()]


def _nrrds(folder: Path) -> list[bytes]:
    import nrrd

    space = {"space": "left-posterior-superior", "space units": ["um"] * 3,
             "space directions": [[8.0, 0, 0], [0, 8, 0], [0, 0, -8]]}  # fmt: skip
    found = []
    for header in (
        {**space, "encoding": "raw"}, {**space, "encoding": "gzip"}, {"encoding": "ascii", "spacings": [1, 2, 3]},
        {"encoding": "bzip2", "spacings": [8, 8, 8], "units": ["um"] * 3, "kinds": ["domain"] * 3},
    ):  # fmt: skip
        nrrd.write(str(folder / "a.nrrd"), _cube(), header)
        found.append((folder / "a.nrrd").read_bytes())
    nrrd.write(str(folder / "b.nhdr"), _cube(), {**space, "encoding": "raw"})
    found.append((folder / "b.nhdr").read_bytes())
    return found


def _niftis(folder: Path) -> list[bytes]:
    import nibabel

    found = []
    for kind, dtype in ((nibabel.Nifti1Image, "<u2"), (nibabel.Nifti2Image, "<f4"), (nibabel.Nifti1Image, "u1")):
        image = kind(_cube(dtype), np.diag([0.008, 0.008, -0.008, 1]))
        image.header.set_xyzt_units("mm")
        image.set_sform(image.affine, 1)
        nibabel.save(image, folder / "a.nii")
        found.append((folder / "a.nii").read_bytes())
    (folder / "a.nii").unlink()
    return found


def _packed(folder: Path) -> list[bytes]:
    return [gzip.compress(data, mtime=0) for data in _niftis(folder)]


def _zarr(version: int, name: str) -> Callable[[Path], list[bytes]]:
    def make(folder: Path) -> list[bytes]:
        import zarr

        root = folder / "a.zarr"
        shutil.rmtree(root, ignore_errors=True)
        group = zarr.open_group(str(root), mode="w", zarr_format=version)
        for level, n in ((0, 8), (1, 4)):
            shards = {"shards": (8, 8, 8)} if version == 3 and level == 0 else {}
            group.create_array(str(level), data=_cube("u2", (n, n, n)), chunks=(4, 4, 4), **shards)
        axes = [{"name": a, "type": "space", "unit": "micrometer"} for a in "zyx"]
        axes[0]["orientation"] = {"type": "anatomical", "value": "inferior-to-superior"}
        datasets = [{"path": str(k), "coordinateTransformations": [
            {"type": "scale", "scale": [8.0 * 2**k] * 3}, {"type": "translation", "translation": [4.0 * k] * 3}]}
            for k in (0, 1)]  # fmt: skip
        scales = [{"axes": axes, "datasets": datasets, "version": "0.4"}]
        group.attrs.update(
            {"multiscales": scales} if version == 2 else {"ome": {"version": "0.5", "multiscales": scales}}
        )
        return [(root / name).read_bytes()]

    return make


# -- files of others, read by libraries in C ---------------------------------------------------------------------------


def _transforms(folder: Path) -> list[bytes]:
    from leadline.io.transforms import write_transforms
    from leadline.model.transform import Affine, Field, PointTransform

    affine = Affine(np.eye(3), np.ones(3))
    field = Field(np.ones((3, 3, 3, 3)), np.full(3, 100.0), np.zeros(3))
    found = []
    for transform in (PointTransform(affine), PointTransform(affine, field, affine)):
        write_transforms(folder / "a.npz", {"t": transform})
        found.append((folder / "a.npz").read_bytes())
    return found


def _nwbs(folder: Path) -> list[bytes]:
    from tests.made_nwb import write_nwb

    write_good_brain(folder)
    rows = np.fromfile(folder / "a_lfp.bin", "<i2").reshape(-1, 33)[:2600]
    rows.tofile(folder / "a_lfp.bin")
    found = [write_nwb(folder).read_bytes()]
    for path in list(folder.iterdir()):
        shutil.rmtree(path) if path.is_dir() else path.unlink()
    return found


def _read_nwb(folder: Path) -> object:
    from leadline.io import nwb

    def traces(folder: Path) -> object:
        found = nwb.open_nwb(folder / "s.nwb", _good_probe(), "A")  # type: ignore[arg-type]
        return found.read_uv(0, 100, np.arange(found.n_channels))

    return _both(
        traces,
        lambda f: nwb.read_nwb_spikes(f / "s.nwb", _good_probe(), "A"),  # type: ignore[arg-type]
        lambda f: nwb.read_nwb_events(f / "s.nwb", "A"),
        lambda f: nwb.read_nwb_excluded(f / "s.nwb", "A"),
        lambda f: __import__("leadline.io.export_nwb", fromlist=["x"]).electrodes_of(f / "s.nwb"),
    )(folder)


def _profile(folder: Path) -> list[bytes]:
    from leadline.io.profiles import write_profile
    from leadline.model.profile import Profile

    x = np.arange(5.0)
    write_profile(folder / "a.parquet", Profile("A", np.zeros(5, int), x, {"delta_power_db": x}))
    return [(folder / "a.parquet").read_bytes()]


def _spectra(folder: Path) -> list[bytes]:
    from leadline.io.profiles import write_spectra
    from leadline.model.spectra import Spectra

    x, f, t = np.arange(3.0), np.arange(1.0, 5.0), np.arange(4.0)
    evoked = np.ones((3, 4))
    write_spectra(folder / "a.npz", Spectra("A", np.zeros(3, int), x, f, np.ones((3, 4)), t, evoked, evoked, "flash"))
    return [(folder / "a.npz").read_bytes()]


def _atlas(file: str) -> Callable[[Path], list[bytes]]:
    def make(folder: Path) -> list[bytes]:
        import nrrd

        header = {"space": "right-anterior-superior", "space units": ["um"] * 3, "encoding": "raw",
                  "space directions": [[0, -100.0, 0], [0, 0, -100.0], [100.0, 0, 0]]}  # fmt: skip
        labels = np.where(_cube("u4", (4, 5, 6)) > 100, 10, 0).astype("u4")
        nrrd.write(str(folder / "labels.nrrd"), labels, header)
        nrrd.write(str(folder / "template.nrrd"), _cube("u2", (4, 5, 6)), header)
        (folder / "structures.csv").write_text(STRUCTURES)
        (folder / "atlas.toml").write_text(
            'name = "Tiny"\ncitation = "x"\nlicence = "CC0"\nlabels = "labels.nrrd"\ntemplate = "template.nrrd"\n'
            'structures = "structures.csv"\nbregma_um = [260.0, 20.0, 275.0]\norientation = "PIR"\n'
        )
        return [(folder / file).read_bytes()]

    return make


def _read_atlas(folder: Path) -> object:
    from leadline.pipeline.atlas_import import check_atlas

    return check_atlas(folder)


def _history(_: Path) -> list[bytes]:
    from leadline.model.anchor import Anchor
    from leadline_napari.history import REDO, UNDO, line_of
    from leadline_napari.session import Edits

    lines = [line_of(Edits()), line_of(Edits((Anchor("A", 0, 1140.0, 600.0),))), UNDO, REDO]
    return ["".join(f"{line}\n" for line in lines).encode()]


def _read_history(folder: Path) -> object:
    from leadline_napari.store import Store

    return Store(replace(_any_brain(), file=folder / "brain.toml")).open()  # type: ignore[type-var]


@cache
def _any_brain() -> object:
    from leadline.io.brainfile import read_brain

    with TemporaryDirectory() as scratch:
        _brain(Path(scratch))
        (Path(scratch) / "brain.toml").write_text(BRAIN_TOML)
        return read_brain(Path(scratch))


READERS = {
    reader.name: reader
    for reader in (
        Reader("brain.toml", "brain.toml", _brain, _read_brain),
        Reader("knowledge", "k.toml", _knowledge, _read_knowledge),
        Reader("structures", "structures.csv", _alone(STRUCTURES), _read_structures),
        Reader("foreign-csv", "f.csv", _alone(STRUCTURES, STRUCTURES.replace(",", ";")), _foreign("f.csv")),
        Reader("foreign-json", "f.json", _alone(json.dumps([TREE]), json.dumps({"msg": [TREE]})), _foreign("f.json")),
        Reader("atlas.toml", "atlas.toml", _atlas("atlas.toml"), _read_atlas),
        Reader("labels", "labels.nrrd", _atlas("labels.nrrd"), _read_atlas),
        Reader("probe", "p.json", _probe_files, _read_probe),
        Reader("spikes-csv", "s.csv", _alone(*SPIKES), _read_spikes("s.csv")),
        Reader("spikes-parquet", "s.parquet", _parquet, _read_spikes("s.parquet")),
        Reader("events", "e.csv", _alone("time_s,kind\n0.5,flash\n1,tone\n"), _by("io.spikes", "read_events", "e.csv")),
        Reader("exclude", "x.csv", _alone("start_s,stop_s\n2.1,2.4\n"), _by("io.spikes", "read_excluded", "x.csv")),
        Reader("anchors", "a.csv", _alone(*ANCHORS), _both(_by("io.tables", "read_anchors", "a.csv"),
                                                         _by("io.tables", "read_suggestions", "a.csv"))),
        Reader("points", "p.csv", _alone(POINTS), _by("io.points", "read_hand_points", "p.csv")),
        Reader("track-edits", "t.csv", _alone(EDITS), _by("io.points", "read_track_edits", "t.csv")),
        Reader("pairs", "q.csv", _alone(PAIRS), _by("io.points", "read_pairs", "q.csv")),
        Reader("units", "u.csv", _alone(UNITS), _by("io.units", "read_unit_table", "u.csv")),
        Reader("steps", ".leadline/steps.json", _steps, _read_steps),
        Reader("history", ".leadline/history.jsonl", _history, _read_history),
        Reader("flat", "r.bin", _flat, _read_traces),
        Reader("tiff", "a.tif", _tiffs, _stack("a.tif")),
        Reader("planes", "p_1.tif", _planes, _stack("")),
        Reader("nrrd", "a.nrrd", _nrrds, _stack("a.nrrd")),
        Reader("nifti", "a.nii", _niftis, _stack("a.nii")),
        Reader("nifti-gz", "a.nii.gz", _packed, _stack("a.nii.gz")),
        Reader("zarr2-group", "a.zarr/.zattrs", _zarr(2, ".zattrs"), _stack("a.zarr")),
        Reader("zarr2-array", "a.zarr/0/.zarray", _zarr(2, "0/.zarray"), _stack("a.zarr")),
        Reader("zarr3-group", "a.zarr/zarr.json", _zarr(3, "zarr.json"), _stack("a.zarr")),
        Reader("zarr3-array", "a.zarr/0/zarr.json", _zarr(3, "0/zarr.json"), _stack("a.zarr")),
        Reader("transform", "a.npz", _transforms, _by("io.transforms", "read_transforms", "a.npz", ("t",))),
        Reader("nwb", "s.nwb", _nwbs, _read_nwb),
        Reader("profile", "a.parquet", _profile, _by("io.profiles", "read_profile", "a.parquet")),
        Reader("spectra", "a.npz", _spectra, _by("io.profiles", "read_spectra", "a.npz")),
    )
}  # fmt: skip
