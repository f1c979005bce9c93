"""Where the brain is: a mask from autofluorescence and the depth below the brain surface."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from leadline.base.arrays import AnyArray, Float32Array, FloatArray
from leadline.base.errors import LeadlineError
from leadline.model.volume import Volume
from leadline.tracing.grid import grown, reduced
from leadline.tracing.lazy import Region, region_of

EVERYWHERE = (slice(None), slice(None), slice(None))
MASK_UM = 80.0
OUTSIDE_SHARE = 0.002


@dataclass(frozen=True, slots=True, eq=False)
class Tissue:
    """``depth_um`` : float32 volume of the distance to the outside, 0 outside. ``level`` : half-way grey value."""

    depth_um: Volume
    level: float

    def depth_at(self, points_um: FloatArray) -> FloatArray:
        """Depth ``(n,)`` below the surface; beyond the volume, that of its nearest voxel (a cut is no surface)."""
        from scipy.ndimage import map_coordinates

        index = self.depth_um.index(points_um).T
        depth = map_coordinates(self.depth_um.array(), index, order=1, mode="nearest", output=np.float64)
        return np.asarray(depth, np.float64)


def find_tissue(background: Volume) -> Tissue:
    """Mask of the brain from its autofluorescence, and depth in um below its surface.

    The threshold is Otsu's [1]_ on a grid of about 80 um. The outside is made of the large connected parts below it;
    small dark parts (ventricles, bubbles, vessels) are holes and belong to the brain. Tissue cut by the edge of the
    volume goes on beyond it: the edge is no surface.

    Raises LeadlineError when the background holds one grey value only.

    .. [1] Otsu (1979). IEEE Trans. Syst. Man Cybern. 9, 62. doi:10.1109/TSMC.1979.4310076
    """
    from scipy.ndimage import distance_transform_edt, gaussian_filter
    from skimage.filters import threshold_otsu

    small = reduced(background, MASK_UM)
    grey = gaussian_filter(small.array(), 0.7)
    if not np.ptp(grey) > 0:
        raise LeadlineError(
            f"the background channel holds one grey value only ({float(grey.flat[0]):g})",
            where="tracing",
            mend="Check background_channel in brain.toml",
        )
    capped = np.minimum(grey, np.percentile(grey, 99.5))
    level = float(threshold_otsu(capped))
    outside = _outside(grey < level)
    tissue = ~outside
    inside, beyond = (float(np.median(capped[m])) if m.any() else level for m in (tissue, outside))
    depth = distance_transform_edt(tissue, sampling=small.voxel_um).astype(np.float32) if outside.any() else None
    if depth is None:  # the crop shows no surface at all
        depth = np.full(grey.shape, 1e4, np.float32)
    depth = np.maximum(depth - np.float32(small.voxel_um.mean() / 2), 0)
    return Tissue(Volume(depth, small.voxel_um, small.code, small.origin_um), (inside + beyond) / 2)


def _outside(dark: AnyArray) -> AnyArray:
    """The large connected dark parts that reach the edge of the volume, or very large ones."""
    from scipy.ndimage import binary_opening, label

    parts, many = label(binary_opening(dark, iterations=1) | (dark & _edge(dark.shape)))
    if many == 0:
        return np.zeros(dark.shape, bool)
    size = np.bincount(parts.ravel(), minlength=many + 1)
    at_edge = np.bincount(parts[_edge(dark.shape)], minlength=many + 1) > 0
    keep = (size > OUTSIDE_SHARE * dark.size) & at_edge
    keep[0] = False
    kept = keep[parts]
    # opening ate the rim of the outside; give it back
    from scipy.ndimage import binary_dilation

    return np.asarray(binary_dilation(kept, iterations=1) & dark)


def _edge(shape: tuple[int, ...]) -> AnyArray:
    edge = np.ones(shape, bool)
    edge[1:-1, 1:-1, 1:-1] = False
    return edge


def depth_on(tissue: Tissue, grid: Volume, region: Region = EVERYWHERE) -> Float32Array:
    """Depth below the surface at the voxels of a region of another grid of the same stack."""
    source = tissue.depth_um
    frame = zip(grid.shape, grid.voxel_um, grid.origin_um, source.voxel_um, source.origin_um, region, strict=True)
    a, b, c = (((np.arange(n) * v + o - so) / sv)[part] for n, v, o, sv, so, part in frame)
    return grown(source.array(), (a, b, c))


class Deeper:
    """Which voxels of a grid lie deeper than ``least_um``, worked out for those that are asked for."""

    dtype = np.dtype(bool)

    def __init__(self, tissue: Tissue, grid: Volume, least_um: float) -> None:
        self._tissue, self._grid, self._least_um = tissue, grid, least_um
        self.shape = grid.shape

    def __getitem__(self, key: Any) -> AnyArray:
        """Whether, on a region of slices."""
        return depth_on(self._tissue, self._grid, region_of(key, self.shape)) > self._least_um
