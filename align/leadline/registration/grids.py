"""Regular isotropic grids in the PIR frame, and images laid on them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, Float32Array, FloatArray, frozen_vector
from leadline.model.frames import as_pir, axes_matrix, voxel_as_pir
from leadline.model.transform import Affine

if TYPE_CHECKING:
    from leadline.model.volume import Volume


@dataclass(frozen=True, slots=True, eq=False)
class Grid:
    """Nodes at ``origin_um + index * step_um``; ``shape`` (3,) counts them."""

    shape: tuple[int, int, int]
    step_um: float
    origin_um: FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "origin_um", frozen_vector(self.origin_um, "origin_um", length=3))

    def axis_um(self, axis: int) -> FloatArray:
        """Coordinates of the nodes along one axis."""
        return np.asarray(self.origin_um[axis] + np.arange(self.shape[axis]) * self.step_um)

    def points_um(self) -> FloatArray:
        """All nodes, ``(n, 3)``."""
        axes = np.meshgrid(*(self.axis_um(k) for k in range(3)), indexing="ij")
        return np.stack(axes, axis=-1).reshape(-1, 3)

    @property
    def middle_um(self) -> FloatArray:
        """Centre of the grid."""
        return np.asarray(self.origin_um + (np.asarray(self.shape) - 1) * self.step_um / 2)

    def halved(self) -> Grid:
        """The grid of :func:`halve`'s result."""
        shape = tuple(n // 2 for n in self.shape)
        return Grid((shape[0], shape[1], shape[2]), 2 * self.step_um, self.origin_um + self.step_um / 2)

    def cropped(self, low: FloatArray, high: FloatArray) -> tuple[Grid, tuple[slice, slice, slice]]:
        """The part between two points in um, and the slices that cut it out of an array."""
        first = np.clip(np.floor((low - self.origin_um) / self.step_um), 0, None).astype(int)
        last = np.minimum(np.ceil((high - self.origin_um) / self.step_um).astype(int) + 1, self.shape)
        cut = tuple(slice(int(a), int(b)) for a, b in zip(first, last, strict=True))
        shape = tuple(int(b - a) for a, b in zip(first, last, strict=True))
        grid = Grid((shape[0], shape[1], shape[2]), self.step_um, self.origin_um + first * self.step_um)
        return grid, (cut[0], cut[1], cut[2])


def halve(image: AnyArray) -> Float32Array:
    """Mean over blocks of 2 x 2 x 2 voxels; odd ends are dropped."""
    a, b, c = (n // 2 * 2 for n in image.shape)
    blocks = np.asarray(image[:a, :b, :c], np.float32).reshape(a // 2, 2, b // 2, 2, c // 2, 2)
    return np.asarray(blocks.mean(axis=(1, 3, 5), dtype=np.float32))


def pir_to_stack(volume: Volume) -> Affine:
    """The affine from um of ``volume.as_pir()`` (first PIR voxel's centre at zero) to stack um."""
    axes = axes_matrix(volume.code)
    last_um = (np.asarray(volume.shape) - 1) * volume.voxel_um
    backwards = axes.sum(axis=0) < 0
    return Affine(axes.T, volume.origin_um + np.where(backwards, last_um, 0.0))


def on_isotropic_grid(volume: Volume, step_um: float) -> tuple[Float32Array, Grid]:
    """Average a volume, laid out as PIR, over cubes of edge ``step_um``.

    Each output voxel is the exact mean of the (piecewise constant) input over its cube, so nothing aliases and any
    ratio of voxel sizes is allowed.
    """
    data = as_pir(volume.array(), volume.code)
    voxel = voxel_as_pir(volume.voxel_um, volume.code)
    shape = tuple(max(1, int(np.ceil(n * v / step_um - 1e-6))) for n, v in zip(data.shape, voxel, strict=True))
    for axis in range(3):
        data = _average_axis(data, axis, float(voxel[axis]), shape[axis], step_um)
    grid = Grid((shape[0], shape[1], shape[2]), step_um, np.asarray(step_um / 2 - voxel / 2))
    return data, grid


def _average_axis(data: AnyArray, axis: int, voxel_um: float, count: int, step_um: float) -> Float32Array:
    from scipy.sparse import csr_array

    size = data.shape[axis]
    edges = np.minimum(np.arange(count + 1) * step_um / voxel_um, size)
    rows, columns, weights = [], [], []
    for row in range(count):
        cells = np.arange(int(edges[row]), min(size, int(np.ceil(edges[row + 1]))))
        share = np.minimum(cells + 1, edges[row + 1]) - np.maximum(cells, edges[row])
        rows += [row] * len(cells)
        columns += cells.tolist()
        weights += (share / share.sum()).tolist()
    matrix = csr_array((np.asarray(weights, np.float32), (rows, columns)), shape=(count, size))
    moved = np.moveaxis(data, axis, 0)
    flat = np.ascontiguousarray(moved, np.float32).reshape(size, -1)
    out = np.asarray(matrix @ flat, np.float32).reshape(count, *moved.shape[1:])
    return np.moveaxis(out, 0, axis)
