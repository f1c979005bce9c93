"""A value of units in atlas space: three planes with the regions' outlines, and the whole in 3-D."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.report import style
from leadline.report.sections import (
    AXIS_NAMES,
    AXIS_WORDS,
    PLANES,
    Plane,
    anchor_point,
    coarse_labels,
    labels_in,
    outlines,
)

if TYPE_CHECKING:
    import pandas as pd

    from leadline.base.arrays import AnyArray, FloatArray, IntArray
    from leadline.model.atlas import Atlas

MARGIN_UM = 1000.0
SMALLEST_WINDOW_UM = 3600.0
FAR_UM = 500.0
MOST_CATEGORIES = len(style.CATEGORIES)
HULL_VOXELS = 40


@dataclass(frozen=True, slots=True, eq=False)
class Shades:
    """Colours of values. ``rgba`` : (n, 4); ``entries`` : (text, colour) of categories; ``scale`` : of numbers."""

    rgba: FloatArray
    entries: tuple[tuple[str, str], ...] = ()
    scale: Any = None


def shades(values: pd.Series, period: float | None = None) -> Shades:
    """Colours for a column: numbers on a scale that reads the same in grey, words in at most seven colours and grey.

    ``period`` : numbers that come round, such as 180 for orientations in degrees, on a scale that closes on itself.
    Numbers are spread over their 2nd to 98th percentile.
    """
    import matplotlib as mpl
    import pandas as pd
    from matplotlib.cm import ScalarMappable
    from matplotlib.colors import Normalize, to_rgba_array

    if pd.api.types.is_numeric_dtype(values) and not pd.api.types.is_bool_dtype(values):
        numbers = values.to_numpy(float)
        if period is not None:
            scale = ScalarMappable(Normalize(0, period), mpl.colormaps[style.CYCLIC])
            numbers = np.mod(numbers, period)
        else:
            low, high = np.percentile(numbers, [2, 98])
            scale = ScalarMappable(Normalize(low, high if high > low else low + 1), mpl.colormaps[style.SEQUENTIAL])
        return Shades(np.asarray(scale.to_rgba(numbers), float), scale=scale)
    words = values.astype(str).replace("", "none")
    counts = words.value_counts()
    ranked = sorted(counts.index, key=lambda word: (-counts[word], word))
    colour = dict(zip(ranked[:MOST_CATEGORIES], style.CATEGORIES, strict=False))
    entries = [(f"{word} ({counts[word]})", colour[word]) for word in colour]
    if len(ranked) > MOST_CATEGORIES:
        rest = int(sum(counts[word] for word in ranked[MOST_CATEGORIES:]))
        entries.append((f"{len(ranked) - MOST_CATEGORIES} others ({rest})", style.OTHER))
    rgba = to_rgba_array([colour.get(word, style.OTHER) for word in words])
    return Shades(np.asarray(rgba, float), tuple(entries))


def draw_value(units: pd.DataFrame, column: str, atlas: Atlas, *, period: float | None = None) -> Any:
    """Draw ``column`` of located units (``ap_um, dv_um, ml_um``) of one or several brains of one atlas.

    Units that are not located, or have no value, are left out and counted in the title. Returns a matplotlib figure.
    """
    shown = units[units["ap_um"].notna() & units[column].notna()]
    points = shown[["ap_um", "dv_um", "ml_um"]].to_numpy(float)
    colours = shades(shown[column], period)
    with style.drawing():
        figure = style.new_figure(9.8, 8.4)
        axes = figure.subplot_mosaic([["coronal", "sagittal"], ["horizontal", "solid"]],
                                     per_subplot_kw={"solid": {"projection": "3d"}})  # fmt: skip
        centre = np.median(points, axis=0)
        for plane in PLANES:
            _draw_plane(axes[plane.name], plane, atlas, points, colours.rgba, centre)
        _draw_solid(axes["solid"], atlas, points, colours.rgba, float(centre[0]))
        _draw_key(figure, axes, column, colours)
        left_out = len(units) - len(shown)
        brains = shown["brain"].nunique()
        figure.suptitle(
            f"{column} of {len(shown)} units in {brains} brain{'s' if brains > 1 else ''}, {atlas.name}"
            + (f"; {left_out} without place or value not shown" if left_out else ""),
            fontsize=10, fontweight="bold",
        )  # fmt: skip
    return figure


def _draw_plane(
    axis: Any, plane: Plane, atlas: Atlas, points: FloatArray, rgba: FloatArray, centre: FloatArray
) -> None:
    labels = labels_in(plane, atlas, float(centre[plane.axis]))
    coarse = coarse_labels(labels, atlas)
    window = _window(points[:, [plane.rows, plane.columns]])
    _draw_outlines(axis, plane, atlas, labels, style.FAINT, 0.5)
    _draw_outlines(axis, plane, atlas, coarse, style.SOFT, 0.9)
    _name_regions(axis, plane, atlas, coarse, window)
    # Units far from the section are paler: the outlines about them are not those of their own section.
    far = np.abs(points[:, plane.axis] - centre[plane.axis]) > FAR_UM
    faded = rgba.copy()
    faded[far, 3] = 0.3
    order = np.argsort(~far, kind="stable")
    axis.scatter(points[order, plane.columns], points[order, plane.rows], c=faded[order], s=16,
                 edgecolors="white", linewidths=0.4, zorder=5, clip_on=True)  # fmt: skip
    axis.set(xlim=window[1], ylim=window[0][::-1], aspect="equal")
    axis.set_xlabel(f"{AXIS_NAMES[plane.columns]}_um  ({AXIS_WORDS[plane.columns]} →)")
    axis.set_ylabel(f"{AXIS_NAMES[plane.rows]}_um  (← {AXIS_WORDS[plane.rows]})")
    axis.set_title(f"{plane.name}, section at {AXIS_NAMES[plane.axis]} {centre[plane.axis]:.0f} um", loc="left")
    _draw_inset(axis, plane, atlas, coarse, window)


def _draw_outlines(axis: Any, plane: Plane, atlas: Atlas, labels: IntArray, colour: str, width: float) -> None:
    from matplotlib.collections import LineCollection

    voxel = atlas.voxel_um[[plane.columns, plane.rows]]
    curves = [curve[:, ::-1] * voxel for group in outlines(labels).values() for curve in group]
    axis.add_collection(LineCollection(curves, colors=colour, linewidths=width, zorder=1))


def _name_regions(axis: Any, plane: Plane, atlas: Atlas, coarse: IntArray, window: FloatArray) -> None:
    voxel = atlas.voxel_um[[plane.rows, plane.columns]]
    low = np.maximum(np.floor(window[:, 0] / voxel), 0).astype(int)
    high = np.ceil(window[:, 1] / voxel).astype(int) + 1
    seen = coarse[low[0] : high[0], low[1] : high[1]]
    for region in np.unique(seen[seen != 0]):
        row, column, room = anchor_point(seen == region)
        if room * voxel.min() >= 130.0:
            y, x = (np.array([row, column]) + low) * voxel
            axis.text(x, y, atlas.structures[int(region)].acronym, ha="center", va="center", fontsize=7,
                      color=style.SOFT, zorder=2, clip_on=True)  # fmt: skip


def _draw_inset(axis: Any, plane: Plane, atlas: Atlas, coarse: IntArray, window: FloatArray) -> None:
    """The whole section, small, with the window marked."""
    from matplotlib.patches import Rectangle

    inset = axis.inset_axes((0.76, 0.74, 0.26, 0.26))
    _draw_outlines(inset, plane, atlas, (coarse != 0).astype(np.int64), style.SOFT, 0.8)
    (top, bottom), (left, right) = window
    inset.add_patch(Rectangle((left, top), right - left, bottom - top, fill=False, ec=style.ACCENT, lw=1.2))
    size = np.array(atlas.labels.shape) * atlas.voxel_um
    room = 0.08 * size.max()
    inset.set(xlim=(-room, size[plane.columns] + room), ylim=(size[plane.rows] + room, -room), aspect="equal")
    inset.set(xticks=[], yticks=[])
    inset.patch.set_alpha(0.85)
    for spine in inset.spines.values():
        spine.set_visible(False)


def _window(points: FloatArray) -> FloatArray:
    """Low and high ``(2, 2)`` of what is shown along rows and columns: all the units, with room about them."""
    low, high = points.min(axis=0) - MARGIN_UM, points.max(axis=0) + MARGIN_UM
    # A square window: the three planes then stand side by side at one size.
    side = max(SMALLEST_WINDOW_UM, float((high - low).max()))
    middle = (low + high) / 2
    return np.column_stack([middle - side / 2, middle + side / 2])


def _draw_solid(axis: Any, atlas: Atlas, points: FloatArray, rgba: FloatArray, ap_um: float) -> None:
    """The brain's surface, the coronal section's regions in it, and the units."""
    from mpl_toolkits.mplot3d.art3d import Line3DCollection, Poly3DCollection

    vertices, faces = _hull(atlas)
    surface = {"facecolors": "#b9c6d4", "shade": True, "alpha": 0.12, "linewidths": 0}
    hull = Poly3DCollection(vertices[faces][..., [2, 0, 1]], **surface)
    hull.set_rasterized(True)
    axis.add_collection3d(hull)
    coronal = PLANES[0]
    curves = outlines(coarse_labels(labels_in(coronal, atlas, ap_um), atlas))
    voxel = atlas.voxel_um
    lines = [
        np.column_stack([curve[:, 1] * voxel[2], np.full(len(curve), ap_um), curve[:, 0] * voxel[1]])
        for group in curves.values()
        for curve in group
    ]
    axis.add_collection3d(Line3DCollection(lines, colors=style.SOFT, linewidths=0.6))
    axis.scatter(points[:, 2], points[:, 0], points[:, 1], c=rgba, s=12, edgecolors="none", depthshade=False)
    size = np.array(atlas.labels.shape) * atlas.voxel_um
    axis.set(xlim=(0, size[2]), ylim=(size[0], 0), zlim=(size[1], 0))
    axis.set_box_aspect((size[2], size[0], size[1]), zoom=1.5)
    axis.view_init(elev=24, azim=-55)
    axis.set_axis_off()
    axis.set_title("whole brain, seen from behind on the right", loc="left")


def _hull(atlas: Atlas) -> tuple[FloatArray, IntArray]:
    """Surface of the brain, coarse, in atlas um: vertices ``(v, 3)`` and triangles ``(t, 3)``."""
    from scipy.ndimage import gaussian_filter
    from skimage.measure import marching_cubes

    step = max(1, int(np.ceil(max(atlas.labels.shape) / HULL_VOXELS)))
    inside: AnyArray = (np.asarray(atlas.labels.data[::step, ::step, ::step]) != 0).astype(np.float32)
    smooth = gaussian_filter(np.pad(inside, 2), 0.8)
    vertices, faces, _, _ = marching_cubes(smooth, 0.5)
    return np.asarray((vertices - 2) * step * atlas.voxel_um, float), np.asarray(faces, np.int64)


def _draw_key(figure: Any, axes: Any, column: str, colours: Shades) -> None:
    if colours.scale is not None:
        bar = figure.colorbar(colours.scale, ax=list(axes.values()), shrink=0.5, aspect=28, pad=0.02)
        bar.set_label(column)
        bar.outline.set_visible(False)
        return
    from matplotlib.lines import Line2D

    dots = [Line2D([], [], ls="", marker="o", color=colour, label=text) for text, colour in colours.entries]
    figure.legend(handles=dots, loc="outside right center", title=column)
