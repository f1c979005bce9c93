"""Whether probabilities and standard deviations mean what they say, against known truth."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

    from leadline.base.arrays import FloatArray

NINETY = 1.645


def reliability(probability: ArrayLike, right: ArrayLike, bins: int = 10) -> FloatArray:
    """Mean probability, share right and number ``(k, 3)`` in each of the equally wide bins that hold any.

    ``probability`` : (n,) in 0..1. ``right`` : (n,) of true or false.

    References
    ----------
    Niculescu-Mizil & Caruana (2005), Proc. 22nd ICML, 625: reliability diagrams.
    """
    p, hit = np.asarray(probability, float), np.asarray(right, float)
    where = np.clip((p * bins).astype(int), 0, bins - 1)
    number = np.bincount(where, minlength=bins)
    some = number > 0
    mean = np.bincount(where, p, bins)[some] / number[some]
    share = np.bincount(where, hit, bins)[some] / number[some]
    return np.column_stack([mean, share, number[some]])


def calibration_error(probability: ArrayLike, right: ArrayLike, bins: int = 10) -> float:
    """Expected calibration error: the mean gap between probability and share right, each bin by its number.

    References
    ----------
    Naeini, Cooper & Hauskrecht (2015), Proc. 29th AAAI, 2901.

    Examples
    --------
    >>> round(calibration_error([0.9, 0.9, 0.9, 0.9], [1, 1, 1, 0]), 2)
    0.15
    """
    table = reliability(probability, right, bins)
    return float(np.sum(np.abs(table[:, 0] - table[:, 1]) * table[:, 2]) / table[:, 2].sum()) if len(table) else np.nan


def coverage(error: ArrayLike, sd: ArrayLike, width: float = NINETY) -> float:
    """Share of errors within ``width`` standard deviations: 0.90 for honest normal ones at the default width.

    Examples
    --------
    >>> coverage([1.0, -2.0], [1.0, 1.0])
    0.5
    """
    e, s = np.abs(np.asarray(error, float)), np.asarray(sd, float)
    return float(np.mean(e <= width * s)) if e.size else np.nan
