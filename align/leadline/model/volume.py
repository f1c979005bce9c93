"""Voxels that may be large: an array that reads on slicing, with the frame it lies in."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray, frozen_vector
from leadline.base.errors import LeadlineError
from leadline.model.frames import as_pir, orientation, voxel_as_pir


class Voxels(Protocol):
    """Three axes, sliced to numpy arrays; only what is sliced is read."""

    @property
    def shape(self) -> tuple[int, ...]:
        """Lengths of the three axes."""

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of a voxel."""

    def __getitem__(self, key: Any) -> Any:
        """Read a block (basic slices only)."""


@dataclass(frozen=True, slots=True, eq=False)
class Volume:
    """A three-dimensional image in stored axis order.

    ``data`` : (n0, n1, n2) voxels, read on slicing. ``voxel_um`` : (3,) along the stored axes.
    ``code`` : three-letter orientation. ``origin_um`` : (3,) centre of the first voxel in stack um, not zero for a
    volume reduced from a finer one. ``chunk`` : block that is cheap to read at once.
    """

    data: Voxels
    voxel_um: FloatArray
    code: str
    origin_um: FloatArray = None  # type: ignore[assignment]
    chunk: tuple[int, int, int] | None = None

    def __post_init__(self) -> None:
        if len(self.data.shape) != 3:
            raise LeadlineError(f"a volume has three axes, this one has shape {self.data.shape}", where="volume")
        voxel = frozen_vector(self.voxel_um, "voxel_um", length=3)
        if (voxel <= 0).any():
            raise LeadlineError(f"voxel sizes must be positive, got {voxel.tolist()}", where="voxel_um")
        origin = np.zeros(3) if self.origin_um is None else self.origin_um
        object.__setattr__(self, "voxel_um", voxel)
        object.__setattr__(self, "origin_um", frozen_vector(origin, "origin_um", length=3))
        object.__setattr__(self, "code", orientation(self.code))

    @property
    def shape(self) -> tuple[int, int, int]:
        """Number of voxels along the stored axes."""
        a, b, c = self.data.shape
        return int(a), int(b), int(c)

    @property
    def extent_um(self) -> FloatArray:
        """Edge lengths of the imaged box along the stored axes."""
        return np.asarray(self.shape) * self.voxel_um

    def array(self) -> AnyArray:
        """The whole volume in memory, stored order. For working resolutions only."""
        return np.asarray(self.data[:, :, :])

    def index(self, points_um: FloatArray) -> FloatArray:
        """Fractional voxel indices ``(n, 3)`` of points in stack um."""
        return (np.asarray(points_um, float) - self.origin_um) / self.voxel_um

    def points(self, index: FloatArray) -> FloatArray:
        """Stack um ``(n, 3)`` of fractional voxel indices."""
        return np.asarray(index, float) * self.voxel_um + self.origin_um

    def as_pir(self) -> Volume:
        """The same volume in memory laid out as PIR, its first voxel's centre at the origin."""
        return Volume(as_pir(self.array(), self.code), voxel_as_pir(self.voxel_um, self.code), "PIR")


@dataclass(frozen=True, slots=True, eq=False)
class Stack:
    """One channel of an imaged brain at one or several resolutions, finest first."""

    levels: tuple[Volume, ...]

    @property
    def finest(self) -> Volume:
        """The full resolution."""
        return self.levels[0]

    def fitting(self, target_um: float) -> Volume:
        """The coarsest level that is still at least as fine as ``target_um`` on every axis, else the finest."""
        fine = [level for level in self.levels if (level.voxel_um <= target_um * 1.0001).all()]
        return fine[-1] if fine else self.finest
