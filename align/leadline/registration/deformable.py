"""The smooth deformation that the affine leaves: a maximum a posteriori displacement on nodes.

The images' local correlation is the likelihood, bending energy the prior; both are quadratic near the answer, so a few
Gauss-Newton steps find it. Where the images say little the prior rules, where they say much fine detail is followed.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import BoolArray, Float32Array
from leadline.registration.grids import Grid
from leadline.registration.matching import Displacement, believable, compare, pulled, target
from leadline.registration.nodes import Prior, bending_prior, jacobian, spline_basis, to_nodes, to_voxels, unfolded

if TYPE_CHECKING:
    from leadline.base.progress import Progress
    from leadline.model.transform import Affine
    from leadline.registration.prepare import Image

STIFFNESS = 1.0
MARGIN_UM = 1000.0
TOLERANCE_UM = 300.0
LEAST_JACOBIAN = 0.1
MAX_STEP_VOXELS = 1.0
REFRESH = 3
FINE_NODES, UNSEEN = 2.5, 2.0


@dataclass(frozen=True, slots=True, eq=False)
class Deformation:
    """Displacement in atlas um on ``nodes``: ``values`` (3, n0, n1, n2), 0 on the outer nodes."""

    values: Float32Array
    nodes: Grid

    def on(self, grid: Grid) -> Displacement:
        """At the nodes of another grid, in its steps."""
        basis = spline_basis(self.nodes, grid, 3)
        u = [to_voxels(basis, v) / np.float32(grid.step_um) for v in self.values]
        return u[0], u[1], u[2]

    def refined(self) -> Deformation:
        """The same on nodes twice as dense."""
        shape = tuple(2 * n - 1 for n in self.nodes.shape)
        grid = Grid((shape[0], shape[1], shape[2]), self.nodes.step_um / 2, self.nodes.origin_um)
        basis = spline_basis(self.nodes, grid, 3)
        return Deformation(np.stack([to_voxels(basis, v) for v in self.values]), grid)

    @property
    def jacobian(self) -> Float32Array:
        """Determinant of the gradient of ``x + u(x)``."""
        return jacobian(self.values, self.nodes.step_um)


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """A deformation with what it rests on: the last normal equations, and per node how many voxels were believed."""

    deformation: Deformation
    prior: Prior
    stiffness: tuple[Float32Array, ...]
    believed: Float32Array

    def error_um(self, seed: int, draws: int = 2) -> float:
        """Estimated standard deviation of one coordinate of the displacement, over tissue that could be compared.

        Two parts: the posterior's, drawn; and detail too fine for the prior, taken as ``UNSEEN`` times the finest
        detail that was found (waves shorter than about eight nodes). ``UNSEEN`` was fitted on invented brains
        (``tests/studies/registration.py``).
        """
        from scipy.ndimage import gaussian_filter

        rng = np.random.default_rng(seed)
        values = self.deformation.values
        fine = values - np.stack([gaussian_filter(v, FINE_NODES) for v in values])
        drawn = np.mean([np.mean(self.prior.draw(self.stiffness, rng)[:, self._known] ** 2) for _ in range(draws)])
        return float(np.sqrt(drawn + UNSEEN**2 * np.mean(fine[:, self._known] ** 2)))

    @property
    def size_um(self) -> float:
        """Root mean square of one coordinate of the displacement over the same tissue."""
        return float(np.sqrt(np.mean(np.square(self.deformation.values[:, self._known]))))

    @property
    def _known(self) -> BoolArray:
        return np.asarray(self.believed > self.believed.max() / 2, bool)


def undeformed(atlas: Image, step_um: float) -> Deformation:
    """No deformation, on nodes ``step_um`` apart that reach a margin beyond the tissue."""
    where = np.argwhere(atlas.trust > 0.3) * atlas.grid.step_um + atlas.grid.origin_um
    low, high = where.min(axis=0) - MARGIN_UM, where.max(axis=0) + MARGIN_UM
    count = np.ceil((high - low) / step_um).astype(int) + 1
    grid = Grid((int(count[0]), int(count[1]), int(count[2])), step_um, low)
    return Deformation(np.zeros((3, *grid.shape), np.float32), grid)


def fit(
    atlas: Image,
    sample: Image,
    affine: Affine,
    start: Deformation,
    *,
    belief: float,
    iterations: int,
    progress: Progress,
    far: bool = False,
) -> Fit:
    """Improve a deformation at one resolution.

    ``belief`` : how many independent observations a voxel counts for (voxels of real tissue are not independent).
    ``far`` : the images may still be further apart than a voxel or two.
    """
    nodes = start.nodes
    last = nodes.origin_um + (np.asarray(nodes.shape) - 1) * nodes.step_um
    grid, cut = atlas.grid.cropped(nodes.origin_um + nodes.step_um, last - nodes.step_um)
    goal = target(
        replace(atlas, intensity=atlas.intensity[cut], tissue=atlas.tissue[cut], trust=atlas.trust[cut], grid=grid)
    )
    cubic, linear = spline_basis(nodes, grid, 3), spline_basis(nodes, grid, 1)
    prior = bending_prior(nodes, STIFFNESS)
    values = start.values
    stiffness: tuple[Float32Array, ...] = ()
    weight = np.zeros(grid.shape, np.float32)
    for step in range(iterations):
        u = [to_voxels(cubic, v) / np.float32(grid.step_um) for v in values]
        shift = (u[0], u[1], u[2])
        if step % REFRESH == 0:
            weight = believable(goal, sample, affine, shift, tolerance_um=TOLERANCE_UM)
        moved = pulled(sample.intensity, sample.grid, grid, affine, shift, weight > 0)
        evidence = compare(goal.image.intensity, moved, weight, step_um=grid.step_um, far=far)
        stiffness = tuple(to_nodes(linear, s) * np.float32(belief) for s in evidence.stiffness)
        force = np.stack([to_nodes(cubic, f) * np.float32(belief) for f in evidence.force])
        change = prior.solve(stiffness, force - prior.times(values))
        largest = float(np.abs(change).max())
        change *= np.float32(min(1.0, MAX_STEP_VOXELS * grid.step_um / max(largest, 1e-9)))
        values = unfolded(values + change, nodes.step_um, least=LEAST_JACOBIAN)
        progress.step()
    return Fit(Deformation(values, nodes), prior, stiffness, to_nodes(linear, weight * goal.image.tissue))
