import gzip
import json

import nibabel as nib
import nrrd
import numpy as np
import pytest
import tifffile
import zarr
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.io.formats_planes import in_order
from leadline.io.stacks import open_stack

VOXELS = np.random.default_rng(0).integers(0, 4000, (6, 20, 24)).astype(np.uint16)
SIZE = {"axes": "ZYX", "PhysicalSizeX": 4.0, "PhysicalSizeY": 5.0, "PhysicalSizeZ": 8.0}
ZARR_AXES = [{"name": n, "type": "space", "unit": "micrometer"} for n in "zyx"]


def refuses(path, words, **given):
    with pytest.raises(LeadlineError, match=words) as caught:
        open_stack(path, **given)
    assert caught.value.mend


def holds(stack, voxels=VOXELS, voxel_um=(8.0, 5.0, 4.0), code="PIR"):
    finest = stack.finest
    assert finest.shape == voxels.shape
    assert finest.voxel_um == pytest.approx(voxel_um)
    assert finest.code == code
    np.testing.assert_array_equal(finest.array(), voxels)
    np.testing.assert_array_equal(finest.data[1:3, 4:9, ::2], voxels[1:3, 4:9, ::2])
    assert finest.array().dtype.isnative


# --- OME-Zarr


def write_zarr(path, levels=(VOXELS,), fmt=2, axes=None, steps=None, chunks=None):
    group = zarr.open_group(path, mode="w", zarr_format=fmt)
    axes = ZARR_AXES if axes is None else axes
    datasets = []
    for k, voxels in enumerate(levels):
        group.create_array(str(k), data=voxels, chunks=chunks or tuple(min(8, n) for n in voxels.shape))
        scale = [8.0, 5.0 * 2**k, 4.0 * 2**k]
        own = [{"type": "scale", "scale": [1.0] * (voxels.ndim - 3) + scale}] if steps is None else steps[k]
        datasets.append({"path": str(k), "coordinateTransformations": own})
    scales = [{"axes": axes, "datasets": datasets}]
    group.attrs.update({"ome": {"version": "0.5", "multiscales": scales}} if fmt == 3 else {"multiscales": scales})
    return path


@pytest.mark.parametrize("fmt", [2, 3])
def test_ome_zarr_of_both_versions(tmp_path, fmt):
    holds(open_stack(write_zarr(tmp_path / "a.ome.zarr", fmt=fmt), code="PIR"))


def test_ome_zarr_channels_units_and_orientation(tmp_path):
    ways = ("posterior-to-anterior", "dorsal-to-ventral", "right-to-left")
    axes = [{"name": "t", "type": "time"}, {"name": "c", "type": "channel"}]
    axes += [
        {"name": n, "type": "space", "unit": "millimeter", "orientation": {"type": "anatomical", "value": w}}
        for n, w in zip("zyx", ways, strict=True)
    ]
    steps = [[{"type": "scale", "scale": [1, 1, 0.008, 0.005, 0.004]}]]
    both = np.stack([VOXELS, VOXELS + 1])[None]
    path = write_zarr(tmp_path / "a.zarr", (both,), axes=axes, steps=steps, chunks=(1, 1, 4, 8, 8))
    holds(open_stack(path, channel=1), VOXELS + 1, code="AIL")
    refuses(path, "channel 2 is missing; the file has channels 0 to 1", channel=2)
    refuses(path, "orientations disagree: the file says 'AIL', brain.toml says 'PIR'", code="PIR")


def test_levels_lie_where_translations_put_them(tmp_path):
    steps = [
        [{"type": "scale", "scale": [8, 5, 4]}, {"type": "translation", "translation": [10, 0, 0]}],
        [{"type": "scale", "scale": [16, 10, 8]}, {"type": "translation", "translation": [14, 2.5, 2]}],
    ]
    stack = open_stack(write_zarr(tmp_path / "a.zarr", (VOXELS, VOXELS[::2, ::2, ::2]), steps=steps), code="PIR")
    coarse = stack.levels[1]
    assert coarse.voxel_um.tolist() == [16, 10, 8]
    assert coarse.origin_um.tolist() == [4, 2.5, 2]
    assert stack.finest.origin_um.tolist() == [0, 0, 0]


