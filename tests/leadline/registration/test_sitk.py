"""ITK files of point transforms: SimpleITK's own TransformPoint against our arrays."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import SimpleITK as sitk

from leadline.model.transform import Affine, Field, PointTransform
from leadline.registration._sitk import write_point_transform


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
