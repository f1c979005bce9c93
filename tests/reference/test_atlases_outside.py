"""Atlas folders against the libraries that own the formats."""

import nibabel as nib
import nrrd
import numpy as np
import pytest
import SimpleITK as sitk

from leadline.io.atlases import read_atlas, write_atlas
from leadline.model.atlas import Structure
from leadline.pipeline.atlas_import import import_atlas

LABELS = np.zeros((6, 7, 8), np.uint32)
LABELS[1:4, 2:6, 3:7] = 4294967295
LABELS[2, 3, 4] = 16777217
TEMPLATE = (LABELS % 997).astype(np.float32)
ROWS = (Structure(4294967295, "A", "Some area", None), Structure(16777217, "B", "Another area", 4294967295))


def test_a_written_atlas_is_seen_the_same_by_pynrrd_and_simpleitk(tmp_path):
    write_atlas(
        tmp_path / "a", name="x", citation="", licence="", labels=LABELS, template=TEMPLATE, voxel_um=(50, 40, 30),
        rows=ROWS,
    )  # fmt: skip
    voxels, header = nrrd.read(str(tmp_path / "a" / "labels.nrrd"))
    np.testing.assert_array_equal(voxels, LABELS)
    assert header["space units"] == ["um"] * 3
    image = sitk.ReadImage(str(tmp_path / "a" / "labels.nrrd"))
    np.testing.assert_array_equal(sitk.GetArrayFromImage(image), LABELS.transpose(2, 1, 0))
    assert image.GetSpacing() == pytest.approx((50, 40, 30))
    # LPS world: a step along AP goes posterior (+y), along DV inferior (-z), along ML right (-x)
    steps = np.array(image.GetDirection()).reshape(3, 3).T
    np.testing.assert_allclose(steps, [[0, 1, 0], [0, 0, -1], [-1, 0, 0]])


@pytest.mark.parametrize("code", ["PIR", "RAS", "LPS", "SAL", "ARI"])
def test_import_lays_a_nifti_out_as_nibabel_does(tmp_path, code):
    pir = nib.orientations.axcodes2ornt(tuple("PIR"))
    affine = np.array([[0, 0, 0.03, 0], [-0.05, 0, 0, 0], [0, -0.04, 0, 0], [0, 0, 0, 1.0]])
    turn = nib.orientations.ornt_transform(pir, nib.orientations.axcodes2ornt(tuple(code)))
    for name, voxels in (("l", LABELS), ("t", TEMPLATE)):
        image = nib.Nifti1Image(voxels, affine).as_reoriented(turn)
        image.header.set_xyzt_units("mm")
        nib.save(image, tmp_path / f"{name}.nii.gz")
    (tmp_path / "s.csv").write_text("id,acronym,name,parent_id\n4294967295,A,Some area,\n16777217,B,Another area,A\n")
    import_atlas(tmp_path / "l.nii.gz", tmp_path / "t.nii.gz", tmp_path / "s.csv", tmp_path / "out", name="x")
    atlas = read_atlas(tmp_path / "out")
    np.testing.assert_array_equal(atlas.labels.data, LABELS)
    np.testing.assert_array_equal(atlas.template.data, TEMPLATE)
    assert atlas.voxel_um == pytest.approx([50, 40, 30], rel=1e-5)
