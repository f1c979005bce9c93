"""One picture per penetration: what was recorded, by depth, the tip at the bottom."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.atomic import whole_file
from leadline.model.profile import FEATURE_BY_NAME

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from leadline.base.arrays import AnyArray, FloatArray
    from leadline.model.profile import Profile
    from leadline.model.spectra import Spectra

# Okabe & Ito's colours for all kinds of colour vision (jfly.uni-koeln.de, 2008; from memory)
BLUE, ORANGE, GREEN, RED, SKY, PINK = "#0072B2", "#E69F00", "#009E73", "#D55E00", "#56B4E9", "#CC79A7"
LANES: tuple[tuple[str, tuple[tuple[str, str], ...]], ...] = (
    (
        "band power\n(dB from its median)",
        (
            ("delta_power_db", BLUE),
            ("theta_power_db", GREEN),
            ("gamma_power_db", ORANGE),
            ("ripple_power_db", RED),
            ("high_frequency_power_db", PINK),
        ),
    ),
    (
        "likeness",
        (("theta_coherence", GREEN), ("neighbour_correlation", BLUE), ("neighbour_coherence", ORANGE)),
    ),
    ("theta phase (°)", (("theta_phase_rad", GREEN),)),
    ("units per 100 µm", (("unit_density_per_100um", BLUE),)),
    (
        "spikes/s per 100 µm",
        (("spike_rate_hz", RED), ("crossing_density_hz_per_100um", ORANGE), ("evoked_rate_hz", SKY)),
    ),
    ("spike amplitude (µV)", (("spike_amplitude_uv", PINK), ("crossing_amplitude_uv", ORANGE))),
)
SHORT = {
    "delta_power_db": "delta",
    "theta_power_db": "theta",
    "gamma_power_db": "gamma",
    "ripple_power_db": "ripple",
    "high_frequency_power_db": "high-frequency",
    "theta_coherence": "theta, with the reference",
    "neighbour_correlation": "neighbours, all bands",
    "neighbour_coherence": "neighbours, gamma",
    "spike_rate_hz": "all spikes",
    "spike_amplitude_uv": "units",
    "crossing_density_hz_per_100um": "threshold crossings",
    "crossing_amplitude_uv": "threshold crossings",
    "evoked_rate_hz": "added after events",
}
GAP = 2.5  # times the usual pitch; a wider step between rows is left white
FLAG_COLOUR = "#999999"


def draw_profiles(
    path: Path, profile: Profile, spectra: Spectra, boundaries: Sequence[tuple[int, float, str]] | None = None
) -> None:
    """Draw a penetration: spectrum, current sources, band powers, likeness of rows and units against tip distance.

    Parameters
    ----------
    path : PNG to write.
    profile, spectra : of one penetration, the same rows.
    boundaries : shank, tip distance of a border, and the name of what lies below it.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    shanks = np.unique(profile.shank)
    lanes = [lane for lane in LANES if any(_has(profile, name) for name, _ in lane[1])]
    maps = 1 + bool(spectra.time_s.size)
    widths = [2.2] * maps + [1.5] * len(lanes)
    size = (sum(widths) * 1.05 + 1.4, 1.7 + (5.5 if len(shanks) == 1 else 3.4 * len(shanks)))
    figure = Figure(figsize=size, dpi=110, layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.subplots(
        len(shanks), len(widths), squeeze=False, sharey="row", sharex="col", gridspec_kw={"width_ratios": widths}
    )
    _draw_spectra(axes[:, 0], profile, spectra, shanks)
    if maps == 2:
        _draw_sources(axes[:, 1], profile, spectra, shanks)
    for line, shank in zip(axes, shanks, strict=True):
        rows = np.flatnonzero(profile.shank == shank)
        for axis, (_, features) in zip(line[maps:], lanes, strict=True):
            _draw_lane(axis, profile, rows, features)
        _finish(line, profile, rows, [b for b in boundaries or () if b[0] == shank])
        line[0].set_ylabel("tip distance (µm)" if len(shanks) == 1 else f"shank {shank}: tip distance (µm)")
    for axis, bottom, (title, features) in zip(axes[0, maps:], axes[-1, maps:], lanes, strict=True):
        axis.set_title(title, fontsize=9)
        if len(features) > 1:
            bottom.legend(
                fontsize=6.5, loc="upper center", bbox_to_anchor=(0.5, -0.09), frameon=False, handlelength=1.2
            )
    figure.suptitle(f"Penetration {profile.penetration}", fontsize=11)
    with whole_file(path) as part:
        figure.savefig(part, format="png", metadata={"Software": None})


def _has(profile: Profile, name: str) -> bool:
    return name in profile.features and bool(np.isfinite(profile.features[name]).any())


def _blocks(tip_um: FloatArray) -> list[slice]:
    """Rows in stretches without gaps."""
    steps = np.diff(tip_um)
    cuts = np.flatnonzero(steps > GAP * np.median(steps)) + 1 if steps.size else np.zeros(0, int)
    edges = [0, *cuts.tolist(), len(tip_um)]
    return [slice(a, b) for a, b in pairwise(edges)]


def _edges(tip_um: FloatArray) -> FloatArray:
    """Edges ``(n + 1,)`` of the strips that stand for rows."""
    if len(tip_um) == 1:
        return np.array([tip_um[0] - 10.0, tip_um[0] + 10.0])
    middle = (tip_um[:-1] + tip_um[1:]) / 2
    return np.concatenate([[2 * tip_um[0] - middle[0]], middle, [2 * tip_um[-1] - middle[-1]]])


def _draw_map(axis: Any, across: FloatArray, tip_um: FloatArray, values: AnyArray, limit: float, colours: str) -> Any:
    image = None
    for block in _blocks(tip_um):
        image = axis.pcolormesh(
            across,
            _edges(tip_um[block]),
            np.ma.masked_invalid(values[block]),
            cmap=colours,
            vmin=-limit,
            vmax=limit,
            rasterized=True,
        )
    return image


def _draw_spectra(axes: AnyArray, profile: Profile, spectra: Spectra, shanks: AnyArray) -> None:
    """Power at each frequency against its own median over the shank, so that every frequency shows its pattern."""
    axes[0].set_title("power", fontsize=9)
    axes[-1].set_xlabel("frequency (Hz)", fontsize=8)
    axes[0].set_xscale("log")
    known = np.isfinite(spectra.power_uv2_per_hz).any(axis=0)
    if not known.any():
        return
    decibels = 10 * np.log10(np.maximum(spectra.power_uv2_per_hz[:, known].astype(float), 1e-9))
    contrast = np.full(decibels.shape, np.nan)
    for shank in shanks:
        rows = profile.shank == shank
        if np.isfinite(decibels[rows]).any():
            contrast[rows] = decibels[rows] - np.nanmedian(decibels[rows], axis=0)
    frequency = spectra.frequency_hz[known]
    edges = np.concatenate([[frequency[0] / 2 ** (1 / 16)], frequency * 2 ** (1 / 16)])
    limit = max(3.0, float(np.nanpercentile(np.abs(contrast), 98)))
    for axis, shank in zip(axes, shanks, strict=True):
        rows = profile.shank == shank
        image = _draw_map(axis, edges, profile.tip_distance_um[rows], contrast[rows], limit, "PuOr_r")
    _bar(axes, image, "dB from the median")


def _draw_sources(axes: AnyArray, profile: Profile, spectra: Spectra, shanks: AnyArray) -> None:
    axes[0].set_title(f"after {spectra.event_kind or 'events'}", fontsize=9, parse_math=False)
    axes[-1].set_xlabel("time (ms)", fontsize=8)
    density = spectra.csd_ua_per_mm3.astype(float)
    if not np.isfinite(density).any():
        return
    limit = max(1e-6, float(np.nanpercentile(np.abs(density), 99.5)))
    step = float(spectra.time_s[1] - spectra.time_s[0]) * 1e3
    edges = np.append(spectra.time_s * 1e3, spectra.time_s[-1] * 1e3 + step) - step / 2
    for axis, shank in zip(axes, shanks, strict=True):
        rows = profile.shank == shank
        image = _draw_map(axis, edges, profile.tip_distance_um[rows], density[rows], limit, "RdBu_r")
        axis.axvline(0, color="black", lw=0.6)
    _bar(axes, image, "sources (µA/mm³); blue: sink")


def _bar(axes: AnyArray, image: Any, label: str) -> None:
    bar = axes[0].figure.colorbar(image, ax=list(axes), location="bottom", aspect=16, pad=0.01, shrink=0.9)
    bar.set_label(label, fontsize=8)
    bar.ax.tick_params(labelsize=7)


def _draw_lane(axis: Any, profile: Profile, rows: AnyArray, features: tuple[tuple[str, str], ...]) -> None:
    tip_um = profile.tip_distance_um[rows]
    for name, colour in features:
        if not _has(profile, name):
            continue
        values = profile.features[name][rows]
        if name.endswith("_db"):
            values = values - np.nanmedian(values) if np.isfinite(values).any() else values
        for number, block in enumerate(_blocks(tip_um)):
            label = SHORT.get(name, FEATURE_BY_NAME[name].words) if number == 0 else None
            if FEATURE_BY_NAME[name].circular:
                axis.plot((np.degrees(values[block]) + 90) % 360 - 90, tip_um[block], ".", color=colour, ms=3)
                axis.set_xlim(-90, 270)
                axis.set_xticks([-90, 0, 90, 180, 270])
            else:
                axis.plot(values[block], tip_um[block], color=colour, lw=1.2, label=label)


def _finish(line: AnyArray, profile: Profile, rows: AnyArray, boundaries: list[tuple[int, float, str]]) -> None:
    """Grey bands over flagged rows, borders across all lanes, quiet axes."""
    tip_um = profile.tip_distance_um[rows]
    half = float(np.median(np.diff(tip_um))) / 2 if len(tip_um) > 1 else 10.0
    for axis in line:
        axis.tick_params(labelsize=7)
        axis.spines[["top", "right"]].set_visible(False)
        axis.set_ylim(tip_um[0] - 2 * half, tip_um[-1] + 2 * half)
        for i in rows:
            if profile.flags[int(i)]:
                at = profile.tip_distance_um[int(i)]
                axis.axhspan(at - half, at + half, color=FLAG_COLOUR, alpha=0.3, lw=0)
        for _, border_um, _ in boundaries:
            axis.axhline(border_um, color="black", lw=0.5, ls=(0, (4, 3)))
    room_um = 0.025 * (tip_um[-1] - tip_um[0])
    lowest_um = np.inf
    for _, border_um, name in sorted(boundaries, key=lambda b: -b[1]):
        if tip_um[0] <= border_um <= min(tip_um[-1] + 2 * half, lowest_um - room_um):
            lowest_um = border_um
            place = line[-1].get_yaxis_transform()
            line[-1].text(1.02, border_um, name, transform=place, fontsize=6.5, va="top", parse_math=False)
