"""Orientation codes, micrometres and the PIR frame: the only file that knows which axis is which.

Letter *i* of a three-letter code is the direction in which index *i* of the stored array grows, as NIfTI tools
use it. Atlas space is PIR: ``ap_um`` grows posterior, ``dv_um`` inferior, ``ml_um`` right.
"""

from __future__ import annotations

from itertools import permutations, product
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Sequence

PIR = "PIR"
ATLAS_COLUMNS = ("ap_um", "dv_um", "ml_um")
STACK_COLUMNS = ("s0_um", "s1_um", "s2_um")
_AXIS = {"P": 0, "A": 0, "I": 1, "S": 1, "R": 2, "L": 2}
_SIGN = {"P": 1, "A": -1, "I": 1, "S": -1, "R": 1, "L": -1}
ALL_CODES = tuple("".join(letters) for axes in permutations(("PA", "IS", "RL")) for letters in product(*axes))


def orientation(code: object, *, where: str = "orientation") -> str:
    """Check a three-letter orientation code and return it in capitals.

    Raises LeadlineError unless it holds one letter of each of R/L, A/P, S/I.

    Examples
    --------
    >>> orientation("pir")
    'PIR'
    """
    text = code.strip().upper() if isinstance(code, str) else ""
    if text not in ALL_CODES:
        raise LeadlineError(
            f"orientation {code!r} is not a three-letter code",
            where=where,
            mend="Write one letter each of R/L, A/P and S/I: the directions in which the stored axes grow, e.g. 'PIR'",
        )
    return text


def direction(letter: str) -> FloatArray:
    """Unit vector in atlas axes (ap, dv, ml) of an anatomical direction letter.

    Examples
    --------
    >>> direction("A").tolist()
    [-1.0, 0.0, 0.0]
    """
    vector = np.zeros(3)
    vector[_AXIS[letter]] = _SIGN[letter]
    return vector


def mirrored(code: str) -> str:
    """The code with left and right exchanged.

    Examples
    --------
    >>> mirrored("IAR")
    'IAL'
    """
    return code.translate(str.maketrans("RL", "LR"))


def axes_matrix(code: str) -> FloatArray:
    """Signed permutation that carries vectors along the stored axes of ``code`` to (ap, dv, ml).

    Its determinant is -1 for codes of the other handedness: mirrors live in the code and nowhere else.

    Examples
    --------
    >>> axes_matrix("RAS") @ [1.0, 0.0, 0.0]
    array([0., 0., 1.])
    """
    return np.column_stack([direction(letter) for letter in code])


def as_pir(array: AnyArray, code: str) -> AnyArray:
    """View of a volume stored as ``code``, laid out as PIR (transposed and flipped, nothing copied)."""
    axes = [_AXIS[letter] for letter in code]
    flipped = array[tuple(slice(None, None, _SIGN[letter]) for letter in code)]
    return np.transpose(flipped, np.argsort(axes))


def from_pir(array: AnyArray, code: str) -> AnyArray:
    """View of a PIR volume, stored as ``code``: the inverse of :func:`as_pir`."""
    stored = np.transpose(array, [_AXIS[letter] for letter in code])
    return stored[tuple(slice(None, None, _SIGN[letter]) for letter in code)]


def voxel_as_pir(voxel_um: Sequence[float] | FloatArray, code: str) -> FloatArray:
    """Voxel sizes along the stored axes, reordered to (ap, dv, ml)."""
    return np.asarray(np.abs(axes_matrix(code)) @ np.asarray(voxel_um, dtype=float), np.float64)
