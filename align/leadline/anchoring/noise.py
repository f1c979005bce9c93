"""How the features of neighbouring rows stray together, and the evidence of a recording that says nothing of labels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.anchoring.depth_prior import matern32
from leadline.base.arrays import FloatArray


@dataclass(frozen=True, slots=True)
class NoiseModel:
    """Shares of the noise variance: white, exponential of ``length_um``, and smooth of ``smooth_length_um``."""

    white: float
    length_um: float
    smooth: float
    smooth_length_um: float


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
    """Lower-triangular ``U`` with ``U C U' = I``."""
    from scipy.linalg import solve_triangular

    factor = np.linalg.cholesky(correlation_matrix)
    return np.asarray(solve_triangular(factor, np.eye(len(factor)), lower=True), np.float64)


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
