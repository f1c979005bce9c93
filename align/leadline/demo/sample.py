"""The invented sample under the microscope: autofluorescence and dye, drawn voxel by voxel through the true map."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, FloatArray
from leadline.base.progress import SILENT, Progress
from leadline.demo import glow
from leadline.demo.anatomy import BOX_UM, MIDLINE_UM, codes_at, shared_texture, surface_depth_um
from leadline.demo.structures import greys, kinds
from leadline.demo.warp import Frame, Spline, TrueMap, random_spline
from leadline.model.frames import voxel_as_pir

if TYPE_CHECKING:
    from leadline.demo.recipe import Recipe
    from leadline.demo.tracks import TruePenetration

_PLANES = 8
_DARK = 45.0
_TISSUE = 420.0


@dataclass(frozen=True, slots=True, eq=False)
class Look:
    """How this sample looks: brightness of each structure, its own texture, uneven light, bubbles."""

    counts: AnyArray
    texture: Spline
    light: Spline
    fade_per_um: FloatArray
    stripes: AnyArray
    bubbles: tuple[tuple[FloatArray, float, float], ...]


def missing(recipe: Recipe, atlas_um: AnyArray) -> BoolArray:
    """True ``(n,)`` where the sample's tissue at atlas points ``(n, 3)`` was torn off."""
    side = 1 if recipe.seed % 2 else -1
    pieces = (
        ((1250.0, 3400.0, MIDLINE_UM + side * 800.0), 1050.0),
        ((9700.0, 2300.0, MIDLINE_UM - side * 2500.0), 900.0),
        ((1250.0, 3400.0, MIDLINE_UM - side * 800.0), 700.0),
    )[: recipe.torn]
    p = np.asarray(atlas_um)
    gone = np.zeros(len(p), bool)
    ragged = 60 * np.sin(p[:, 0] / 140) + 60 * np.sin(p[:, 1] / 170 + p[:, 2] / 110)
    for centre, radius in pieces:
        far2 = sum((p[:, k] - centre[k]) ** 2 for k in range(3))
        gone |= far2 < (radius + ragged) ** 2
    return gone


def make_look(recipe: Recipe, chart: TrueMap, grid: glow.Grid) -> Look:
    """Draw a sample's looks."""
    rng = np.random.default_rng([recipe.seed, 60])
    grey = greys() ** rng.uniform(0.75, 1.3) * _own_tint(rng)
    counts = np.where(greys() > 0, _TISSUE * np.clip(grey, 0.1, None), 0.0)
    texture = random_spline(rng, grid.extent_um, 130.0, 1, 1.0)
    texture = Spline(texture.coefficients * 0.28, texture.knot_um)
    light = random_spline(rng, grid.extent_um, 3000.0, 1, min(0.6, 0.28 * recipe.shading))
    fade = np.zeros(3)
    fade[rng.integers(3)] = rng.choice([-1, 1]) * 4e-5 * recipe.shading
    stripes = 0.025 * recipe.stripes * rng.standard_normal((grid.shape[0], grid.shape[1], 1))
    return Look(
        counts.astype(np.float32), texture, light, fade, stripes.astype(np.float32), _bubbles(recipe, rng, chart)
    )


def _own_tint(rng: np.random.Generator) -> FloatArray:
    """Brightness of each structure in this sample against the atlas; a layer is tinted alike in all areas."""
    layers = {layer: rng.normal(0, 0.05) for layer in sorted({kind.layer for kind in kinds()} - {""})}
    own = rng.standard_normal(len(kinds()))
    return np.array(
        [1 + layers[k.layer] + 0.02 * z if k.layer else 1 + 0.07 * z for k, z in zip(kinds(), own, strict=True)]
    )


def _bubbles(recipe: Recipe, rng: np.random.Generator, chart: TrueMap) -> tuple[tuple[FloatArray, float, float], ...]:
    """(centre, radius, brightness) of air and debris, somewhere in the brain."""
    found: list[tuple[FloatArray, float, float]] = []
    while len(found) < recipe.bubbles:
        place = rng.uniform(0.1, 0.9, 3) * BOX_UM
        if surface_depth_um(place[None])[0] > 150:
            found.append((chart.inverse(place[None])[0], rng.uniform(60, 240), rng.choice([0.1, 0.25, 2.5, 5.0])))
    return tuple(found)


