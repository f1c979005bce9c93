"""ITK files of point transforms: SimpleITK's own TransformPoint against our arrays."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import SimpleITK as sitk

from leadline.base.errors import LeadlineError
from leadline.model.transform import Affine, Field, PointTransform
from leadline.registration._sitk import read_point_transform, write_point_transform


def some_transform(seed: int = 1) -> PointTransform:
    """Affine, a field on a grid of unequal sides and steps, affine."""
    rng = np.random.default_rng(seed)
    shape = (7, 9, 11)
    u = np.zeros((*shape, 3), np.float32)
    u[1:-1, 1:-1, 1:-1] = rng.normal(0, 60, (5, 7, 9, 3))
    field = Field(u, np.array([200.0, 150.0, 120.0]), np.array([-300.0, 100.0, 50.0]))
    first = Affine(np.eye(3)[[2, 0, 1]] + rng.normal(0, 0.05, (3, 3)), rng.normal(0, 200, 3))
    return PointTransform(first, field, Affine(np.eye(3) + rng.normal(0, 0.05, (3, 3)), rng.normal(0, 200, 3)))


@pytest.mark.parametrize("with_field", [True, False])
def test_itk_carries_points_as_we_do(tmp_path: Path, with_field: bool) -> None:
    """In and beyond the field, to a thousandth of a um."""
    whole = some_transform()
    transform = whole if with_field else PointTransform(whole.first, None, whole.last)
    write_point_transform(tmp_path / "t.h5", transform)
    itk = sitk.ReadTransform(str(tmp_path / "t.h5"))
    points = np.random.default_rng(2).uniform(-800, 2200, (500, 3))
    want = np.array([itk.TransformPoint(p.tolist()) for p in points])
    assert np.abs(transform(points) - want).max() < 1e-3


def test_what_is_written_is_read_back(tmp_path: Path) -> None:
    transform = some_transform(3)
    write_point_transform(tmp_path / "t.h5", transform)
    back = read_point_transform(tmp_path / "t.h5")
    points = np.random.default_rng(4).uniform(-800, 2200, (500, 3))
    assert np.abs(back(points) - transform(points)).max() < 1e-6
    assert back.field is not None
    assert np.array_equal(back.field.displacement_um, transform.field.displacement_um)  # type: ignore[union-attr]


def test_a_missing_file_is_said(tmp_path: Path) -> None:
    with pytest.raises(LeadlineError, match="no such file"):
        read_point_transform(tmp_path / "none.h5")


def test_a_file_of_another_kind_is_said(tmp_path: Path) -> None:
    (tmp_path / "t.h5").write_text("not a transform")
    with pytest.raises(LeadlineError, match="is no ITK transform"):
        read_point_transform(tmp_path / "t.h5")


def test_a_transform_of_another_kind_is_said(tmp_path: Path) -> None:
    sitk.WriteTransform(sitk.Euler3DTransform(), str(tmp_path / "t.tfm"))
    with pytest.raises(LeadlineError, match="affine, a displacement field"):
        read_point_transform(tmp_path / "t.tfm")
