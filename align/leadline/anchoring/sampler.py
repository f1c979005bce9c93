"""Draws of depth maps from the tempered posterior: sequential Monte Carlo with slice moves."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from leadline.anchoring.features import GROUPS
from leadline.anchoring.noise import MODELS
from leadline.base.arrays import FloatArray, IntArray
from leadline.base.progress import SILENT, Progress

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from leadline.anchoring.depth_prior import DepthPrior
    from leadline.anchoring.pack import Packed

# Few particles that walk far find better modes, and hold them steadier between seeds, than many that walk little.
# Where several shanks speak, a look at them costs more, and fewer walk.
WALKERS, WALKERS_OF_SEVERAL = 120, 64
MOVES, LAST_MOVES = 8, 12
# of the walkers: how many scouts go before them, and how many walk, less far, while modes are still to be told apart
SCOUTS, EARLY = 26, 4
KEEP_ESS = 0.4
MAX_SHRINK = 24
MAX_LEVELS = 60
SHRINK = 0.7


@dataclass
class Ensemble:
    """Particles in motion: ``z`` (N, J), log likelihood of each group of features (N, G), noise models ``c`` (N, G),
    log weights (N,)."""

    z: FloatArray
    by_group: FloatArray
    c: IntArray
    log_weight: FloatArray

    @property
    def log_likelihood(self) -> FloatArray:
        """Log likelihood (N,)."""
        return np.asarray(self.by_group.sum(axis=1), np.float64)

    @classmethod
    def of(cls, parts: Sequence[Ensemble]) -> Ensemble:
        """All particles of several ensembles."""
        return cls(
            np.concatenate([p.z for p in parts]),
            np.concatenate([p.by_group for p in parts]),
            np.concatenate([p.c for p in parts]),
            np.concatenate([p.log_weight for p in parts]),
        )

    def take(self, rows: IntArray) -> Ensemble:
        """Copies of the particles ``rows``."""
        return Ensemble(
            self.z[rows].copy(),
            self.by_group[rows].copy(),
            self.c[rows].copy(),
            np.zeros(len(rows)),
        )


@dataclass(frozen=True, slots=True, eq=False)
class Drawn:
    """The outcome: draws ``z`` (N, J), log evidence of the tempered model, and how the run
    went: tempering ``levels``, ``evaluations`` of the likelihood, ``effective`` number of independent draws, the
    ``share`` of the power at which they were drawn."""

    z: FloatArray
    log_evidence: float
    levels: int
    evaluations: int
    effective: float
    share: float


class Crew:
    """Runs a kernel over the particles on all cores; what each particle gets does not depend on how many there are."""

    def __init__(self) -> None:
        self.size = max(1, min(os.cpu_count() or 1, int(os.environ.get("NUMBA_NUM_THREADS", "64")), 8))
        self.pool = ThreadPoolExecutor(self.size) if self.size > 1 else None

    def __enter__(self) -> Crew:
        return self

    def __exit__(self, *_: object) -> None:
        if self.pool is not None:
            self.pool.shutdown()

    def run(self, kernel: Any, head: tuple[Any, ...], arrays: tuple[Any, ...]) -> None:
        """Call ``kernel(*head, *parts of arrays)`` on parts of the particles."""
        n = len(arrays[0])
        if self.pool is None:
            kernel(*head, *arrays)
            return
        cuts = np.linspace(0, n, self.size + 1).astype(int)
        jobs = [self.pool.submit(kernel, *head, *(a[lo:hi] for a in arrays)) for lo, hi in pairwise(cuts.tolist())]
        for job in jobs:
            job.result()


class Target(NamedTuple):
    """What particles walk on: the likelihood's power, and centre and root of the Gaussian that guides them."""

    crew: Crew
    packed: Packed
    power: float
    shape: tuple[FloatArray, FloatArray]


