"""Readers of stacks against the libraries that own the formats: nibabel, SimpleITK, pynrrd, tifffile, zarr."""

import nibabel as nib
import nrrd
import numpy as np
import pytest
import SimpleITK as sitk
import tifffile
import zarr
from skimage.transform import downscale_local_mean

from leadline.io.reduce import reduce_to
from leadline.io.stacks import open_stack
from leadline.model.frames import ALL_CODES, axes_matrix
from leadline.model.volume import Volume

VOXELS = np.random.default_rng(3).integers(0, 65535, (5, 6, 7)).astype(np.uint16)
VOXEL_UM = np.array([8.0, 5.0, 4.0])


def ras_mm(code):
    """Affine of a volume stored as ``code``, made by nibabel alone."""
    stored = nib.orientations.axcodes2ornt(tuple(code))
    return np.linalg.inv(nib.orientations.inv_ornt_aff(stored, VOXELS.shape)) @ np.diag([*(VOXEL_UM / 1000), 1.0])


@pytest.mark.parametrize("code", ALL_CODES)
def test_nifti_codes_and_points_are_those_of_nibabel(tmp_path, code):
    image = nib.Nifti1Image(VOXELS, ras_mm(code))
    image.header.set_xyzt_units("mm")
    nib.save(image, tmp_path / "a.nii")
    loaded = nib.load(tmp_path / "a.nii")
    finest = open_stack(tmp_path / "a.nii").finest
    assert finest.code == "".join(nib.aff2axcodes(loaded.affine)) == code
    assert finest.voxel_um == pytest.approx(nib.affines.voxel_sizes(loaded.affine) * 1000, rel=1e-5)
    np.testing.assert_array_equal(finest.array(), np.asanyarray(loaded.dataobj))
    # a step along each stored axis goes the same way in the world, which is RAS: (ml, -ap, -dv)
    ap, dv, ml = axes_matrix(code) * finest.voxel_um
    np.testing.assert_allclose([ml, -ap, -dv], loaded.affine[:3, :3] * 1000, atol=1e-3)


@pytest.mark.parametrize("code", ALL_CODES)
def test_nibabel_reorients_to_the_same_pir_volume(tmp_path, code):
    nib.save(nib.Nifti1Image(VOXELS, ras_mm(code)), tmp_path / "a.nii")
    image = nib.load(tmp_path / "a.nii")
    to_pir = nib.orientations.ornt_transform(
        nib.orientations.io_orientation(image.affine), nib.orientations.axcodes2ornt(tuple("PIR"))
    )
    theirs = np.asanyarray(image.as_reoriented(to_pir).dataobj)
    ours = open_stack(tmp_path / "a.nii", voxel_um=VOXEL_UM).finest.as_pir()
    np.testing.assert_array_equal(ours.array(), theirs)


@pytest.mark.parametrize("code", ALL_CODES)
def test_nrrd_codes_are_those_that_simpleitk_writes(tmp_path, code):
    """SimpleITK's world is LPS and its direction matrix has one column for each index axis, fastest first."""
    ap, dv, ml = axes_matrix(code)
    image = sitk.GetImageFromArray(VOXELS.transpose(2, 1, 0))
    image.SetSpacing((VOXEL_UM / 1000).tolist())
    image.SetDirection(np.concatenate([-ml, ap, -dv]).tolist())
    sitk.WriteImage(image, tmp_path / "a.nrrd")
    finest = open_stack(tmp_path / "a.nrrd", voxel_um=VOXEL_UM).finest
    assert finest.code == code
    np.testing.assert_array_equal(finest.array(), VOXELS)


@pytest.mark.parametrize("encoding", ["raw", "gzip"])
@pytest.mark.parametrize("dtype", ["u1", "i1", "u2", "i2", "u4", "i4", "u8", "f4", "f8"])
def test_nrrd_voxels_are_those_of_pynrrd(tmp_path, encoding, dtype):
    header = {"encoding": encoding, "spacings": [8, 5, 4], "units": ["um"] * 3}
    nrrd.write(str(tmp_path / "a.nrrd"), VOXELS.astype(dtype), header)
    theirs = nrrd.read(str(tmp_path / "a.nrrd"))[0]
    ours = open_stack(tmp_path / "a.nrrd", code="PIR").finest
    np.testing.assert_array_equal(ours.array(), theirs)
    assert ours.data.dtype == theirs.dtype


@pytest.mark.parametrize("compression", [None, "lzw", "zlib", "zstd", "packbits"])
def test_tiff_voxels_are_those_of_tifffile(tmp_path, compression):
    path = tmp_path / "a.ome.tif"
    tifffile.imwrite(path, np.stack([VOXELS, VOXELS[::-1]]), metadata={"axes": "CZYX"}, compression=compression)
    for channel in (0, 1):
        ours = open_stack(path, channel=channel, voxel_um=VOXEL_UM, code="PIR").finest
        np.testing.assert_array_equal(ours.array(), tifffile.imread(path)[channel])


def test_zarr_voxels_are_those_of_zarr_with_shards(tmp_path):
    group = zarr.open_group(tmp_path / "a.zarr", mode="w", zarr_format=3)
    voxels = np.random.default_rng(4).integers(0, 99, (16, 32, 32)).astype(np.uint8)
    group.create_array("0", data=voxels, chunks=(4, 8, 8), shards=(8, 16, 16), dimension_names=["z", "y", "x"])
    axes = [{"name": n, "type": "space", "unit": "micrometer"} for n in "zyx"]
    steps = [{"type": "scale", "scale": [8, 5, 4]}]
    scales = {"axes": axes, "datasets": [{"path": "0", "coordinateTransformations": steps}]}
    group.attrs["ome"] = {"version": "0.5", "multiscales": [scales]}
    ours = open_stack(tmp_path / "a.zarr", code="PIR").finest
    assert ours.chunk == (4, 8, 8)  # shards are read chunk by chunk
    np.testing.assert_array_equal(ours.data[3:9, 5:, ::3], zarr.open_group(tmp_path / "a.zarr")["0"][3:9, 5:, ::3])


@pytest.mark.parametrize("factors", [(2, 4, 4), (1, 3, 5), (4, 1, 2)])
def test_whole_number_reduction_is_that_of_scikit_image(factors):
    voxels = np.random.default_rng(5).integers(0, 65535, (8, 24, 40)).astype(np.uint16)
    voxels = voxels[:, : 24 // factors[1] * factors[1], : 40 // factors[2] * factors[2]]
    ours = reduce_to(Volume(voxels, 60.0 / np.array(factors), "PIR"), 60.0)
    np.testing.assert_allclose(ours.data, downscale_local_mean(voxels, factors), rtol=1e-6)
