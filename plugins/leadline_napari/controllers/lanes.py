"""Physiology lanes of one shank, from its profile and its spectra."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.model.profile import FEATURE_BY_NAME
from leadline_napari.states import Lane
from leadline_napari.style import lookup

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.base.arrays import AnyArray, FloatArray
    from leadline.model.profile import Profile
    from leadline.model.spectra import Spectra

UNITS = (
    ("_ua_per_mm3", "uA/mm³"), ("_per_100um", "/100 um"), ("_uv2_per_hz", "uV²/Hz"), ("_db", "dB"), ("_hz", "Hz"),
    ("_uv", "uV"), ("_rad", "rad"), ("_s", "s"),
)  # fmt: skip
TITLES = {
    "ripple_power_db": "Ripple power",
    "high_frequency_power_db": "Fast power",
    "unit_density_per_100um": "Unit density",
    "spike_amplitude_uv": "Spike size",
    "crossing_density_hz_per_100um": "Spike density",
    "crossing_amplitude_uv": "Crossing depth",
    "theta_coherence": "Theta coherence",
    "neighbour_correlation": "Neighbour corr.",
    "neighbour_coherence": "Neighbour coh.",
    "evoked_csd_ua_per_mm3": "Evoked CSD",
    "evoked_amplitude_uv": "Evoked size",
    "evoked_latency_s": "Evoked latency",
    "sink_latency_s": "Sink latency",
    "evoked_rate_hz": "Evoked spikes",
}
SHOWN_FIRST = ("lfp_power", "csd", "ripple_power_db", "unit_density_per_100um", "spike_amplitude_uv")
RANGE = (2.0, 98.0)


def lanes_of(profile: Profile | None, spectra: Spectra | None, shank: int) -> tuple[Lane, ...]:
    """Every lane that can be shown of a shank, those shown by default first."""
    lanes: list[Lane] = []
    if spectra is not None:
        lanes += _pictures(spectra, shank)
    if profile is not None:
        for name, values in profile.features.items():
            if np.isfinite(values).any():
                lanes.append(_curve(name, profile.tip_distance_um, values))
    order = {name: i for i, name in enumerate(SHOWN_FIRST)}
    return tuple(sorted(lanes, key=lambda lane: order.get(lane.name, len(order))))


def with_range(lane: Lane, low_percent: float, high_percent: float) -> Lane:
    """The lane with its range set to percentiles of its values; a diverging one stays even about zero."""
    low, high = _range(lane.values, low_percent, high_percent)
    if lane.palette == "diverging":
        high = max(abs(low), abs(high))
        low = -high
    ranged = replace(lane, low=low, high=high)
    if lane.across is None:
        return replace(ranged, ticks=((0.0, _short(low)), (1.0, _short(high))))
    return _painted(ranged)


def _painted(lane: Lane) -> Lane:
    """The lane's picture: rows put on an even grid, the nearest row where one is near, nothing where none is."""
    assert lane.across is not None
    tip, values = _merged(lane.tip_um, lane.values)
    step = float(np.median(np.diff(tip))) if tip.size > 1 else 20.0
    grid = np.arange(tip[0], tip[-1] + step / 2, step)
    nearest = np.abs(tip[None, :] - grid[:, None]).argmin(axis=1)
    near = np.abs(tip[nearest] - grid) <= 1.5 * step
    shown = values[nearest]
    share = np.clip((shown - lane.low) / (lane.high - lane.low), 0, 1)
    rgba = np.zeros((*shown.shape, 4), np.uint8)
    rgba[..., :3] = lookup(lane.palette)[np.nan_to_num(share * 255).astype(np.uint8)]
    rgba[..., 3] = np.where(np.isfinite(shown) & near[:, None], 255, 0)
    picture = (float(grid[0] - step / 2), float(grid[-1] + step / 2))
    return replace(lane, rgba=np.ascontiguousarray(rgba[::-1]), picture_um=picture, ticks=_ticks(lane))


