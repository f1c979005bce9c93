"""Where the probes of the invented brain truly went, and where each contact truly sat."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from leadline.base.arrays import FloatArray
from leadline.demo.anatomy import BOX_UM, MIDLINE_UM, surface_depth_um
from leadline.demo.probes import Design, banked, four_shanks, single_shank
from leadline.demo.warp import Spline
from leadline.model.track import along, arc_length

if TYPE_CHECKING:
    from collections.abc import Callable

    from leadline.demo.recipe import Recipe

Triple: TypeAlias = tuple[float, float, float]
STEP_UM = 10.0
BEYOND_UM = 1500.0

# Where probes go: above the brain, and toward; (ap, dv, distance from the midline), um.
_ROUTES: dict[str, tuple[tuple[Triple, Triple], ...]] = {
    "A": (
        ((6900, 200, 2500), (6150, 4300, 1500)),
        ((5500, 200, 2900), (5800, 4300, 1500)),
        ((6100, 200, 2000), (5800, 4300, 1250)),
    ),
    "B": (
        ((7000, 200, 2900), (6600, 2900, 2300)),
        ((6200, 200, 2300), (6100, 2900, 1900)),
        ((5300, 200, 3600), (5300, 2700, 2700)),
    ),
    "C": (
        ((3700, 200, 2600), (4000, 4700, 2500)),
        ((6900, 200, 1700), (7300, 4700, 1000)),
        ((3100, 200, 1900), (3100, 4800, 1600)),
    ),
}
_DESIGNS: dict[str, Callable[[], Design]] = {"A": single_shank, "B": four_shanks, "C": banked}
_LENGTH_UM = {"A": 3750.0, "B": 1950.0, "C": 4350.0}


@dataclass(frozen=True, slots=True, eq=False)
class DepthLaw:
    """In-vivo tip distance to true track depth: ``tip_depth - (distance + stretch)``, on a fine grid."""

    tip_distance_um: FloatArray
    track_depth_um: FloatArray

    def __call__(self, tip_distance_um: FloatArray) -> FloatArray:
        """True track depth ``(n,)``."""
        return np.interp(tip_distance_um, self.tip_distance_um, self.track_depth_um)

    def inverse(self, track_depth_um: float) -> float:
        """Tip distance at a track depth."""
        return float(np.interp(track_depth_um, self.track_depth_um[::-1], self.tip_distance_um[::-1]))


@dataclass(frozen=True, slots=True, eq=False)
class Shank:
    """A true centre line: ``atlas_um`` (n, 3) by ``depth_um`` (n,), 0 at the surface, going on beyond both ends."""

    penetration: str
    number: int
    atlas_um: FloatArray
    depth_um: FloatArray
    tip_depth_um: float
    dye_end_um: float
    law: DepthLaw

    def at(self, depth_um: FloatArray) -> FloatArray:
        """Atlas um ``(n, 3)`` at track depths."""
        return along(self.depth_um, self.atlas_um, np.asarray(depth_um, float))


@dataclass(frozen=True, slots=True, eq=False)
class TruePenetration:
    """A probe and its shanks. ``shank_toward`` : direction in which shank numbers grow."""

    name: str
    design: Design
    shanks: tuple[Shank, ...]
    shank_toward: str = ""

    @property
    def chord_um(self) -> tuple[FloatArray, FloatArray]:
        """Entry and tip in atlas um, the mean over the shanks."""
        ends = np.array([[s.at(np.array([0.0]))[0], s.at(np.array([s.tip_depth_um]))[0]] for s in self.shanks])
        return ends.mean(axis=0)[0], ends.mean(axis=0)[1]


def make_penetrations(recipe: Recipe) -> tuple[TruePenetration, ...]:
    """The penetrations of a recipe; no two of them in the same hemisphere unless there are three."""
    side = 1 if np.random.default_rng([recipe.seed, 30]).random() < 0.5 else -1
    made = []
    for k, name in enumerate(sorted(_ROUTES)[: recipe.penetrations]):
        rng = np.random.default_rng([recipe.seed, 31 + k])
        route = _ROUTES[name][rng.integers(len(_ROUTES[name]))]
        above, target = (np.asarray(end, float) + rng.uniform(-150, 150, 3) for end in route)
        for end in (above, target):
            end[2] = MIDLINE_UM + (side if k % 2 == 0 else -side) * end[2]
        made.append(_penetration(recipe, rng, name, above, target))
    return tuple(made)


def _penetration(
    recipe: Recipe, rng: np.random.Generator, name: str, above: FloatArray, target: FloatArray
) -> TruePenetration:
    design = _DESIGNS[name]()
    direction = (target - above) / np.linalg.norm(target - above)
    toward, row = "", np.zeros(3)
    if len(design.probe.shanks) > 1:
        toward = ("P", "A")[rng.integers(2)]
        row = np.array([1.0 if toward == "P" else -1.0, 0.0, 0.0])
        row -= direction * (row @ direction)
        row /= np.linalg.norm(row)
    bow = np.cross(direction, rng.normal(size=3))
    bow *= recipe.bend_um * rng.uniform(0.4, 1.0) / np.linalg.norm(bow)
    lead = np.arange(-BEYOND_UM, np.linalg.norm(target - above) + BEYOND_UM, STEP_UM)
    reach = float(np.linalg.norm(target - above))
    line = above + lead[:, None] * direction + np.sin(np.pi * lead / reach + rng.uniform(-0.5, 0.5))[:, None] * bow
    n = len(design.probe.shanks)
    lines = [line + (k - (n - 1) / 2) * 250.0 * row for k in range(n)]
    depths = [_depth_from_surface(points) for points in lines]
    # The shanks are one piece of silicon: their tips lie on a line across the track, and their entries do not.
    tip = int(np.argmin(np.abs(np.mean(depths, axis=0) - _LENGTH_UM[name] * rng.uniform(0.96, 1.04))))
    stretch = _stretch(recipe, rng)
    offset = rng.normal(0, recipe.law_sd_um)
    shanks = []
    for k, (points, depth) in enumerate(zip(lines, depths, strict=True)):
        end = float(depth[tip])
        own = end + offset + (rng.normal(0, 12.0) if n > 1 else 0.0)
        law = DepthLaw(stretch[0], own - stretch[1])
        shanks.append(Shank(name, k, points, depth, own, end + rng.normal(0, recipe.dye_end_sd_um), law))
    return TruePenetration(name, design, tuple(shanks), toward)


def _depth_from_surface(points_um: FloatArray) -> FloatArray:
    """Arc length along a line, 0 where it enters the brain for good."""
    arc, inside = arc_length(points_um), surface_depth_um(points_um)
    first = int(np.flatnonzero((inside[1:] > 0) & (inside[:-1] <= 0))[0])
    share = inside[first] / (inside[first] - inside[first + 1])
    return np.asarray(arc - (arc[first] + share * (arc[first + 1] - arc[first])))


def _stretch(recipe: Recipe, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
    """Tip distances, and the atlas um between them and the tip: a scale and a smoothly varying local stretch.

    The local stretch is a Gaussian process with the Matern-3/2 covariance, length 700 um (Rasmussen & Williams 2006,
    eq. 4.17).
    """
    x = np.arange(0.0, 13000.0, 50.0)
    far = np.sqrt(3) * np.abs(x[:, None] - x) / 700.0
    root = np.linalg.cholesky((1 + far) * np.exp(-far) + 1e-9 * np.eye(len(x)))
    local = recipe.slope_sd * (root @ rng.standard_normal(len(x)))
    slope = np.clip((1 + rng.normal(0, recipe.scale_sd)) * (1 + local), 0.6, 1.6)
    travelled = np.concatenate([[0.0], np.cumsum((slope[1:] + slope[:-1]) / 2 * np.diff(x))])
    return x, travelled


def border_shift(recipe: Recipe) -> Callable[[FloatArray], FloatArray]:
    """Where, in the atlas, the animal's own tissue at an atlas point is found: points ``(n, 3)`` to points.

    Correlated over about 0.6 mm; the identity where ``border_sd_um`` is 0.
    """
    rng = np.random.default_rng([recipe.seed, 40])
    count = np.ceil(BOX_UM / 600.0).astype(int) + 3
    # A cubic B-spline of unit coefficients has a standard deviation of 0.33 in three dimensions.
    field = Spline(rng.standard_normal((*count, 3)) * recipe.border_sd_um / 0.33, 600.0)
    return lambda points_um: np.asarray(points_um, float) + field(np.asarray(points_um, float))
