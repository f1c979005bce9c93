"""Landmarks that the recording suggests as anchors: the few that would tell most, and what speaks for and against."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.anchoring.depth_prior import build
from leadline.anchoring.features import GROUPS
from leadline.anchoring.knowledge import Knowledge, builtin
from leadline.anchoring.pack import Packed, assemble
from leadline.base.arrays import FloatArray
from leadline.model.anchor import Anchor, Suggestion
from leadline.model.atlas import OUTSIDE_ID
from leadline.model.profile import FEATURE_BY_NAME

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.anchoring.evidence import ShankEvidence
    from leadline.model.atlas import Structures
    from leadline.model.posterior import DepthPosterior

USER_SD_UM = 30.0
MIN_SHARE = 0.5
MIN_INFORMED = 0.5
MAX_SD_UM = 120.0
APART_UM = 120.0
THIN_UM = 160.0
BUMP_UM = (-120.0, -80.0, 80.0, 120.0)
BUMP_SD_UM = 120.0
SAY_NATS = 0.5
UNKNOWN_DISCOUNT = 0.5


@dataclass(frozen=True, slots=True)
class Landmark:
    """A border or thin structure along a track at ``track_depth_um``; ``at_um`` : (S,) tip distance in each draw,
    NaN in draws where the shank does not show it. ``worth`` : discount for structures of unknown type."""

    name: str
    track_depth_um: float
    at_um: FloatArray
    worth: float


def suggest(
    posteriors: Sequence[DepthPosterior],
    evidence: Sequence[ShankEvidence],
    structures: Structures,
    knowledge: Knowledge | None = None,
    *,
    at_most: int = 5,
) -> tuple[Suggestion, ...]:
    """At most ``at_most`` anchors for each shank, the one that would narrow the depth map most first.

    The gain of a landmark X is the variance of all rows that knowing it (with 30 um of error) would take away,
    ``sum_r Cov(u_r, X)^2 / (Var X + 30^2)``; the next is judged given those before it. Support and opposition are the
    change of each feature's log evidence, in nats, when the depth map is bent by 80 and 120 um around the landmark.
    Shanks whose recording says nothing have no suggestions.
    """
    known = builtin() if knowledge is None else knowledge
    out: list[Suggestion] = []
    for posterior, shank in zip(posteriors, evidence, strict=True):
        if posterior.informed < MIN_INFORMED or posterior.label_id is None or shank.profile is None:
            continue
        chosen = _chosen(landmarks(posterior, shank, structures, known), posterior, shank, at_most)
        if chosen:
            out += _explained(chosen, posterior, shank, structures, known)
    return tuple(out)


def landmarks(
    posterior: DepthPosterior, shank: ShankEvidence, structures: Structures, knowledge: Knowledge
) -> list[Landmark]:
    """Borders and thin structures of the track that lie within the shank in most draws."""
    depth, label = shank.depth_um, shank.label_id
    edges = np.flatnonzero(np.diff(label))
    borders = (depth[edges] + depth[edges + 1]) / 2
    draws = posterior.depth_um
    found = []
    for i, (edge, border) in enumerate(zip(edges, borders, strict=True)):
        above, below = int(label[edge]), int(label[edge + 1])
        at = _crossing(posterior, above, below, border)
        worth = 1.0 if _known(above, below, structures, knowledge) else UNKNOWN_DISCOUNT
        if draws.min() < border < draws.max():
            found.append(Landmark(_border_name(above, below, structures), float(border), at, worth))
        thin = i + 1 < borders.size and borders[i + 1] - border < THIN_UM
        if thin:
            after = int(label[edges[i + 1] + 1])
            middle = (at + _crossing(posterior, below, after, borders[i + 1])) / 2
            name = structures[below].name if below in structures else str(below)
            centre = float((border + borders[i + 1]) / 2)
            found.append(Landmark(name, centre, middle, worth))
    return [f for f in found if np.isfinite(f.at_um).mean() >= MIN_SHARE]


def _crossing(posterior: DepthPosterior, above: int, below: int, border_um: float) -> FloatArray:
    """Tip distance (S,) at which each draw goes from ``below`` to ``above``; of several the nearest in depth."""
    labels, tip = np.asarray(posterior.label_id), posterior.tip_distance_um
    step = (labels[:, :-1] == below) & (labels[:, 1:] == above)
    far = np.abs((posterior.depth_um[:, :-1] + posterior.depth_um[:, 1:]) / 2 - border_um)
    best = np.where(step, far, np.inf).argmin(axis=1)
    middle = (tip[:-1] + tip[1:]) / 2
    return np.where(step.any(axis=1), middle[best], np.nan)


def _chosen(
    candidates: list[Landmark], posterior: DepthPosterior, shank: ShankEvidence, at_most: int
) -> list[tuple[Landmark, Anchor]]:
    """Greedy choice, each landmark judged on what those before it leave open."""
    spread = posterior.depth_um - posterior.depth_um.mean(axis=0)
    filled = {c.name: _filled(c) for c in candidates}
    taken: list[tuple[Landmark, Anchor]] = []
    busy = [a.tip_distance_um for a in shank.anchors]
    while len(taken) < at_most:
        gains = []
        for c in candidates:
            x, sd = filled[c.name], float(np.nanstd(c.at_um))
            near = any(abs(np.nanmedian(c.at_um) - b) < APART_UM for b in busy)
            cross = spread.T @ x / len(x)
            gain = float((cross**2).sum() / (x @ x / len(x) + USER_SD_UM**2))
            gains.append(0.0 if near or sd > MAX_SD_UM else gain * c.worth * float(np.isfinite(c.at_um).mean()))
        if not gains or max(gains) <= 0:
            break
        best = candidates[int(np.argmax(gains))]
        anchor = _anchor(best, posterior, shank)
        busy.append(anchor.tip_distance_um)
        if not _crosses(anchor, [*shank.anchors, *(a for _, a in taken)]):
            taken.append((best, anchor))
            spread = _without(spread, filled[best.name])
            filled = {name: x - _slope(filled[best.name], x) * filled[best.name] for name, x in filled.items()}
    return taken


def _filled(landmark: Landmark) -> FloatArray:
    """Centred positions, absent ones at the centre."""
    x = landmark.at_um - np.nanmedian(landmark.at_um)
    return np.where(np.isfinite(x), x, 0.0)


def _slope(known: FloatArray, other: FloatArray) -> float:
    return float(known @ other / (known @ known + len(known) * USER_SD_UM**2))


def _without(spread: FloatArray, x: FloatArray) -> FloatArray:
    """What is left of the draws' spread when ``x`` is known to within the user's error."""
    return np.asarray(spread - np.outer(x, x @ spread) / (x @ x + len(x) * USER_SD_UM**2), np.float64)


def _anchor(landmark: Landmark, posterior: DepthPosterior, shank: ShankEvidence) -> Anchor:
    sd = float(np.hypot(np.nanstd(landmark.at_um), USER_SD_UM))
    return Anchor(
        posterior.penetration,
        posterior.shank,
        round(float(np.nanmedian(landmark.at_um)), 1),
        round(landmark.track_depth_um, 1),
        round(sd, 1),
        landmark.name,
        "auto",
    )


def _crosses(anchor: Anchor, others: Sequence[Anchor]) -> bool:
    return any(
        (anchor.tip_distance_um - o.tip_distance_um) * (anchor.track_depth_um - o.track_depth_um) >= 0 for o in others
    )


def _explained(
    chosen: list[tuple[Landmark, Anchor]],
    posterior: DepthPosterior,
    shank: ShankEvidence,
    structures: Structures,
    knowledge: Knowledge,
) -> list[Suggestion]:
    packed = assemble([shank], build([shank], knowledge.depth), structures, knowledge)
    out = []
    for landmark, anchor in chosen:
        change = feature_support(packed, posterior, anchor.tip_distance_um)
        ranked = sorted(change.items(), key=lambda item: -item[1])
        support = [f"{FEATURE_BY_NAME[f].words} {v:+.1f}" for f, v in ranked if v >= SAY_NATS]
        against = [f"{FEATURE_BY_NAME[f].words} {v:+.1f}" for f, v in reversed(ranked) if v <= -SAY_NATS]
        where = f"seen in {np.isfinite(landmark.at_um).mean():.0%} of draws, at +-{np.nanstd(landmark.at_um):.0f} um"
        out.append(
            Suggestion(
                anchor,
                (", ".join(support) + " (nats); " if support else "the other landmarks and the law of depth; ") + where,
                ", ".join(against) + " (nats)" if against else "",
            )
        )
    return out


def feature_support(packed: Packed, posterior: DepthPosterior, tip_distance_um: float) -> dict[str, float]:
    """Nats that each feature of a packed single shank loses, on average, when the map is bent near a tip distance."""
    feature = packed.features[0]
    rows = feature.tip_distance_um
    path = np.interp(rows, posterior.tip_distance_um, posterior.median_um)
    bump = np.exp(-0.5 * ((rows - tip_distance_um) / BUMP_SD_UM) ** 2)
    here = path_evidence(packed, path)
    bent = [path_evidence(packed, path + size * bump) for size in BUMP_UM]
    change: dict[str, float] = {}
    for group in GROUPS:
        for k, name in enumerate(feature.names[group]):
            loss = here[group][k] - float(np.mean([b[group][k] for b in bent]))
            change[name] = change.get(name, 0.0) + loss
    return change


def path_evidence(packed: Packed, depth_um: FloatArray, noise_model: int = 0) -> dict[str, FloatArray]:
    """Log evidence of each feature of a packed single shank for one label depth per row, by group."""
    from leadline.anchoring._kernels import group_evidence

    out = {}
    for g, group in enumerate(GROUPS):
        out[group] = np.empty(len(packed.columns[group]))
        if out[group].size:
            group_evidence(packed.pack, g, noise_model, np.ascontiguousarray(depth_um)[None], out[group])
    return out


def _known(above: int, below: int, structures: Structures, knowledge: Knowledge) -> bool:
    return all(i in structures and knowledge.of(structures, i) is not None for i in (above, below))


def _border_name(above: int, below: int, structures: Structures) -> str:
    """A border named by its more telling side: thin or special tissue first, else the structure below."""
    if above == OUTSIDE_ID:
        return "brain surface"
    if below == OUTSIDE_ID:
        return "far surface of the brain"
    upper = structures.by_id.get(above)
    lower = structures.by_id.get(below)
    if upper is not None and upper.tissue in ("white", "ventricle") and (lower is None or lower.tissue == "grey"):
        return f"{upper.name}, lower edge"
    return f"{lower.name if lower else below}, upper edge"
