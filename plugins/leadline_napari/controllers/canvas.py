"""What the canvas shows, as layers in stack um: stack, atlas outlines, tracks, contacts, surfaces in 3-D."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.model.frames import axes_matrix, direction
from leadline_napari.states import LayerSpec, Pose
from leadline_napari.style import ORANGE, PINK, SKY, VERMILION

if TYPE_CHECKING:
    from collections.abc import Mapping

    import pandas as pd

    from leadline.base.arrays import AnyArray, FloatArray
    from leadline.model.atlas import Atlas, Structures
    from leadline.model.track import Track
    from leadline.model.transform import Registration
    from leadline.model.volume import Stack, Volume
    from leadline.pipeline.bench import Bench
    from leadline_napari.results import Results

NAMES = {
    "background": "Stack background",
    "dye": "Stack dye",
    "outlines": "Atlas regions",
    "tracks": "Tracks",
    "contacts": "Contacts",
    "hull": "Brain hull",
    "plane": "Plane along track",
    "units": "Units",
}
OUTLINE_GRAIN_UM = 25.0
TRACK_STEP_UM = 25.0
PLANES_KEPT = 32
PLANE_VOXELS = 60e6
CONTACT_PX_UM = 60.0
SAMPLE_PLANES = 3
SURFACE_GRAIN_UM = 100.0
CONTACT_COLUMNS = (
    "penetration", "shank", "channel", "contact_id", "tip_distance_um", "track_depth_um", "track_depth_sd_um", "region",
    "region_name", "coarse_region", "layer", "p_region", "boundary_um", "basis",
)  # fmt: skip


def pose_of(code: str) -> Pose:
    """Coronal sections, dorsal up and the animal's right to the right, whatever the stored order: looked at from
    behind. In 3-D it is looked at from behind, from the left and from above, and never as a mirror image."""
    place = {letter: axis for axis, letter in enumerate(code)}
    ap = place.get("A", place.get("P"))
    dv = place.get("S", place.get("I"))
    ml = place.get("R", place.get("L"))
    if ap is None or dv is None or ml is None:
        raise LeadlineError(f"orientation {code!r} lacks an axis", where="stack")
    flat = ("away" if code[ap] == "A" else "towards", "up" if code[dv] == "S" else "down")
    to_stored = axes_matrix(code).T
    mirrored = (
        np.linalg.det(to_stored) < 0
    )  # in the order in which the canvas lays axes out, from the last to the first
    view = to_stored @ (0.75 * direction("A") + 0.5 * direction("R") + 0.45 * direction("I"))
    return Pose(
        (ap, dv, ml),
        (*flat, "right" if code[ml] == "R" else "left"),
        ("away" if mirrored else "towards", "down", "right"),
        tuple(view.tolist()),
        tuple((to_stored @ direction("S")).tolist()),
    )


def stack_specs(bench: Bench) -> list[LayerSpec]:
    """Background and dye, every resolution, read as they are looked at."""
    specs = [_stack(NAMES["background"], bench.background, "gray", "translucent", (1.0, 99.8), 1.0)]
    if bench.dye is not None:
        specs.append(_stack(NAMES["dye"], bench.dye, ORANGE, "additive", (98.0, 99.99), 1.0))
    return specs


def _stack(
    name: str, stack: Stack, colormap: str, blending: str, percentiles: tuple[float, float], opacity: float
) -> LayerSpec:
    levels = [_lazy(level) for level in stack.levels]
    finest = stack.finest
    return LayerSpec(
        name,
        "image",
        levels if len(levels) > 1 else levels[0],
        {
            "multiscale": len(levels) > 1,
            "projection_mode": "none",  # the margins that make contacts visible are no slab of the stack
            "scale": finest.voxel_um,
            "translate": finest.origin_um,
            "colormap": colormap,
            "blending": blending,
            "opacity": opacity,
            "contrast_limits": _limits(stack.levels[-1], percentiles),
            "axis_labels": axis_names(finest.code),
        },
    )


def axis_names(code: str) -> tuple[str, ...]:
    """Names of the stored axes."""
    return tuple(f"s{k}" for k in range(len(code)))


def _lazy(volume: Volume) -> Any:
    """The voxels as a dask array that reads a block when it is looked at."""
    import dask.array as da

    chunk = volume.chunk or (1, *volume.shape[1:])
    empty = np.zeros((0, 0, 0), volume.data.dtype)
    return da.from_array(volume.data, chunks=chunk, name=False, fancy=False, asarray=True, lock=False, meta=empty)


def _limits(volume: Volume, percentiles: tuple[float, float]) -> tuple[float, float]:
    """Grey values between which contrast is spread, from a few planes of the coarsest level, across the axis along
    which a plane is cheap to read."""
    chunk = volume.chunk or (1, *volume.shape[1:])
    axis = int(np.argmin([c / n for c, n in zip(chunk, volume.shape, strict=True)]))
    step = max(1, max(n for k, n in enumerate(volume.shape) if k != axis) // 400)
    looks = []
    for k in np.linspace(0, volume.shape[axis] - 1, SAMPLE_PLANES + 2).astype(int)[1:-1]:
        place = tuple(slice(int(k), int(k) + 1) if a == axis else slice(None, None, None) for a in range(3))
        looks.append(np.asarray(volume.data[place]).squeeze(axis)[::step, ::step])
    low, high = (float(v) for v in np.percentile(np.concatenate([look.ravel() for look in looks]), percentiles))
    return (low, high) if high > low else (low, low + 1.0)


class AtlasInStack:
    """Atlas regions on a grid in stack space, worked out for just the voxels that are asked for.

    An array to those who slice it: ``shape``, ``dtype``, ``ndim`` and basic indexing; values are rows of ``ids``.
    """

    ndim = 3
    dtype = np.dtype(np.uint16)

    def __init__(self, stack: Volume, atlas: Atlas, registration: Registration, grain_um: float) -> None:
        factor = np.maximum(np.rint(grain_um / stack.voxel_um), 1)
        self.voxel_um = stack.voxel_um * factor
        self.origin_um = stack.origin_um + (self.voxel_um - stack.voxel_um) / 2
        self.shape = tuple(int(n) for n in np.ceil(np.asarray(stack.shape) / factor))
        self.ids = np.array(sorted(atlas.structures.by_id))
        self._atlas, self._registration = atlas, registration
        self._kept: dict[str, AnyArray] = {}

    def __getitem__(self, key: Any) -> AnyArray:
        """Rows of ``ids`` at the voxels of a basic index; the last few planes are remembered."""
        parts = (key if isinstance(key, tuple) else (key,)) + (slice(None),) * 3
        axes = [np.arange(n)[part] for n, part in zip(self.shape, parts, strict=False)]
        name = str([(a.shape, a[:1].tolist(), a[-1:].tolist()) if a.ndim else int(a) for a in axes])
        if name not in self._kept:
            while len(self._kept) >= PLANES_KEPT:
                self._kept.pop(next(iter(self._kept)))
            self._kept[name] = self._at(axes)
        return self._kept[name]

    def _at(self, axes: list[AnyArray]) -> AnyArray:
        grid = np.stack(np.meshgrid(*(np.atleast_1d(a) for a in axes), indexing="ij"), axis=-1)
        points = grid.reshape(-1, 3) * self.voxel_um + self.origin_um
        found = self._atlas.label_at(self._registration.stack_to_atlas(points))
        shape = tuple(a.size for a in axes if a.ndim)
        return np.searchsorted(self.ids, found).astype(self.dtype).reshape(shape)


def outline_spec(bench: Bench, registration: Registration) -> LayerSpec:
    """Atlas regions in stack space; hovering names the region."""
    import pandas as pd

    data = AtlasInStack(bench.background.finest, bench.atlas, registration, OUTLINE_GRAIN_UM)
    rows = [bench.atlas.structures[int(i)] for i in data.ids]
    features = pd.DataFrame(
        {"index": np.arange(len(rows)), "region": [s.acronym for s in rows], "name": [s.name for s in rows]}
    )
    colours: dict[int | None, Any] = {k: s.colour for k, s in enumerate(rows)}
    colours[0] = colours[None] = "transparent"
    return LayerSpec(
        NAMES["outlines"],
        "labels",
        data,
        {
            "scale": data.voxel_um, "translate": data.origin_um, "features": features, "opacity": 0.6, "contour": 1,
            "direct_colours": colours, "axis_labels": axis_names(bench.background.finest.code), "multiscale": False,
        },
    )  # fmt: skip


def track_spec(tracks: Mapping[tuple[str, int], Track], code: str) -> LayerSpec:
    """Every track as a chain of small points (lines show in 2-D on one plane only)."""
    import pandas as pd

    points, rows = [], []
    for (penetration, shank), track in sorted(tracks.items()):
        depth = np.arange(0.0, track.length_um + 1.0, TRACK_STEP_UM)
        points.append(track.stack_at(depth))
        rows += [(penetration, shank, float(d)) for d in depth]
    data = np.concatenate(points) if points else np.zeros((0, 3))
    return LayerSpec(
        NAMES["tracks"],
        "points",
        data,
        {
            "features": pd.DataFrame(rows, columns=["penetration", "shank", "track_depth_um"]),
            "size": 22.0, "face_color": "white", "border_width": 0.0, "opacity": 0.85, "symbol": "disc",
            "blending": "translucent_no_depth", "projection_mode": "all", "axis_labels": axis_names(code),
        },
    )  # fmt: skip


def contact_spec(
    channels: pd.DataFrame, tracks: Mapping[tuple[str, int], Track], structures: Structures, code: str
) -> LayerSpec:
    """Every located contact, coloured by region, with its whole row of the channel table."""
    table = channels[channels["track_depth_um"].notna()].reset_index(drop=True)
    points = np.zeros((len(table), 3))
    for (penetration, shank), track in tracks.items():
        rows = np.flatnonzero((table["penetration"] == penetration) & (table["shank"] == shank))
        points[rows] = track.stack_at(table["track_depth_um"].to_numpy(float)[rows])
    colours = contact_colours(table["region_id"].to_numpy(), structures)
    return LayerSpec(
        NAMES["contacts"],
        "points",
        points,
        {
            "features": table,
            "size": CONTACT_PX_UM, "face_color": colours, "border_color": colours, "border_width": 0.0,
            "symbol": "disc", "opacity": 1.0, "blending": "translucent_no_depth", "projection_mode": "all",
            "axis_labels": axis_names(code),
        },
    )  # fmt: skip


def contact_colours(region_id: Any, structures: Structures) -> AnyArray:
    """RGBA ``(n, 4)`` from 0 to 1 of regions."""
    ids, codes = np.unique(np.asarray(region_id).astype(np.int64), return_inverse=True)
    hexes = [structures[int(i)].colour if i else "#4a4a4a" for i in ids]
    rgb = np.array([[int(h[k : k + 2], 16) for k in (1, 3, 5)] for h in hexes], float).reshape(-1, 3) / 255
    return np.column_stack([rgb[codes], np.ones(len(codes))])


def surface_specs(atlas: Atlas, registration: Registration, results: Results, code: str) -> list[LayerSpec]:
    """The brain's hull and the regions that the tracks cross, as smooth surfaces in stack um."""
    labels = atlas.labels.array()
    step = np.maximum(np.rint(SURFACE_GRAIN_UM / atlas.voxel_um).astype(int), 1)
    small = labels[:: step[0], :: step[1], :: step[2]]
    grain = atlas.voxel_um * step
    specs = [_surface(NAMES["hull"], small > 0, grain, "#c9d2dc", 0.25, registration, code)]
    for structure_id in crossed(results, atlas):
        row = atlas.structures[structure_id]
        inside = small == structure_id
        if inside.any():
            specs.append(_surface(f"{row.acronym} surface", inside, grain, row.colour, 0.5, registration, code))
    return specs


