"""The one door to SimpleITK: point transforms as ITK files.

ITK's points are written (s0, s1, s2) and (ap, dv, ml) in um, as everywhere in Leadline; only the *arrays* of a field
are reversed, because ITK counts the fastest axis first.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.atomic import whole_file
from leadline.base.errors import LeadlineError
from leadline.model.transform import Affine, Field, PointTransform

if TYPE_CHECKING:
    from pathlib import Path


def write_point_transform(path: Path, transform: PointTransform) -> None:
    """Write a point transform as an ITK composite (.h5): ``TransformPoint`` of a point gives the carried point."""
    import SimpleITK as sitk

    composite = sitk.CompositeTransform(3)
    # ITK applies the transform that was added last first
    composite.AddTransform(_affine(transform.last))
    if transform.field is not None:
        composite.AddTransform(_field(transform.field))
    composite.AddTransform(_affine(transform.first))
    with whole_file(path) as part:
        sitk.WriteTransform(composite, str(part))


def read_point_transform(path: Path) -> PointTransform:
    """Read what :func:`write_point_transform` wrote.

    Raises LeadlineError when the file is missing, unreadable, or holds another kind of transform.
    """
    import SimpleITK as sitk

    if not path.is_file():
        raise LeadlineError("no such file", where=str(path), mend="Run `leadline register` first")
    try:
        composite = sitk.CompositeTransform(sitk.ReadTransform(str(path)))
    except RuntimeError as error:
        raise LeadlineError("is no ITK transform", where=str(path), mend="Run `leadline register` again") from error
    parts = [composite.GetNthTransform(k).Downcast() for k in range(composite.GetNumberOfTransforms())]
    affines = [p for p in parts if isinstance(p, sitk.AffineTransform)]
    fields = [p for p in parts if isinstance(p, sitk.DisplacementFieldTransform)]
    if len(affines) != 2 or len(fields) != len(parts) - 2 or len(fields) > 1:
        raise LeadlineError(
            "is not an affine, a displacement field and an affine",
            where=str(path),
            mend="Leadline reads back only the transforms that it wrote; run `leadline register` again",
        )
    return PointTransform(
        _from_affine(affines[1]), _from_field(fields[0]) if fields else None, _from_affine(affines[0])
    )


def _affine(affine: Affine) -> Any:
    import SimpleITK as sitk

    out = sitk.AffineTransform(3)
    out.SetMatrix(affine.matrix.ravel().tolist())
    out.SetTranslation(affine.shift_um.tolist())
    return out


def _from_affine(itk: Any) -> Affine:
    matrix = np.asarray(itk.GetMatrix()).reshape(3, 3)
    centre, shift = np.asarray(itk.GetCenter()), np.asarray(itk.GetTranslation())
    return Affine(matrix, shift + centre - matrix @ centre)


def _field(field: Field) -> Any:
    import SimpleITK as sitk

    reversed_axes = np.ascontiguousarray(field.displacement_um.transpose(2, 1, 0, 3), np.float64)
    image = sitk.GetImageFromArray(reversed_axes, isVector=True)
    image.SetSpacing(field.spacing_um.tolist())
    image.SetOrigin(field.origin_um.tolist())
    return sitk.DisplacementFieldTransform(image)


def _from_field(itk: Any) -> Field:
    import SimpleITK as sitk

    image = itk.GetDisplacementField()
    array = sitk.GetArrayFromImage(image).transpose(2, 1, 0, 3)
    return Field(array, np.asarray(image.GetSpacing()), np.asarray(image.GetOrigin()))
