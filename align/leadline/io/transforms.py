"""Point transforms as Leadline itself reads them back: plain arrays, each with a checksum, no pickles.

ITK's files beside them are for other tools: the library that reads those cannot be trusted with a damaged one.
"""

from __future__ import annotations

from typing import TYPE_CHECKING
from zipfile import BadZipFile

import numpy as np

from leadline.base.atomic import whole_file
from leadline.base.errors import LeadlineError
from leadline.io.images import READ_FAULTS
from leadline.model.transform import Affine, Field, PointTransform

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence
    from pathlib import Path

    from leadline.base.arrays import AnyArray


def write_transforms(path: Path, transforms: Mapping[str, PointTransform]) -> None:
    """Write named point transforms to one ``.npz``."""
    arrays: dict[str, AnyArray] = {}
    for name, transform in transforms.items():
        for side, affine in (("first", transform.first), ("last", transform.last)):
            arrays[f"{name}_{side}"] = np.column_stack([affine.matrix, affine.shift_um])
        if transform.field is not None:
            arrays[f"{name}_field"] = transform.field.displacement_um
            arrays[f"{name}_grid"] = np.stack([transform.field.spacing_um, transform.field.origin_um])
    with whole_file(path) as part, part.open("wb") as handle:
        np.savez(handle, **arrays)  # type: ignore[arg-type]


def read_transforms(path: Path, names: Sequence[str]) -> tuple[PointTransform, ...]:
    """Read transforms by name, exactly as they were written.

    Raises LeadlineError when the file is missing or damaged.
    """
    mend = "Run `leadline register` again"
    if not path.is_file():
        raise LeadlineError("no such file", where=str(path), mend=mend)
    try:
        with np.load(path, allow_pickle=False) as arrays:
            return tuple(_transform(arrays, name) for name in names)
    except (BadZipFile, AttributeError, *READ_FAULTS) as error:
        raise LeadlineError(f"holds no transforms ({type(error).__name__})", where=str(path), mend=mend) from error


def _transform(arrays: Mapping[str, AnyArray], name: str) -> PointTransform:
    first, last = (_shaped(arrays[f"{name}_{side}"], 3, 4) for side in ("first", "last"))
    field = None
    if f"{name}_field" in arrays:
        grid = _shaped(arrays[f"{name}_grid"], 2, 3)
        field = Field(_shaped(arrays[f"{name}_field"], None, None, None, 3), grid[0], grid[1])
    return PointTransform(Affine(first[:, :3], first[:, 3]), field, Affine(last[:, :3], last[:, 3]))


def _shaped(array: AnyArray, *shape: int | None) -> AnyArray:
    fits = array.ndim == len(shape) and all(m in (n, None) for n, m in zip(array.shape, shape, strict=True))
    if not fits or array.dtype.kind != "f" or not np.isfinite(array).all():
        raise ValueError(f"an array of shape {array.shape}")
    return array