def crossed(results: Results, atlas: Atlas, at_most: int = 12) -> list[int]:
    """Structures that the tracks cross, those crossed longest first; outside left out."""
    lengths: dict[int, int] = {}
    for track in results.tracks.values():
        ids, counts = np.unique(
            atlas.label_at(track.atlas_at(np.arange(0.0, track.length_um, 10.0))), return_counts=True
        )
        for structure_id, count in zip(ids.tolist(), counts.tolist(), strict=True):
            lengths[structure_id] = lengths.get(structure_id, 0) + count
    lengths.pop(0, None)
    return sorted(lengths, key=lambda i: -lengths[i])[:at_most]


def _surface(
    name: str,
    inside: AnyArray,
    grain_um: FloatArray,
    colour: str,
    opacity: float,
    registration: Registration,
    code: str,
) -> LayerSpec:
    from scipy.ndimage import gaussian_filter
    from skimage.measure import marching_cubes

    # The hull is drawn first and must not hide what lies inside it; regions hide each other as solids do.
    blending = "translucent_no_depth" if name == NAMES["hull"] else "translucent"
    field = gaussian_filter(np.pad(inside.astype(np.float32), 2), 1.0)
    vertices, faces, _, _ = marching_cubes(field, min(0.5, float(field.max()) * 0.6))
    points = registration.atlas_to_stack((vertices - 2) * grain_um)
    if np.linalg.det(axes_matrix(code)) > 0:  # the canvas is left-handed; faces must look outward to be lit
        faces = faces[:, ::-1]
    rgb = [int(colour[k : k + 2], 16) / 255 for k in (1, 3, 5)]
    return LayerSpec(
        name,
        "surface",
        (points, faces, np.ones(len(points))),
        {
            "vertex_colors": np.tile([*rgb, 1.0], (len(points), 1)), "opacity": opacity, "shading": "smooth",
            "blending": blending, "axis_labels": axis_names(code),
        },
    )  # fmt: skip


