"""A profile made ready for inference: rows averaged, gaps filled, outliers clipped, features on one scale."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import FloatArray, IntArray
from leadline.model.profile import FEATURE_BY_NAME

if TYPE_CHECKING:
    from leadline.model.profile import Profile

ROW_UM = 40.0
GROUPS = ("lfp", "units")
MIN_FINITE = 0.5
MIN_ROWS = 8
CLIP = 3.0


@dataclass(frozen=True, slots=True, eq=False)
class FeatureSet:
    """Features of one shank. ``tip_distance_um`` : (R,). ``values`` : group -> (K, R) of zero median and unit scale.

    ``names`` : group -> K names; an angle gives two columns, its cosine and sine, under one name.
    """

    tip_distance_um: FloatArray
    values: dict[str, FloatArray]
    names: dict[str, tuple[str, ...]]

    @property
    def informative(self) -> bool:
        """Whether there is anything to infer from."""
        return self.tip_distance_um.size >= MIN_ROWS and any(len(v) for v in self.values.values())


def prepare(profile: Profile | None, row_um: float = ROW_UM) -> FeatureSet:
    """Average rows within ``row_um``, drop dead ones, fill gaps, filter by a running median, scale and clip.

    Features finite on less than half of the rows are dropped; so are those that do not vary.
    """
    empty: FeatureSet = FeatureSet(np.zeros(0), {g: np.zeros((0, 0)) for g in GROUPS}, dict.fromkeys(GROUPS, ()))
    if profile is None:
        return empty
    keep = np.array([flag not in ("dead", "noisy") for flag in profile.flags], bool)
    tip = profile.tip_distance_um[keep]
    if tip.size < MIN_ROWS:
        return empty
    bins = np.unique(np.floor((tip - tip[0]) / row_um).astype(np.int64), return_inverse=True)[1].astype(np.int64)
    rows = _bin_means(tip, bins)
    values: dict[str, list[FloatArray]] = {g: [] for g in GROUPS}
    names: dict[str, list[str]] = {g: [] for g in GROUPS}
    for name, column in profile.features.items():
        feature = FEATURE_BY_NAME[name]
        raw = column[keep]
        for part in (np.cos(raw), np.sin(raw)) if feature.circular else (raw,):
            ready = _ready(_bin_means(part, bins), rows)
            if ready is not None:
                values[feature.group].append(ready)
                names[feature.group].append(name)
    return FeatureSet(
        rows,
        {g: np.array(values[g]).reshape(len(values[g]), rows.size) for g in GROUPS},
        {g: tuple(names[g]) for g in GROUPS},
    )


def _bin_means(values: FloatArray, bins: IntArray) -> FloatArray:
    """Mean of the finite values of each bin, NaN where there is none."""
    ok = np.isfinite(values)
    count = np.bincount(bins[ok], minlength=bins.max() + 1)
    total = np.bincount(bins[ok], weights=values[ok], minlength=bins.max() + 1)
    return np.asarray(np.divide(total, count, out=np.full(count.shape, np.nan), where=count > 0), np.float64)


def _ready(values: FloatArray, rows: FloatArray) -> FloatArray | None:
    """One feature filled, filtered, scaled and clipped, or None where it cannot speak."""
    ok = np.isfinite(values)
    if ok.sum() < max(MIN_ROWS, MIN_FINITE * values.size):
        return None
    filled = np.interp(rows, rows[ok], values[ok])
    smooth = filled.copy()
    smooth[1:-1] = np.median(np.stack([filled[:-2], filled[1:-1], filled[2:]]), axis=0)
    low, high = np.percentile(smooth, [1, 99])
    bounded = np.clip(smooth, low, high)
    spread = bounded.std()
    if not spread > 1e-9 * max(1.0, float(np.abs(bounded).max())):
        return None
    return np.asarray(np.clip((bounded - bounded.mean()) / spread, -CLIP, CLIP), np.float64)
