"""The affine that carries atlas um onto the sample, by Gauss-Newton on the local correlation."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.model.transform import Affine
from leadline.registration.matching import NEAR_UM, PAIRS, believable, compare, pulled, still

if TYPE_CHECKING:
    from leadline.registration.matching import Target
    from leadline.registration.prepare import Image

LENGTH_UM = 3000.0
DAMPING = 0.01
MAX_STEP_VOXELS = 2.0


def refine_affine(
    goal: Target, sample: Image, start: Affine, *, iterations: int, tolerance_um: float
) -> tuple[Affine, float]:
    """Improve an affine from atlas um to sample um at one resolution; returns it and the score of the last step.

    The score is the sum of the local correlations over the whole neighbourhood of the template, so that not believing
    the sample is never rewarded.
    """
    grid = goal.image.grid
    centre = grid.middle_um
    reach = (grid.points_um() - centre) / LENGTH_UM
    shift, affine, agreement = still(grid), start, 0.0
    near = max(1, int((goal.outside_um <= NEAR_UM).sum()))
    for _ in range(iterations):
        weight = believable(goal, sample, affine, shift, tolerance_um=tolerance_um)
        moved = pulled(sample.intensity, sample.grid, grid, affine, shift)
        evidence = compare(goal.image.intensity, moved, weight, step_um=grid.step_um)
        agreement = float((evidence.correlation * weight).sum()) / near
        used = evidence.weight.ravel() > 0
        if not used.any():
            break
        basis = np.column_stack([reach[used], np.ones(int(used.sum()))])
        normal, right = np.zeros((12, 12)), np.zeros(12)
        for values, (i, j) in zip(evidence.stiffness, PAIRS, strict=True):
            block = basis.T @ (basis * values.ravel()[used, None])
            normal[4 * i : 4 * i + 4, 4 * j : 4 * j + 4] = block
            normal[4 * j : 4 * j + 4, 4 * i : 4 * i + 4] = block
        for i, values in enumerate(evidence.force):
            right[4 * i : 4 * i + 4] = basis.T @ values.ravel()[used]
        normal[np.diag_indices(12)] *= 1 + DAMPING
        normal[np.diag_indices(12)] += 1e-12
        change = np.linalg.solve(normal, right).reshape(3, 4)
        largest = np.abs(basis @ change.T).max()
        change *= min(1.0, MAX_STEP_VOXELS * grid.step_um / max(largest, 1e-9))
        matrix = np.eye(3) + change[:, :3] / LENGTH_UM
        affine = affine.after(Affine(matrix, change[:, 3] + centre - matrix @ centre))
    return affine, agreement
