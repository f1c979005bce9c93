"""The check of a registration: the stack seen in atlas space beside the template, under the atlas outlines."""

from __future__ import annotations

from base64 import b64encode
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.report.sections import AXIS_NAMES, PLANES, Plane, coarse_labels, labels_in, outlines

if TYPE_CHECKING:
    from leadline.base.arrays import AnyArray, Float32Array, FloatArray
    from leadline.model.volume import Volume
    from leadline.report.findings import Findings

WORK_UM = 40.0
PICTURE_PIXELS = 560
JPEG_LEVEL = 82


@dataclass(frozen=True, slots=True)
class CheckPlane:
    """One section for the page. ``stack``, ``template`` : data URIs of equal size. ``outlines`` : an SVG path in units
    of atlas voxels on a board of ``width`` x ``height``. ``tracks`` : SVG point lists of the tracks."""

    title: str
    stack: str
    template: str
    width: int
    height: int
    outlines: str
    tracks: tuple[str, ...]


def check_planes(findings: Findings) -> list[CheckPlane]:
    """Three sections through the middle of the tracks, or of the brain where there are none."""
    atlas, bench = findings.bench.atlas, findings.bench
    points = [track.atlas_um for track in findings.tracks]
    centre = np.median(np.concatenate(points), axis=0) if points else _middle(np.asarray(atlas.labels.array()) != 0)
    centre = centre if points else centre * atlas.voxel_um
    stack = bench.reduced(bench.background, WORK_UM)
    template = atlas.template
    return [_plane(plane, findings, stack, template, float(centre[plane.axis])) for plane in PLANES]


def _middle(mask: AnyArray) -> FloatArray:
    return np.array([np.flatnonzero(mask.any(axis=tuple({0, 1, 2} - {k}))).mean() for k in range(3)])


def _plane(plane: Plane, findings: Findings, stack: Volume, template: Volume, at_um: float) -> CheckPlane:
    atlas = findings.bench.atlas
    voxel = atlas.voxel_um
    shape = (atlas.labels.shape[plane.rows], atlas.labels.shape[plane.columns])
    points = _fine_grid(plane, shape, voxel, at_um)
    flat = points.reshape(-1, 3)
    seen = sampled(stack, findings.registration.atlas_to_stack(flat)).reshape(points.shape[:2])
    model = sampled(template, flat).reshape(points.shape[:2])
    coarse = coarse_labels(labels_in(plane, atlas, at_um), atlas)
    # Voxel (0, 0) has its centre at (0.5, 0.5) of the board.
    curves = [curve + 0.5 for group in outlines(coarse).values() for curve in group]
    tracks = [t.atlas_um[:, [plane.columns, plane.rows]] / voxel[[plane.columns, plane.rows]] + 0.5
              for t in findings.tracks]  # fmt: skip
    return CheckPlane(
        title=f"{plane.name}, {AXIS_NAMES[plane.axis]} {at_um:.0f} um",
        stack=jpeg_uri(grey(seen)),
        template=jpeg_uri(grey(model)),
        width=shape[1],
        height=shape[0],
        outlines=" ".join(_path(curve[:, ::-1]) for curve in curves),
        tracks=tuple(" ".join(f"{x:.1f},{y:.1f}" for x, y in track) for track in tracks),
    )


def _fine_grid(plane: Plane, shape: tuple[int, int], voxel: FloatArray, at_um: float) -> FloatArray:
    """Atlas um ``(h, w, 3)`` of the pixels of a picture that covers the whole section, voxel edge to voxel edge."""
    extent = np.array([shape[0] * voxel[plane.rows], shape[1] * voxel[plane.columns]])
    pixel = extent.max() / PICTURE_PIXELS
    size = np.maximum(np.rint(extent / pixel).astype(int), 1)
    points = np.empty((size[0], size[1], 3))
    points[..., plane.axis] = at_um
    for k, axis in ((0, plane.rows), (1, plane.columns)):
        along = (np.arange(size[k]) + 0.5) / size[k] * extent[k] - voxel[axis] / 2
        points[..., axis] = along[:, None] if k == 0 else along[None, :]
    return points


def sampled(volume: Volume, points_um: FloatArray) -> Float32Array:
    """Grey values ``(n,)`` of a volume at points ``(n, 3)`` in its own frame, linear; NaN outside."""
    from scipy.ndimage import map_coordinates

    index = volume.index(points_um).T
    values = map_coordinates(np.asarray(volume.array(), np.float32), index, order=1, mode="constant", cval=np.nan)
    return np.asarray(values, np.float32)


def grey(values: Float32Array) -> AnyArray:
    """8-bit grey values between the 1st and 99.7th percentile; black where there is no data."""
    known = values[np.isfinite(values)]
    if not known.size:
        return np.zeros(values.shape, np.uint8)
    low, high = np.percentile(known, [1, 99.7])
    scaled = np.clip((values - low) / max(float(high - low), 1e-9), 0, 1) * 255
    return np.asarray(np.nan_to_num(scaled), np.uint8)


def jpeg_uri(pixels: AnyArray) -> str:
    """A grey picture as a data URI."""
    import imagecodecs

    return "data:image/jpeg;base64," + b64encode(imagecodecs.jpeg_encode(pixels, level=JPEG_LEVEL)).decode("ascii")


def _path(curve: FloatArray) -> str:
    """SVG path of a closed curve ``(k, 2)`` of x, y, simplified to a tenth of a voxel."""
    from skimage.measure import approximate_polygon

    kept = approximate_polygon(curve, 0.1)
    return "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in kept)
