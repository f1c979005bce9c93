"""A profile made ready for inference: rows averaged, gaps filled, outliers clipped, features on one scale."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from leadline.base.arrays import FloatArray, IntArray
from leadline.model.profile import FEATURE_BY_NAME

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.model.profile import Profile

ROW_UM = 40.0
GROUPS = ("lfp", "units")
MIN_FINITE = 0.5
MIN_ROWS = 8
CLIP = 3.0
MIN_SHANKS = 0.5

Column: TypeAlias = tuple[str, int]  # a feature, and which part of an angle


@dataclass(frozen=True, slots=True, eq=False)
class FeatureSet:
    """Features of one shank. ``tip_distance_um`` : (R,). ``values`` : group -> (K, R) of zero median and unit scale.

    ``columns`` : group -> K keys; an angle has two, its cosine and sine.
    """

    tip_distance_um: FloatArray
    values: dict[str, FloatArray]
    columns: dict[str, tuple[Column, ...]]

    @property
    def names(self) -> dict[str, tuple[str, ...]]:
        """The feature of every column, by group."""
        return {group: tuple(key[0] for key in keys) for group, keys in self.columns.items()}

    @property
    def informative(self) -> bool:
        """Whether there is anything to infer from."""
        return self.tip_distance_um.size >= MIN_ROWS and any(len(v) for v in self.values.values())


def prepare(profile: Profile | None, row_um: float = ROW_UM) -> FeatureSet:
    """The features of one shank by itself: see `prepare_probe`."""
    return prepare_probe([profile], row_um)[0]


def prepare_probe(profiles: Sequence[Profile | None], row_um: float = ROW_UM) -> tuple[FeatureSet, ...]:
    """Average rows within ``row_um``, drop dead ones, fill gaps, filter by a running median, scale and clip.

    Shanks of one probe are put on one scale, so that a structure that two of them cross looks the same in both.
    Features finite on less than half of the rows of a shank are dropped there; so are those that do not vary, and
    those that less than half of the shanks have.
    """
    rows = [None if p is None else _rows(p, row_um) for p in profiles]
    columns: dict[Column, list[FloatArray | None]] = {}
    for i, row in enumerate(rows):
        for key, values in {} if row is None else row[1].items():
            columns.setdefault(key, [None] * len(rows))[i] = values
    speaking = sum(row is not None for row in rows)
    ready = {
        key: _scaled(values)
        for key, values in columns.items()
        if sum(v is not None for v in values) >= MIN_SHANKS * speaking
    }
    return tuple(_feature_set(row[0] if row else np.zeros(0), i, ready) for i, row in enumerate(rows))


def _rows(profile: Profile, row_um: float) -> tuple[FloatArray, dict[Column, FloatArray]] | None:
    """Rows of one shank and its features on them, filled and smoothed; None where there are too few."""
    keep = np.array([flag not in ("dead", "noisy") for flag in profile.flags], bool)
    tip = profile.tip_distance_um[keep]
    if tip.size < MIN_ROWS:
        return None
    bins = np.unique(np.floor((tip - tip[0]) / row_um).astype(np.int64), return_inverse=True)[1].astype(np.int64)
    rows = _bin_means(tip, bins)
    found: dict[Column, FloatArray] = {}
    for name, column in profile.features.items():
        raw = column[keep]
        for part, values in enumerate((np.cos(raw), np.sin(raw)) if FEATURE_BY_NAME[name].circular else (raw,)):
            filled = _filled(_bin_means(values, bins), rows)
            if filled is not None:
                found[name, part] = filled
    return (rows, found) if rows.size >= MIN_ROWS else None


def _feature_set(rows: FloatArray, shank: int, ready: dict[Column, list[FloatArray | None]]) -> FeatureSet:
    """The scaled features that one shank has."""
    keys: dict[str, list[Column]] = {g: [] for g in GROUPS}
    for key, values in ready.items():
        if values[shank] is not None:
            keys[FEATURE_BY_NAME[key[0]].group].append(key)
    return FeatureSet(
        rows,
        {g: np.array([ready[k][shank] for k in keys[g]]).reshape(len(keys[g]), rows.size) for g in GROUPS},
        {g: tuple(keys[g]) for g in GROUPS},
    )


def _bin_means(values: FloatArray, bins: IntArray) -> FloatArray:
    """Mean of the finite values of each bin, NaN where there is none."""
    ok = np.isfinite(values)
    count = np.bincount(bins[ok], minlength=bins.max() + 1)
    total = np.bincount(bins[ok], weights=values[ok], minlength=bins.max() + 1)
    return np.asarray(np.divide(total, count, out=np.full(count.shape, np.nan), where=count > 0), np.float64)


def _filled(values: FloatArray, rows: FloatArray) -> FloatArray | None:
    """One feature of one shank with its gaps filled and single rows smoothed away; None where too little is known."""
    ok = np.isfinite(values)
    if ok.sum() < max(MIN_ROWS, MIN_FINITE * values.size):
        return None
    filled = np.interp(rows, rows[ok], values[ok])
    smooth = filled.copy()
    smooth[1:-1] = np.median(np.stack([filled[:-2], filled[1:-1], filled[2:]]), axis=0)
    return smooth


def _scaled(shanks: list[FloatArray | None]) -> list[FloatArray | None]:
    """One feature of all shanks on one scale, clipped; None everywhere where it does not vary."""
    together = np.concatenate([s for s in shanks if s is not None])
    low, high = np.percentile(together, [1, 99])
    bounded = np.clip(together, low, high)
    middle, spread = bounded.mean(), bounded.std()
    if not spread > 1e-9 * max(1.0, float(np.abs(bounded).max())):
        return [None] * len(shanks)
    return [None if s is None else np.clip((np.clip(s, low, high) - middle) / spread, -CLIP, CLIP) for s in shanks]
