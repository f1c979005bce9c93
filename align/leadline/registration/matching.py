"""How well two images agree in every neighbourhood, and which displacement would make them agree better."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import BoolArray, Float32Array
from leadline.registration.kernels import pull

if TYPE_CHECKING:
    from leadline.model.transform import Affine
    from leadline.registration.grids import Grid
    from leadline.registration.prepare import Image

PAIRS = ((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2))
WINDOW = 5
NOISE = 0.1
OUTLIER = 2.5
NEAR_UM = 300.0
SCAR_UM = 200.0
Displacement = tuple[Float32Array, Float32Array, Float32Array]


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """What every voxel says of the displacement that would make the images agree (Gauss-Newton normal equations).

    ``stiffness`` : six images, in the order of ``PAIRS``, per um^2; ``force`` : three, per um. ``correlation`` : local
    correlation coefficient; ``weight`` : 0 where nothing is to be believed.
    """

    stiffness: tuple[Float32Array, ...]
    force: tuple[Float32Array, ...]
    correlation: Float32Array
    weight: Float32Array

    @property
    def agreement(self) -> float:
        """Mean local correlation where the images are believed."""
        return float((self.correlation * self.weight).sum() / max(float(self.weight.sum()), 1e-9))


@dataclass(frozen=True, slots=True, eq=False)
class Target:
    """The atlas at one resolution with the distances that tell where the sample may be believed."""

    image: Image
    inside_um: Float32Array
    outside_um: Float32Array


def target(image: Image) -> Target:
    """Measure how far every voxel of the template lies from its own border."""
    from scipy.ndimage import distance_transform_edt

    bright = image.tissue > 0.5
    step = np.float32(image.grid.step_um)
    inside = distance_transform_edt(bright).astype(np.float32) * step
    return Target(image, inside, distance_transform_edt(~bright).astype(np.float32) * step)


def still(grid: Grid) -> Displacement:
    """No displacement, in index units."""
    zero = np.broadcast_to(np.float32(0), grid.shape)
    return zero, zero, zero


def pulled(
    image: Float32Array, source: Grid, goal: Grid, affine: Affine, shift: Displacement, wanted: BoolArray | None = None
) -> Float32Array:
    """Read ``image`` (on ``source``) at ``affine(x + u(x))`` for the nodes x of ``goal``; ``shift`` is u in steps."""
    matrix = affine.matrix * (goal.step_um / source.step_um)
    offset = (affine(goal.origin_um[None])[0] - source.origin_um) / source.step_um
    asked = np.broadcast_to(np.True_, goal.shape) if wanted is None else wanted
    return np.asarray(pull(image, matrix, offset, *shift, asked))


def believable(
    goal: Target, sample: Image, affine: Affine, shift: Displacement, *, tolerance_um: float
) -> Float32Array:
    """1 near the template where the sample is to be believed, else 0.

    Not believed are dye and artefacts (the sample's own trust), and what cannot be explained by a displacement of
    ``tolerance_um``: sample missing deep inside the template (a torn or lost piece, a bubble) and sample present far
    outside it (debris), each with its rim.
    """
    from scipy.ndimage import binary_dilation

    step = goal.image.grid.step_um
    there = pulled(sample.tissue, sample.grid, goal.image.grid, affine, shift) > 0.5
    clean = pulled(sample.trust, sample.grid, goal.image.grid, affine, shift)
    odd = (~there & (goal.inside_um > tolerance_um)) | (there & (goal.outside_um > tolerance_um))
    odd = binary_dilation(odd, iterations=max(1, round(SCAR_UM / step)))
    return np.asarray((goal.outside_um <= NEAR_UM) & ~odd & (clean > 0.6), np.float32)


def compare(
    fixed: Float32Array, moved: Float32Array, weight: Float32Array, *, step_um: float, far: bool = False
) -> Evidence:
    """Compare two images under ``moved = a + b fixed + noise`` with a, b and the noise of every window its own.

    The negative log likelihood of that model is half the log of the residual variance, a function of the local
    correlation alone [1]_. Residuals beyond ``OUTLIER`` standard deviations lose their weight (Cauchy). The gradient
    is the template's: the sample's holds the same noise as the residual, and where the weights vary the product of
    the two does not average out. While the images are still ``far`` apart the mean of both gradients is used, which
    converges from further away [2]_.

    .. [1] Cachier et al. (2003). Comput. Vis. Image Underst. 89, 272. doi:10.1016/S1077-3142(03)00002-X
    .. [2] Vercauteren et al. (2009). NeuroImage 45, S61. doi:10.1016/j.neuroimage.2008.10.040
    """
    from scipy.ndimage import uniform_filter

    def mean(values: Float32Array) -> Float32Array:
        return np.asarray(uniform_filter(values, WINDOW, mode="constant"))

    floor = np.float32(NOISE**2)
    mass = mean(weight) + np.float32(1e-6)
    mean_f, mean_m = mean(weight * fixed) / mass, mean(weight * moved) / mass
    var_f = np.maximum(mean(weight * fixed * fixed) / mass - mean_f**2, 0) + floor
    var_m = np.maximum(mean(weight * moved * moved) / mass - mean_m**2, 0) + floor
    covariance = mean(weight * fixed * moved) / mass - mean_f * mean_m
    slope = covariance / var_f
    unexplained = np.maximum(var_m - slope * covariance, floor)
    residual = moved - mean_m - slope * (fixed - mean_f)
    precision = weight / (unexplained * (1 + residual**2 / (OUTLIER**2 * unexplained)))
    share = np.float32(0.5 if far else 0.0)
    gradient = [
        (1 - share) * slope * f + share * m
        for f, m in zip(np.gradient(fixed, step_um), np.gradient(moved, step_um), strict=True)
    ]
    force = tuple(-precision * g * residual for g in gradient)
    stiffness = tuple(precision * gradient[i] * gradient[j] for i, j in PAIRS)
    return Evidence(stiffness, force, covariance / np.sqrt(var_f * var_m), weight)
