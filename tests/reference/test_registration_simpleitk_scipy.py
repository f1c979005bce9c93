"""Resampling through a transform: SimpleITK's resampler against scipy.ndimage through Leadline's arrays.

Sources: SimpleITK 2.5 ResampleImageFilter with the ITK file that Leadline writes; scipy.ndimage.map_coordinates with
the same transform as numpy arrays; leadline's own compiled reader.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import SimpleITK as sitk
from scipy.ndimage import gaussian_filter, map_coordinates

from leadline.model.transform import Affine, Field, PointTransform
from leadline.registration._sitk import write_point_transform
from leadline.registration.grids import Grid
from leadline.registration.matching import pulled

SOURCE = Grid((30, 28, 26), 40.0, np.array([15.0, -10.0, 5.0]))
GOAL = Grid((22, 20, 18), 50.0, np.array([40.0, 30.0, 60.0]))


def image() -> np.ndarray:
    noise = np.random.default_rng(5).normal(size=SOURCE.shape)
    return np.asarray(gaussian_filter(noise, 1.5) * 100, np.float32)


def transform() -> PointTransform:
    rng = np.random.default_rng(6)
    u = np.zeros((14, 13, 12, 3), np.float32)
    u[1:-1, 1:-1, 1:-1] = rng.normal(0, 15, (12, 11, 10, 3))
    field = Field(u, np.full(3, 100.0), np.array([-100.0, -100.0, -60.0]))
    return PointTransform(field=field, last=Affine(np.eye(3) + rng.normal(0, 0.03, (3, 3)), rng.normal(0, 10, 3)))


def as_itk(array: np.ndarray, grid: Grid) -> sitk.Image:
    out = sitk.GetImageFromArray(np.ascontiguousarray(array.transpose(2, 1, 0)))
    out.SetSpacing([grid.step_um] * 3)
    out.SetOrigin(grid.origin_um.tolist())
    return out


def test_simpleitk_resamples_as_scipy_does(tmp_path: Path) -> None:
    """The written transform, given to SimpleITK, pulls the same image as scipy with the arrays: to 1e-3 of its sd."""
    write_point_transform(tmp_path / "t.h5", transform())
    like = as_itk(np.zeros(GOAL.shape, np.float32), GOAL)
    itk = sitk.Resample(as_itk(image(), SOURCE), like, sitk.ReadTransform(str(tmp_path / "t.h5")), sitk.sitkLinear, 0.0)
    theirs = sitk.GetArrayFromImage(itk).transpose(2, 1, 0)
    index = (transform()(GOAL.points_um()) - SOURCE.origin_um) / SOURCE.step_um
    ours = map_coordinates(image(), index.T, order=1, mode="constant", cval=0.0).reshape(GOAL.shape)
    inside = ((index >= 0) & (index <= np.asarray(SOURCE.shape) - 1)).all(axis=1).reshape(GOAL.shape)
    assert inside.mean() > 0.5
    assert np.abs(theirs - ours)[inside].max() < 1e-3 * image().std()


def test_the_compiled_reader_reads_as_scipy_does() -> None:
    """Leadline's own reader in float32 agrees with scipy in float64 to 1e-3 of the image's sd."""
    full = transform()
    assert full.field is not None
    u = full.field.displacement_at(GOAL.points_um()).reshape(*GOAL.shape, 3).astype(np.float32) / GOAL.step_um
    found = pulled(image(), SOURCE, GOAL, full.last, (u[..., 0], u[..., 1], u[..., 2]))
    index = (full(GOAL.points_um()) - SOURCE.origin_um) / SOURCE.step_um
    inside = ((index > 0) & (index < np.asarray(SOURCE.shape) - 1.001)).all(axis=1).reshape(GOAL.shape)
    want = map_coordinates(image(), index.T, order=1).reshape(GOAL.shape)
    assert found[inside] == pytest.approx(want[inside], abs=1e-3 * float(image().std()))
