"""The true map of the invented sample: from the stack, laid out as PIR, to the atlas, and back."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.demo.anatomy import BOX_UM, surface_depth_um
from leadline.model.frames import axes_matrix, voxel_as_pir

if TYPE_CHECKING:
    from leadline.demo.recipe import Recipe

_MARGIN_UM = 350.0
Axes: TypeAlias = "tuple[AnyArray, ...]"


def _cubic(t: FloatArray) -> FloatArray:
    """The cardinal cubic B-spline (de Boor 1978): 2/3 at 0, 1/6 at 1, 0 from 2 on."""
    t = np.abs(t)
    return np.where(t < 1, (4 - 6 * t**2 + 3 * t**3) / 6, np.clip(2 - t, 0, None) ** 3 / 6)


@dataclass(frozen=True, slots=True, eq=False)
class Spline:
    """A uniform cubic B-spline on a box: ``coefficients`` (k0, k1, k2, c), knots ``knot_um`` apart."""

    coefficients: FloatArray
    knot_um: float

    def basis(self, at_um: FloatArray, axis: int) -> FloatArray:
        """Weights ``(n, k)`` of the coefficients along one axis; the first knot lies one step before 0."""
        k = self.coefficients.shape[axis]
        return _cubic(np.asarray(at_um, float)[:, None] / self.knot_um + 1 - np.arange(k))

    def __call__(self, points_um: FloatArray) -> FloatArray:
        """Values ``(n, c)`` at scattered points: the 64 coefficients about each."""
        at = np.asarray(points_um, float) / self.knot_um + 1
        top = np.array(self.coefficients.shape[:3]) - 4
        first = np.clip(np.floor(at).astype(int) - 1, 0, top)
        weights = [_cubic(at[:, k, None] - first[:, k, None] - np.arange(4)) for k in range(3)]
        value = np.zeros((len(at), self.coefficients.shape[3]))
        for i, j, k in np.ndindex(4, 4, 4):
            weight = weights[0][:, i] * weights[1][:, j] * weights[2][:, k]
            value += weight[:, None] * self.coefficients[first[:, 0] + i, first[:, 1] + j, first[:, 2] + k]
        return value

    def on_grid(self, axes_um: Axes) -> AnyArray:
        """The same values, float32 ``(n0, n1, n2, c)``, on a grid: exact, by one axis after the other."""
        a, b, c = (self.basis(axis, k).astype(np.float32) for k, axis in enumerate(axes_um))
        shape = (len(a), len(b), len(c))
        value = np.empty((*shape, self.coefficients.shape[3]), np.float32)
        for k in range(value.shape[3]):
            part = np.tensordot(a, self.coefficients[..., k].astype(np.float32), axes=(1, 0))
            value[..., k] = ((b @ part).reshape(-1, c.shape[1]) @ c.T).reshape(shape)
        return value


def random_spline(
    rng: np.random.Generator, extent_um: FloatArray, knot_um: float, components: int, largest: float
) -> Spline:
    """A random smooth field of zero mean whose largest vector is ``largest`` long."""
    count = np.ceil(np.asarray(extent_um) / knot_um).astype(int) + 3
    spline = Spline(rng.standard_normal((*count, components)), knot_um)
    fine = tuple(np.arange(0, e, knot_um / 3) for e in extent_um)
    length = np.sqrt((spline.on_grid(fine) ** 2).sum(axis=-1)).max()
    return Spline(spline.coefficients * (largest / length), knot_um)


@dataclass(frozen=True, slots=True, eq=False)
class Dent:
    """Tissue pushed along a shank: at ``entry_um``, along ``direction``, fading 250 um aside and with depth."""

    entry_um: FloatArray
    direction: FloatArray
    length_um: float
    push_um: float

    def __call__(self, points_um: AnyArray) -> AnyArray:
        """Displacement ``(..., 3)`` at points of the stack laid out as PIR."""
        off = points_um - self.entry_um.astype(points_um.dtype)
        along = off @ self.direction.astype(points_um.dtype)
        aside = (off**2).sum(axis=-1) - along**2
        depth = np.clip(along / self.length_um, 0, 1)
        size = -self.push_um * np.exp(-aside / (2 * 250.0**2)) * (1 - depth) ** 2
        return np.asarray(size[..., None] * self.direction.astype(points_um.dtype))


@dataclass(frozen=True, slots=True, eq=False)
class TrueMap:
    """``atlas_centre + matrix (q + splines(q) + dents(q) - stack_centre)``, q in the stack laid out as PIR."""

    matrix: FloatArray
    stack_centre_um: FloatArray
    atlas_centre_um: FloatArray
    splines: tuple[Spline, ...]
    dents: tuple[Dent, ...] = ()

    def __call__(self, points_um: FloatArray) -> FloatArray:
        """Atlas um of points ``(n, 3)``."""
        q = np.asarray(points_um, float)
        moved = q - self.stack_centre_um
        for spline in self.splines:
            moved += spline(q)
        for dent in self.dents:
            moved += dent(q)
        return moved @ self.matrix.T + self.atlas_centre_um

    def on_grid(self, axes_um: Axes) -> AnyArray:
        """Atlas um, float32 ``(n0, n1, n2, 3)``, of a grid."""
        q = np.stack(np.meshgrid(*[a.astype(np.float32) for a in axes_um], indexing="ij"), axis=-1)
        moved = q - self.stack_centre_um.astype(np.float32)
        for spline in self.splines:
            moved += spline.on_grid(axes_um)
        for dent in self.dents:
            moved += dent(q)
        return np.asarray(moved @ self.matrix.T.astype(np.float32) + self.atlas_centre_um.astype(np.float32))

    def inverse(self, atlas_um: FloatArray) -> FloatArray:
        """Points ``(n, 3)`` of the stack, laid out as PIR, that lie at ``atlas_um``; to 0.01 um."""
        target = np.asarray(atlas_um, float)
        back = np.linalg.inv(self.matrix).T
        q = (target - self.atlas_centre_um) @ back + self.stack_centre_um
        for _ in range(60):
            step = (self(q) - target) @ back
            q -= step
            if np.abs(step).max(initial=0.0) < 0.01:
                return q
        raise ValueError("the invented deformation folds")


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """A stack as stored: ``code``, ``shape`` and ``voxel_um`` along the stored axes."""

    code: str
    shape: tuple[int, int, int]
    voxel_um: FloatArray

    @property
    def pir_shape(self) -> tuple[int, int, int]:
        """Voxels along (ap, dv, ml)."""
        a, b, c = np.rint(np.abs(axes_matrix(self.code)) @ np.asarray(self.shape)).astype(int)
        return int(a), int(b), int(c)

    @property
    def _shift_um(self) -> FloatArray:
        back = axes_matrix(self.code).sum(axis=1) < 0
        return np.where(back, (np.asarray(self.pir_shape) - 1) * voxel_as_pir(self.voxel_um, self.code), 0.0)

    def to_pir(self, stack_um: FloatArray) -> FloatArray:
        """Stack um ``(n, 3)`` along the stored axes to the stack laid out as PIR."""
        return np.asarray(stack_um, float) @ axes_matrix(self.code).T + self._shift_um

    def from_pir(self, points_um: FloatArray) -> FloatArray:
        """The inverse of :meth:`to_pir`."""
        return (np.asarray(points_um, float) - self._shift_um) @ axes_matrix(self.code)


def _linear(rng: np.random.Generator, tilt_deg: float) -> FloatArray:
    """Sample to atlas: a rotation, a stretch that undoes a shrinkage of 0.88 to 1, a little shear."""
    from scipy.spatial.transform import Rotation

    axis = rng.normal(size=3)
    rotation = Rotation.from_rotvec(np.radians(tilt_deg) * axis / np.linalg.norm(axis)).as_matrix()
    scale = np.diag(1 / (rng.uniform(0.9, 0.97) + rng.uniform(-0.02, 0.03, 3)))
    shear = np.eye(3) + np.triu(rng.uniform(-0.04, 0.04, (3, 3)), 1)
    return np.asarray(rotation @ scale @ shear)


def make_map(recipe: Recipe, chords_um: tuple[tuple[FloatArray, FloatArray], ...]) -> tuple[TrueMap, Frame]:
    """The true map and the frame of a stack that holds the whole brain.

    ``chords_um`` : (entry, tip) of each penetration in atlas um; a dent follows each.
    """
    rng = np.random.default_rng([recipe.seed, 20])
    matrix = _linear(rng, recipe.tilt_deg)
    back = np.linalg.inv(matrix)
    centre = BOX_UM / 2
    corners = (_brain_points() - centre) @ back.T
    room = recipe.warp_um + recipe.fine_um + _MARGIN_UM
    low, high = corners.min(axis=0) - room, corners.max(axis=0) + room
    extent = high - low
    splines = [
        random_spline(rng, extent, 2400.0, 3, 0.7 * recipe.warp_um),
        random_spline(rng, extent, 1600.0, 3, 0.45 * recipe.warp_um),
    ]
    if recipe.fine_um:
        splines.append(random_spline(rng, extent, rng.uniform(800.0, 1000.0), 3, recipe.fine_um))
    voxel = np.asarray(recipe.voxel_um, float)
    stored = np.abs(axes_matrix(recipe.stack_code)).T @ extent
    a, b, c = np.ceil(stored / voxel).astype(int) + 1
    chart = TrueMap(matrix, -low, centre, tuple(splines), _dents(recipe, chords_um, back, centre, low))
    return chart, Frame(recipe.stack_code, (int(a), int(b), int(c)), voxel)


def _dents(
    recipe: Recipe,
    chords_um: tuple[tuple[FloatArray, FloatArray], ...],
    back: AnyArray,
    centre: AnyArray,
    low: AnyArray,
) -> tuple[Dent, ...]:
    dents = []
    for entry, tip in chords_um:
        a, b = ((end - centre) @ back.T - low for end in (entry, tip))
        length = float(np.linalg.norm(b - a))
        dents.append(Dent(a, (b - a) / length, length, recipe.dent_um))
    return tuple(dents) if recipe.dent_um else ()


def _brain_points() -> FloatArray:
    axes = [np.arange(0, edge + 1, 150.0) for edge in BOX_UM]
    points = np.stack([m.ravel() for m in np.meshgrid(*axes, indexing="ij")], axis=1)
    return points[surface_depth_um(points) > -100]
