"""A tiny invented brain for the registration tests: a few structures whose sample is drawn through a known map."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.model.frames import as_pir, axes_matrix, from_pir, voxel_as_pir
from leadline.model.transform import Affine
from leadline.model.volume import Volume
from leadline.registration.grids import pir_to_stack

BOX_UM = np.array([9600.0, 6400.0, 8000.0])
VOXEL_UM = 200.0


def ids_at(points_um: FloatArray) -> AnyArray:
    """Structure at atlas points: nothing in it is symmetric about any plane but the midline, and not quite there."""
    p = points_um - BOX_UM / 2
    r = np.sqrt((p[:, 0] / 4000) ** 2 + (p[:, 1] / 2500) ** 2 + (p[:, 2] / 3300) ** 2) + 0.05 * np.sin(p[:, 0] / 900)
    ids = np.where(r < 1, 7, 0)
    ids[(r < 1) & (r > 0.8) & (p[:, 1] < 500)] = 2**32 - 2
    ids[(r < 0.8) & (r > 0.68) & (p[:, 1] < 500)] = 11
    ids[(r < 0.65) & (np.hypot(p[:, 0] + 800, p[:, 1] - 300) < 900)] = 12
    ids[(r < 0.65) & (np.hypot(p[:, 0] - 1500, np.abs(p[:, 2]) - 1200) < 700)] = 13
    ids[(r < 0.9) & (p[:, 1] > 1300)] = 14
    ids[(r < 1) & (p[:, 0] > 2600)] = 15
    ids[(r < 1) & (p[:, 0] < -2900)] = 16
    return ids.astype(np.uint32)


def glow_at(points_um: FloatArray, levels: dict[int, float]) -> FloatArray:
    """Brightness: of the structure, with a ripple of the tissue's own."""
    ids = ids_at(points_um)
    level = np.zeros(len(ids))
    for k, value in levels.items():
        level[ids == k] = value
    ripple = np.sin(points_um @ [1 / 210, 1 / 320, 1 / 330]) + np.sin(points_um @ [-1 / 280, 1 / 190, 1 / 410])
    ripple += np.sin(points_um @ [1 / 350, -1 / 300, 1 / 220])
    return level * (1 + 0.12 * ripple)


ATLAS_LEVELS = {7: 0.7, 2**32 - 2: 1.1, 11: 0.35, 12: 1.3, 13: 0.5, 14: 1.0, 15: 1.4, 16: 0.9}
SAMPLE_LEVELS = {7: 0.8, 2**32 - 2: 1.0, 11: 0.45, 12: 1.1, 13: 0.6, 14: 0.9, 15: 1.5, 16: 1.1}


def supersampled(shape: tuple[int, ...], voxel_um: FloatArray, value_at: object) -> AnyArray:
    """Mean of eight points in every voxel."""
    total = np.zeros(int(np.prod(shape)))
    nodes = np.stack(np.meshgrid(*[np.arange(n) for n in shape], indexing="ij"), -1).reshape(-1, 3)
    for corner in np.stack(np.meshgrid(*[(-0.25, 0.25)] * 3, indexing="ij"), -1).reshape(-1, 3):
        total += value_at((nodes + corner) * voxel_um)  # type: ignore[operator]
    return total.reshape(shape) / 8


def make_atlas() -> tuple[Volume, Volume]:
    """Template and labels, PIR."""
    shape = tuple((BOX_UM / VOXEL_UM).astype(int))
    voxel = np.full(3, VOXEL_UM)
    template = 900 * supersampled(shape, voxel, lambda p: glow_at(p, ATLAS_LEVELS))
    nodes = np.stack(np.meshgrid(*[np.arange(n) for n in shape], indexing="ij"), -1).reshape(-1, 3)
    labels = ids_at(nodes * voxel).reshape(shape)
    return Volume(template.astype(np.float32), voxel, "PIR"), Volume(labels, voxel, "PIR")


@dataclass(frozen=True)
class Sample:
    """A stack with the true map: stack um to atlas um."""

    background: Volume
    stack_um: FloatArray
    atlas_um: FloatArray


def make_sample(
    code: str = "PIR",
    *,
    tilt_deg: float = 6.0,
    warp_um: float = 150.0,
    voxel_um: tuple[float, float, float] = (180.0, 150.0, 150.0),
    seed: int = 1,
    lost: bool = False,
) -> Sample:
    """Draw a sample: shrunk, tilted, smoothly deformed, in another contrast, noisy; ``lost`` cuts its front off."""
    from scipy.spatial.transform import Rotation

    rng = np.random.default_rng(seed)
    axis = rng.normal(size=3)
    turn = Rotation.from_rotvec(np.radians(tilt_deg) * axis / np.linalg.norm(axis)).as_matrix()
    matrix = turn / np.array([0.94, 0.96, 0.93])
    room = BOX_UM * 1.06
    phase = rng.uniform(0, 2 * np.pi, (3, 3))

    def to_atlas(q: FloatArray) -> FloatArray:
        waves = np.stack([np.sin(q[:, (k + 1) % 3] / 1100 + phase[k, 0]) for k in range(3)], axis=1)
        return (q - room / 2 + warp_um * waves) @ matrix.T + BOX_UM / 2

    pir_voxel = voxel_as_pir(voxel_um, code)
    shape = tuple(np.ceil(room / pir_voxel).astype(int))

    def value_at(q: FloatArray) -> FloatArray:
        p = to_atlas(q)
        glow = glow_at(p, SAMPLE_LEVELS)
        return np.where(lost & (p[:, 0] < 2600), 0.0, glow)

    image = 300 * supersampled(shape, pir_voxel, value_at) + 100 + rng.normal(0, 8, shape)
    stored = np.ascontiguousarray(from_pir(np.clip(image, 0, None).astype(np.uint16), code))
    background = Volume(stored, np.asarray(voxel_um), code)
    q = rng.uniform(0, 1, (6000, 3)) * room
    p = to_atlas(q)
    kept = (ids_at(p) > 0) & (~np.asarray(lost) | (p[:, 0] > 2600))
    return Sample(background, pir_to_stack(background)(q[kept]), p[kept])


__all__ = ["Affine", "Sample", "as_pir", "axes_matrix", "make_atlas", "make_sample"]
