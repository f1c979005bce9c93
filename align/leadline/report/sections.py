"""Sections through an atlas along its axes, and the outlines of regions in them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray, IntArray

if TYPE_CHECKING:
    from leadline.model.atlas import Atlas

OUTLINE_SMOOTH_VOXELS = 0.7


@dataclass(frozen=True, slots=True)
class Plane:
    """A section across one atlas axis. ``rows``, ``columns`` : the atlas axes that run down and across the picture."""

    name: str
    axis: int
    rows: int
    columns: int


PLANES = (Plane("coronal", 0, 1, 2), Plane("sagittal", 2, 1, 0), Plane("horizontal", 1, 0, 2))
AXIS_NAMES = ("ap", "dv", "ml")
AXIS_WORDS = ("posterior", "inferior", "right")


def grid(plane: Plane, atlas: Atlas, at_um: float) -> FloatArray:
    """Atlas um ``(rows, columns, 3)`` of the centres of a section's voxels."""
    shape, voxel = atlas.labels.shape, atlas.voxel_um
    points = np.empty((shape[plane.rows], shape[plane.columns], 3))
    points[..., plane.axis] = at_um
    points[..., plane.rows] = (np.arange(shape[plane.rows]) * voxel[plane.rows])[:, None]
    points[..., plane.columns] = (np.arange(shape[plane.columns]) * voxel[plane.columns])[None, :]
    return points


def labels_in(plane: Plane, atlas: Atlas, at_um: float) -> IntArray:
    """Structure ids ``(rows, columns)`` of a section."""
    return atlas.label_at(grid(plane, atlas, at_um))


def coarse_labels(labels: IntArray, atlas: Atlas) -> IntArray:
    """The same section by coarse region."""
    ids, where = np.unique(labels, return_inverse=True)
    coarse = np.array([atlas.structures.coarse(int(i)).id for i in ids])
    return np.asarray(coarse[where].reshape(labels.shape), np.int64)


def outlines(labels: IntArray) -> dict[int, list[FloatArray]]:
    """Closed outlines of every region but 0: id -> curves ``(k, 2)`` of fractional (row, column).

    Each region is blurred by less than a voxel and cut at one half, which rounds the stairs of the voxels and moves
    no straight border. Lorensen & Cline (1987), SIGGRAPH 21, 163, in two dimensions (scikit-image's find_contours).
    """
    from scipy.ndimage import find_objects, gaussian_filter
    from skimage.measure import find_contours

    ids, where = np.unique(labels, return_inverse=True)
    ranks = where.reshape(labels.shape) + 1
    found: dict[int, list[FloatArray]] = {}
    for rank, box in enumerate(find_objects(ranks), 1):
        region = int(ids[rank - 1])
        if region == 0 or box is None:
            continue
        mask = np.pad((ranks[box] == rank).astype(np.float32), 3)
        corner = np.array([box[0].start - 3, box[1].start - 3])
        curves = find_contours(gaussian_filter(mask, OUTLINE_SMOOTH_VOXELS), 0.5)
        found[region] = [np.asarray(curve + corner, np.float64) for curve in curves if len(curve) > 3]
    return found


def anchor_point(mask: AnyArray) -> tuple[float, float, float]:
    """(row, column, room) of the place in a region that is farthest from its borders, ``room`` pixels away."""
    from scipy.ndimage import distance_transform_edt

    room = distance_transform_edt(np.pad(mask, 1))[1:-1, 1:-1]
    row, column = np.unravel_index(int(room.argmax()), room.shape)
    return float(row), float(column), float(room.max())
