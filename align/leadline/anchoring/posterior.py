"""The whole posterior over depth maps of every shank of a brain."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.anchoring.depth_prior import DepthPrior, build
from leadline.anchoring.pack import Packed, assemble
from leadline.anchoring.preview import preview
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

__all__ = ["infer", "preview"]

POWER = 0.35
# how much tempered evidence makes labels as likely as not, and how fast it convinces: learned on invented tracks,
# because the evidence of a tempered model is no calibrated Bayes factor
EVEN_AT, CONVINCES = 4.0, 0.7
MIN_STEP_UM = 1e-3


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
    z, copy = prior.draw(rng, draws), rng.integers(0, 2**31, draws)
    if not physiology:
        return _results(shanks, prior, z, copy, rng, 0.0, {})
    packed = assemble(shanks, prior, structures, knowledge)
    if not packed.informative:
        return _results(shanks, prior, z, copy, rng, 0.0, {})
    drawn = sample(packed, prior, rng, POWER, progress)
    informed = chance_informed(packed, drawn)
    kept = round(informed * draws)
    if kept:
        best_z, best_copy = _thinned(drawn, prior, kept, rng)
        z, copy = np.concatenate([best_z, z[kept:]]), np.concatenate([best_copy, copy[kept:]])
    return _results(shanks, prior, z, copy, rng, informed, _diagnostics(drawn, packed))


def _thinned(drawn: Drawn, prior: DepthPrior, n: int, rng: np.random.Generator) -> tuple[FloatArray, IntArray]:
    """``n`` of the draws, evenly along the leading direction, moved so that their mean is that of all draws."""
    spread = drawn.z - drawn.z.mean(axis=0)
    label = spread @ prior.basis.T
    order = np.argsort(label.mean(axis=1), kind="stable")
    rows = order[np.minimum(((np.arange(n) + rng.random()) / n * len(order)).astype(int), len(order) - 1)]
    return drawn.z[rows] + (drawn.z.mean(axis=0) - drawn.z[rows].mean(axis=0)), drawn.copy[rows]


def chance_informed(packed: Packed, drawn: Drawn) -> float:
    """Probability that the recording speaks of these labels at all, against smooth features that know no labels."""
    log_bayes = drawn.log_evidence - POWER * packed.log_silent
    return float(1 / (1 + np.exp(-np.clip(CONVINCES * (log_bayes - EVEN_AT), -50, 50))))


def _diagnostics(drawn: Drawn, packed: Packed) -> dict[str, float]:
    return {
        "levels": float(drawn.levels),
        "evaluations": float(drawn.evaluations),
        "log_bayes_factor": drawn.log_evidence - POWER * packed.log_silent,
    }


def _results(
    shanks: Sequence[ShankEvidence],
    prior: DepthPrior,
    z: FloatArray,
    copy: IntArray,
    rng: np.random.Generator,
    informed: float,
    diagnostics: dict[str, float],
) -> list[DepthPosterior]:
    """Physical depth and label of every row, draw by draw."""
    left_open = _balanced_noise(rng, len(z), prior.mean_um.size) @ prior.physical_rest.T
    physical = prior.physical_mean_um + z @ prior.physical_basis.T + left_open
    label = prior.mean_um + z @ prior.basis.T
    out = []
    for i, shank in enumerate(shanks):
        at = prior.weights(i, shank.tip_distance_um).T
        depth = falling(physical[:, prior.slice(i)] @ at)
        ids = shank.label_at(falling(label[:, prior.slice(i)] @ at), copy[:, None] % len(shank.lateral_label_id))
        out.append(
            DepthPosterior(
                shank.penetration,
                shank.shank,
                shank.tip_distance_um,
                depth,
                informed if shank.profile is not None else 0.0,
                diagnostics,
                label_id=ids,
            )
        )
    return out


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
