"""Invented stacks, registered as they are and as something that they are not."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache

import numpy as np

from leadline.demo import recipe as kinds
from leadline.demo.anatomy import make_atlas
from leadline.demo.recipe import Recipe
from leadline.demo.sample import draw
from leadline.demo.tracks import Shank, TruePenetration
from leadline.demo.warp import random_spline
from leadline.demo.write import invent
from leadline.model.atlas import Atlas
from leadline.model.frames import axes_matrix, from_pir
from leadline.model.settings import RegisterSettings
from leadline.model.transform import Registration
from leadline.model.volume import Volume
from leadline.registration.grids import pir_to_stack
from leadline.registration.stage import register

CODES = ("PIR", "RAS", "LIP", "IAR", "SPL")
PIR_VOXEL_UM = (96.0, 75.0, 75.0)
SETTINGS = RegisterSettings(resolution_um=400.0, deformable=False)


@dataclass(frozen=True)
class Made:
    """A stack laid out as PIR, the true shanks in its um, and the penetrations."""

    background: np.ndarray
    dye: np.ndarray
    shanks_pir_um: list[np.ndarray]
    penetrations: tuple[TruePenetration, ...]
    voxel_um: np.ndarray

    def stored(self, code: str) -> tuple[Volume, Volume]:
        """Background and dye stored as ``code``."""
        voxel_um = voxel_as_stored(self.voxel_um, code)
        images = (np.ascontiguousarray(from_pir(i, code)) for i in (self.background, self.dye))
        background, dye = (Volume(i, voxel_um, code) for i in images)
        return background, dye

    def shanks_stack_um(self, code: str) -> list[np.ndarray]:
        """The true shanks, in um along the axes of a stack stored as ``code``."""
        to_stack = pir_to_stack(self.stored(code)[0])
        return [to_stack(points) for points in self.shanks_pir_um]


@cache
def atlas() -> Atlas:
    """The invented atlas at 100 um."""
    return make_atlas(Recipe(1, atlas_voxel_um=100.0))


def stack(seed: int) -> Made:
    """The stack of a seed, badly treated where it is odd."""
    recipe = Recipe(seed, stack_code="PIR", voxel_um=PIR_VOXEL_UM, seconds=0.0, atlas_voxel_um=100.0)
    recipe = kinds.hard(recipe) if seed % 2 else recipe
    brain = invent(recipe)
    background, dye = draw(recipe, brain.chart, brain.frame, brain.penetrations)
    shanks = [brain.chart.inverse(s.at(dyed(s))) for pen in brain.penetrations for s in pen.shanks]
    return Made(background, dye, shanks, brain.penetrations, np.asarray(PIR_VOXEL_UM))


def dyed(shank: Shank) -> np.ndarray:
    """Depths from the entry to the end of the dye."""
    return np.append(np.arange(0.0, shank.dye_end_um, 100.0), shank.dye_end_um)


def registered(made: Made, code: str, *, called: str = "", voxel_um=None, goal: Atlas | None = None) -> Registration:
    """Register a stack stored as ``code`` under the orientation and the (PIR) voxel sizes that it is said to have."""
    goal = goal or atlas()
    background, dye = (
        replace(v, code=called or code, voxel_um=v.voxel_um if voxel_um is None else voxel_as_stored(voxel_um, code))
        for v in made.stored(code)
    )
    return register(background, goal.template, goal.labels, settings=SETTINGS, dye=dye)


def voxel_as_stored(voxel_um, code: str) -> np.ndarray:
    """Voxel sizes along (ap, dv, ml), reordered to the stored axes."""
    return np.abs(axes_matrix(code)).T @ voxel_um


def wrong_sizes(voxel_um: np.ndarray, rng: np.random.Generator) -> dict[str, np.ndarray]:
    """Voxel sizes that somebody might write, by kind."""
    axis = np.eye(3)[rng.integers(3)]
    return {
        "voxel size x 2 or 1/2": voxel_um * rng.choice([2.0, 0.5]),
        "voxel size x 1.5 or 2/3": voxel_um * rng.choice([1.5, 2 / 3]),
        "one axis x 1.5 or 2/3": voxel_um * (1 + axis * (rng.choice([1.5, 2 / 3]) - 1)),
        "one axis x 1.25 or 0.8": voxel_um * (1 + axis * (rng.choice([1.25, 0.8]) - 1)),
        "two sizes exchanged": voxel_um[[1, 0, 2]],
    }


def young(seed: int) -> Atlas:
    """The atlas as of a younger animal: 0.65 to 0.9 of the size, front and back of other proportions, bent."""
    from scipy.ndimage import map_coordinates

    rng = np.random.default_rng([seed, 5])
    old = atlas()
    size, step = rng.uniform(0.65, 0.9), old.voxel_um
    extent = np.asarray(old.labels.shape) * step
    axes = tuple(np.arange(n) * s for n, s in zip(old.labels.shape, step, strict=True))
    at = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1)
    off = (at / (extent / 2) - 1) / size
    off[..., 0] += 0.15 * np.sin(np.pi * off[..., 0])
    source = (off + 1) * extent / 2 + random_spline(rng, extent, 3000.0, 3, 600.0).on_grid(axes)
    index = np.moveaxis(source / step, -1, 0)
    template = map_coordinates(old.template.array().astype(np.float32), index, order=1)
    labels = map_coordinates(old.labels.array().astype(np.float64), index, order=0).astype(np.uint32)
    return replace(old, template=Volume(template, step, "PIR"), labels=Volume(labels, step, "PIR"))