@pytest.mark.parametrize("how", ["every second", "mean"])
def test_levels_without_translation_lie_where_their_voxels_say(tmp_path, how):
    fine = np.random.default_rng(1).normal(500, 100, (6, 40, 40)).astype(np.float32)
    boxes = fine.reshape(6, 20, 2, 20, 2)
    coarse = boxes[:, :, 0, :, 0] if how == "every second" else boxes.mean(axis=(2, 4))
    inside = 0.0 if how == "every second" else 0.5
    for stack in (
        open_stack(write_zarr(tmp_path / "a.zarr", (fine, coarse)), code="PIR"),
        open_stack(write_pyramid(tmp_path / "a.ome.tif", (fine, coarse)), code="PIR"),
    ):
        assert stack.levels[1].origin_um == pytest.approx([0, inside * 5, inside * 4])


def test_axes_of_space_may_have_names_of_their_own(tmp_path):
    axes = [{"name": n, "type": "space", "unit": "micrometer"} for n in ("slice", "row", "column")]
    holds(open_stack(write_zarr(tmp_path / "a.zarr", axes=axes), code="PIR"))


def test_transformations_of_the_whole_image_count(tmp_path):
    path = write_zarr(tmp_path / "a.zarr", steps=[[{"type": "scale", "scale": [4, 5, 2]}]])
    meta = json.loads((path / ".zattrs").read_text())
    meta["multiscales"][0]["coordinateTransformations"] = [{"type": "scale", "scale": [2, 1, 2]}]
    (path / ".zattrs").write_text(json.dumps(meta))
    holds(open_stack(path, code="PIR"))


def test_a_bare_zarr_array_needs_everything_from_the_user(tmp_path):
    zarr.create_array(str(tmp_path / "a.zarr"), data=VOXELS)
    holds(open_stack(tmp_path / "a.zarr", voxel_um=(8, 5, 4), code="PIR"))
    refuses(tmp_path / "a.zarr", "does not carry its voxel size")


def test_faults_of_ome_zarr(tmp_path):
    refuses(write_zarr(tmp_path / "n.zarr", axes=[{"name": n, "type": "space"} for n in "zyx"]), "without a unit")
    path = write_zarr(tmp_path / "t.zarr", (np.stack([VOXELS] * 2),), axes=[{"name": "t", "type": "time"}, *ZARR_AXES])
    refuses(path, r"more than one point along 't' \[2\]", code="PIR")
    refuses(
        write_zarr(tmp_path / "p.zarr", steps=[[{"type": "affine", "path": "m"}]]), "type 'affine' that is not read"
    )
    refuses(write_zarr(tmp_path / "s.zarr", steps=[[{"type": "scale", "scale": [8, 0, 4]}]]), "its scale is")
    refuses(write_zarr(tmp_path / "x.zarr", steps=[[{"scale": [1, 1, 1]}]]), "metadata are not as")
    lost = write_zarr(tmp_path / "l.zarr", (VOXELS, VOXELS[:, ::2, ::2]))
    for file in sorted((lost / "1").rglob("*"), reverse=True):
        file.unlink() if file.is_file() else file.rmdir()
    refuses(lost, "dataset '1' is named in its metadata but is not there", code="PIR")
    two = [{"name": n, "type": "channel"} for n in "ab"]
    path = write_zarr(tmp_path / "c.zarr", (VOXELS[None, None],), axes=[*two, *ZARR_AXES])
    refuses(path, "two axes of channels", code="PIR")
    zarr.open_group(tmp_path / "e.zarr", mode="w", zarr_format=2)
    refuses(tmp_path / "e.zarr", "carries no 'multiscales' metadata")
    (tmp_path / "nothing.zarr").mkdir()
    refuses(tmp_path / "nothing.zarr", "cannot be read")


