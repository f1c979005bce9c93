"""Invented pieces of brain with known tracks, for the tests and the study of tracing.

The tissue is the lower half-space of a dome; dye is a line source blurred by a Gaussian, so the end of the line is
where the blurred dye falls to half. Vessels, pools, bubbles, gaps, faint tips and halos stand in the way.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.ndimage import gaussian_filter, map_coordinates, zoom

from leadline.model.frames import axes_matrix, from_pir, voxel_as_pir
from leadline.model.volume import Volume

STEP_UM = 4.0


@dataclass(frozen=True)
class Conditions:
    """What one phantom holds; lengths in um, ``signal`` in noise sd of one voxel of 36 um."""

    voxel_um: tuple[float, float, float] = (36.0, 36.0, 36.0)
    size_um: tuple[float, float, float] = (5000.0, 5000.0, 5000.0)
    code: str = "PIR"
    singles: int = 2
    shanks: int = 0
    pitch_um: float = 250.0
    sigma_um: tuple[float, float] = (20.0, 45.0)
    signal: tuple[float, float] = (8.0, 40.0)
    gaps: int = 1
    faint_tip: float = 0.3
    halo: float = 0.3
    bow_um: float = 120.0
    vessels: int = 12
    pools: int = 3
    bubbles: int = 3
    lean_deg: float = 22.0


@dataclass(frozen=True)
class TrueTrack:
    """``points_um`` (n, 3) stack um from the surface to the end of the dye, every 4 um."""

    points_um: np.ndarray
    sigma_um: float
    group: int


@dataclass(frozen=True)
class Phantom:
    dye: Volume
    background: Volume
    tracks: tuple[TrueTrack, ...]
    conditions: Conditions = field(repr=False)


def make(seed: int, conditions: Conditions | None = None) -> Phantom:
    """One phantom; the same seed and conditions give the same voxels."""
    c = conditions or Conditions()
    rng = np.random.default_rng(seed)
    voxel = voxel_as_pir(c.voxel_um, c.code)
    shape = np.round(np.asarray(c.size_um) / voxel).astype(int)
    scene = _Scene(shape, voxel, rng)
    tissue, auto = scene.tissue()
    tracks = scene.tracks(c)
    dye = np.zeros(shape, np.float32)
    noise = 40.0
    for _, amount in tracks:
        dye += amount
    dye += scene.vessels(c.vessels, noise)
    dye += scene.pools(c.pools, noise)
    ratio = 0.45 + 0.08 * scene.smooth(1500.0)
    grain = noise * (36.0 / np.cbrt(voxel.prod())) ** 0.75  # finer voxels are noisier, averaged they are cleaner
    signal = 90.0 + ratio * auto + dye * tissue
    auto = 110.0 + auto + 0.03 * dye * tissue
    for k in range(c.bubbles):
        scene.bubble(signal, auto, k)
    signal += rng.normal(0, 1, shape) * grain * np.sqrt(0.3 + 0.7 * signal / 500.0)
    auto += rng.normal(0, 1, shape) * grain * 1.2
    return Phantom(
        _stored(signal, c.code, voxel),
        _stored(auto, c.code, voxel),
        tuple(TrueTrack(_to_stack(t.points_um, c.code, shape, voxel), t.sigma_um, t.group) for t, _ in tracks),
        c,
    )


def _stored(pir: np.ndarray, code: str, voxel: np.ndarray) -> Volume:
    array = np.ascontiguousarray(from_pir(np.clip(pir, 0, 65535).astype(np.uint16), code))
    return Volume(array, np.abs(axes_matrix(code)).T @ voxel, code)


def _to_stack(points: np.ndarray, code: str, shape: np.ndarray, voxel: np.ndarray) -> np.ndarray:
    """PIR um to stored um: a signed permutation, flipped axes counted from their other end."""
    matrix = axes_matrix(code)
    last = (shape - 1) * voxel
    flipped = np.where(matrix.sum(axis=1) < 0, last - points, points)
    return flipped @ np.abs(matrix)


class _Scene:
    def __init__(self, shape: np.ndarray, voxel: np.ndarray, rng: np.random.Generator) -> None:
        self.shape, self.voxel, self.rng = shape, voxel, rng
        self.size = shape * voxel
        a, _, r = self.size
        self.dome = np.array([a / 2 + rng.uniform(-400, 400), 0.0, r / 2 + rng.uniform(-400, 400)])
        self.radius = rng.uniform(5500, 8000)
        self.top = rng.uniform(500, 800)
        self.wave = rng.uniform(0, 2 * np.pi, 2)

    def surface(self, ap: np.ndarray, ml: np.ndarray) -> np.ndarray:
        """Depth coordinate (dv) of the brain surface."""
        away2 = (ap - self.dome[0]) ** 2 + (ml - self.dome[2]) ** 2
        bump = 25 * np.sin(ap / 700 + self.wave[0]) * np.sin(ml / 800 + self.wave[1])
        return self.top + self.radius - np.sqrt(np.maximum(self.radius**2 - away2, 1.0)) + bump

    def smooth(self, scale_um: float) -> np.ndarray:
        """A smooth random field of unit sd."""
        coarse = self.rng.normal(0, 1, np.maximum(np.ceil(self.size / scale_um * 2), 3).astype(int))
        coarse = gaussian_filter(coarse, 1.0)
        grown = zoom(coarse, self.shape / coarse.shape, order=1, grid_mode=True, mode="nearest")
        return (grown / max(grown.std(), 1e-9)).astype(np.float32)

    def tissue(self) -> tuple[np.ndarray, np.ndarray]:
        """Share of tissue in each voxel, and autofluorescence over the offset."""
        ap, dv, ml = (np.arange(n) * v for n, v in zip(self.shape, self.voxel, strict=True))
        depth = dv[None, :, None] - self.surface(ap[:, None, None], ml[None, None, :])
        share = np.clip(0.5 + depth / self.voxel[1], 0, 1).astype(np.float32)
        share = gaussian_filter(share, 12.0 / self.voxel)
        level = 500 + 60 * self.smooth(700.0) + 25 * self.smooth(150.0)
        fibre = 1 - 0.35 * np.exp(-(((depth - 1100 - 60 * self.smooth(900.0)) / 110) ** 2))
        grid = np.meshgrid(ap, dv, ml, indexing="ij", sparse=True)
        middle, half = self.size * [0.5, 0.62, 0.3], (700, 300, 250)
        cavity = sum(((g - o) / h) ** 2 for g, o, h in zip(grid, middle, half, strict=True))
        hollow = 1 - 0.7 / (1 + np.exp((np.sqrt(cavity) - 1) * 8))
        return share, (share * level * fibre * hollow).astype(np.float32)

    def tracks(self, c: Conditions) -> list[tuple[TrueTrack, np.ndarray]]:
        rng, made, starts = self.rng, [], []
        for group in range(c.singles + (c.shanks > 0)):
            many = c.shanks if group == c.singles else 1
            for _ in range(60):
                at = self.size[[0, 2]] * rng.uniform(0.22, 0.78, 2)
                if all(np.linalg.norm(at - s) > 500 for s in starts):
                    break
            starts.append(at)
            lean = np.radians(c.lean_deg) * np.sqrt(rng.uniform())
            inward = np.arctan2(self.size[2] / 2 - at[1], self.size[0] / 2 - at[0])
            turn = inward + rng.uniform(-1.2, 1.2)
            way = np.array([np.sin(lean) * np.cos(turn), np.cos(lean), np.sin(lean) * np.sin(turn)])
            side = np.cross(way, [0.0, 0, 1] if rng.uniform() < 0.5 else [1.0, 0, 0])
            side /= np.linalg.norm(side)
            room = (self.size[1] - self.top - 500) / way[1]
            length = rng.uniform(0.55, 0.95) * min(room, 4500)
            bow = rng.normal(0, c.bow_um / 2) * side + rng.normal(0, c.bow_um / 2) * np.cross(way, side)
            sigma, signal = rng.uniform(*c.sigma_um), np.exp(rng.uniform(*np.log(c.signal)))
            for k in range(many):
                start = np.array([at[0], 0, at[1]]) + (k - (many - 1) / 2) * c.pitch_um * side
                line = self.line(start, way, bow, length + rng.normal(0, 15 * (many > 1)))
                made.append((TrueTrack(line, sigma, group), self.dye(line, sigma, 40 * signal, c)))
        return made

    def line(self, start: np.ndarray, way: np.ndarray, bow: np.ndarray, length: float) -> np.ndarray:
        s = np.arange(-600, 6000, STEP_UM)
        u = s / length
        points = start + s[:, None] * way + (4 * u * (1 - u))[:, None] * bow
        below = points[:, 1] - self.surface(points[:, 0], points[:, 2]) > 0
        first = int(np.flatnonzero(below)[0])
        return points[first : first + int(length / STEP_UM)]

    def dye(self, line: np.ndarray, sigma: float, peak: float, c: Conditions) -> np.ndarray:
        rng, n = self.rng, len(line)
        s = np.arange(n) * STEP_UM
        amount = 1 + 0.35 * np.interp(s, np.linspace(0, s[-1], 12), rng.normal(0, 1, 12).clip(-1.5, 1.5))
        amount *= np.interp(s, [0, s[-1]], [1.0, rng.uniform(0.45, 1.1)])
        for _ in range(rng.integers(0, c.gaps + 1)):
            at = rng.uniform(0.15, 0.8) * s[-1]
            amount[np.abs(s - at) < rng.uniform(75, 150)] = 0.02
        if rng.uniform() < c.faint_tip:
            amount[s > s[-1] - rng.uniform(200, 600)] *= rng.uniform(0.25, 0.6)
        image = self.blur(line, amount, sigma)
        if rng.uniform() < c.halo:
            image += rng.uniform(0.15, 0.5) * self.blur(line[-10:], np.ones(10), 110.0, whole=True)
        if rng.uniform() < 0.4:  # dye that bled into the tissue near the surface
            image += 0.12 * self.blur(line[: n // 4], amount[: n // 4], 90.0)
        return image * peak

    def blur(self, line: np.ndarray, amount: np.ndarray, sigma: float, *, whole: bool = False) -> np.ndarray:
        """A line source blurred in three dimensions; its peak is ``amount`` (of a ball, with ``whole``)."""
        image = np.zeros(self.shape, np.float32)
        lo = np.maximum(np.floor((line.min(0) - 4 * sigma) / self.voxel), 0).astype(int)
        hi = np.minimum(np.ceil((line.max(0) + 4 * sigma) / self.voxel) + 1, self.shape).astype(int)
        if (hi <= lo).any():
            return image
        box = np.zeros(hi - lo)
        index = line / self.voxel - lo
        base = np.floor(index).astype(int)
        part = index - base
        for corner in np.ndindex(2, 2, 2):
            weight = np.prod(np.where(corner, part, 1 - part), axis=1) * amount
            where = base + corner
            inside = ((where >= 0) & (where < box.shape)).all(axis=1)
            np.add.at(box, tuple(where[inside].T), weight[inside])
        left = np.sqrt(np.maximum(sigma**2 - self.voxel**2 / 6, 1.0))
        box = gaussian_filter(box, left / self.voxel, truncate=4)
        box /= box.max() if whole else self.voxel.prod() / (STEP_UM * 2 * np.pi * sigma**2)
        image[tuple(slice(a, b) for a, b in zip(lo, hi, strict=True))] = box
        return image

    def vessels(self, many: int, noise: float) -> np.ndarray:
        rng = self.rng
        image = np.zeros(self.shape, np.float32)
        for k in range(many):
            penetrating = k % 4 == 0
            at = self.size * rng.uniform(0.1, 0.9, 3)
            way = rng.normal(0, 1, 3)
            length = rng.uniform(600, 3000)
            if penetrating:
                at[1] = self.surface(at[0], at[2]) + 10
                way, length = np.array([0.1, 1, 0.1]) * rng.normal(1, 0.15, 3), rng.uniform(300, 1000)
            line = [at]
            way = way / np.linalg.norm(way)
            turn = rng.normal(0, 1, 3)
            for _ in range(int(length / STEP_UM)):
                turn = 0.985 * turn + 0.17 * rng.normal(0, 1, 3)
                way = way + turn * STEP_UM / rng.uniform(250, 600) * (0.5 if penetrating else 1.0)
                way /= np.linalg.norm(way)
                line.append(line[-1] + way * STEP_UM)
            points = np.array(line)
            image += self.blur(points, np.ones(len(points)), rng.uniform(14, 30)) * noise * rng.uniform(4, 30)
        return image

    def pools(self, many: int, noise: float) -> np.ndarray:
        rng = self.rng
        ap, dv, ml = (np.arange(n) * v for n, v in zip(self.shape, self.voxel, strict=True))
        depth = dv[None, :, None] - self.surface(ap[:, None, None], ml[None, None, :])
        film = np.exp(-((depth / 35) ** 2)) * noise * 3 * (1 + self.smooth(400.0)).clip(0, 3)
        for _ in range(many):
            at, wide = self.size[[0, 2]] * rng.uniform(0.15, 0.85, 2), rng.uniform(150, 400)
            away2 = (ap[:, None, None] - at[0]) ** 2 + (ml[None, None, :] - at[1]) ** 2
            film = film + np.exp(-away2 / wide**2 - ((depth - 20) / 50) ** 2) * noise * rng.uniform(10, 60)
        return film.astype(np.float32)

    def bubble(self, signal: np.ndarray, auto: np.ndarray, k: int) -> None:
        rng = self.rng
        at, radius = self.size * rng.uniform(0.2, 0.85, 3), rng.uniform(80, 300)
        lo = np.maximum((at - 1.5 * radius) / self.voxel, 0).astype(int)
        hi = np.minimum((at + 1.5 * radius) / self.voxel, self.shape).astype(int)
        if (hi - lo < 2).any():
            return
        box = tuple(slice(a, b) for a, b in zip(lo, hi, strict=True))
        grid = np.meshgrid(*(np.arange(a, b) * v for a, b, v in zip(lo, hi, self.voxel, strict=True)), indexing="ij")
        away = np.sqrt(sum((g - o) ** 2 for g, o in zip(grid, at, strict=True)))
        inside = 1 / (1 + np.exp((away - radius) / 12))
        rim = np.exp(-(((away - radius) / 20) ** 2)) * (k % 2)
        signal[box] = signal[box] * (1 - 0.8 * inside) + 400 * rim
        auto[box] = auto[box] * (1 - 0.8 * inside) + 150 * rim


def at_points(volume: Volume, points_um: np.ndarray) -> np.ndarray:
    """Linear interpolation of a small volume."""
    return np.asarray(map_coordinates(volume.array().astype(float), volume.index(points_um).T, order=1))
