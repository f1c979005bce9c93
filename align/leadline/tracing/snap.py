"""Points set by hand, drawn to the centre of the dye near them."""

from __future__ import annotations

import numpy as np

from leadline.base.arrays import FloatArray, frozen_points
from leadline.model.track import arc_length
from leadline.model.volume import Volume
from leadline.tracing import centre, path
from leadline.tracing.grid import sampled

NEAR_UM = 50.0
MIN_PEAK = 3.0
MAX_ERROR_UM = 30.0
PASSES = 2


def snapped(points_um: FloatArray, dye: Volume) -> FloatArray:
    """Move points of a track to the centre line of the dye.

    Around the polyline through the points, Gaussians are fitted to the dye in planes across it; each point is moved
    sideways by the weighted mean offset of the planes within 50 um. A point near which no dye stands out stays.

    Parameters
    ----------
    points_um : (n >= 2, 3) stack um, in order.
    dye : the dye channel, at about 10 um or finer; only the corridor about the points is read.

    Returns
    -------
    (n, 3) stack um.
    """
    points = np.array(frozen_points(points_um, "points", min_rows=2))
    for _ in range(PASSES):
        points = points + _offsets(points, dye)
    return points


def _offsets(points: FloatArray, dye: Volume) -> FloatArray:
    curve = path.resampled(points, centre.STATION_UM)
    if len(curve) < 3:
        return np.zeros_like(points)
    voxel = float(np.cbrt(dye.voxel_um.prod()))
    stations = centre.look(curve, lambda at: sampled(dye, at), max(12.0, voxel / 2))
    noise = _noise(stations.values)
    fitted = centre.fit_gaussians(
        centre.Stations(stations.curve_um, stations.sides, stations.grid_um, stations.values / noise), voxel_um=voxel
    )
    sideways = np.einsum("nkd,nd->nk", stations.sides, fitted.offset_um)
    trust = np.where((fitted.peak > MIN_PEAK) & (fitted.error_um < MAX_ERROR_UM), 1 / (25.0 + fitted.error_um**2), 0.0)
    at = np.arange(len(curve)) * centre.STATION_UM
    weight = np.exp(-0.5 * ((arc_length(points)[:, None] - at) / NEAR_UM) ** 2) * trust
    total = weight.sum(axis=1)
    enough = total > 0.2 / (25.0 + MAX_ERROR_UM**2)
    return np.where(enough[:, None], weight @ sideways / np.maximum(total, 1e-12)[:, None], 0.0)


def _noise(values: FloatArray) -> float:
    """Spread of grey values across the planes, by neighbouring places: what is no dye and no gradient."""
    steps = np.diff(values, axis=1)
    spread = float(np.nanmedian(np.abs(steps - np.nanmedian(steps)))) * 1.4826 / np.sqrt(2)
    return spread if np.isfinite(spread) and spread > 0 else 1.0