# --- TIFF


def write_pyramid(path, levels):
    with tifffile.TiffWriter(path, bigtiff=True) as writer:
        writer.write(levels[0], subifds=len(levels) - 1, tile=(16, 16), metadata=SIZE, compression="zlib")
        for level in levels[1:]:
            writer.write(level, subfiletype=1, tile=(16, 16), compression="zlib")
    return path


@pytest.mark.parametrize(
    "written",
    [
        {},
        {"compression": "lzw"},
        {"compression": "zlib", "tile": (16, 16)},
        {"bigtiff": True},
        {"byteorder": ">"},
    ],
)
def test_ome_tiff(tmp_path, written):
    tifffile.imwrite(tmp_path / "a.ome.tif", VOXELS, metadata=SIZE, **written)
    holds(open_stack(tmp_path / "a.ome.tif", code="PIR"))
    refuses(tmp_path / "a.ome.tif", "does not carry its orientation")


@pytest.mark.parametrize("axes", ["CZYX", "ZCYX"])
def test_ome_tiff_channels_and_units(tmp_path, axes):
    both = np.stack([VOXELS, VOXELS[::-1]], axis=axes.index("C"))
    size = {k: v / 1000 for k, v in SIZE.items() if k != "axes"} | {f"PhysicalSize{a}Unit": "mm" for a in "XYZ"}
    tifffile.imwrite(tmp_path / "a.ome.tif", both, metadata={"axes": axes, **size}, photometric="minisblack")
    holds(open_stack(tmp_path / "a.ome.tif", channel=1, code="PIR"), VOXELS[::-1])


def test_an_absent_size_is_unknown_and_not_one(tmp_path):
    size = {k: v for k, v in SIZE.items() if k != "PhysicalSizeZ"}
    tifffile.imwrite(tmp_path / "a.ome.tif", VOXELS, metadata=size)
    refuses(tmp_path / "a.ome.tif", r"does not carry its voxel size \(the file says \[\?, 5, 4\] um\)", code="PIR")
    holds(open_stack(tmp_path / "a.ome.tif", voxel_um=(8, 5, 4), code="PIR"))
    refuses(tmp_path / "a.ome.tif", r"disagree: the file says \[\?, 5, 4\] um", voxel_um=(8, 4, 5), code="PIR")


def test_a_unit_on_one_axis_only_leaves_the_others_unknown(tmp_path):
    size = SIZE | {"PhysicalSizeX": 0.004, "PhysicalSizeXUnit": "mm"}
    tifffile.imwrite(tmp_path / "a.ome.tif", VOXELS, metadata=size)
    refuses(tmp_path / "a.ome.tif", r"the file says \[\?, \?, 4\] um", code="PIR")


def test_imagej_tiff(tmp_path):
    said = {"axes": "ZYX", "spacing": 8.0, "unit": "um"}
    tifffile.imwrite(tmp_path / "a.tif", VOXELS, imagej=True, resolution=(1 / 4, 1 / 5), metadata=said)
    holds(open_stack(tmp_path / "a.tif", code="PIR"))
    refuses(tmp_path / "a.tif", "voxel sizes disagree", voxel_um=(8, 4, 5), code="PIR")
    tifffile.imwrite(tmp_path / "b.tif", VOXELS, imagej=True, resolution=(1 / 4, 1 / 5), metadata={"axes": "ZYX"})
    refuses(tmp_path / "b.tif", "the file says nothing")


