"""What a shank of the invented brain passes and hears on its way: features by true track depth."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.demo.anatomy import codes_at
from leadline.demo.structures import kinds
from leadline.demo.tendencies import FEATURES, structure_means, type_codes, types
from leadline.demo.tracks import border_shift

if TYPE_CHECKING:
    from collections.abc import Callable

    from leadline.demo.recipe import Recipe
    from leadline.demo.tracks import Shank

STEP_UM = 10.0
CONDUCTION_UM = 45.0
_AREA_DRIVE = {"VIP": 1.0, "VIM": 0.8, "VIL": 0.8, "PAR": 0.35, "SCS": 1.0, "SCI": 0.4, "TLG": 1.0, "TLP": 0.5}


@dataclass(frozen=True, slots=True, eq=False)
class Tissue:
    """One shank's tissue, every 10 um of true track depth.

    ``depth_um`` (n,), ``codes`` (n,) of the animal's own structures, ``features`` (n, 9) as in ``FEATURES``,
    ``drive`` (n,) how strongly a flash reaches there. ``lies`` : the recording knows nothing of the structures.
    """

    depth_um: FloatArray
    codes: AnyArray
    features: FloatArray
    drive: FloatArray
    lies: bool = False

    def named(self, *names: str) -> FloatArray:
        """1.0 ``(n,)`` where the structure is of one of these types; 0 everywhere where the recording says nothing."""
        if self.lies:
            return np.zeros(len(self.codes))
        return np.isin(type_codes()[self.codes], [types().index(name) for name in names]).astype(float)


def own_codes(shank: Shank, depth_um: FloatArray, shift: Callable[[FloatArray], FloatArray]) -> AnyArray:
    """The animal's own structures ``(n,)`` at true track depths; outside above the surface."""
    depth = np.asarray(depth_um, float)
    codes = codes_at(shift(shank.at(depth)))
    # The animal's own borders move its surface too; the surface itself is where the track says it is.
    skin = np.flatnonzero((codes == 0) & (depth >= 0) & (depth < 150))
    if skin.size:
        fine = np.arange(0.0, 400.0, 5.0)
        below = codes_at(shift(shank.at(fine)))
        codes[skin] = below[np.flatnonzero(below)[0]]
    codes[depth < 0] = 0
    return codes


def make_tissue(recipe: Recipe, shank: Shank) -> Tissue:
    """Features along a shank: means of its structures, gradients and noise of this place, injuries."""
    depth = np.arange(-1500.0, shank.tip_depth_um + 1500.0, STEP_UM)
    astray = np.random.default_rng([recipe.seed, 85, ord(shank.penetration[0])])
    # In a rough brain what is heard changes some way off the border that a histologist would draw.
    heard_at = depth + 25.0 * recipe.rough * _wiggles(astray, len(depth), 1, 200.0)[:, 0]
    codes = own_codes(shank, np.where(depth > 0, np.clip(heard_at, 0, None), depth), border_shift(recipe))
    # Shanks of one probe share the animal and the place, not the wiggles along each.
    rng = np.random.default_rng([recipe.seed, 81, ord(shank.penetration[0])])
    features = structure_means(recipe)[codes]
    features = features + 0.15 * rng.standard_normal((len(kinds()), len(FEATURES)))[codes] * (codes > 0)[:, None]
    if recipe.rough:
        features = features + recipe.rough * _gradients(rng, codes, depth)
        _lose_landmarks(recipe, rng, codes, features)
    own = np.random.default_rng([recipe.seed, 82, ord(shank.penetration[0]), shank.number])
    features = features + (0.18 + 0.14 * recipe.rough) * _wiggles(own, len(depth), len(FEATURES)) * (codes > 0)[:, None]
    if recipe.rough:
        hurt = recipe.rough * own.uniform(0.3, 1.0) * np.exp(-np.clip(depth, 0, None) / own.uniform(150, 350))
        features = features - (hurt * (codes > 0))[:, None] * np.array([0.2, 0.2, 0.8, 0.8, 1.2, 2.0, 0.8, 0.5, 0.0])
    lies = recipe.silent == shank.penetration
    if lies:
        inside = (codes > 0)[:, None]
        features = np.where(inside, 0.8 * _wiggles(rng, len(depth), len(FEATURES), 200.0), features)
    return Tissue(depth, codes, features, np.zeros(len(depth)) if lies else _drive(codes), lies)


def _drive(codes: AnyArray) -> FloatArray:
    table = np.array([_AREA_DRIVE.get(k.acronym, _AREA_DRIVE.get(k.parent, 0.1 if k.layer else 0.0)) for k in kinds()])
    return table[codes]


def _gradients(rng: np.random.Generator, codes: AnyArray, depth: FloatArray) -> FloatArray:
    """Inside every run of one structure each feature climbs or falls."""
    out = np.zeros((len(codes), len(FEATURES)))
    starts = np.flatnonzero(np.diff(codes, prepend=-1))
    for start, stop in zip(starts, [*starts[1:], len(codes)], strict=True):
        if codes[start] and stop - start > 3:
            ramp = np.linspace(-1, 1, stop - start)
            out[start:stop] = ramp[:, None] * rng.normal(0, 0.45, len(FEATURES))
    return out


def _lose_landmarks(recipe: Recipe, rng: np.random.Generator, codes: AnyArray, features: FloatArray) -> None:
    """Each of the thin landmarks may be missing from a recording."""
    for name, like in (("sp", "so"), ("L4", "L2"), ("sg", "po"), ("white", "L6"), ("slm", "sr")):
        gone = rng.random() < 0.3 * recipe.rough
        here = type_codes()[codes] == types().index(name)
        there = type_codes()[codes] == types().index(like)
        if gone and here.any() and there.any():
            features[here] = features[there].mean(axis=0)


def _wiggles(rng: np.random.Generator, n: int, k: int, length_um: float = 90.0) -> FloatArray:
    """Smooth noise of unit size along the depth."""
    from scipy.ndimage import gaussian_filter1d

    raw = gaussian_filter1d(rng.standard_normal((n, k)), length_um / STEP_UM, axis=0, mode="wrap")
    return np.asarray(raw / raw.std(axis=0))
