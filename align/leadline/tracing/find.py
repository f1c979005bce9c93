"""Every dye track of a stack, without a hand: ridges, lines, centre lines, ends, and what speaks for each."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import BoolArray, FloatArray
from leadline.base.progress import SILENT, Progress, tracked
from leadline.model.frames import axes_matrix
from leadline.model.settings import TraceSettings
from leadline.model.track import Trace
from leadline.model.volume import Volume, Voxels
from leadline.tracing import centre, ends, path
from leadline.tracing.autofluorescence import Foretold, excess, excess_at, foretell
from leadline.tracing.grid import check_frame, slabs
from leadline.tracing.lazy import averaged, block_mean, remembering
from leadline.tracing.ridge import Ridges, find_ridges
from leadline.tracing.tissue import MASK_UM, Deeper, Tissue, depth_on, find_tissue

if TYPE_CHECKING:
    from collections.abc import Iterator

DETECT_UM = 27.0
THIN = 2
SEED = 20
SKIN_UM = 120.0
MIN_GAIN = 0.15
THRESHOLD = 0.28
MAX_POINTS = 40_000
MIN_SCORE = 6.0
MAX_TRIES = 150
EXTEND_UM = 500.0
SAME_UM = 45.0
LOOKS = 4
HOPELESS = 0.75
LENGTHS_UM = (1000.0, 1500.0, 2000.0, 3000.0, 4500.0)
WANDER_UM = (2.0, 4.5, 6.2, 7.5, 9.0)
BEND_DEG = (5.0, 8.0, 12.0, 14.0, 16.0)
DEEP_TOP_UM = 600.0
WINDS = "winds more than a shank can"
BESIDE_UM, BESIDE_SPREAD_UM = (80.0, 450.0), 80.0
BOTH_NEAR_UM = 250.0


@dataclass(frozen=True, slots=True, eq=False)
class Scene:
    """What every candidate is judged in."""

    dye: Volume
    background: Volume
    tissue: Tissue
    foretold: Foretold
    settings: TraceSettings

    @property
    def voxel_um(self) -> float:
        """Typical voxel size of what is sampled."""
        return float(np.cbrt(self.dye.voxel_um.prod()))

    def excess(self, points_um: FloatArray) -> FloatArray:
        """Dye in noise sd at points; NaN outside the volume."""
        return excess_at(self.dye, self.background, self.foretold, points_um)


@dataclass(frozen=True, slots=True, eq=False)
class Candidate:
    """A curve with what was measured along it; ``fault`` is empty for a track."""

    curve_um: FloatArray
    sigma_um: float
    run: tuple[int, int]
    profile: ends.DyeProfile
    measures: dict[str, float]
    fault: str = ""


def trace(
    dye: Volume, background: Volume, *, settings: TraceSettings | None = None, progress: Progress = SILENT
) -> tuple[Trace, ...]:
    """Find every dye track: smooth curves from the brain surface to the end of the dye, in stack um.

    Parameters
    ----------
    dye, background : two channels of one stack, any voxel size, any orientation; may be on disk, then memory does not
        grow with them.
    settings : ``sensitivity`` scales what counts as faint, ``min_length_um`` what counts as short.
    progress : told of each step.

    Returns
    -------
    Traces, the clearest first.

    Raises
    ------
    LeadlineError
        When the channels do not lie on the same voxels or the background is empty.
    """
    settings = settings or TraceSettings()
    check_frame(dye, background)
    dye, background = remembering(dye), remembering(background)
    coarse_dye, coarse_background = averaged(dye, DETECT_UM), averaged(background, DETECT_UM)
    some_dye, some_background, small = _survey(dye, background, coarse_dye, coarse_background, progress)
    tissue = find_tissue(small)
    foretold = foretell(some_dye, some_background, depth_on(tissue, some_dye) > 0)
    del some_dye, some_background
    image = excess(coarse_dye, coarse_background, foretold)
    ridges = _ridges(image, Deeper(tissue, image, SKIN_UM), settings.sensitivity, progress)
    scene = Scene(dye, background, tissue, foretold, settings)
    progress.begin("following tracks", MAX_TRIES)
    taken = _candidates(scene, ridges, progress)
    taken = _second_look(scene, taken, progress)
    found = [_finish(scene, item) for item in taken]
    return tuple(sorted(found, key=lambda t: -t.contrast * t.length_um))


def _survey(
    dye: Volume, background: Volume, coarse_dye: Volume, coarse_background: Volume, progress: Progress
) -> tuple[Volume, Volume, Volume]:
    """A sample of the voxels of both channels, every second along each axis, and the background small and whole."""
    small = averaged(coarse_background, MASK_UM)
    step = np.round(small.voxel_um / coarse_background.voxel_um).astype(int)
    thin = np.array([THIN if n > 2 * THIN else 1 for n in coarse_dye.shape])
    whole = np.empty(small.shape, np.float32)
    some = [np.empty([-(-n // t) for n, t in zip(coarse_dye.shape, thin, strict=True)], np.float32) for _ in range(2)]
    cut = slabs(dye, coarse_dye, multiple=int(np.lcm(step[0], thin[0])))
    for rows in tracked(cut, progress, "looking through the stack", len(cut)):
        for sample, coarse in zip(some, (coarse_dye, coarse_background), strict=True):
            slab = coarse.data[rows]
            part = slab[:: thin[0], :: thin[1], :: thin[2]]
            sample[rows.start // thin[0] :][: len(part)] = part
        fits = [int(n // s * s) for n, s in zip(slab.shape, step, strict=True)]
        part = block_mean(slab[: fits[0], : fits[1], : fits[2]], step)
        whole[rows.start // step[0] :][: len(part)] = part
    frame = coarse_dye.voxel_um * thin, coarse_dye.code, coarse_dye.origin_um
    return Volume(some[0], *frame), Volume(some[1], *frame), replace(small, data=whole)


def _ridges(image: Volume, inside: Voxels, sensitivity: float, progress: Progress) -> Ridges:
    voxel = float(image.voxel_um.max())
    scales = (max(30.0, voxel), max(50.0, 1.5 * voxel))
    ridges = find_ridges(image, inside, scales, THRESHOLD / sensitivity, progress)
    if len(ridges) > MAX_POINTS:
        ridges = ridges.take(np.sort(np.argsort(-ridges.strength, kind="stable")[:MAX_POINTS]))
    return ridges


def _candidates(scene: Scene, ridges: Ridges, progress: Progress) -> list[Candidate]:
    """Take the best line, look closely, keep or drop it, take its points away, and so on until lines are poor."""
    kept: list[Candidate] = []
    doubtful: list[Candidate] = []
    if len(ridges) < 10:
        return kept
    alive = np.ones(len(ridges), bool)
    lines = path.draw_lines(ridges, np.random.default_rng(SEED))
    for row, run in _best_first(lines, ridges, alive):
        progress.step()
        rough = path.bend(lines.origin_um[row], lines.way[row], run, ridges, alive)
        item = examine(scene, rough)
        if not item.fault and not any(_same(item, other) for other in kept):
            kept.append(item)
        elif item.fault == WINDS:
            doubtful.append(item)
        spent = path.near_curve(ridges.points_um, ridges.axes, item.curve_um, max(50.0, scene.voxel_um * 1.5), 0.95)
        spent |= path.near_curve(ridges.points_um, ridges.axes, rough, 60.0, 0.95) if item.fault else False
        alive &= ~spent
        if not spent.any():
            break
    # a winding curve that runs beside a track, like the next shank of its probe, is one
    for item in doubtful:
        if any(_beside(item, other) for other in kept) and not any(_same(item, other) for other in kept):
            kept.append(replace(item, fault=""))
    return kept


def _best_first(lines: path.Lines, ridges: Ridges, alive: BoolArray) -> Iterator[tuple[int, FloatArray]]:
    """Lines by their present score. Scores only fall as points are taken away, so the old ones are upper bounds."""
    run = lines.run.copy()
    fresh = np.ones(len(run), bool)
    for _ in range(MAX_TRIES):
        while True:
            best = int(np.argmax(run[:, 0])) if len(run) else -1
            if best < 0 or run[best, 0] < MIN_SCORE:
                return
            if fresh[best]:
                break
            stale = np.flatnonzero(~fresh & (run[:, 0] >= MIN_SCORE))
            stale = stale[np.argsort(-run[stale, 0])[:64]]
            run[stale] = path.score(lines.origin_um[stale], lines.way[stale], ridges, alive)
            fresh[stale] = True
        yield best, run[best].copy()
        fresh[:] = False


def examine(scene: Scene, rough_um: FloatArray, others: tuple[Candidate, ...] = ()) -> Candidate:
    """Refine a rough curve in sub-voxel centring, find its run of dye, and judge it."""
    curve, sigma = centre.even(rough_um), 30.0
    pixel = max(14.0, 0.6 * scene.voxel_um)
    n = len(curve)
    run = (0, n - 1)
    for look in range(LOOKS):
        curve = path.resampled(curve[run[0] : run[1] + 1], centre.STATION_UM, before_um=EXTEND_UM, after_um=EXTEND_UM)
        stations = centre.look(curve, partial(_excess_without, scene, others), pixel)
        centres = centre.fit_gaussians(stations, voxel_um=scene.voxel_um, sigma_um=sigma)
        profile = ends.dye_profile(stations, sigma)
        off = np.linalg.norm(centres.offset_um, axis=1)
        run = ends.dye_run(profile, (off > max(35.0, scene.voxel_um)) if look else np.zeros(len(curve), bool))
        depth = scene.tissue.depth_at(curve)
        counts = np.zeros(len(curve), bool)
        counts[run[0] : run[1] + 1] = True
        counts &= (depth > SKIN_UM) & (profile.amount > profile.noise)
        if counts.sum() < 8:
            return Candidate(rough_um, sigma, run, profile, {}, "no dye along it")
        good = counts & (centres.error_um < 20)
        if good.sum() > 5:
            sigma = float(np.clip(np.median(centres.sigma_um[good]), 12.0, 80.0))
        curve, _ = centre.join(stations, centres, counts)
        if look and (run[1] - run[0]) * centre.STATION_UM < HOPELESS * scene.settings.min_length_um:
            break
    measures = _measures(scene, curve, run, profile) | {"wander": centre.wander(stations, centres, counts)}
    item = Candidate(curve, sigma, run, profile, measures)
    return _judged(scene, item)


def _excess_without(scene: Scene, others: tuple[Candidate, ...], points_um: FloatArray) -> FloatArray:
    """Dye at points, less what the other tracks put there."""
    from scipy.spatial import cKDTree

    value = scene.excess(points_um)
    for other in others:
        curve = other.curve_um[other.run[0] : other.run[1] + 1]
        amount = other.profile.amount[other.run[0] : other.run[1] + 1]
        gap, at = cKDTree(curve).query(points_um, distance_upper_bound=4 * other.sigma_um)
        near = np.isfinite(gap)
        value[near] -= amount[at[near]].clip(0) * np.exp(-(gap[near] ** 2) / (2 * other.sigma_um**2))
    return value


def _measures(scene: Scene, curve: FloatArray, run: tuple[int, int], profile: ends.DyeProfile) -> dict[str, float]:
    """What is judged: length and depths in um, dye, and the turning of the curve against its chord."""
    inside = slice(run[0], run[1] + 1)
    depth = scene.tissue.depth_at(curve[inside])
    clear = profile.clearness[inside]
    length = (run[1] - run[0]) * centre.STATION_UM
    turn = np.diff(curve[inside], axis=0)
    turn /= np.linalg.norm(turn, axis=1)[:, None]
    chord = (curve[run[1]] - curve[run[0]]) / max(np.linalg.norm(curve[run[1]] - curve[run[0]]), 1e-9)
    top = float(min(depth[0], depth[-1]))
    return {
        "length": length,
        "top": top,
        "gain": float((depth.max() - top) / max(length, 1.0)),
        "contrast": float(np.median(clear)),
        "coverage": float((clear > 2).mean()),
        "bend_deg": float(np.degrees(np.arccos(np.clip(np.quantile(turn @ chord, 0.05), -1, 1)))),
    }


def _judged(scene: Scene, item: Candidate) -> Candidate:
    m = item.measures
    faint = 2.5 / scene.settings.sensitivity
    # silicon is stiff, vessels are not; the shorter a candidate, the less a bend of the tissue may excuse it
    winding = m["wander"] / float(np.interp(m["length"], LENGTHS_UM, WANDER_UM))
    # a smooth bow, as tissue that was bent makes, may be larger than a bend in a curve that winds as well
    bend_deg = float(np.interp(m["length"], LENGTHS_UM, BEND_DEG)) * (1.0 + max(0.0, 1.0 - 2.0 * winding))
    checks = (
        (m["length"] < scene.settings.min_length_um, "shorter than a track"),
        (m["coverage"] < 0.5, "dye on less than half of it"),
        (m["top"] > DEEP_TOP_UM, "does not come near the brain surface"),
        (winding + 0.5 * m["top"] / DEEP_TOP_UM > 1.0, WINDS),
        (m["gain"] < MIN_GAIN, "runs along the surface"),
        (m["contrast"] < faint, "fainter than noise allows"),
        (m["bend_deg"] > bend_deg, "bends more than a shank can"),
    )
    fault = next((text for wrong, text in checks if wrong), "")
    return Candidate(item.curve_um, item.sigma_um, item.run, item.profile, m, fault)


def _beside(a: Candidate, b: Candidate) -> bool:
    """Whether two candidates run side by side at the distance of two shanks, all along."""
    from scipy.spatial import cKDTree

    one, two = (c.curve_um[c.run[0] : c.run[1] + 1] for c in (a, b))
    low, high = np.quantile(cKDTree(two).query(one)[0], [0.1, 0.9])
    alike = 0.6 < len(one) / len(two) < 1.6
    return bool(alike and low > BESIDE_UM[0] and high < BESIDE_UM[1] and high - low < BESIDE_SPREAD_UM)


def _same(a: Candidate, b: Candidate) -> bool:
    """Whether two candidates are one track: most of the shorter lies on the other."""
    from scipy.spatial import cKDTree

    one, two = (c.curve_um[c.run[0] : c.run[1] + 1] for c in (a, b))
    if len(one) > len(two):
        one, two = two, one
    gap, _ = cKDTree(two).query(one)
    return float((gap < SAME_UM).mean()) > 0.5


def _second_look(scene: Scene, kept: list[Candidate], progress: Progress) -> list[Candidate]:
    """Look at tracks with near neighbours again, the neighbours' dye taken away."""
    from scipy.spatial import cKDTree

    out = []
    for i, item in enumerate(kept):
        progress.step(0.0)
        tree = cKDTree(item.curve_um)
        others = tuple(other for k, other in enumerate(kept) if k != i and tree.query(other.curve_um)[0].min() < 330.0)
        again = examine(scene, item.curve_um[item.run[0] : item.run[1] + 1], others) if others else item
        out.append(item if again.fault else again)
    return out


