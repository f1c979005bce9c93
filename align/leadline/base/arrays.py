"""Arrays that are checked at birth and read-only afterwards."""

from __future__ import annotations

from typing import Any, TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from leadline.base.errors import LeadlineError

FloatArray: TypeAlias = NDArray[np.float64]
Float32Array: TypeAlias = NDArray[np.float32]
IntArray: TypeAlias = NDArray[np.int64]
BoolArray: TypeAlias = NDArray[np.bool_]
AnyArray: TypeAlias = NDArray[Any]


def frozen(values: ArrayLike, dtype: Any = np.float64) -> AnyArray:
    """Copy ``values`` into a read-only, C-contiguous array of ``dtype``."""
    array = np.array(values, dtype=dtype, order="C", copy=True)
    array.setflags(write=False)
    return array


def frozen_vector(values: ArrayLike, name: str, *, length: int | None = None, finite: bool = True) -> FloatArray:
    """Check and freeze a one-dimensional float64 array.

    Raises LeadlineError when the shape is wrong or, with ``finite``, a value is not finite.
    """
    array = frozen(values)
    if array.ndim != 1 or (length is not None and array.size != length):
        want = "one dimension" if length is None else f"shape ({length},)"
        raise LeadlineError(f"must have {want}, has shape {array.shape}", where=name)
    if finite:
        _require_finite(array, name)
    return array


def frozen_points(values: ArrayLike, name: str, *, min_rows: int = 0) -> FloatArray:
    """Check and freeze ``(n, 3)`` float64 points in um.

    Raises LeadlineError when the shape is wrong, there are fewer than ``min_rows`` rows, or a value is not finite.
    """
    array = frozen(values)
    if array.ndim != 2 or array.shape[1] != 3:
        raise LeadlineError(f"must have shape (n, 3), has {array.shape}", where=name)
    if len(array) < min_rows:
        raise LeadlineError(f"needs at least {min_rows} points, has {len(array)}", where=name)
    _require_finite(array, name)
    return array


def _require_finite(array: FloatArray, name: str) -> None:
    bad = np.flatnonzero(~np.isfinite(array.reshape(len(array), -1)).all(axis=1)) if len(array) else array[:0]
    if bad.size:
        raise LeadlineError(
            f"row {int(bad[0])} is not finite ({bad.size} such rows)", where=name, mend="Remove or correct it"
        )
