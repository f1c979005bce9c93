"""How good a registration is, and how far to believe it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.registration.matching import compare, pulled

if TYPE_CHECKING:
    from leadline.base.arrays import BoolArray
    from leadline.model.transform import Affine
    from leadline.registration.matching import Displacement, Target
    from leadline.registration.prepare import Image


def dice(a: BoolArray, b: BoolArray) -> float:
    """Overlap of two masks, 1 when they are the same (Dice 1945, Ecology 26, 297. doi:10.2307/1932409)."""
    total = int(a.sum()) + int(b.sum())
    return 2 * int((a & b).sum()) / total if total else 0.0


def agreement(goal: Target, sample: Image, affine: Affine, shift: Displacement) -> tuple[float, float, float]:
    """Mean local correlation, correlation of intensities inside the template's tissue, and Dice of the tissues."""
    grid = goal.image.grid
    moved = pulled(sample.intensity, sample.grid, grid, affine, shift)
    inside = goal.image.tissue > 0.5
    there = pulled(sample.tissue, sample.grid, grid, affine, shift) > 0.5
    evidence = compare(goal.image.intensity, moved, inside.astype(np.float32), step_um=grid.step_um)
    both = inside & there
    whole = float(np.corrcoef(goal.image.intensity[both], moved[both])[0, 1]) if both.sum() > 2 else 0.0
    return evidence.agreement, whole, dice(inside, there)