def _upside_down(scene: Scene, first_um: FloatArray, last_um: FloatArray) -> bool:
    """Whether the entry is at the last point: the one nearer to the surface, or the upper one where both are near."""
    depth = scene.tissue.depth_at(np.stack([first_um, last_um]))
    if depth.max() < BOTH_NEAR_UM:
        return bool((axes_matrix(scene.dye.code) @ (last_um - first_um))[1] < 0)
    return bool(depth[0] > depth[1])


def _finish(scene: Scene, item: Candidate) -> Trace:
    """Cut a candidate to its ends and state their doubt."""
    curve, profile = item.curve_um, item.profile
    first, last = item.run
    if _upside_down(scene, curve[first], curve[last]):
        curve = curve[::-1]
        profile = profile.reversed()
        first, last = len(curve) - 1 - last, len(curve) - 1 - first
    step = centre.STATION_UM
    end, end_sd = ends.dye_end(profile, (first, last), step, item.sigma_um)
    long = path.resampled(curve[first : int(np.ceil(end)) + 1], step, before_um=1200.0)
    shift = len(long) - len(curve[first : int(np.ceil(end)) + 1]) - first
    outside = np.flatnonzero(scene.tissue.depth_at(long[: len(long) // 2]) <= 0)
    surface = int(outside[-1]) if len(outside) else first + shift
    level = scene.tissue.level
    enter = ends.entry(long, step, surface, scene.background, level)
    if enter is None:
        enter = ends.Entry(surface * step, 150.0)
    s = np.arange(len(long)) * step
    stop = min((end + shift) * step, s[-1])
    at = np.append(np.arange(enter.at_um, stop - step / 2, step), stop)
    points = np.column_stack([np.interp(at, s, long[:, k]) for k in range(3)])
    m = item.measures
    return Trace(points, np.full(len(points), item.sigma_um), enter.sd_um, end_sd, m["contrast"], m["coverage"])