def draw(
    recipe: Recipe,
    chart: TrueMap,
    frame: Frame,
    penetrations: tuple[TruePenetration, ...],
    progress: Progress = SILENT,
) -> tuple[AnyArray, AnyArray]:
    """Background and dye, uint16, laid out as PIR; no more than a few planes are held in floating point."""
    grid = glow.Grid(frame.pir_shape, voxel_as_pir(frame.voxel_um, frame.code))
    look = make_look(recipe, chart, grid)
    dye = glow.together([glow.dye(recipe, chart, grid, s) for pen in penetrations for s in pen.shanks])
    other = glow.together(glow.vessels(recipe, chart, grid))
    shared = shared_texture(recipe)
    images = np.zeros(grid.shape, np.uint16), np.zeros(grid.shape, np.uint16)
    progress.begin("drawing the sample", grid.shape[0])
    for start in range(0, grid.shape[0], _PLANES):
        planes = slice(start, min(start + _PLANES, grid.shape[0]))
        rng = np.random.default_rng([recipe.seed, 61, start])
        tissue = _tissue(recipe, chart, grid, look, shared, planes)
        tracks, rest = _part(dye, grid, planes), _part(other, grid, planes)
        background = tissue + recipe.crosstalk * (tracks + rest)
        stain = 0.45 * tissue + tracks + rest
        for image, clean in ((images[0], background), (images[1], stain)):
            image[planes] = _expose(rng, clean, recipe.noise)
        progress.step(planes.stop - planes.start)
    return images


def _tissue(recipe: Recipe, chart: TrueMap, grid: glow.Grid, look: Look, shared: AnyArray, planes: slice) -> AnyArray:
    """Autofluorescence of some planes, counts, before noise."""
    from scipy.ndimage import map_coordinates

    axes = grid.axes_um(planes)
    atlas = chart.on_grid(axes)
    flat = atlas.reshape(-1, 3)
    codes = codes_at(flat)
    inside = np.flatnonzero(codes)
    gone = missing(recipe, flat[inside])
    codes[inside[gone]] = 0
    inside = inside[~gone]
    counts = look.counts[codes]
    counts[inside] *= map_coordinates(shared, flat[inside].T / np.float32(100.0), order=1, mode="nearest")
    counts = counts.reshape(atlas.shape[:3])
    counts *= 1 + look.texture.on_grid(axes)[..., 0]
    light = np.exp(look.light.on_grid(axes)[..., 0])
    for k, fade in enumerate(look.fade_per_um):
        if fade:
            along = np.exp(fade * (axes[k] - grid.extent_um[k] / 2)).astype(np.float32)
            light = light * along.reshape([-1 if j == k else 1 for j in range(3)])
    counts *= light * (1 + look.stripes[planes])
    _blow(counts, axes, look)
    return np.asarray(counts + np.float32(_DARK))


def _blow(counts: AnyArray, axes: tuple[FloatArray, FloatArray, FloatArray], look: Look) -> None:
    """Put the bubbles in."""
    for centre, radius, brightness in look.bubbles:
        cut = tuple(
            slice(*np.searchsorted(axis, [c - radius, c + radius])) for axis, c in zip(axes, centre, strict=True)
        )
        mesh = np.meshgrid(*[axis[s] - c for axis, s, c in zip(axes, cut, centre, strict=True)], indexing="ij")
        r = np.sqrt(sum(m**2 for m in mesh)) / radius
        inner = counts[cut]
        counts[cut] = np.where(r < 1, _TISSUE * brightness * (0.7 + 0.6 * r**4), inner)


def _part(glowing: glow.Glow, grid: glow.Grid, planes: slice) -> AnyArray:
    area = grid.shape[1] * grid.shape[2]
    part = np.zeros((planes.stop - planes.start) * area, np.float32)
    low, high = np.searchsorted(glowing.flat, [planes.start * area, planes.stop * area])
    part[glowing.flat[low:high] - planes.start * area] = glowing.counts[low:high]
    return part.reshape(-1, *grid.shape[1:])


def _expose(rng: np.random.Generator, clean: AnyArray, noise: float) -> AnyArray:
    """Shot and read noise, rounded to counts of a 16-bit camera."""
    spread = noise * np.sqrt(0.9 * clean + 8.0**2)
    return np.clip(np.rint(clean + spread * rng.standard_normal(clean.shape, np.float32)), 0, 65535).astype(np.uint16)


def draw_points(recipe: Recipe, chart: TrueMap, frame: Frame) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Random points in tissue that is there: stack um, true atlas um, and whether a border is within 75 um."""
    rng = np.random.default_rng([recipe.seed, 62])
    grid_um = (np.asarray(frame.pir_shape) - 1) * voxel_as_pir(frame.voxel_um, frame.code)
    kept: list[FloatArray] = []
    while sum(len(k) for k in kept) < recipe.n_points:
        q = rng.uniform(0, 1, (recipe.n_points * 2, 3)) * grid_um
        p = chart(q)
        kept.append(q[(surface_depth_um(p) > 0) & ~missing(recipe, p)])
    q = np.concatenate(kept)[: recipe.n_points]
    p = chart(q)
    here = codes_at(p)
    border = np.zeros(len(p), bool)
    for step in 75.0 * np.concatenate([np.eye(3), -np.eye(3)]):
        border |= codes_at(p + step) != here
    return frame.from_pir(q), p, border
