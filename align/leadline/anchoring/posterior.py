"""The whole posterior over depth maps of every shank of a brain."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.anchoring.depth_prior import DepthPrior, build
from leadline.anchoring.doubts import doubts
from leadline.anchoring.pack import Packed, assemble
from leadline.anchoring.sampler import Drawn, sample
from leadline.base.arrays import FloatArray, IntArray
from leadline.base.progress import SILENT, Progress
from leadline.model.anchor import in_order
from leadline.model.posterior import DepthPosterior

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.anchoring.evidence import ShankEvidence
    from leadline.anchoring.knowledge import Knowledge
    from leadline.model.atlas import Structures

# power of the likelihood: features and rows are less independent than the model says, and so are the shanks of a
# probe (of four, ALIKE makes two). Chosen for calibration on invented tracks and brains, kind and rough, of other seeds
# than the study's; 0.3 to 0.4 do nearly as well
POWER, ALIKE = 0.4, 0.5
# nats of tempered evidence for each row and feature from which on a recording is believed with all of its power, and
# the least share of it: learned on the same invented brains, kind and rough
TRUSTED_NATS, LEAST_TRUST = 0.11, 0.1
# how much tempered evidence makes labels as likely as not, and how fast it convinces: learned on invented tracks,
# because the evidence of a tempered model is no calibrated Bayes factor
EVEN_AT, CONVINCES = 5.5, 0.9
# a median strays 1.25 times as far as a mean, two runs sqrt(2) times as far as one
SHIFT_OF_MEDIAN = 1.25 * 2**0.5
ON_TRACK = -1
TOLD = 0.75
MIN_STEP_UM = 1e-3


@dataclass(frozen=True, slots=True, eq=False)
class Draws:
    """Coordinates ``z`` (S, J) of depth maps, and for each a lateral ``copy`` (S,) of the track, or -1 for itself."""

    z: FloatArray
    copy: IntArray


def infer(
    shanks: Sequence[ShankEvidence],
    structures: Structures,
    knowledge: Knowledge,
    *,
    draws: int = 400,
    seed: int = 1,
    physiology: bool = True,
    progress: Progress = SILENT,
) -> tuple[DepthPosterior, ...]:
    """Posterior over the depth maps of all shanks of one brain, in the order given.

    Shanks of one penetration share offset, scale and most of the local stretch. With ``physiology`` False, or no
    profile that can speak, draws are of the prior conditioned on anchors. The same seed gives the same bytes, and
    each penetration its own stream, so that an edit in one leaves the others alone.

    Raises LeadlineError when two anchors of one shank cross, naming both.
    """
    found: dict[int, DepthPosterior] = {}
    for name in dict.fromkeys(s.penetration for s in shanks):
        rows = [i for i, s in enumerate(shanks) if s.penetration == name]
        probe = [shanks[i] for i in rows]
        for shank in probe:
            in_order(shank.anchors)
        rng = np.random.default_rng([seed, *name.encode()])
        each = _infer_probe(probe, structures, knowledge, draws, rng, physiology, progress)
        found.update(zip(rows, each, strict=True))
    return tuple(found[i] for i in range(len(shanks)))


def _infer_probe(
    shanks: Sequence[ShankEvidence],
    structures: Structures,
    knowledge: Knowledge,
    draws: int,
    rng: np.random.Generator,
    physiology: bool,
    progress: Progress,
) -> list[DepthPosterior]:
    prior = build(shanks, knowledge.depth)
    before = Draws(prior.draw(rng, draws), rng.integers(0, 2**31, draws))
    packed = assemble(shanks, prior, structures, knowledge) if physiology else None
    if packed is None or not packed.informative:
        return [_result(s, prior, i, before, rng) for i, s in enumerate(shanks)]
    power = POWER * packed.speaking**-ALIKE
    silent = power * packed.log_silent
    drawn = sample(
        packed, prior, rng, power, progress, lambda log_evidence: trust(packed, log_evidence - silent, power)
    )
    log_bayes = drawn.log_evidence - silent
    informed = chance_informed(log_bayes)
    kept = round(informed * draws)
    # where the recording speaks, it tells most of the border displacement itself; the rest stays with some draws
    told = (np.arange(draws) < kept) & (rng.random(draws) < TOLD)
    copy = np.where(told, ON_TRACK, before.copy)
    after = Draws(np.concatenate([_thinned(drawn, prior, kept, rng), before.z[kept:]]), copy)
    out = []
    for i, shank in enumerate(shanks):
        plain = _result(shank, prior, i, before, rng)
        found = _result(shank, prior, i, after, rng)
        shift = SHIFT_OF_MEDIAN * float(found.sd_um.mean()) / np.sqrt(drawn.effective)
        notes = doubts(shank, plain.depth_um, found.depth_um, informed, shift)
        out.append(
            replace(
                found,
                informed=informed if shank.profile is not None else 0.0,
                warnings=notes if shank.profile is not None else (),
                diagnostics={
                    "log_bayes_factor": log_bayes,
                    "trust": drawn.share,
                    "effective_draws": drawn.effective,
                    "expected_shift_um": shift,
                    "levels": float(drawn.levels),
                    "evaluations": float(drawn.evaluations),
                },
            )
        )
    return out


def _thinned(drawn: Drawn, prior: DepthPrior, n: int, rng: np.random.Generator) -> FloatArray:
    """``n`` of the draws, evenly along the leading direction, moved so that their mean is that of all draws."""
    if not n:
        return drawn.z[:0]
    spread = drawn.z - drawn.z.mean(axis=0)
    label = spread @ prior.basis.T
    order = np.argsort(label.mean(axis=1), kind="stable")
    rows = order[np.minimum(((np.arange(n) + rng.random()) / n * len(order)).astype(int), len(order) - 1)]
    return np.asarray(drawn.z[rows] + (drawn.z.mean(axis=0) - drawn.z[rows].mean(axis=0)), np.float64)


def trust(packed: Packed, log_bayes: float, power: float) -> float:
    """Share of ``power`` with which the recording is believed, from how well it follows the labels at all.

    A recording of homogeneous structures with all their landmarks gains 0.1 nats a row and feature, and more; one with
    gradients inside structures and landmarks missing gains less, and what the model then gets wrong is many rows long,
    so that rows are no independent witnesses. The power of a generalised posterior is a matter of how far the model is
    off (Bissiri, Holmes & Walker 2016, J. R. Stat. Soc. B 78, 1103; Gruenwald & van Ommen 2017, Bayesian Anal. 12,
    1069).
    """
    return float(np.clip(log_bayes / (power * packed.size) / TRUSTED_NATS, LEAST_TRUST, 1.0))


def chance_informed(log_bayes: float) -> float:
    """Probability that the recording speaks of these labels at all, against smooth features that know no labels."""
    return float(1 / (1 + np.exp(-np.clip(CONVINCES * (log_bayes - EVEN_AT), -50, 50))))


def _result(
    shank: ShankEvidence, prior: DepthPrior, position: int, draws: Draws, rng: np.random.Generator
) -> DepthPosterior:
    """Physical depth and label of every row of one shank, draw by draw."""
    rows, at = prior.slice(position), prior.weights(position, shank.tip_distance_um).T
    left_open = _balanced_noise(rng, len(draws.z), prior.mean_um.size) @ prior.physical_rest[rows].T
    physical = prior.physical_mean_um[rows] + draws.z @ prior.physical_basis[rows].T + left_open
    label = prior.mean_um[rows] + draws.z @ prior.basis[rows].T
    copies = np.where(draws.copy == ON_TRACK, ON_TRACK, draws.copy % len(shank.lateral_label_id))[:, None]
    return DepthPosterior(
        shank.penetration,
        shank.shank,
        shank.tip_distance_um,
        falling(physical @ at),
        label_id=shank.label_at(falling(label @ at), copies),
    )


def _balanced_noise(rng: np.random.Generator, draws: int, nodes: int) -> FloatArray:
    """Standard normal noise, opposite in every other draw: neighbouring draws are mirrored or lie side by side, so
    what z leaves open widens the draws and hardly moves their centre."""
    half = rng.standard_normal(((draws + 1) // 2, nodes))
    return np.asarray(np.stack([half, -half], axis=1).reshape(-1, nodes)[:draws], np.float64)


def falling(depth_um: FloatArray) -> FloatArray:
    """The same draws made strictly decreasing along a row by rearrangement.

    References: Chernozhukov, Fernandez-Val & Galichon 2009, Biometrika 96, 559 (never further from the truth).
    """
    ordered = -np.sort(-depth_um, axis=1)
    return np.asarray(ordered - MIN_STEP_UM * np.arange(ordered.shape[1]), np.float64)
