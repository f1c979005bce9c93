"""Units of the invented brain: how many a row of sites sees, how they fire, how they answer a flash."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.demo.tendencies import FEATURES, type_codes, types
from leadline.demo.tissue import STEP_UM

if TYPE_CHECKING:
    import pandas as pd

    from leadline.demo.lfp import Timeline
    from leadline.demo.recipe import Recipe
    from leadline.demo.tissue import Tissue
    from leadline.demo.tracks import Shank

_PER_100UM = 5.0
_REACH_UM = 18.0
# Peak time after a flash, s, and gain; order of layers as in Niell & Stryker (2008), J. Neurosci. 28, 7520.
_ANSWER = {
    "L1": (0.09, 0.3),
    "L2": (0.078, 0.8),
    "L4": (0.056, 1.5),
    "L5": (0.085, 1.2),
    "L6": (0.075, 0.8),
    "thalamus": (0.042, 1.6),
    "tectum": (0.05, 1.6),
}


@dataclass(frozen=True, slots=True, eq=False)
class Units:
    """Units of one shank: ``tip_distance_um, rate_hz, amplitude_uv, width_s, latency_s, gain`` (n,)."""

    shank: int
    tip_distance_um: FloatArray
    rate_hz: FloatArray
    amplitude_uv: FloatArray
    width_s: FloatArray
    latency_s: FloatArray
    gain: FloatArray


def make_units(recipe: Recipe, shank: Shank, tissue: Tissue, site_um: FloatArray) -> Units:
    """Draw the units near a shank's sites (tip distances ``site_um``)."""
    rng = np.random.default_rng([recipe.seed, 83, ord(shank.penetration[0]), shank.number])
    edges = np.arange(site_um.min() - 30, site_um.max() + 30, STEP_UM)
    near = np.abs(edges[:, None] - site_um[None, :]).min(axis=1) < 25
    depth = shank.law(edges)
    features = {
        name: _heard(tissue, tissue.features[:, k], depth)
        for k, name in enumerate(FEATURES)
        if name not in FEATURES[:5]
    }
    sorted_share = 1 - 0.6 * recipe.rough
    expected = sorted_share * _PER_100UM * STEP_UM / 100 * np.exp(0.75 * np.clip(features["density"], -9, 2.5)) * near
    tip = np.repeat(edges, rng.poisson(expected))
    n = len(tip)
    tip = tip + rng.uniform(-STEP_UM / 2, STEP_UM / 2, n)
    here = {name: np.interp(tip, edges, values) for name, values in features.items()}
    at = np.clip(np.searchsorted(tissue.depth_um, shank.law(tip)), 0, len(tissue.codes) - 1)
    answers = np.array([_ANSWER.get(name, (0.09, 0.2)) for name in types()])[type_codes()[tissue.codes[at]]].T
    return Units(
        shank.number,
        tip,
        np.exp(0.7 * here["rate"] + 0.9 * rng.standard_normal(n)) * 2.5,
        70 * np.exp(0.3 * here["amplitude"] + 0.4 * rng.standard_normal(n)),
        np.clip(0.42e-3 + 0.11e-3 * here["width"] + 0.1e-3 * rng.standard_normal(n), 0.1e-3, 1e-3),
        np.clip(answers[0] * rng.lognormal(0, 0.12, n), 0.025, 0.25),
        6 * answers[1] * tissue.drive[at] * rng.gamma(1.5, 0.6, n),
    )


def _heard(tissue: Tissue, profile: FloatArray, depth_um: FloatArray) -> FloatArray:
    from scipy.ndimage import gaussian_filter1d

    return np.asarray(np.interp(depth_um, tissue.depth_um, gaussian_filter1d(profile, _REACH_UM / STEP_UM)))


def spike_table(
    recipe: Recipe, units: list[Units], channel_of: AnyArray, site: AnyArray, site_shank: AnyArray, timeline: Timeline
) -> pd.DataFrame:
    """One row a spike, in order of time: ``time_s, unit_id, tip_distance_um, channel, amplitude_uv, width_s``.

    ``channel_of, site, site_shank`` : trace, tip distance and shank of each recorded contact.
    """
    import pandas as pd

    rng = np.random.default_rng([recipe.seed, 84, len(site), int(site.max())])
    parts, number = [], 0
    for group in units:
        for k in range(len(group.rate_hz)):
            times = _spikes(rng, group, k, timeline)
            tip = group.tip_distance_um[k] + rng.normal(0, 4.0, len(times))
            mine = np.flatnonzero(site_shank == group.shank)
            channel = channel_of[mine[np.abs(site[mine] - group.tip_distance_um[k]).argmin()]]
            parts.append(
                pd.DataFrame(
                    {
                        "time_s": times,
                        "unit_id": number,
                        "tip_distance_um": tip,
                        "channel": channel,
                        "amplitude_uv": group.amplitude_uv[k] * rng.normal(1, 0.1, len(times)),
                        "width_s": group.width_s[k],
                    }
                )
            )
            number += 1
    table = pd.concat(parts).sort_values("time_s", kind="stable", ignore_index=True)
    return table.round({"time_s": 5, "tip_distance_um": 1, "amplitude_uv": 1, "width_s": 6})


def _spikes(rng: np.random.Generator, units: Units, k: int, timeline: Timeline) -> FloatArray:
    """Times of one unit: an uneven Poisson train, more in answer to flashes."""
    bursts = rng.gamma(4, 0.25, len(timeline.running)) * np.where(timeline.running, 1.15, 0.9)
    starts = np.arange(len(bursts)) * timeline.block_s
    spans = np.minimum(timeline.block_s, timeline.seconds - starts)
    counts = rng.poisson(units.rate_hz[k] * bursts * spans)
    ongoing = np.concatenate([s + rng.uniform(0, d, c) for s, d, c in zip(starts, spans, counts, strict=True)])
    answers = rng.poisson(np.full(len(timeline.flash_s), units.gain[k] * min(1.0, units.rate_hz[k] / 5) * 0.5))
    evoked = np.repeat(timeline.flash_s, answers) + units.latency_s[k] + rng.normal(0, 0.012, answers.sum())
    times = np.sort(np.concatenate([ongoing, evoked]))
    return times[(times > 0) & (times < timeline.seconds)]
