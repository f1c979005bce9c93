"""Whether the probe file tells the true order of the sites: fields of near sites are alike, those of far ones less.

Volume conduction makes the likeness of two sites fall with their distance, whatever the tissue (e.g. Destexhe,
Contreras & Steriade 1999, J. Neurosci. 19, 4595, from memory). A wrong site map shows where claimed and heard distance
disagree.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.physiology.channels import coherency_size

if TYPE_CHECKING:
    from leadline.base.arrays import AnyArray, BoolArray, FloatArray
    from leadline.physiology.rows import Rows

MIN_ROWS = 12
NEAR_UM, FAR_UM, WINDOW_UM, WINDOW_ROWS = 60.0, 400.0, 300.0, 8
FALLS = -0.6  # rank correlation of likeness with distance, of a right map about -0.95
BROKEN = 0.6  # likeness across two neighbouring rows, as a share of the usual one
JOINED = 0.85
LEAST_SHARED = 0.2  # rows that share less with every other are noise
PAIRS = 2  # one pair alike may share a fault
PARTNER = 0.25  # by how much likeness with the most similar row stands out from that with any
NOTHING = 0.15  # likeness of neighbours in a slow band; in tissue it is above 0.8
COMMON = 0.85  # likeness of far sites over that of near ones: a signal common to all tells no distance


def order_doubts(cross: AnyArray, rows: Rows, x_um: FloatArray, good: BoolArray) -> tuple[str, ...]:
    """Sentences about the shanks whose fields contradict the order or the spacing of their sites.

    ``cross`` : (R, R) cross-spectrum of the rows in a fast band; the faster, the more local. ``x_um`` : (R,) place of
    the rows across the probe. ``good`` : (R,) rows that hold a signal.
    """
    if good.sum() < MIN_ROWS:
        return ()
    alike = _of_signals(np.nan_to_num(coherency_size(cross[np.ix_(good, good)])))
    tip, shank = rows.tip_distance_um[good], rows.shank[good]
    place = np.column_stack([x_um[good], tip])
    shanks = [m for s in np.unique(shank) if len(m := np.flatnonzero(shank == s)) >= MIN_ROWS]
    scrambled = [s for m in shanks for s in _scrambled(alike[np.ix_(m, m)], tip[m])]
    if scrambled:
        return tuple(scrambled[:1])
    return (*[s for m in shanks for s in _broken(alike[np.ix_(m, m)], tip[m])][:1], *_joined(alike, place, shank))


def _of_signals(alike: FloatArray) -> FloatArray:
    """Likeness of the signals without each row's own noise: over the geometric mean of what either row shares with its
    most similar one (Spearman 1904, Am. J. Psychol. 15, 72: correction for attenuation)."""
    shared = np.sqrt(np.maximum(alike.max(axis=1), LEAST_SHARED))
    return np.asarray(np.minimum(alike / shared[:, None] / shared, 1.0), np.float64)


def deaf(slow_cross: AnyArray, rows: Rows, good: BoolArray) -> tuple[str, ...]:
    """A sentence where neighbouring rows share next to nothing even in a slow band, as noise does.

    ``slow_cross`` : (R, R) cross-spectrum of the rows in that band.
    """
    close = (np.diff(rows.shank) == 0) & (np.diff(rows.tip_distance_um) <= FAR_UM)
    pairs = np.flatnonzero(close & good[1:] & good[:-1])
    if pairs.size < MIN_ROWS:
        return ()
    usual = float(np.nanmedian(coherency_size(slow_cross)[pairs, pairs + 1]))
    if not usual < NOTHING:
        return ()
    return (
        f"neighbouring sites share next to nothing even in slow bands (likeness {usual:.2f}, in tissue above 0.8): are "
        "n_channels, dtype and the file the right ones?",
    )


def fall(alike: FloatArray, tip_um: FloatArray) -> float:
    """How likeness falls with claimed distance nearby: the median over rows of Spearman's rank correlation."""
    from scipy.stats import rankdata

    distance = np.abs(tip_um[:, None] - tip_um)
    window = max(WINDOW_UM, WINDOW_ROWS / 2 * float(np.median(np.diff(tip_um))))
    found = []
    for row in range(len(tip_um)):
        near = np.flatnonzero((distance[row] <= window) & (distance[row] > 0))
        if near.size >= WINDOW_ROWS / 2:
            found.append(float(np.corrcoef(rankdata(distance[row, near]), rankdata(alike[row, near]))[0, 1]))
    return float(np.nanmedian(found)) if found else -1.0


def _scrambled(alike: FloatArray, tip_um: FloatArray) -> list[str]:
    falls = fall(alike, tip_um)
    stands_out = float(np.median(alike.max(axis=1) - np.median(alike, axis=1)))
    if falls < FALLS or stands_out < PARTNER:
        return []
    return [
        f"sites that the probe file puts side by side are no more alike than sites farther away (rank correlation of "
        f"likeness with distance {falls:.2f}; of a right map about -0.9): is it the right probe file, with the right "
        "wiring (device_channel_indices)?"
    ]


def _broken(alike: FloatArray, tip_um: FloatArray) -> list[str]:
    """Neighbours that do not hear each other: a gap between them that the probe file does not know."""
    step = np.diff(tip_um)
    across = np.array([_across(alike, tip_um, k) if step[k] <= NEAR_UM else np.nan for k in range(step.size)])
    if np.isfinite(across).sum() < MIN_ROWS // 2:
        return []
    usual, k = float(np.nanmedian(across)), int(np.nanargmin(across))
    if usual < 0.3 or across[k] > BROKEN * usual:
        return []
    return [
        f"between tip distances {tip_um[k]:.0f} and {tip_um[k + 1]:.0f} um neighbouring sites share little (likeness "
        f"{across[k]:.2f}, usually {usual:.2f}), as if they were far apart: is it the site map (bank) that was "
        "recorded, in the right order?"
    ]


def _across(alike: FloatArray, tip_um: FloatArray, k: int) -> float:
    """Likeness of the most similar two of three rows below step ``k`` and three above it, so that a bad row breaks
    nothing; NaN where there is but one."""
    below = [i for i in range(k - 2, k + 1) if i >= 0 and tip_um[k] - tip_um[i] <= NEAR_UM]
    above = [i for i in range(k + 1, k + 4) if i < tip_um.size and tip_um[i] - tip_um[k + 1] <= NEAR_UM]
    return float(alike[np.ix_(below, above)].max()) if min(len(below), len(above)) > 1 else float("nan")


def _joined(alike: FloatArray, place_um: FloatArray, shank: AnyArray) -> list[str]:
    """Sites that the probe file puts far apart and that hear each other as neighbours do."""
    distance = np.linalg.norm(place_um[:, None] - place_um, axis=2)
    near, far = (distance > 0) & (distance <= NEAR_UM), distance > FAR_UM
    if not near.any() or not far.any():
        return []
    usual, apart = float(np.median(alike[near])), float(np.median(alike[far]))
    if apart > COMMON * usual:
        return []
    odd = far & (alike > apart + JOINED * (usual - apart))
    if odd.sum() < 2 * PAIRS:
        return []
    i, j = np.unravel_index(int(np.where(odd, distance, 0.0).argmax()), odd.shape)
    here, there = (f"{place_um[k, 1]:.0f} um on shank {shank[k]}" for k in (i, j))
    return [
        f"the sites at tip distance {here} and {there} hear each other as neighbours do (likeness {alike[i, j]:.2f}, "
        f"of neighbours {usual:.2f}) though the probe file puts {distance[i, j]:.0f} um between them: is it the right "
        "probe file, and the site map (bank) that was recorded?"
    ]
