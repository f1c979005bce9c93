"""A volume straightened along a track: the picture in which the shank stands upright."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import Float32Array, FloatArray
from leadline.model.frames import axes_matrix, direction

if TYPE_CHECKING:
    from leadline.model.volume import Volume

ROWS_AT_ONCE = 64
MARGIN_VOXELS = 2


def straightened(volume: Volume, points_um: FloatArray, side_um: FloatArray) -> Float32Array:
    """Linear resampling of ``volume`` on the surface that a curve sweeps sideways.

    Parameters
    ----------
    points_um : (D, 3) points of the curve in the volume's frame.
    side_um : (W, 3) steps across it, added to every point.

    Returns
    -------
    (D, W) grey values, NaN outside the volume. Only the blocks about the curve are read.
    """
    points = np.asarray(points_um, float)
    out = np.empty((len(points), len(side_um)), np.float32)
    for start in range(0, len(points), ROWS_AT_ONCE):
        rows = slice(start, start + ROWS_AT_ONCE)
        out[rows] = _block(volume, volume.index((points[rows, None] + side_um[None]).reshape(-1, 3))).reshape(
            -1, len(side_um)
        )
    return out


def sideways(points_um: FloatArray, code: str, offsets_um: FloatArray) -> FloatArray:
    """Steps ``(W, 3)`` across a curve by ``offsets_um`` (W,), to the animal's right, or to its back where the curve
    itself runs right to left. ``code`` : orientation of the volume that the curve lies in."""
    tangent = points_um[-1] - points_um[0]
    tangent = tangent / np.linalg.norm(tangent)
    to_stored = axes_matrix(code).T
    across = to_stored @ direction("R")
    if abs(across @ tangent) > 0.8:
        across = to_stored @ direction("P")
    across = across - (across @ tangent) * tangent
    return np.asarray(np.asarray(offsets_um, float)[:, None] * (across / np.linalg.norm(across)), np.float64)


def _block(volume: Volume, index: FloatArray) -> Float32Array:
    from scipy.ndimage import map_coordinates

    shape = np.asarray(volume.shape)
    low = np.clip(np.floor(index.min(axis=0)).astype(int) - MARGIN_VOXELS, 0, shape - 1)
    high = np.clip(np.ceil(index.max(axis=0)).astype(int) + MARGIN_VOXELS, 1, shape)
    if (high <= low).any():
        return np.full(len(index), np.nan, np.float32)
    block = np.asarray(volume.data[tuple(slice(a, b) for a, b in zip(low, high, strict=True))], np.float32)
    values = map_coordinates(block, (index - low).T, order=1, mode="nearest", output=np.float32)
    outside = ((index < -0.5) | (index > shape - 0.5)).any(axis=1)
    return np.where(outside, np.float32(np.nan), values)
