"""Bright tubes as points with a direction: candidates by the Laplacian first, the costly test only there.

Second derivatives are in um, so that voxels of any shape give the same answer.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import AnyArray, Float32Array, FloatArray
from leadline.base.progress import SILENT, Progress, tracked
from leadline.model.volume import Volume, Voxels
from leadline.tracing.grid import blocks

BLOCK = 96
TRUNCATE = 3.0


@dataclass(frozen=True, slots=True, eq=False)
class Ridges:
    """``points_um``, ``axes`` : (n, 3), unit vectors along the tube. ``strength`` : (n,) in noise sd."""

    points_um: FloatArray
    axes: FloatArray
    strength: FloatArray

    def take(self, rows: AnyArray) -> Ridges:
        """The points ``rows``."""
        return Ridges(self.points_um[rows], self.axes[rows], self.strength[rows])

    def __len__(self) -> int:
        return len(self.points_um)


def find_ridges(
    image: Volume, inside: Voxels, scales_um: tuple[float, ...], threshold: float, progress: Progress = SILENT
) -> Ridges:
    """Points on the centre lines of bright tubes, by the eigenvalues of the Hessian [1]_ and a sub-voxel test [2]_.

    Parameters
    ----------
    image : a volume that may be worked out as it is sliced: it is asked for in blocks, where ``inside`` is true.
    inside : bool on the same grid; only these voxels are looked at.
    scales_um : sd of the Gaussians, um.
    threshold : least tube strength ``scale**2 sqrt(l1 l2)``, in units of the image.

    Returns
    -------
    Points of all scales in the order of the voxels; of two scales at one voxel the stronger is kept. The answer does
    not depend on how the volume is cut into blocks: every block carries the margin that the Gaussian and the
    differences need.

    References
    ----------
    .. [1] Sato et al. (1998). Med. Image Anal. 2, 143. doi:10.1016/S1361-8415(98)80009-1
    .. [2] Steger (1998). IEEE Trans. Pattern Anal. Mach. Intell. 20, 113. doi:10.1109/34.659930
    """
    from leadline.tracing._kernels import ridge_points

    found: list[AnyArray] = []
    reach = max(scales_um) / image.voxel_um
    margin = tuple(int(np.ceil(TRUNCATE * r)) + 3 for r in reach)
    cut = list(blocks(image.shape, BLOCK, margin))
    for outer, inner in tracked(cut, progress, "looking for tubes", len(cut)):
        within = np.asarray(inside[outer])
        if not within[inner].any():
            continue
        block = np.asarray(image.data[outer])
        lo = np.array([s.start for s in inner])
        hi = np.array([s.stop for s in inner])
        base = np.array([s.start for s in outer])
        for scale in scales_um:
            smooth = smoothed(block, scale / image.voxel_um)
            found.append(ridge_points(smooth, within, base, lo, hi, image.voxel_um, scale, threshold))
    rows = np.concatenate(found) if found else np.zeros((0, 7))
    rows = rows[_strongest_per_voxel(rows, image.shape)]
    return Ridges(image.points(rows[:, :3]), rows[:, 3:6], rows[:, 6])


def smoothed(block: AnyArray, sigma_vox: FloatArray) -> Float32Array:
    """``scipy.ndimage.gaussian_filter(block, sigma_vox, mode="nearest", truncate=TRUNCATE)`` to the bit, and faster.

    ``block`` : (n0, n1, n2), taken as float32. ``sigma_vox`` : (3,) along the axes.
    """
    from leadline.tracing._kernels import correlate_lines, correlate_rows

    first, second, third = (_weights(float(sigma)) for sigma in sigma_vox)
    values = np.ascontiguousarray(block, np.float32)
    down, out = np.empty_like(values), np.empty_like(values)
    correlate_rows(values.reshape(1, len(values), -1), first, down.reshape(1, len(values), -1))
    correlate_rows(down, second, out)
    correlate_lines(out.reshape(-1, out.shape[2]), third)
    return out


def _weights(sigma: float) -> FloatArray:
    """The middle and one side of a Gaussian kernel whose sum over both sides is 1."""
    reach = int(TRUNCATE * sigma + 0.5)
    both = np.exp(-0.5 / (sigma * sigma) * np.arange(-reach, reach + 1) ** 2)
    return np.asarray((both / both.sum())[reach:], float)


def _strongest_per_voxel(rows: AnyArray, shape: tuple[int, int, int]) -> AnyArray:
    voxel = np.ravel_multi_index(tuple(np.clip(np.rint(rows[:, :3]).astype(int), 0, np.array(shape) - 1).T), shape)
    order = np.lexsort((*rows[:, :3].T, -rows[:, 6], voxel))
    first = np.ones(len(rows), bool)
    first[1:] = np.diff(voxel[order]) != 0
    return np.asarray(order[first])
