"""The writers against the libraries that define the formats."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from leadline.demo.formats import write_image
from leadline.model.frames import ALL_CODES

if TYPE_CHECKING:
    from pathlib import Path

VOXEL = np.array([30.0, 20.0, 25.0])
IMAGE = np.random.default_rng(1).integers(0, 2**32 - 1, (6, 7, 8), dtype=np.uint32)


@pytest.mark.parametrize("code", ALL_CODES[::5])
def test_nifti_axes_are_what_nibabel_says(code: str, tmp_path: Path) -> None:
    nibabel = pytest.importorskip("nibabel")
    write_image(tmp_path / "x.nii.gz", [IMAGE], VOXEL, code, "nifti")
    read = nibabel.load(tmp_path / "x.nii.gz")
    assert "".join(nibabel.aff2axcodes(read.affine)) == code
    np.testing.assert_allclose(nibabel.affines.voxel_sizes(read.affine), VOXEL / 1000)
    np.testing.assert_array_equal(np.asarray(read.dataobj), IMAGE)


@pytest.mark.parametrize("code", ALL_CODES[::5])
def test_nrrd_is_what_simpleitk_and_pynrrd_read(code: str, tmp_path: Path) -> None:
    """ITK's physical space is L, P, S."""
    sitk, nrrd = pytest.importorskip("SimpleITK"), pytest.importorskip("nrrd")
    write_image(tmp_path / "x.nrrd", [IMAGE], VOXEL, code, "nrrd")
    read = sitk.ReadImage(str(tmp_path / "x.nrrd"))
    toward = sitk.DICOMOrientImageFilter.GetOrientationFromDirectionCosines(read.GetDirection())
    assert toward == code
    np.testing.assert_allclose(read.GetSpacing(), VOXEL / 1000)
    np.testing.assert_array_equal(sitk.GetArrayFromImage(read).transpose(), IMAGE)
    np.testing.assert_array_equal(nrrd.read(str(tmp_path / "x.nrrd"))[0], IMAGE)


def test_ome_tiff_sizes_stand_in_its_xml(tmp_path: Path) -> None:
    tifffile = pytest.importorskip("tifffile")
    write_image(tmp_path / "x.ome.tif", [IMAGE, IMAGE + 1], VOXEL, "RAS", "ome-tiff")
    with tifffile.TiffFile(tmp_path / "x.ome.tif") as file:
        assert 'PhysicalSizeZ="30.0"' in file.ome_metadata
        assert file.series[0].axes == "CZYX"
        np.testing.assert_array_equal(file.asarray()[1], IMAGE + 1)
