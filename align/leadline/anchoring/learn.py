"""A lab's own knowledge: what its finished brains say of each structure type and of the law of depth."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.anchoring.depth_prior import slope_variance
from leadline.anchoring.features import GROUPS, prepare
from leadline.anchoring.knowledge import FORMAT, DepthLaw, Knowledge, StructureType, builtin
from leadline.base.arrays import FloatArray, IntArray
from leadline.base.errors import LeadlineError
from leadline.model.profile import FEATURE_BY_NAME

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.model.atlas import Structures
    from leadline.model.profile import Profile

MIN_BRAINS = 3
MIN_TYPES = 3
MIN_ROWS = 3
SURE = 0.8
MIN_SPAN_UM = 1000.0
MIN_SHANKS = 5
PRIOR_MEAN_SD = 0.5
PRIOR_WEIGHT = 5.0
MIN_SD = 0.2

Samples = dict[tuple[str, str], dict[str, float]]


@dataclass(frozen=True, slots=True, eq=False)
class FinishedShank:
    """One shank whose channels have been placed.

    ``profile`` : its rows. ``tip_distance_um``, ``track_depth_um``, ``region_id``, ``p_region`` : (R,) of its
    channels, ascending tip distance. ``end_depth_um`` : track depth of the dye's end.
    """

    brain: str
    structures: Structures
    profile: Profile
    tip_distance_um: FloatArray
    track_depth_um: FloatArray
    region_id: IntArray
    p_region: FloatArray
    end_depth_um: float


@dataclass(frozen=True, slots=True)
class Learned:
    """``text`` : TOML for ``[knowledge] path``. ``gain_nats`` : held-out log likelihood of one feature's mean in one
    structure type of one brain, over that of the knowledge begun with. ``types`` : names learned."""

    text: str
    gain_nats: float
    brains: int
    types: tuple[str, ...]
    warnings: tuple[str, ...] = ()


def learn(finished: Sequence[FinishedShank], knowledge: Knowledge | None = None) -> Learned:
    """Learn type means, their scatter, and the size of depth errors from finished brains.

    Means are conjugate Gaussian updates of the knowledge begun with, from rows whose region is at least 80 % sure; a
    brain counts once for a type. The gain is measured by leaving out one brain at a time. Raises LeadlineError when
    there are fewer than 3 brains, or fewer than 3 structure types seen in 3 brains each.
    """
    known = builtin() if knowledge is None else knowledge
    brains = sorted({f.brain for f in finished})
    if len(brains) < MIN_BRAINS:
        raise LeadlineError(
            f"{len(brains)} finished brains are too few to learn from",
            where="learn",
            mend=f"Give at least {MIN_BRAINS}; with fewer the built-in knowledge is the better guess",
        )
    samples = _samples(finished, known)
    seen = [t for t in known.types if sum((b, t.name) in samples for b in brains) >= MIN_BRAINS]
    if len(seen) < MIN_TYPES:
        raise LeadlineError(
            f"only {len(seen)} structure types are seen in {MIN_BRAINS} brains with at least {SURE:.0%} certainty",
            where="learn",
            mend="Place anchors in more brains, or give brains whose tracks share structures",
        )
    gain = float(np.mean([g for b in brains for g in _held_out(b, brains, seen, samples)]))
    types = [_update(t, [samples[b, t.name] for b in brains if (b, t.name) in samples]) for t in seen]
    notes = () if gain > 0 else ("what was learned predicts a held-out brain no better than what was known before",)
    text = _text(types, _law(finished, known.depth), len(brains), gain)
    return Learned(text, gain, len(brains), tuple(t.name for t in types), notes)


def _samples(finished: Sequence[FinishedShank], known: Knowledge) -> Samples:
    """Mean of every feature for each brain and type, rows of all its shanks together."""
    rows: dict[tuple[str, str], dict[str, list[float]]] = {}
    for shank in finished:
        features = prepare(shank.profile)
        if not features.informative:
            continue
        nearest = np.abs(shank.tip_distance_um[None, :] - features.tip_distance_um[:, None]).argmin(axis=1)
        sure = shank.p_region[nearest] >= SURE
        kinds = {int(i): known.of(shank.structures, int(i)) for i in np.unique(shank.region_id)}
        for group in GROUPS:
            for name, values in zip(features.names[group], features.values[group], strict=True):
                if FEATURE_BY_NAME[name].circular:
                    continue
                for r in np.flatnonzero(sure):
                    kind = kinds[int(shank.region_id[nearest[r]])]
                    if kind is not None:
                        rows.setdefault((shank.brain, kind.name), {}).setdefault(name, []).append(float(values[r]))
    means = {
        key: {name: float(np.mean(v)) for name, v in by_name.items() if len(v) >= MIN_ROWS}
        for key, by_name in rows.items()
    }
    return {key: value for key, value in means.items() if value}


def _update(kind: StructureType, brains: Sequence[dict[str, float]]) -> StructureType:
    """Type with means and scatter updated by brains, each a mapping of feature to mean."""
    mean = dict(kind.mean)
    residuals: list[float] = []
    for name in sorted({n for b in brains for n in b}):
        values = np.array([b[name] for b in brains if name in b])
        precision = 1 / PRIOR_MEAN_SD**2 + values.size / kind.sd**2
        centre = (kind.mean.get(name, 0.0) / PRIOR_MEAN_SD**2 + values.sum() / kind.sd**2) / precision
        mean[name] = round(float(centre), 3)
        residuals += [float(v) for v in (values - centre) ** 2]
    spread = (PRIOR_WEIGHT * kind.sd**2 + sum(residuals)) / (PRIOR_WEIGHT + len(residuals))
    sd = max(MIN_SD, round(float(np.sqrt(spread)), 3))
    return StructureType(kind.name, kind.words, kind.rules, mean, sd, kind.instance_sd, kind.source)


def _held_out(brain: str, brains: Sequence[str], seen: Sequence[StructureType], samples: Samples) -> list[float]:
    """Gain of each feature of each type in one brain, learned from the others."""
    gains = []
    for kind in seen:
        others = [samples[b, kind.name] for b in brains if b != brain and (b, kind.name) in samples]
        if (brain, kind.name) not in samples or not others:
            continue
        after = _update(kind, others)
        for name, value in samples[brain, kind.name].items():
            gains.append(_log_normal(value, after, name) - _log_normal(value, kind, name))
    return gains


def _log_normal(value: float, kind: StructureType, name: str) -> float:
    return float(-np.log(kind.sd) - 0.5 * ((value - kind.mean.get(name, 0.0)) / kind.sd) ** 2)


def _law(finished: Sequence[FinishedShank], law: DepthLaw) -> dict[str, float]:
    """Offset and scale of each long shank against one to one, less what local stretch would do to the fit; their
    sizes, drawn towards those of ``law``."""
    fits = []
    for shank in finished:
        if shank.tip_distance_um.size > 1 and np.ptp(shank.tip_distance_um) >= MIN_SPAN_UM:
            slope, tip = np.polyfit(shank.tip_distance_um, shank.track_depth_um, 1)
            local = slope_variance(shank.tip_distance_um, law)
            fits.append(((tip - shank.end_depth_um) ** 2, max((slope + 1) ** 2 - local, 0.0)))
    if len(fits) < MIN_SHANKS:
        return {}
    square = np.array(fits).sum(axis=0)
    before = np.array([law.offset_sd_um, law.scale_sd]) ** 2
    sd = np.sqrt((PRIOR_WEIGHT * before + square) / (PRIOR_WEIGHT + len(fits)))
    return {"offset_sd_um": round(float(sd[0]), 1), "scale_sd": round(float(sd[1]), 4)}


def _text(types: Sequence[StructureType], law: dict[str, float], brains: int, gain: float) -> str:
    import tomli_w

    table: dict[str, Any] = {"format": FORMAT}
    if law:
        table["depth"] = law
    table["type"] = [
        {
            "name": t.name,
            "sd": t.sd,
            "instance_sd": t.instance_sd,
            "source": f"{brains} finished brains, over: {t.source}",
            "mean": dict(sorted(t.mean.items())),
        }
        for t in types
    ]
    head = (
        f"# Learned from {brains} finished brains; gain on a held-out brain {gain:+.3f} nats a feature and structure.\n"
    )
    return head + tomli_w.dumps(table)
