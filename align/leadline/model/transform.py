"""Point transforms between stack um and atlas um: an affine on either side of a smooth displacement field."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import Float32Array, FloatArray, frozen


@dataclass(frozen=True, slots=True, eq=False)
class Affine:
    """``y = matrix @ x + shift_um``; ``matrix`` (3, 3), ``shift_um`` (3,)."""

    matrix: FloatArray
    shift_um: FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "matrix", frozen(self.matrix))
        object.__setattr__(self, "shift_um", frozen(self.shift_um))

    def __call__(self, points_um: FloatArray) -> FloatArray:
        """Carry points ``(n, 3)``."""
        return np.asarray(points_um, float) @ self.matrix.T + self.shift_um

    def inverse(self) -> Affine:
        """The affine that undoes this one."""
        matrix = np.asarray(np.linalg.inv(self.matrix), np.float64)
        return Affine(matrix, -matrix @ self.shift_um)

    def after(self, first: Affine) -> Affine:
        """The affine that applies ``first``, then this one."""
        return Affine(self.matrix @ first.matrix, self.matrix @ first.shift_um + self.shift_um)


IDENTITY = Affine(np.eye(3), np.zeros(3))


@dataclass(frozen=True, slots=True, eq=False)
class Field:
    """Displacements on a regular grid: ``y = x + u(x)``, linear between nodes, zero beyond the grid.

    ``displacement_um`` : (n0, n1, n2, 3) float32. ``spacing_um``, ``origin_um`` : (3,) of the grid nodes. The outer
    nodes are zero, so the map is continuous.
    """

    displacement_um: Float32Array
    spacing_um: FloatArray
    origin_um: FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "displacement_um", frozen(self.displacement_um, np.float32))
        object.__setattr__(self, "spacing_um", frozen(self.spacing_um))
        object.__setattr__(self, "origin_um", frozen(self.origin_um))

    def displacement_at(self, points_um: FloatArray) -> FloatArray:
        """Displacement ``(n, 3)`` at points ``(n, 3)``."""
        from scipy.ndimage import map_coordinates

        index = ((np.asarray(points_um, float) - self.origin_um) / self.spacing_um).T
        return np.column_stack(
            [
                map_coordinates(
                    self.displacement_um[..., k], index, order=1, mode="constant", cval=0.0, output=np.float64
                )
                for k in range(3)
            ]
        )

    def __call__(self, points_um: FloatArray) -> FloatArray:
        """Carry points ``(n, 3)``."""
        return np.asarray(points_um, float) + self.displacement_at(points_um)


@dataclass(frozen=True, slots=True, eq=False)
class PointTransform:
    """``first``, then ``field`` (where there is one), then ``last``; all on points in um."""

    first: Affine = IDENTITY
    field: Field | None = None
    last: Affine = IDENTITY

    def __call__(self, points_um: FloatArray) -> FloatArray:
        """Carry points ``(n, 3)``."""
        points = self.first(points_um)
        return self.last(points if self.field is None else self.field(points))


@dataclass(frozen=True, slots=True, eq=False)
class Registration:
    """A stack tied to an atlas, both ways, with the honest size of its error.

    ``error_um`` : estimated standard deviation of one coordinate of the carried points, atlas um; later stages add
    it to their own. ``quality`` : the numbers of ``qc.json``. ``warnings`` : sentences for the user.
    """

    stack_to_atlas: PointTransform
    atlas_to_stack: PointTransform
    error_um: float
    quality: dict[str, float | str | list[float]]
    warnings: tuple[str, ...] = ()
