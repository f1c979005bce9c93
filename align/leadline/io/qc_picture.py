"""``qc.png``: the sample as the registration lays it on the atlas, in three planes, under the atlas's outlines."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, FloatArray
from leadline.base.atomic import whole_file

if TYPE_CHECKING:
    from pathlib import Path

    from leadline.model.atlas import Atlas
    from leadline.model.transform import Registration
    from leadline.model.volume import Volume

PLANES = (("coronal", "AP"), ("horizontal", "DV"), ("sagittal", "ML"))
SLICES = 4
# blue and orange of Okabe and Ito (2008), told apart by every kind of colour vision
BORDER, SURFACE = "#56B4E9", "#E69F00"
SCALE_UM = 2000.0


def draw_qc(path: Path, sample: Volume, atlas: Atlas, registration: Registration) -> None:
    """Draw the atlas's outlines over the sample and write it as PNG, whole or not at all.

    Parameters
    ----------
    sample : background channel in stack um, at a working resolution.
    atlas : outlines of its labels are drawn; blue between structures, orange where the brain ends.
    registration : ``atlas_to_stack`` says where each atlas voxel lies in the sample.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    labels = atlas.labels.array()
    low, high = _extent(labels)
    data = sample.array()
    sections = [
        [_Section(k, _at(k, share, low, high), labels, data, sample, atlas, registration) for share in _shares()]
        for k in range(3)
    ]
    top = float(np.percentile(np.concatenate([s.image[s.image > 0] for row in sections for s in row] or [[1]]), 99.5))
    heights = [max(s.image.shape[0] / s.image.shape[1] for s in row) for row in sections]
    figure = Figure(figsize=(13.0, 13.0 / SLICES * sum(heights) + 1.6), layout="constrained", facecolor="black")
    FigureCanvasAgg(figure)
    axes = figure.subplots(3, SLICES, squeeze=False, height_ratios=heights)
    for row, sections_of_plane in zip(axes, sections, strict=True):
        for ax, section in zip(row, sections_of_plane, strict=True):
            section.draw(ax, top)
    _scale_bar(axes[0][0], sections[0][0])
    figure.suptitle(_title(registration), color="white", fontsize=13)
    with whole_file(path) as part:
        figure.savefig(part, dpi=110, format="png", facecolor="black", metadata={"Software": None})


def _title(registration: Registration) -> str:
    words = [
        f"Sample under the outlines of the atlas; estimated error {registration.error_um:.0f} um (sd of a coordinate)"
    ]
    overlap = registration.quality.get("mask_dice")
    if isinstance(overlap, float):
        words.append(f"tissue overlap {overlap:.3f}")
    return ", ".join(words) + "\nblue: borders between structures; orange: surface of the brain"


def _shares() -> FloatArray:
    return np.asarray((np.arange(SLICES) + 0.75) / (SLICES + 0.5), np.float64)


def _extent(labels: AnyArray) -> tuple[FloatArray, FloatArray]:
    """First and last index of the brain along each axis."""
    spans = [np.flatnonzero(labels.any(axis=tuple(j for j in range(3) if j != k))) for k in range(3)]
    if not all(len(s) for s in spans):
        return np.zeros(3), np.asarray(labels.shape, float) - 1
    return np.array([s[0] for s in spans], float), np.array([s[-1] for s in spans], float)


def _at(axis: int, share: float, low: FloatArray, high: FloatArray) -> int:
    return round(float(low[axis] + share * (high[axis] - low[axis])))


class _Section:
    """One plane of the atlas with the sample read through the registration. Rows grow ventral, or posterior."""

    def __init__(
        self,
        axis: int,
        index: int,
        labels: AnyArray,
        data: AnyArray,
        sample: Volume,
        atlas: Atlas,
        registration: Registration,
    ) -> None:
        from scipy.ndimage import map_coordinates

        plane = labels.take(index, axis=axis)
        rows, columns = np.indices(plane.shape)
        grid = np.stack([rows, columns], axis=-1).reshape(-1, 2).astype(float)
        points = np.insert(grid, axis, index, axis=1) * atlas.voxel_um
        where = sample.index(registration.atlas_to_stack(points)).T
        read = map_coordinates(data, where, output=np.float32, order=1, mode="constant", cval=0.0)
        image = read.reshape(plane.shape)
        # sagittal planes come as (ap, dv); shown with the dorsal side up
        self.image, self.labels = (image.T, plane.T) if axis == 2 else (image, plane)
        self.axis = axis
        self.place_mm = float(index * atlas.voxel_um[axis] / 1000)
        self.pixel_um = float(np.delete(atlas.voxel_um, axis)[0 if axis == 2 else 1])
        self.aspect = float(np.delete(atlas.voxel_um, axis)[1 if axis == 2 else 0]) / self.pixel_um

    def draw(self, ax: Any, top: float) -> None:
        """Image and outlines."""
        ax.imshow(self.image, cmap="gray", vmin=0, vmax=top, aspect=self.aspect, interpolation="nearest")
        border, surface = _outlines(self.labels)
        ax.imshow(_tint(border, BORDER, 0.55), aspect=self.aspect, interpolation="nearest")
        ax.imshow(_tint(surface, SURFACE, 0.95), aspect=self.aspect, interpolation="nearest")
        plane, letter = PLANES[self.axis]
        ax.set_title(f"{plane}, {letter} {self.place_mm:.2f} mm", color="white", fontsize=11)
        ax.set_axis_off()


def _outlines(labels: AnyArray) -> tuple[BoolArray, BoolArray]:
    """Pixels at a border between two structures, and at the surface of the brain."""
    border, surface = np.zeros(labels.shape, bool), np.zeros(labels.shape, bool)
    for axis in (0, 1):
        here, there = (np.moveaxis(labels, axis, 0)[s] for s in (slice(None, -1), slice(1, None)))
        differs = here != there
        edge = differs & ((here == 0) | (there == 0))
        for found, what in ((border, differs & ~edge), (surface, edge)):
            np.moveaxis(found, axis, 0)[:-1] |= what
    return border & ~surface, surface


def _tint(mask: BoolArray, colour: str, strength: float) -> AnyArray:
    from matplotlib.colors import to_rgba

    picture = np.zeros((*mask.shape, 4), np.float32)
    picture[mask] = to_rgba(colour, strength)
    return picture


def _scale_bar(ax: Any, section: _Section) -> None:
    rows, columns = section.image.shape
    length = SCALE_UM / section.pixel_um
    x, y = 0.03 * columns, 0.97 * rows
    ax.plot([x, x + length], [y, y], color="white", linewidth=3, solid_capstyle="butt")
    ax.text(
        x + length / 2, y - 0.02 * rows, f"{SCALE_UM / 1000:g} mm", color="white", ha="center", va="bottom", fontsize=10
    )
