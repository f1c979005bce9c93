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
FLAT_DB = -40.0  # below the shank's median: no tissue is that quiet
QUIET_DB, MUTE_DB = -10.0, -25.0  # below the neighbours: without, and even with, signals in common with them
LOUD_DB, SHOUTING_DB = 10.0, 20.0  # above the neighbours, likewise; a thin cell layer is some 6 dB louder
LONE, APART = 0.35, 0.75  # likeness to the neighbours, as a share of the usual likeness around
OUTSIDE_ROWS = 3
OUTSIDE_SHARE = 0.4
OUTSIDE_DB = -15.0


def bad_channels(statistics: FieldStatistics, probe: Probe) -> tuple[BoolArray, BoolArray]:
    """Which channels ``(C,)`` are dead and which are noisy.

    Each is judged against the contacts of its shank within 250 um, so that a whole quiet stretch (a ventricle, white
    matter) is neither. Dead: 40 dB below the shank, 25 dB below the neighbours, or 10 dB below them and sharing
    hardly any of their gamma signals. Noisy: 20 dB above the neighbours from 100 Hz up (those within 250 um and also
    the nearest four, which spares a thin cell layer), or 10 dB above them and sharing clearly less of their signals
    than they share of each other's.
    """
    top = USABLE * 2 * float(statistics.frequency_hz[-1])
    level = band_power_db(statistics, (1.0, min(300.0, top)))
    high = band_power_db(statistics, (min(100.0, top / 2), min(1000.0, top)))
    alike = _likeness(statistics.cross_uv2, probe)
    dead = np.zeros(level.size, bool)
    noisy = np.zeros(level.size, bool)
    for shank in probe.shanks:
        members = np.flatnonzero(probe.shank == shank)
        flat = level[members] < np.nanmedian(level[members]) + FLAT_DB
        dead[members[flat]] = True
        live = members[~flat]
        if live.size < 5:
            continue
        near = _neighbourhoods(probe.tip_distance_um[live])
        below = level[live] - _median_of(level[live], near)
        share = alike[live] / np.maximum(_median_of(alike[live], near), 0.2)
        dead[live] |= (below < MUTE_DB) | ((below < QUIET_DB) & (share < LONE))
        next_to = _neighbourhoods(probe.tip_distance_um[live], reach_um=0.0)
        above = high[live] - np.maximum(_median_of(high[live], near), _median_of(high[live], next_to))
        noisy[live] = (above > SHOUTING_DB) | ((above > LOUD_DB) & (share < APART))
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
        if members.size < 3 * OUTSIDE_ROWS:
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


def _likeness(cross: Mapping[str, AnyArray], probe: Probe) -> FloatArray:
    """Median coherency ``(C,)`` of each contact with those of its shank within 150 um, in the gamma band."""
    name = next((band for band in ("gamma", "theta", "delta") if band in cross), None)
    if name is None:
        return np.ones(len(probe.contact_id))
    near = np.abs(probe.tip_distance_um[:, None] - probe.tip_distance_um) <= 150.0
    near &= probe.shank[:, None] == probe.shank
    np.fill_diagonal(near, False)
    size = np.where(near, np.nan_to_num(coherency_size(cross[name])), np.nan)
    lonely = ~near.any(axis=1)
    size[lonely] = 0.0
    return np.asarray(np.nanmedian(size, axis=1), float)


def _neighbourhoods(tip_distance_um: FloatArray, reach_um: float = REACH_UM) -> BoolArray:
    """Which contacts ``(n, n)`` each is judged against: those within reach, and at least the nearest four."""
    distance = np.abs(tip_distance_um[:, None] - tip_distance_um)
    np.fill_diagonal(distance, np.inf)
    reach = np.maximum(np.sort(distance, axis=1)[:, 3], reach_um)
    near: BoolArray = distance <= reach[:, None]
    return near


def _median_of(values: FloatArray, near: BoolArray) -> FloatArray:
    return np.asarray(np.nanmedian(np.where(near, values, np.nan), axis=1), float)


def _running_median(values: FloatArray, width: int = 5) -> FloatArray:
    padded = np.pad(values, width // 2, mode="edge")
    return np.asarray(np.nanmedian(np.lib.stride_tricks.sliding_window_view(padded, width), axis=1), float)