def test_plain_tiff_tells_nothing_of_size_even_with_dots_per_inch(tmp_path):
    tifffile.imwrite(tmp_path / "a.tif", VOXELS, resolution=(300, 300), resolutionunit=2)
    refuses(tmp_path / "a.tif", r"the file says nothing\)\. Write voxel_um = \[a, b, c\] in brain.toml")
    holds(open_stack(tmp_path / "a.tif", voxel_um=(8, 5, 4), code="PIR"))
    with tifffile.TiffWriter(tmp_path / "b.tif") as writer:
        for plane in VOXELS:
            writer.write(plane, contiguous=False)
    holds(open_stack(tmp_path / "b.tif", voxel_um=(8, 5, 4), code="PIR"))


def test_faults_of_tiff(tmp_path):
    whole = tmp_path / "a.ome.tif"
    for written in ({}, {"compression": "zlib"}, {"tile": (16, 16)}):
        tifffile.imwrite(whole, VOXELS, metadata=SIZE, **written)
        (tmp_path / "cut.ome.tif").write_bytes(whole.read_bytes()[: whole.stat().st_size * 6 // 10])
        refuses(tmp_path / "cut.ome.tif", "cannot be read", code="PIR")
    tifffile.imwrite(tmp_path / "rgb.ome.tif", np.zeros((6, 20, 24, 3), np.uint8), photometric="rgb")
    refuses(tmp_path / "rgb.ome.tif", "colour")
    tifffile.imwrite(tmp_path / "one.tif", VOXELS[0])
    refuses(tmp_path / "one.tif", "no three-dimensional stack")
    tifffile.imwrite(tmp_path / "c.tif", VOXELS.astype(np.complex64))
    refuses(tmp_path / "c.tif", "voxels are of type complex64")
    tifffile.imwrite(tmp_path / "q.tif", np.stack([VOXELS] * 2))
    refuses(tmp_path / "q.tif", "has 4 axes and does not name them")
    tifffile.imwrite(tmp_path / "t.ome.tif", VOXELS, metadata={"axes": "TYX"})
    refuses(
        tmp_path / "t.ome.tif", r"more than one point along 't' \[6\]. The axes are TYX: .* name the axis of planes Z"
    )
    (tmp_path / "no.tif").write_text("not a TIFF")
    refuses(tmp_path / "no.tif", "cannot be read")
    with tifffile.TiffWriter(tmp_path / "two.tif") as writer:
        writer.write(VOXELS[0], contiguous=False)
        writer.write(VOXELS[0, :9], contiguous=False)
    refuses(tmp_path / "two.tif", "planes differ in shape")


# --- a folder of planes


def write_planes(folder, numbers=range(6), name="plane_{}.tif", **written):
    folder.mkdir()
    for k, number in enumerate(numbers):
        tifffile.imwrite(folder / name.format(number), VOXELS[k], **written)
    return folder


def test_planes_come_in_natural_order(tmp_path):
    folder = write_planes(tmp_path / "p", (7, 8, 9, 10, 11, 12), compression="lzw")
    (folder / "notes.txt").write_text("by hand")
    (folder / "._plane_7.tif").write_bytes(b"")
    holds(open_stack(folder, voxel_um=(8, 5, 4), code="PIR"))
    refuses(folder, "the file says nothing")


def test_planes_of_several_channels(tmp_path):
    folder = tmp_path / "p"
    folder.mkdir()
    for k in range(6):
        tifffile.imwrite(folder / f"{k}.tif", np.stack([VOXELS[k] + 1, VOXELS[k]]), photometric="minisblack")
    holds(open_stack(folder, channel=1, voxel_um=(8, 5, 4), code="PIR"))
    refuses(folder, "channel 2 is missing", channel=2)


def test_planes_may_tell_their_pixel_size(tmp_path):
    folder = tmp_path / "p"
    folder.mkdir()
    for k in range(6):
        size = {"axes": "YX", "PhysicalSizeX": 4.0, "PhysicalSizeY": 5.0}
        tifffile.imwrite(folder / f"{k}.ome.tif", VOXELS[k], metadata=size)
    refuses(folder, r"the file says \[\?, 5, 4\] um")
    holds(open_stack(folder, voxel_um=(8, 5, 4), code="PIR"))


def test_faults_of_a_folder_of_planes(tmp_path):
    refuses(write_planes(tmp_path / "gap", (1, 2, 3, 5, 6, 7)), "missing between number 3 and number 5")
    other = write_planes(tmp_path / "other")
    tifffile.imwrite(other / "plane_3.tif", VOXELS[3, :10])
    refuses(other, r"plane_3.tif: is 10 x 24 of uint16, 1 channel, the plane plane_0.tif is 20 x 24")
    tifffile.imwrite(other / "plane_3.tif", VOXELS[3].astype(np.uint8))
    refuses(other, "of uint8")
    cut = write_planes(tmp_path / "cut")
    (cut / "plane_4.tif").write_bytes((cut / "plane_4.tif").read_bytes()[:500])
    refuses(cut, "plane_4.tif: cannot be read")
    two = write_planes(tmp_path / "two")
    tifffile.imwrite(two / "dye_1.tif", VOXELS[0])
    refuses(two, "more than one pattern: dye_#, plane_#")
    (tmp_path / "empty").mkdir()
    refuses(tmp_path / "empty", "holds no TIFF planes")
    refuses(write_planes(tmp_path / "single", [1]), "single plane")


@settings(deadline=None)
@given(st.integers(0, 50), st.integers(1, 7), st.integers(2, 200))
def test_numbers_may_start_and_step_as_they_like(first, step, n):
    from pathlib import Path

    numbers = range(first, first + n * step, step)
    files = [Path(f"s01_{k}_x.tif") for k in sorted(numbers, key=str)]
    assert [f.name for f in in_order(files, Path())] == [f"s01_{k}_x.tif" for k in numbers]


# --- NIfTI

PIR_MM = np.array([[0, 0, 0.004, 0], [-0.008, 0, 0, 0], [0, -0.005, 0, 0], [0, 0, 0, 1.0]])


def write_nifti(path, voxels=VOXELS, affine=PIR_MM, unit="mm", **changes):
    image = nib.Nifti1Image(voxels, affine)
    image.header.set_xyzt_units(unit)
    for key, value in changes.items():
        getattr(image, key)(*value)
    nib.save(image, path)
    return path


@pytest.mark.parametrize("suffix", [".nii", ".nii.gz"])
def test_nifti(tmp_path, suffix):
    stack = open_stack(write_nifti(tmp_path / f"a{suffix}"))
    holds(stack)
    assert stack.finest.chunk == (6, 20, 1)
    um = PIR_MM * [1000, 1000, 1000, 1]
    holds(open_stack(write_nifti(tmp_path / f"um{suffix}", affine=um, unit="micron")))


def test_nifti_channels_and_scaling(tmp_path):
    both = np.stack([VOXELS, VOXELS + 1], -1)
    holds(open_stack(write_nifti(tmp_path / "a.nii", both), channel=1), VOXELS + 1)
    holds(open_stack(write_nifti(tmp_path / "b.nii", both[:, :, :, None]), channel=1), VOXELS + 1)
    path = write_nifti(tmp_path / "s.nii")
    raw = bytearray(path.read_bytes())
    raw[112:120] = np.array([0.5, 3.0], "<f4").tobytes()
    path.write_bytes(raw)
    holds(open_stack(path), (VOXELS * np.float32(0.5) + np.float32(3.0)))


def test_nifti_without_unit_or_frame_tells_nothing(tmp_path):
    path = write_nifti(tmp_path / "a.nii", unit="unknown")
    refuses(path, r"\[0.008, 0.005, 0.004\] without a unit")
    holds(open_stack(path, voxel_um=(8, 5, 4)))
    refuses(path, "without a unit, brain.toml says", voxel_um=(8, 4, 5))
    path = write_nifti(tmp_path / "b.nii", set_sform=(PIR_MM, 0), set_qform=(PIR_MM, 0))
    refuses(path, "does not carry its orientation")
    path = write_nifti(tmp_path / "c.nii", set_sform=(PIR_MM, 1), set_qform=(np.diag([0.008, 0.005, 0.004, 1]), 1))
    refuses(path, "its sform says PIR, its qform says RAS")


def tilted(degrees):
    c, s = np.cos(np.deg2rad(degrees)), np.sin(np.deg2rad(degrees))
    turn = np.eye(4)
    turn[:2, :2] = [[c, -s], [s, c]]
    return turn @ PIR_MM


def test_a_tilted_affine_keeps_its_letters_and_is_noted(tmp_path):
    said = []

    class Listener:
        def begin(self, label, total): ...
        def step(self, amount=1.0): ...
        def say(self, message):
            said.append(message)

    holds(open_stack(write_nifti(tmp_path / "a.nii", affine=tilted(10)), progress=Listener()))
    assert "tilts the axes by 10 degrees" in said[0]
    refuses(write_nifti(tmp_path / "b.nii", affine=tilted(41)), "tilted by 41 degrees")
    skew = PIR_MM.copy()
    skew[0, 0] = 0.004
    refuses(write_nifti(tmp_path / "c.nii", affine=skew, set_qform=(PIR_MM, 0)), "not at right angles")


def test_faults_of_nifti(tmp_path):
    for suffix in (".nii", ".nii.gz"):
        whole = write_nifti(tmp_path / f"a{suffix}").read_bytes()
        (tmp_path / f"cut{suffix}").write_bytes(whole[: len(whole) * 6 // 10])
        refuses(tmp_path / f"cut{suffix}", "cut short|cannot be read")
        (tmp_path / f"no{suffix}").write_bytes(b"nothing of the kind" * 30)
        refuses(tmp_path / f"no{suffix}", "cannot be read")
    refuses(write_nifti(tmp_path / "c.nii", VOXELS.astype(np.complex64)), "complex64")
    rgb = np.zeros((6, 20, 24), [("R", "u1"), ("G", "u1"), ("B", "u1")])
    refuses(write_nifti(tmp_path / "rgb.nii", rgb), "not plain real numbers")
    refuses(write_nifti(tmp_path / "5.nii", np.zeros((6, 20, 24, 2, 3), np.uint8)), "too many axes")
    refuses(write_nifti(tmp_path / "2.nii", VOXELS[:, :, 0]), "three-dimensional")


# --- NRRD

PIR_LPS = {
    "space": "left-posterior-superior",
    "space directions": [[0, 8.0, 0], [0, 0, -5.0], [-4.0, 0, 0]],
    "space units": ["um"] * 3,
}


def write_nrrd(path, voxels=VOXELS, **changes):
    header = {key: value for key, value in (PIR_LPS | changes).items() if value is not None}
    nrrd.write(str(path), voxels, header, detached_header=path.suffix == ".nhdr")
    return path


@pytest.mark.parametrize("encoding", ["raw", "gzip", "bzip2"])
def test_nrrd(tmp_path, encoding):
    holds(open_stack(write_nrrd(tmp_path / "a.nrrd", encoding=encoding)))
    holds(open_stack(write_nrrd(tmp_path / "b.nhdr", encoding=encoding)))
    big = VOXELS.astype(">u2")
    holds(open_stack(write_nrrd(tmp_path / "c.nrrd", big, encoding=encoding)))


def test_nrrd_spaces_and_spacings(tmp_path):
    ras = [[0, -0.008, 0], [0, 0, -0.005], [0.004, 0, 0]]
    more = {"space": "right-anterior-superior", "space directions": ras, "space units": ["mm"] * 3}
    holds(open_stack(write_nrrd(tmp_path / "a.nrrd", **more)))
    holds(open_stack(write_nrrd(tmp_path / "b.nrrd", **(more | {"space": "RAS"}))))
    spaced = dict.fromkeys(PIR_LPS) | {"spacings": [8.0, 5.0, 4.0], "units": ["um"] * 3}
    path = write_nrrd(tmp_path / "c.nrrd", **spaced)
    refuses(path, "does not carry its orientation")
    holds(open_stack(path, code="PIR"))
    refuses(write_nrrd(tmp_path / "d.nrrd", **{"space units": None}), r"\[8.0, 5.0, 4.0\] without a unit")
    path = write_nrrd(tmp_path / "e.nrrd", space="3D-right-handed")
    refuses(path, "does not carry its orientation")
    holds(open_stack(path, code="SAL"), code="SAL")


def test_nrrd_channels(tmp_path):
    directions = [[np.nan] * 3, *PIR_LPS["space directions"]]
    both = np.stack([VOXELS, VOXELS + 1])
    path = write_nrrd(tmp_path / "a.nrrd", both, **{"space directions": directions, "kinds": ["list", *["space"] * 3]})
    holds(open_stack(path, channel=1), VOXELS + 1)
    refuses(path, "channel 5 is missing", channel=5)
    path = write_nrrd(tmp_path / "b.nrrd", both, **dict.fromkeys(PIR_LPS))
    refuses(path, "has 4 axes, 4 of them of space")


def test_faults_of_nrrd(tmp_path):
    for encoding in ("raw", "gzip", "bzip2"):
        whole = write_nrrd(tmp_path / "a.nrrd", encoding=encoding).read_bytes()
        (tmp_path / "cut.nrrd").write_bytes(whole[: len(whole) // 2])
        refuses(tmp_path / "cut.nrrd", "cut short|cannot be read")
    (tmp_path / "no.nrrd").write_text("nothing")
    refuses(tmp_path / "no.nrrd", "cannot be read")
    path = write_nrrd(tmp_path / "b.nhdr", encoding="raw")
    next(f for f in tmp_path.iterdir() if f.name.startswith("b.raw")).unlink()
    refuses(path, "is no file")
    rgb = np.zeros((3, 6, 20, 24), np.uint8)
    directions = [[np.nan] * 3, *PIR_LPS["space directions"]]
    path = write_nrrd(
        tmp_path / "c.nrrd", rgb, **{"space directions": directions, "kinds": ["RGB-color", *["space"] * 3]}
    )
    refuses(path, "colour or complex")


# --- any format


def test_several_gzip_members_are_one_file(tmp_path):
    whole = gzip.decompress(write_nifti(tmp_path / "a.nii.gz").read_bytes())
    (tmp_path / "b.nii.gz").write_bytes(gzip.compress(whole[:1000]) + gzip.compress(whole[1000:]))
    holds(open_stack(tmp_path / "b.nii.gz"))


def test_what_is_no_stack_is_refused(tmp_path):
    refuses(tmp_path / "gone.tif", "gone.tif: is not there")
    (tmp_path / "e.tif").touch()
    refuses(tmp_path / "e.tif", "is an empty file")
    (tmp_path / "a.jpg").write_bytes(b"x")
    refuses(tmp_path / "a.jpg", r"no format that is read here \(.jpg\)")
    path = write_nifti(tmp_path / "a.nii")
    refuses(path, "three positive numbers", voxel_um=(8, -5, 4))
    refuses(path, "not a three-letter code", code="PIP")


def test_opening_reads_no_voxels(tmp_path, monkeypatch):
    paths = [write_zarr(tmp_path / "a.zarr"), write_nifti(tmp_path / "a.nii"), write_planes(tmp_path / "p")]
    for name in ("zarr.Array.__getitem__", "numpy.memmap.__getitem__", "tifffile.TiffPage.asarray"):
        monkeypatch.setattr(name, lambda *_: pytest.fail("read a voxel"))
    for path in paths:
        open_stack(path, voxel_um=(8, 5, 4), code="PIR")
