"""Dead and noisy channels and rows outside the brain, on robust statistics of each against its shank."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.physiology.spectrum import USABLE, band_power_db

if TYPE_CHECKING:
    from collections.abc import Mapping

    from leadline.base.arrays import AnyArray, BoolArray, FloatArray
    from leadline.model.probe import Probe
    from leadline.physiology.rows import Rows
    from leadline.physiology.spectrum import FieldStatistics

REACH_UM = 250.0  # neighbours that a channel is judged against
FLAT_DB = -40.0  # below the shank's median, or re 1 uV^2: no tissue is that quiet
QUIET_DB, MUTE_DB = -6.0, -25.0  # below the neighbours: with little, and even with much, in common with them
LONE = 0.8  # likeness to the neighbours, as a share of the usual likeness around
CLOSE_UM = 50.0
LOUD_DB = 8.0  # own noise above that of the neighbours
OWN_SHARE = 0.4  # of a noisy channel's power that is its own noise
SHOUTING_DB = 20.0  # above the neighbours in all, whatever is shared; a thin cell layer is some 6 dB louder
OUTSIDE_ROWS = 3
OUTSIDE_SHARE = 0.4
OUTSIDE_DB = -15.0


def bad_channels(statistics: FieldStatistics, probe: Probe) -> tuple[BoolArray, BoolArray]:
    """Which channels ``(C,)`` are dead and which are noisy.

    Each is judged against the contacts of its shank within 250 um, so that a whole quiet stretch (a ventricle, white
    matter) is neither. Dead: 40 dB below the shank or below 1 uV^2, 25 dB below the neighbours, or 6 dB below them and
    also below the nearest four, sharing less of their signals than they share of each other's. Noisy: what it shares
    with no neighbour is 8 dB more than the neighbours' own noise and at least two fifths of its power (only where a
    neighbour stands within 50 um: on a coarser probe it may be the one contact in a thin cell layer); or it stands
    20 dB above its neighbours from 100 Hz up.
    """
    top = USABLE * 2 * float(statistics.frequency_hz[-1])
    level = band_power_db(statistics, (1.0, min(300.0, top)))
    high = band_power_db(statistics, (min(100.0, top / 2), min(1000.0, top)))
    alike, own_db, own_share = _sharing(statistics.cross_uv2, probe)
    dead = np.zeros(level.size, bool)
    noisy = np.zeros(level.size, bool)
    for shank in probe.shanks:
        members = np.flatnonzero(probe.shank == shank)
        flat = level[members] < max(float(np.median(level[members])), 0.0) + FLAT_DB
        dead[members[flat]] = True
        live = members[~flat]
        if live.size < 5:
            continue
        near = _neighbourhoods(probe.tip_distance_um[live], REACH_UM)
        next_to = _neighbourhoods(probe.tip_distance_um[live], 0.0)
        below = level[live] - np.minimum(_median_of(level[live], near), _median_of(level[live], next_to))
        share = alike[live] / np.maximum(_median_of(alike[live], near), 0.2)
        dead[live] |= (below < MUTE_DB) | ((below < QUIET_DB) & (share < LONE))
        louder = own_db[live] - _median_of(own_db[live], near)
        noisy[live] = (louder > LOUD_DB) & (own_share[live] > OWN_SHARE) & _close(probe.tip_distance_um[live])
        noisy[live] |= high[live] - _median_of(high[live], near) > SHOUTING_DB
    return dead, noisy & ~dead


def outside_rows(
    rows: Rows, cross: AnyArray | None, level_db: FloatArray, unit_density: FloatArray | None = None
) -> BoolArray:
    """Which rows ``(R,)`` lie above the brain: the upper end of a shank, at least three rows of it.

    Such rows share little of the slow signals of the rows below (in air), or hold 15 dB less power than the shank's
    median (in saline, which conducts); the first row with neighbours that holds units ends them.

    Parameters
    ----------
    rows : rows of the probe.
    cross : (R, R) cross-spectrum of the rows below 12 Hz.
    level_db : (R,) power from 1 to 300 Hz.
    unit_density : (R,) units per 100 um, where there are sorted spikes.
    """
    outside = np.zeros(len(rows), bool)
    for shank in np.unique(rows.shank):
        members = np.flatnonzero(rows.shank == shank)
        if members.size < 3 * OUTSIDE_ROWS or not np.isfinite(level_db[members]).any():
            continue
        strange = level_db[members] < np.nanmedian(level_db[members]) + OUTSIDE_DB
        if cross is not None:
            size = np.nan_to_num(coherency_size(cross[np.ix_(members, members)]))
            smooth = _running_median(np.median(size, axis=1))
            usual = float(np.median(smooth))
            strange |= (smooth < OUTSIDE_SHARE * usual) & (usual > 0.2)
        if unit_density is not None:
            strange &= ~(unit_density[members] >= 0.5)
        run = members.size - 1
        while run >= 0 and (strange[run] or np.isnan(level_db[members[run]])):
            run -= 1
        top = members[run + 1 :]
        if top.size >= OUTSIDE_ROWS and top.size < 0.7 * members.size:
            outside[top] = True
    return outside


def coherency_size(cross: AnyArray) -> FloatArray:
    """Size of the coherency, ``(C, C)`` from 0 to 1; NaN where a channel holds nothing, and on the diagonal."""
    power = np.real(np.diagonal(cross))
    scale = np.sqrt(np.where(power > 0, power, np.nan))
    size = np.asarray(np.abs(cross) / scale[:, None] / scale, float)
    np.fill_diagonal(size, np.nan)
    return size


def _sharing(cross: Mapping[str, AnyArray], probe: Probe) -> tuple[FloatArray, FloatArray, FloatArray]:
    """How much each contact ``(C,)`` shares with those of its shank within 150 um, in its fastest crossed band.

    Returns the median coherency, the power in dB that not even the most similar neighbour explains, and its share.
    """
    name = next((band for band in ("ripple", "gamma", "theta", "delta") if band in cross), None)
    if name is None:
        nothing = np.zeros(len(probe.contact_id))
        return nothing + 1.0, nothing, nothing
    distance = np.abs(probe.tip_distance_um[:, None] - probe.tip_distance_um)
    distance[probe.shank[:, None] != probe.shank] = np.inf
    np.fill_diagonal(distance, np.inf)
    near = distance <= np.maximum(150.0, distance.min(axis=1, keepdims=True))
    size = np.where(near, np.nan_to_num(coherency_size(cross[name])), 0.0)
    alike = np.array([np.median(row[mask]) if mask.any() else 0.0 for row, mask in zip(size, near, strict=True)])
    share = 1.0 - size.max(axis=1) ** 2
    power = np.real(np.diagonal(cross[name]))
    return alike, 10.0 * np.log10(np.maximum(power * share, 1e-9)), share


def _neighbourhoods(tip_distance_um: FloatArray, reach_um: float) -> BoolArray:
    """Which contacts ``(n, n)`` each is judged against: those within reach, and at least the nearest four."""
    distance = np.abs(tip_distance_um[:, None] - tip_distance_um)
    np.fill_diagonal(distance, np.inf)
    reach = np.maximum(np.sort(distance, axis=1)[:, 3], reach_um)
    near: BoolArray = distance <= reach[:, None]
    return near


def _close(tip_distance_um: FloatArray) -> BoolArray:
    """Which contacts ``(n,)`` have another within 50 um of tip distance."""
    distance = np.abs(tip_distance_um[:, None] - tip_distance_um)
    np.fill_diagonal(distance, np.inf)
    return np.asarray(distance.min(axis=1) <= CLOSE_UM, bool)


def _median_of(values: FloatArray, near: BoolArray) -> FloatArray:
    return np.asarray(np.nanmedian(np.where(near, values, np.nan), axis=1), float)


def _running_median(values: FloatArray, width: int = 5) -> FloatArray:
    padded = np.pad(values, width // 2, mode="edge")
    return np.asarray(np.nanmedian(np.lib.stride_tricks.sliding_window_view(padded, width), axis=1), float)
