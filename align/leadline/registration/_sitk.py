"""The one door to SimpleITK: point transforms as ITK files, for other tools.

ITK's points are written (s0, s1, s2) and (ap, dv, ml) in um, as everywhere in Leadline; only the *arrays* of a field
are reversed, because ITK counts the fastest axis first.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.atomic import whole_file
from leadline.model.transform import Affine, Field, PointTransform
from leadline.registration._undated import undated

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
        part.write_bytes(undated(part.read_bytes()))


def _affine(affine: Affine) -> Any:
    import SimpleITK as sitk

    out = sitk.AffineTransform(3)
    out.SetMatrix(affine.matrix.ravel().tolist())
    out.SetTranslation(affine.shift_um.tolist())
    return out


def _field(field: Field) -> Any:
    import SimpleITK as sitk

    reversed_axes = np.ascontiguousarray(field.displacement_um.transpose(2, 1, 0, 3), np.float64)
    image = sitk.GetImageFromArray(reversed_axes, isVector=True)
    image.SetSpacing(field.spacing_um.tolist())
    image.SetOrigin(field.origin_um.tolist())
    return sitk.DisplacementFieldTransform(image)
