"""How the features of neighbouring rows stray together, and the evidence of a recording that says nothing of labels."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.anchoring.depth_prior import matern32
from leadline.base.arrays import FloatArray

if TYPE_CHECKING:
    from collections.abc import Sequence


@dataclass(frozen=True, slots=True)
class NoiseModel:
    """Shares of the noise variance: white, exponential of ``length_um``, and smooth of ``smooth_length_um``."""

    white: float
    length_um: float
    smooth: float
    smooth_length_um: float


BAND = 16
FAINT = 0.001
MODELS = {
    "lfp": (
        NoiseModel(0.06, 100.0, 0.0, 1.0),
        NoiseModel(0.04, 80.0, 0.50, 250.0),
        NoiseModel(0.05, 80.0, 0.85, 120.0),
        NoiseModel(0.20, 80.0, 0.30, 300.0),
    ),
    "units": (
        NoiseModel(0.18, 100.0, 0.0, 1.0),
        NoiseModel(0.12, 80.0, 0.45, 250.0),
        NoiseModel(0.15, 80.0, 0.75, 120.0),
        NoiseModel(0.45, 80.0, 0.25, 300.0),
    ),
}
# what a feature that knows no labels may look like: rough or smooth, short or long, with more or less white noise
SILENT_MODELS = tuple(
    NoiseModel(white, rough, smooth, length)
    for white in (0.04, 0.18, 0.45)
    for rough, smooth, length in (
        (60.0, 0.0, 1.0),
        (150.0, 0.0, 1.0),
        (400.0, 0.0, 1.0),
        *(
            (80.0, share, length)
            for share in (0.45 * (1 - white), 0.9 * (1 - white))
            for length in (100.0, 200.0, 400.0)
        ),
    )
)


def correlation(tip_distance_um: FloatArray, model: NoiseModel) -> FloatArray:
    """Noise correlation ``(R, R)`` of rows."""
    distance = np.abs(tip_distance_um[:, None] - tip_distance_um[None, :])
    rough = np.exp(-distance / model.length_um)
    smooth = matern32(distance, model.smooth_length_um)
    left = 1 - model.white - model.smooth
    return np.asarray(model.white * np.eye(len(distance)) + left * rough + model.smooth * smooth, np.float64)


def whitener(correlation_matrix: FloatArray) -> FloatArray:
    """Lower-triangular ``U`` with ``U C U' = I``, but for what is far off its diagonal.

    Rows far apart tell next to nothing of each other once those between are known. Diagonals are kept up to the last
    that reaches ``FAINT`` of the main one, at most ``BAND`` of them.
    """
    from scipy.linalg import solve_triangular

    factor = np.linalg.cholesky(correlation_matrix)
    whole = solve_triangular(factor, np.eye(len(factor)), lower=True)
    size = np.abs(whole) / np.diag(whole)[:, None]
    row, column = np.nonzero(size > FAINT)
    return np.asarray(np.triu(whole, -min(BAND - 1, int((row - column).max()))), np.float64)


def flat_evidence(
    data: Sequence[FloatArray], noise: Sequence[FloatArray], covariance: FloatArray, shape: float, rate: float
) -> FloatArray:
    """Log evidence ``(F,)`` of features that are an intercept of each shank and noise.

    ``data`` : (F, R) of each shank; ``noise`` : its correlation (R, R); ``covariance`` : (S, S) of the intercepts in
    units of the noise variance. See `student_evidence` for the constant left out.
    """
    white = [whitener(n) for n in noise]
    ones = [u.sum(axis=1) for u in white]
    values = [d @ u.T for d, u in zip(data, white, strict=True)]
    cross = np.stack([v @ one for v, one in zip(values, ones, strict=True)], axis=1)
    factor = np.linalg.inv(covariance) + np.diag([one @ one for one in ones])
    rss = sum((v**2).sum(axis=1) for v in values) - np.einsum("fs,sf->f", cross, np.linalg.solve(factor, cross.T))
    log_det = np.linalg.slogdet(factor)[1] + np.linalg.slogdet(covariance)[1]
    log_scale = sum(np.log(np.diag(u)).sum() for u in white)
    rows = sum(d.shape[1] for d in data)
    return np.asarray(log_scale - 0.5 * log_det - (shape + rows / 2) * np.log(rate + rss / 2), np.float64)


def student_evidence(
    data: FloatArray,
    design: FloatArray,
    correlation_matrix: FloatArray,
    covariance: FloatArray,
    mean: FloatArray,
    shape: float,
    rate: float,
) -> FloatArray:
    """Log evidence ``(F,)`` of data ``(F, R)`` with coefficients and noise variance integrated out.

    y ~ N(design @ mu, v C), mu ~ N(mean, v V), v ~ IG(shape, rate); up to the constant that all designs share,
    ``lgamma(shape + R/2) - lgamma(shape) + shape log(rate) - R/2 log(2 pi)``. The slow, plain form of what the
    compiled kernel does (multivariate Student-t; Bishop 2006, section 2.3.7).
    """
    total = correlation_matrix + design @ covariance @ design.T
    factor = np.linalg.cholesky(total)
    residual = np.linalg.solve(factor, (data - mean.T @ design.T).T)
    rss = (residual**2).sum(axis=0)
    log_det = 2 * np.log(np.diag(factor)).sum()
    return np.asarray(-0.5 * log_det - (shape + data.shape[1] / 2) * np.log(rate + rss / 2), np.float64)
