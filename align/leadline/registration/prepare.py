"""From raw intensities to images that can be compared: background off, tissue found, dye and outliers distrusted."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, Float32Array
from leadline.base.errors import LeadlineError
from leadline.registration.grids import Grid, halve, on_isotropic_grid, pir_to_stack

if TYPE_CHECKING:
    from leadline.model.transform import Affine
    from leadline.model.volume import Volume

SMOOTH_VOXELS = 1.0
MIN_TISSUE_SHARE = 0.002
DYE_Z = 6.0


@dataclass(frozen=True, slots=True, eq=False)
class Image:
    """One resolution of a prepared image.

    ``intensity`` : background 0, tissue about 1. ``tissue`` : 1 where it is bright enough to be tissue.
    ``trust`` : 1, or 0 where dye hides the tissue; of an atlas, the share inside the brain. All on ``grid``.
    """

    intensity: Float32Array
    tissue: Float32Array
    trust: Float32Array
    grid: Grid

    def halved(self) -> Image:
        """The next coarser resolution."""
        return Image(halve(self.intensity), halve(self.tissue), halve(self.trust), self.grid.halved())


@dataclass(frozen=True, slots=True, eq=False)
class Sample:
    """The background channel, finest resolution first, and the way from its PIR um to stack um."""

    images: tuple[Image, ...]
    to_stack: Affine


def prepare_sample(background: Volume, dye: Volume | None, *, step_um: float, levels: int) -> Sample:
    """Prepare the background channel on isotropic grids of ``step_um`` and ``levels - 1`` coarser ones.

    Raises LeadlineError when the volume holds no tissue or values that are not finite.
    """
    raw, grid = on_isotropic_grid(background, step_um)
    if not np.isfinite(raw).all():
        raise LeadlineError(
            "the background channel holds values that are not finite", where="stack", mend="Export it again"
        )
    intensity, tissue = _normalised(raw, "the background channel")
    trust = np.ones_like(intensity)
    if dye is not None:
        trust[_dye_stain(dye, raw, tissue, step_um)] = 0.0
    image = Image(intensity, tissue.astype(np.float32), trust, grid)
    return Sample(_pyramid(image, levels), pir_to_stack(background))


def prepare_atlas(template: Volume, labels: Volume, *, step_um: float, levels: int) -> tuple[Image, ...]:
    """Prepare the template; what the labels call outside is zero."""
    raw, grid = on_isotropic_grid(template, step_um)
    share, _ = on_isotropic_grid(replace(labels, data=np.asarray(labels.array() > 0, np.float32)), step_um)
    intensity, tissue = _normalised(raw, "the atlas template")
    if share.shape != raw.shape:
        raise LeadlineError(f"template and labels differ in size ({raw.shape} and {share.shape})", where="atlas")
    return _pyramid(Image(intensity, tissue.astype(np.float32), share, grid), levels)


def nearest_labels(labels: Volume, grid: Grid) -> AnyArray:
    """Labels of the voxels nearest to a grid's nodes; never mixed."""
    index = [
        np.clip(np.round(grid.axis_um(k) / labels.voxel_um[k]).astype(int), 0, labels.shape[k] - 1) for k in range(3)
    ]
    return np.asarray(labels.array()[np.ix_(*index)])


def _pyramid(image: Image, levels: int) -> tuple[Image, ...]:
    images = [image]
    for _ in range(levels - 1):
        images.append(images[-1].halved())
    return tuple(images)


def _normalised(raw: Float32Array, what: str) -> tuple[Float32Array, BoolArray]:
    """Background to 0, median tissue to 1, bright streaks clipped; and where the tissue is."""
    tissue = find_tissue(raw)
    if tissue.mean() < MIN_TISSUE_SHARE:
        raise LeadlineError(
            f"{what} shows no tissue against its background",
            where="registration",
            mend="Look at the file: is it the right channel?",
        )
    dark = float(np.median(raw[~tissue])) if (~tissue).any() else float(raw.min())
    top = float(np.percentile(raw[tissue], 99.7))
    bright = float(np.median(raw[tissue])) - dark
    return np.asarray(np.clip(raw - dark, 0, top - dark) / bright, np.float32), tissue


def find_tissue(raw: Float32Array) -> BoolArray:
    """Tissue against background: Otsu's threshold [1]_ of the root of the smoothed intensity; the largest piece.

    .. [1] Otsu (1979). IEEE Trans. Syst. Man Cybern. 9, 62. doi:10.1109/TSMC.1979.4310076
    """
    from scipy import ndimage
    from skimage.filters import threshold_otsu

    smooth = ndimage.gaussian_filter(raw, SMOOTH_VOXELS)
    low, high = np.percentile(smooth[::2, ::2, ::2], [1, 99.5])
    if high <= low:
        return np.zeros(raw.shape, bool)
    root = np.sqrt(np.clip((smooth - low) / (high - low), 0, 1))
    bright = np.asarray(root > threshold_otsu(root[::2, ::2, ::2]), bool)
    pieces, count = ndimage.label(bright)
    if count == 0:
        return bright
    sizes = np.bincount(pieces.ravel())
    sizes[0] = 0
    return np.asarray(pieces == sizes.argmax(), bool)


def _dye_stain(dye: Volume, background: Float32Array, tissue: BoolArray, step_um: float) -> BoolArray:
    """Where the dye channel is brighter than its autofluorescence explains."""
    from scipy import ndimage

    raw, _ = on_isotropic_grid(dye, step_um)
    if raw.shape != background.shape:
        raise LeadlineError(f"dye and background differ in size ({raw.shape}, {background.shape})", where="stack")
    local = raw - ndimage.gaussian_filter(raw, 300.0 / step_um)
    values = local[tissue]
    spread = 1.4826 * float(np.median(np.abs(values - np.median(values))))
    stain = (local > np.median(values) + DYE_Z * max(spread, 1e-6)) & tissue
    return np.asarray(ndimage.binary_dilation(stain, iterations=1))