def sample(
    packed: Packed,
    prior: DepthPrior,
    rng: np.random.Generator,
    power: float,
    progress: Progress = SILENT,
    settle: Callable[[float], float] = lambda _: 1.0,
) -> Drawn:
    """Draw depth maps from prior x likelihood^``power``: the particles as they stood after each of the last moves.

    ``settle`` : from the log evidence at full power to the share of it at which the draws are wanted. Adaptive
    tempering (Del Moral, Doucet & Jasra 2006, J. R. Stat. Soc. B 68, 411) from many prior draws; at each level few
    particles are resampled and walk far, by elliptical slices under the Gaussian fitted to the level below, and all
    places on their way are particles of the level (waste-free, Dau & Chopin 2022, J. R. Stat. Soc. B 84, 114).
    """
    with Crew() as crew:
        return _tempered(crew, packed, prior, rng, power, progress, settle)


def _tempered(
    crew: Crew,
    packed: Packed,
    prior: DepthPrior,
    rng: np.random.Generator,
    power: float,
    progress: Progress,
    settle: Callable[[float], float],
) -> Drawn:
    few = WALKERS if packed.speaking == 1 else WALKERS_OF_SEVERAL
    particles = _scouts(prior, rng, SCOUTS * few)
    _evaluate(crew, packed, particles)
    beta, log_z, spent = 0.0, 0.0, len(particles.z)
    levels = [(beta, particles)]
    progress.begin("depth posterior", 1.0)
    while beta < 1.0 and len(levels) <= MAX_LEVELS:
        step = _next_step(particles, power, 1.0 - beta, KEEP_ESS * few * MOVES)
        more_of_them = max(1, EARLY >> (len(levels) - 1))
        walk = (few * more_of_them, MOVES // more_of_them)
        particles, gained, more = _raised(crew, packed, prior, particles, power, beta, step, rng, walk)
        beta, log_z, spent = beta + step, log_z + gained, spent + more
        levels.append((beta, particles))
        progress.step(step)
    share = settle(log_z)
    if share < beta:  # back to the last level below, and up to the share from there
        start, particles = [level for level in levels if level[0] <= share][-1]
        particles, _, more = _raised(crew, packed, prior, particles, power, start, share - start, rng, (few, MOVES))
        spent += more
    shape = fit(particles.z, np.ones(len(particles.z)))
    last = particles.take(np.arange(len(particles.z))[-few:])
    draws, more = _walked(Target(crew, packed, power * share, shape), last, rng, LAST_MOVES)
    effective = _effective(draws.z.reshape(LAST_MOVES, few, -1) @ prior.basis.T)
    return Drawn(draws.z, log_z, len(levels) - 1, spent + more, effective, share)


def _raised(
    crew: Crew,
    packed: Packed,
    prior: DepthPrior,
    particles: Ensemble,
    power: float,
    beta: float,
    step: float,
    rng: np.random.Generator,
    walk: tuple[int, int],
) -> tuple[Ensemble, float, int]:
    """New particles at ``beta + step``, the log evidence gained, and evaluations spent; ``walk`` : walkers, moves."""
    log_weight = particles.log_weight + step * power * particles.log_likelihood
    gained = float(np.logaddexp.reduce(log_weight) - np.logaddexp.reduce(particles.log_weight))
    weight = np.exp(log_weight - log_weight.max())
    raised = particles.take(_resample(weight, particles.z @ prior.offset_basis, walk[0], rng))
    shape = fit(particles.z, weight)
    along, spent = _walked(Target(crew, packed, power * (beta + step), shape), raised, rng, walk[1])
    return along, gained, spent


def _walked(target: Target, particles: Ensemble, rng: np.random.Generator, moves: int) -> tuple[Ensemble, int]:
    """The particles as they stood after each of some moves, all together (moves x N), and evaluations spent."""
    spent, along = 0, []
    for _ in range(moves):
        spent += move_all(target, particles, rng)
        along.append(particles.take(np.arange(len(particles.z))))
    return Ensemble.of(along), spent


def _effective(depth: FloatArray) -> float:
    """Independent draws among the label depths (moves, N, nodes) of N paths: N, times the variance of all draws over
    that of the means of the paths (Gelman & Rubin 1992, Stat. Sci. 7, 457)."""
    moves, n = depth.shape[:2]
    within = ((depth - depth.mean(axis=(0, 1))) ** 2).mean(axis=(0, 1)).sum()
    between = depth.mean(axis=0).var(axis=0).sum()
    return float(n * np.clip(within / max(between, 1e-12), 1.0, moves))


def move_all(target: Target, particles: Ensemble, rng: np.random.Generator) -> int:
    """One slice move and one switch of noise model for every particle; returns evaluations."""
    from leadline.anchoring._kernels import slice_move

    n, dims = particles.z.shape
    centre, root = target.shape
    a = np.linalg.solve(root, (particles.z - centre).T).T.copy()
    group = rng.integers(0, len(GROUPS), n)
    model = (particles.c[np.arange(n), group] + rng.integers(1, len(MODELS["lfp"]), n)) % len(MODELS["lfp"])
    count = np.zeros(n, np.int64)
    state = (particles.z, particles.by_group, particles.c, a)
    slices = (rng.standard_normal((n, dims)), np.log(rng.random(n)), rng.random((n, MAX_SHRINK)))
    switches = (group, model, np.log(rng.random(n)))
    target.crew.run(slice_move, (target.packed.pack, target.power, centre, root), (*state, *slices, *switches, count))
    return int(count.sum())


def fit(z: FloatArray, weight: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Centre and lower Cholesky root of a Gaussian fitted to weighted particles, shrunk towards its diagonal and
    widened."""
    dims = z.shape[1]
    n = weight.sum() ** 2 / (weight**2).sum()
    covariance = np.cov(z.T, aweights=weight).reshape(dims, dims)
    share = min(0.6, SHRINK * dims / n)
    covariance = (1 - share) * covariance + share * np.diag(np.diag(covariance))
    centre = np.average(z, axis=0, weights=weight)
    return centre, np.linalg.cholesky(1.15 * covariance + 1e-3 * np.eye(dims))


def _scouts(prior: DepthPrior, rng: np.random.Generator, n: int) -> Ensemble:
    """Paths whose tip offsets are spread as far as stray ones, in antithetic pairs, weighted to the prior: where the
    dye ends far from the tip, enough of them are near the truth."""
    half = rng.standard_normal((n // 2, prior.dims))
    z = np.concatenate([half, -half])
    log_weight = prior.log_ratio(prior.offset_mean_um + z @ prior.offset_basis)
    return Ensemble(z, np.empty((n, len(GROUPS))), rng.integers(0, len(MODELS["lfp"]), (n, len(GROUPS))), log_weight)


def _evaluate(crew: Crew, packed: Packed, p: Ensemble) -> None:
    from leadline.anchoring._kernels import evaluate

    arrays = (p.z, p.c, p.by_group)
    crew.run(evaluate, (packed.pack,), arrays)


def _next_step(particles: Ensemble, power: float, left: float, keep: float) -> float:
    """Largest step of the inverse temperature that keeps an effective sample size of ``keep`` (by bisection)."""
    slope = power * particles.log_likelihood

    def ess(step: float) -> float:
        log_weight = particles.log_weight + step * slope
        w = np.exp(log_weight - log_weight.max())
        return float(w.sum() ** 2 / (w**2).sum())

    if ess(left) >= keep:
        return left
    low, high = 0.0, left
    for _ in range(40):
        middle = (low + high) / 2
        low, high = (middle, high) if ess(middle) >= keep else (low, middle)
    return max(low, 1e-6)


def _resample(weight: FloatArray, order_by: FloatArray, n: int, rng: np.random.Generator) -> IntArray:
    """Systematic resampling along an order, which keeps neighbours' shares nearly exact (Gerber et al. 2019)."""
    order = np.argsort(order_by, kind="stable")
    edges = np.cumsum(weight[order])
    points = (np.arange(n) + rng.random()) / n * edges[-1]
    return np.asarray(order[np.minimum(np.searchsorted(edges, points), len(order) - 1)], np.int64)
