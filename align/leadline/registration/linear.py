"""The affine that carries atlas um onto the sample, by damped Gauss-Newton on the local correlation."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import FloatArray
from leadline.model.transform import Affine
from leadline.registration.matching import NEAR_UM, PAIRS, Evidence, believable, compare, pulled, still

if TYPE_CHECKING:
    from leadline.registration.matching import Target
    from leadline.registration.prepare import Image

LENGTH_UM = 3000.0
DAMPING = 0.01
MAX_STEP_VOXELS = 2.0
SHORTER, LONGER, SHORTEST = 0.4, 2.0, 0.02


def refine_affine(
    goal: Target, sample: Image, start: Affine, *, iterations: int, tolerance_um: float
) -> tuple[Affine, float]:
    """Improve an affine from atlas um to sample um at one resolution; returns the best one seen and its score.

    The score is the sum of the local correlations over the whole neighbourhood of the template, so that not believing
    the sample is never rewarded. A step that lowers it is taken back and tried shorter (Levenberg's damping in its
    simplest form): where rings of tissue lie inside one another, full steps walk away from the answer.
    """
    grid = goal.image.grid
    centre = grid.middle_um
    reach = (grid.points_um() - centre) / LENGTH_UM
    shift = still(grid)
    near = max(1, int((goal.outside_um <= NEAR_UM).sum()))
    best, agreement, change = start, -np.inf, np.zeros((3, 4))
    trial, length = start, 1.0
    for _ in range(iterations):
        weight = believable(goal, sample, trial, shift, tolerance_um=tolerance_um)
        moved = pulled(sample.intensity, sample.grid, grid, trial, shift)
        evidence = compare(goal.image.intensity, moved, weight, step_um=grid.step_um, far=True)
        score = float((evidence.correlation * weight).sum()) / near
        if score > agreement:
            best, agreement = trial, score
            change = _change(evidence, reach, MAX_STEP_VOXELS * grid.step_um)
            length = min(1.0, LONGER * length)
        else:
            length *= SHORTER
        if length < SHORTEST or not change.any():
            break
        matrix = np.eye(3) + length * change[:, :3] / LENGTH_UM
        trial = best.after(Affine(matrix, length * change[:, 3] + centre - matrix @ centre))
    return best, agreement


def _change(evidence: Evidence, reach: FloatArray, longest_um: float) -> FloatArray:
    """Gauss-Newton change ``(3, 4)`` of the affine, no point moved over ``longest_um``; zero without evidence."""
    used = evidence.weight.ravel() > 0
    if not used.any():
        return np.zeros((3, 4))
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
    largest = float(np.abs(basis @ change.T).max())
    return np.asarray(change * min(1.0, longest_um / max(largest, 1e-9)), np.float64)
