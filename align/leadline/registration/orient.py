"""Where to start: tilts about the stored orientation, and whether another orientation code fits much better.

Handedness is never searched: a mirror is taken from the code and from nothing else, because the two halves of a brain
are too alike for an image to decide it.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import FloatArray
from leadline.model.frames import ALL_CODES, axes_matrix
from leadline.model.transform import Affine
from leadline.registration.linear import refine_affine

if TYPE_CHECKING:
    from leadline.registration.matching import Target
    from leadline.registration.prepare import Image

TILTS_DEG = (-24.0, -12.0, 0.0, 12.0, 24.0)
FEW_TILTS_DEG = (-20.0, 0.0, 20.0)
STARTS = 3
ITERATIONS = 15
TOLERANCE_UM = 600.0
CLEARLY_BETTER = 0.05
MOST_STRETCH = 1.5


@dataclass(frozen=True, slots=True, eq=False)
class Start:
    """``affine`` from atlas um to sample um under the orientation ``code``; ``agreement`` : the score there."""

    code: str
    affine: Affine
    agreement: float


def search(goal: Target, sample: Image, code: str, *, other_codes: bool) -> tuple[Start, Start | None, int]:
    """Find the best start in the stored code, and the best in any other code of the same handedness.

    Returns the start to use (always in ``code``), the best rival (None unless ``other_codes``), and how many codes
    were tried.
    """
    best = _best(goal, sample, code, code, TILTS_DEG)
    if not other_codes:
        return best, None, 1
    codes = same_handed(code)
    rivals = [c for c in codes if c != code]
    ranked = sorted(rivals, key=lambda c: -_rank(goal, sample, _candidates(goal, sample, code, c, FEW_TILTS_DEG))[0][0])
    found = [_best(goal, sample, code, c, FEW_TILTS_DEG) for c in ranked[:STARTS]]
    return best, max(found, key=lambda s: s.agreement), len(codes)


def same_handed(code: str) -> tuple[str, ...]:
    """The 24 codes that a rotation can turn ``code`` into, itself among them."""
    sign = np.linalg.det(axes_matrix(code))
    return tuple(c for c in ALL_CODES if np.linalg.det(axes_matrix(c)) * sign > 0)


def tilt_deg(affine: Affine) -> float:
    """Angle in degrees of the rotation in an affine (polar decomposition)."""
    u, _, vt = np.linalg.svd(affine.matrix)
    cosine = (np.trace(u @ vt) - 1) / 2
    return float(np.degrees(np.arccos(np.clip(cosine, -1, 1))))


def _candidates(goal: Target, sample: Image, stored: str, code: str, tilts: tuple[float, ...]) -> list[Affine]:
    """Rotations about the centres of the two tissues, with the scale that makes their volumes equal."""
    from scipy.spatial.transform import Rotation

    here, there = goal.image, sample
    centre_a, volume_a = _moments(here)
    centre_s, volume_s = _moments(there)
    scale = (volume_s / volume_a) ** (1 / 3)
    # sample um are laid out by the stored code; under another code the same voxels point elsewhere
    turn = axes_matrix(stored) @ axes_matrix(code).T
    found = []
    for angles in product(tilts, repeat=3):
        matrix = scale * turn @ Rotation.from_rotvec(np.radians(angles)).as_matrix()
        found.append(Affine(matrix, centre_s - matrix @ centre_a))
    return found


def _moments(image: Image) -> tuple[FloatArray, float]:
    points = np.argwhere(image.tissue > 0.5) * image.grid.step_um + image.grid.origin_um
    return points.mean(axis=0), float(len(points)) * image.grid.step_um**3


def _rank(goal: Target, sample: Image, candidates: list[Affine]) -> list[tuple[float, Affine]]:
    """Candidates by their correlation of intensity near the template, best first."""
    from scipy.ndimage import map_coordinates

    near = goal.outside_um <= 2 * goal.image.grid.step_um
    points = goal.image.grid.points_um()[near.ravel()]
    fixed = goal.image.intensity[near]
    scored = []
    for affine in candidates:
        index = (affine(points) - sample.grid.origin_um) / sample.grid.step_um
        moved = map_coordinates(sample.intensity, index.T, order=1, mode="constant", cval=0.0)
        spread = moved.std()
        scored.append((float(np.corrcoef(fixed, moved)[0, 1]) if spread > 0 else -1.0, affine))
    return sorted(scored, key=lambda pair: -pair[0])


def _best(goal: Target, sample: Image, stored: str, code: str, tilts: tuple[float, ...]) -> Start:
    ranked = _rank(goal, sample, _candidates(goal, sample, stored, code, tilts))
    refined = [
        refine_affine(goal, sample, affine, iterations=ITERATIONS, tolerance_um=TOLERANCE_UM)
        for _, affine in ranked[:STARTS]
    ]
    sane = [pair for pair in refined if _sane(pair[0], ranked[0][1])]
    affine, agreement = max(sane, key=lambda pair: pair[1]) if sane else (ranked[0][1], 0.0)
    return Start(code, affine, agreement)


def _sane(affine: Affine, start: Affine) -> bool:
    """Whether every stretch stayed within a factor of the start's: a brain neither doubles nor halves."""
    stretch = np.linalg.svd(affine.matrix @ np.linalg.inv(start.matrix), compute_uv=False)
    return bool(stretch.max() < MOST_STRETCH and stretch.min() > 1 / MOST_STRETCH)