def plane_spec(bench: Bench) -> LayerSpec:
    """The background in memory at one resolution, to be cut along a plane in 3-D (only whole volumes can be)."""
    levels = [v for v in bench.background.levels if float(np.prod(v.shape)) <= PLANE_VOXELS]
    volume = levels[0] if levels else bench.background.levels[-1]
    code = bench.background.finest.code
    return LayerSpec(
        NAMES["plane"],
        "image",
        volume.array(),
        {
            "scale": volume.voxel_um, "translate": volume.origin_um, "colormap": "gray", "blending": "translucent",
            "contrast_limits": _limits(volume, (1.0, 99.8)), "axis_labels": axis_names(code), "multiscale": False,
        },
    )  # fmt: skip


def slice_plane(track: Track) -> tuple[FloatArray, FloatArray]:
    """A point of the track and its direction, for a plane that contains it."""
    way = track.stack_um[-1] - track.stack_um[0]
    return track.stack_at(np.array(track.length_um / 2)), way / np.linalg.norm(way)


def edit_spec(points_um: FloatArray, code: str, name: str) -> LayerSpec:
    """Points of a track that can be moved, added and deleted."""
    return LayerSpec(
        name,
        "points",
        np.asarray(points_um, float).reshape(-1, 3),
        {
            "size": 90.0, "face_color": SKY, "border_color": "white", "border_width": 0.12, "symbol": "disc",
            "blending": "translucent_no_depth", "projection_mode": "all", "axis_labels": axis_names(code),
        },
    )  # fmt: skip


def pair_specs(stack_um: FloatArray, atlas_um: FloatArray, registration: Registration, code: str) -> list[LayerSpec]:
    """Both ends of every pair in stack um: where it is in the stack, and where the atlas place now falls."""
    specs = []
    for name, points, colour, symbol in (
        ("Pairs: seen in the stack", stack_um, VERMILION, "cross"),
        (
            "Pairs: place in the atlas",
            registration.atlas_to_stack(atlas_um) if len(atlas_um) else atlas_um,
            PINK,
            "ring",
        ),
    ):
        spec = edit_spec(points, code, name)
        specs.append(LayerSpec(name, "points", spec.data, spec.options | {"face_color": colour, "symbol": symbol}))
    return specs