def _merged(tip_um: FloatArray, values: AnyArray) -> tuple[FloatArray, AnyArray]:
    """Rows of one tip distance (staggered columns) as their mean."""
    tip, row = np.unique(tip_um, return_inverse=True)
    if tip.size == tip_um.size:
        return tip, values[np.argsort(tip_um, kind="stable")]
    total = np.zeros((tip.size, values.shape[1]))
    count = np.zeros((tip.size, values.shape[1]))
    np.add.at(total, row, np.nan_to_num(values))
    np.add.at(count, row, np.isfinite(values))
    return tip, np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _ticks(lane: Lane) -> tuple[tuple[float, str], ...]:
    assert lane.across is not None
    low, high = float(lane.across[0]), float(lane.across[-1])
    if lane.across_log:
        low = max(low, 1e-3)
        wanted = [v for v in (1, 4, 12, 40, 150, 600) if low <= v <= high]
        return tuple((float(np.log(v / low) / np.log(high / low)), f"{v:g}") for v in wanted)
    wanted = [v for v in (0, 100, 200, 300) if low <= v <= high]
    return tuple(((v - low) / (high - low), f"{v:g}") for v in wanted)


def _short(value: float) -> str:
    return f"{value:.3g}" if abs(value) < 1e4 else f"{value:.0f}"


def chosen(lanes: Sequence[Lane], names: Sequence[str]) -> tuple[Lane, ...]:
    """Lanes by name, in that order; those that this shank lacks are left out."""
    by_name = {lane.name: lane for lane in lanes}
    return tuple(by_name[name] for name in names if name in by_name)


def _curve(name: str, tip_um: FloatArray, values: FloatArray) -> Lane:
    feature = FEATURE_BY_NAME[name]
    low, high = (-np.pi, np.pi) if feature.circular else _range(values, 0.0, 100.0)
    words = TITLES.get(name, feature.words[0].upper() + feature.words[1:])
    palette = "cyclic" if feature.circular else "sequential"
    ticks = ((0.0, _short(low)), (1.0, _short(high)))
    return Lane(name, words, _unit(name), tip_um, values, low, high, palette=palette, ticks=ticks)


def _pictures(spectra: Spectra, shank: int) -> list[Lane]:
    rows = np.flatnonzero(spectra.shank == shank)
    tip = spectra.tip_distance_um[rows]
    lanes = []
    if spectra.frequency_hz.size and rows.size:
        power = 10 * np.log10(np.maximum(spectra.power_uv2_per_hz[rows], 1e-12))
        # Each frequency against its own mean over depth: the fall of power with frequency would hide all else.
        there = np.isfinite(power)
        mean = np.nansum(power, axis=0, keepdims=True) / np.maximum(there.sum(axis=0, keepdims=True), 1)
        relative = power - mean
        lane = Lane(
            "lfp_power", "LFP power", "dB", tip, relative, 0.0, 1.0,
            across=spectra.frequency_hz, across_unit="Hz", across_log=True,
        )  # fmt: skip
        lanes.append(with_range(lane, *RANGE))
    if spectra.time_s.size and rows.size and np.isfinite(spectra.csd_ua_per_mm3[rows]).any():
        time_ms = spectra.time_s * 1000.0
        for name, title, unit, values in (
            ("csd", "Current sinks", "uA/mm³", spectra.csd_ua_per_mm3[rows]),
            ("evoked", "Evoked potential", "uV", spectra.evoked_uv[rows]),
        ):
            lane = Lane(
                name, title, unit, tip, values, -1.0, 1.0, across=time_ms, across_unit="ms", palette="diverging"
            )
            lanes.append(with_range(lane, *RANGE))
    return lanes


def _range(values: AnyArray, low_percent: float, high_percent: float) -> tuple[float, float]:
    there = values[np.isfinite(values)]
    if not there.size:
        return 0.0, 1.0
    low, high = (float(v) for v in np.percentile(there, [low_percent, high_percent]))
    return (low, high) if high > low else (low - 0.5, low + 0.5)


def _unit(name: str) -> str:
    return next((unit for suffix, unit in UNITS if name.endswith(suffix)), "")
