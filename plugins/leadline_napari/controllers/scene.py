"""One shank laid out for the section: what does not change while an anchor is dragged, made once, off the screen."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.atlas.crossing import runs_along
from leadline.locating.section import sideways, straightened
from leadline.pipeline.exact import ShankGround, ground
from leadline_napari.controllers.lanes import lanes_of
from leadline_napari.states import Strata, Stratum, Tissue
from leadline_napari.style import ORANGE, OUTSIDE_RGB, rgb_of

if TYPE_CHECKING:
    from leadline.base.arrays import AnyArray, Float32Array, FloatArray
    from leadline.model.atlas import Atlas, Structure
    from leadline.model.track import Track
    from leadline.model.volume import Stack, Volume
    from leadline.pipeline.bench import Bench
    from leadline_napari.results import Results
    from leadline_napari.states import Lane

GRAIN_UM = 10.0
HALF_WIDTH_UM = 400.0
ABOVE_UM = 300.0
BELOW_UM = 300.0


@dataclass(frozen=True, slots=True, eq=False)
class Scene:
    """One shank. ``shanks`` : all located shanks of the penetration, this one at ``index``; ``tissues`` : pictures
    that can be chosen, stack first."""

    shanks: tuple[ShankGround, ...]
    index: int
    strata: Strata
    tissues: tuple[Tissue, ...]
    lanes: tuple[Lane, ...]
    top_um: float
    bottom_um: float

    @property
    def shank(self) -> ShankGround:
        """The shank in hand."""
        return self.shanks[self.index]

    @property
    def end_um(self) -> float:
        """Track depth of the track's end, drawn level with the tip."""
        return self.shank.track.length_um


def make_scene(bench: Bench, results: Results, penetration: str, shank: int) -> Scene | None:
    """Lay out a shank; None where it has no track yet.

    Raises LeadlineError when an input cannot be read.
    """
    tracks = [t for (name, _), t in sorted(results.tracks.items()) if name == penetration]
    shanks = ground(bench, tracks)
    index = next((i for i, s in enumerate(shanks) if s.track.shank == shank), None)
    if index is None:
        return None
    here = shanks[index]
    top, bottom = extent(here)
    return Scene(
        shanks,
        index,
        strata_of(here, bench.atlas),
        (stack_tissue(bench, here.track, top, bottom), template_tissue(bench.atlas, here.track, top, bottom)),
        lanes_of(here.evidence.profile, results.spectra.get(penetration), shank),
        top,
        bottom,
    )


def extent(shank: ShankGround) -> tuple[float, float]:
    """Track depths between which the section is drawn."""
    highest = shank.track.length_um - float(shank.contacts.tip_distance_um.max())
    return min(0.0, highest) - ABOVE_UM, shank.track.length_um + BELOW_UM


def strata_of(shank: ShankGround, atlas: Atlas) -> Strata:
    """Runs of structures along the track."""
    runs = runs_along(atlas, shank.track.atlas_at(shank.table.depth_um), shank.table.depth_um)
    strata = []
    for top, bottom, number in zip(runs.start_um, runs.stop_um, runs.structure_id, strict=True):
        structure = atlas.structures[int(number)]
        strata.append(Stratum(float(top), float(bottom), structure.acronym, structure.name, colour_of(structure)))
    return Strata(tuple(strata), shank.error_um)


def colour_of(structure: Structure) -> tuple[int, int, int]:
    """The atlas's colour; a quiet grey outside the brain."""
    return rgb_of(structure.colour) if structure.id else OUTSIDE_RGB


def stack_tissue(bench: Bench, track: Track, top_um: float, bottom_um: float) -> Tissue:
    """Background in grey, dye over it."""
    depth = np.arange(top_um, bottom_um, GRAIN_UM)
    offsets = np.arange(-HALF_WIDTH_UM, HALF_WIDTH_UM + 1, GRAIN_UM)
    points = track.stack_at(depth)
    side = sideways(points, bench.background.finest.code, offsets)
    grey = straightened(_level(bench.background), points, side)
    dye = None if bench.dye is None else straightened(_level(bench.dye), points, side)
    return Tissue(composed(grey, dye), top_um, bottom_um, HALF_WIDTH_UM, "Stack" if dye is None else "Stack + dye")


def template_tissue(atlas: Atlas, track: Track, top_um: float, bottom_um: float) -> Tissue:
    """The atlas's template along the same track."""
    depth = np.arange(top_um, bottom_um, GRAIN_UM)
    offsets = np.arange(-HALF_WIDTH_UM, HALF_WIDTH_UM + 1, GRAIN_UM)
    points = track.atlas_at(depth)
    grey = straightened(atlas.template, points, sideways(points, "PIR", offsets))
    return Tissue(composed(grey, None), top_um, bottom_um, HALF_WIDTH_UM, "Atlas template")


def composed(grey: Float32Array, dye: Float32Array | None) -> AnyArray:
    """``(D, W, 3)`` uint8: grey values with the dye in orange over them; outside the stack as dark as no signal."""
    base = _stretched(grey, 1.0, 99.5)[..., None] * np.array([235.0, 235.0, 235.0])
    if dye is not None:
        share = (_stretched(dye, 60.0, 99.8) ** 1.2)[..., None] * 0.95
        base = base * (1 - share) + np.array(rgb_of(ORANGE), float) * share
    return np.asarray(base, np.uint8)


def _stretched(values: Float32Array, low: float, high: float) -> FloatArray:
    there = values[np.isfinite(values)]
    if not there.size:
        return np.zeros(values.shape)
    bottom, top = np.percentile(there, [low, high])
    return np.asarray(np.nan_to_num(np.clip((values - bottom) / max(float(top - bottom), 1e-9), 0, 1)), np.float64)


def _level(stack: Stack) -> Volume:
    return stack.fitting(GRAIN_UM)
