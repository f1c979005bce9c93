"""The lanes of a section: each painter draws one, on a scale of track depth."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.model.profile import FEATURE_BY_NAME
from leadline.report import style

if TYPE_CHECKING:
    from collections.abc import Callable

    import pandas as pd

    from leadline.base.arrays import AnyArray, Float32Array, FloatArray, IntArray
    from leadline.model.atlas import Atlas
    from leadline.model.volume import Stack
    from leadline.pipeline.bench import Bench
    from leadline.report.figures import Scale
    from leadline.report.findings import Shank

HALF_WIDTH_UM = 300.0
TISSUE_STEP_UM = 10.0
STRATA_STEP_UM = 5.0
STRETCH_BOUNDS = (0.8, 1.25)
STRETCH_COLOURS = {0: "#dfe5ea", 1: "#d55e00", -1: "#0072b2"}
STRETCH_WINDOW_UM = 200.0
MOST_CURVES = 5
SMALL_SHARE = 0.02
LEAST_FOR_NAME = 0.017
GAP_STEPS = 5.0
# In order of what tells most about where a contact is; the first five that were measured are drawn.
CURVES = (
    "ripple_power_db",
    "unit_density_per_100um",
    "spike_amplitude_uv",
    "crossing_density_hz_per_100um",
    "theta_power_db",
    "gamma_power_db",
    "neighbour_correlation",
    "spike_rate_hz",
    "high_frequency_power_db",
    "evoked_latency_s",
    "delta_power_db",
)


def tissue(axis: Any, bench: Bench, shank: Shank, scale: Scale) -> None:
    """The stack resampled along the curved track, so that the anatomy stands straight; dye in orange."""
    assert shank.track is not None
    depth = np.arange(scale.top_um, scale.bottom_um, TISSUE_STEP_UM)
    offsets = np.arange(-HALF_WIDTH_UM, HALF_WIDTH_UM + 1, TISSUE_STEP_UM)
    points = shank.track.stack_at(depth)
    grey = _windowed(_straight(bench.background, points, offsets), 1.0, 99.5)
    picture = np.repeat(grey[..., None], 3, axis=2)
    if bench.dye is not None:
        dye = _windowed(_straight(bench.dye, points, offsets), 60.0, 99.8)[..., None]
        picture = picture * (1 - dye) + dye * np.array([1.0, 0.62, 0.0])
    extent = (-HALF_WIDTH_UM, HALF_WIDTH_UM, scale.bottom_um, scale.top_um)
    axis.imshow(np.clip(picture, 0, 1), extent=extent, aspect="auto", interpolation="bilinear")
    axis.axhline(0.0, color="white", lw=0.8, ls=(0, (4, 3)))
    axis.set(title="tissue", xticks=[-HALF_WIDTH_UM, 0, HALF_WIDTH_UM], xlabel="across (um)")


def _straight(stack: Stack, points: FloatArray, offsets: FloatArray) -> Float32Array:
    from leadline.locating.section import sideways, straightened

    volume = stack.fitting(TISSUE_STEP_UM)
    return straightened(volume, points, sideways(points, volume.code, offsets))


def _windowed(values: Float32Array, low: float, high: float) -> FloatArray:
    """Grey values from 0 to 1 between two percentiles; black where there is no data."""
    known = values[np.isfinite(values)]
    if not known.size:
        return np.zeros(values.shape)
    floor, ceiling = np.percentile(known, [low, high])
    return np.asarray(np.nan_to_num(np.clip((values - floor) / max(ceiling - floor, 1e-9), 0, 1)), np.float64)


def strata(axis: Any, shank: Shank, scale: Scale, atlas: Atlas) -> None:
    """The atlas regions along the track, with the standard deviation of depth at every border."""
    assert shank.track is not None
    depth = np.arange(scale.top_um, scale.bottom_um, STRATA_STEP_UM)
    labels = atlas.label_at(shank.track.atlas_at(depth))
    for start, stop in _runs(labels):
        structure = atlas.structures[int(labels[start])]
        top, bottom = depth[start], depth[min(stop, len(depth) - 1)]
        if structure.id == 0:
            continue
        axis.axhspan(top, bottom, color=structure.colour, lw=0)
        if bottom - top > LEAST_FOR_NAME * (scale.bottom_um - scale.top_um):
            axis.text(0.5, (top + bottom) / 2, structure.acronym, ha="center", va="center", fontsize=7,
                      fontweight="bold", color=style.readable_on(structure.colour))  # fmt: skip
    borders = depth[np.flatnonzero(np.diff(labels)) + 1]
    by_depth = shank.channels.sort_values("track_depth_um")
    sd = np.interp(borders, by_depth["track_depth_um"], by_depth["track_depth_sd_um"])
    axis.hlines(borders, 0, 1, color="white", lw=0.8)
    axis.errorbar(
        np.full(len(borders), 0.92), borders, yerr=sd, fmt="none", ecolor=style.INK, elinewidth=0.9, capsize=1.8
    )
    axis.set(title="atlas", xlim=(0, 1), xticks=[], xlabel="borders ± sd")


def ties(axis: Any, shank: Shank, scale: Scale) -> None:
    """Lines from contacts to their places in the strata, tinted by local stretch; anchors bold, suggestions dashed."""
    assert shank.track is not None
    rows = shank.channels.dropna(subset=["track_depth_um"]).drop_duplicates("tip_distance_um")
    tip, depth = rows["tip_distance_um"].to_numpy(float), rows["track_depth_um"].to_numpy(float)
    right, stretch = scale.of_tip(tip), local_stretch(tip, depth)
    kind = (stretch[:-1] > STRETCH_BOUNDS[1]).astype(int) - (stretch[:-1] < STRETCH_BOUNDS[0]).astype(int)
    for start, stop in _runs(kind):
        left_edge, right_edge = depth[start : stop + 1], right[start : stop + 1]
        heights = np.concatenate([left_edge, right_edge[::-1]])
        across = np.concatenate([np.zeros(len(left_edge)), np.ones(len(right_edge))])
        axis.fill(across, heights, color=STRETCH_COLOURS[int(kind[start])], alpha=0.85, lw=0)
    for i in range(0, len(tip), max(1, len(tip) // 24)):
        axis.plot([0, 1], [depth[i], right[i]], color="white", lw=0.7)
    for anchor in shank.anchors:
        ends = [anchor.track_depth_um, float(scale.of_tip(np.array(anchor.tip_distance_um)))]
        axis.plot([0, 1], ends, color=style.INK, lw=1.6, marker="o", ms=3.5, clip_on=False)
    for suggestion in shank.suggestions:
        a = suggestion.anchor
        ends = [a.track_depth_um, float(scale.of_tip(np.array(a.tip_distance_um)))]
        axis.plot([0, 1], ends, color=style.INK, lw=1.0, ls=(0, (3, 2)), clip_on=False)
    axis.plot([1], scale.of_tip(np.zeros(1)), marker="v", ms=5, color=style.SOFT, clip_on=False)
    axis.plot([0], [shank.track.length_um], marker="v", ms=5, color="#ff9e00", clip_on=False)
    axis.set(title="ties", xlim=(0, 1), xticks=[0, 1], xticklabels=["track", "shank"])
    axis.set_xlabel("▼ end of dye, tip; orange,\nblue: stretch > 1.25, < 0.8", fontsize=6.2)


def local_stretch(tip_distance_um: FloatArray, track_depth_um: FloatArray) -> FloatArray:
    """Atlas um per probe um at every contact, by the slope of a line through the contacts within 100 um."""
    found = np.ones(len(tip_distance_um))
    for i, here in enumerate(tip_distance_um):
        near = np.abs(tip_distance_um - here) <= STRETCH_WINDOW_UM / 2
        if near.sum() >= 2:
            found[i] = -np.polyfit(tip_distance_um[near] - here, track_depth_um[near], 1)[0]
    return found


def images(shank: Shank, scale: Scale) -> list[Callable[[Any], None]]:
    """Painters of the pictures that the recording has: power by frequency, response to events."""
    spectra = shank.spectra
    if spectra is None:
        return []
    rows = np.flatnonzero(spectra.shank == shank.shank)
    height = scale.of_tip(spectra.tip_distance_um[rows])
    found: list[Callable[[Any], None]] = []
    power = spectra.power_uv2_per_hz[rows]
    if power.size and np.isfinite(power).any():
        found.append(lambda axis: _spectrum(axis, height, spectra.frequency_hz, power))
    csd = spectra.csd_ua_per_mm3[rows]
    if csd.size and np.isfinite(csd).any():
        found.append(lambda axis: _sinks(axis, height, spectra.time_s, csd, spectra.event_kind))
    return found


def _spectrum(axis: Any, height: FloatArray, frequency_hz: FloatArray, power: Float32Array) -> None:
    """Power relative to the shank's median at each frequency, in dB: the fall with frequency is taken out."""
    with np.errstate(divide="ignore", invalid="ignore"):
        decibel = 10 * np.log10(power)
    decibel = np.where(np.isfinite(decibel), decibel, np.nan)
    known = np.isfinite(decibel).any(axis=0)
    relative = decibel[:, known] - np.nanmedian(decibel[:, known], axis=0)
    limit = float(np.nanpercentile(np.abs(relative), 98)) or 1.0
    height, relative = with_gaps(height, relative)
    mesh = axis.pcolormesh(frequency_hz[known], height, relative, cmap="cividis", vmin=-limit, vmax=limit,
                           shading="nearest", rasterized=True)  # fmt: skip
    mesh.set_edgecolor("none")
    axis.set(title="LFP power", xscale="log", xlabel=f"Hz, ±{limit:.0f} dB")
    axis.xaxis.set_major_formatter("{x:g}")  # 100, not ten to the second: names are never taken for mathematics


def _sinks(axis: Any, height: FloatArray, time_s: FloatArray, csd: Float32Array, kind: str) -> None:
    limit = float(np.nanpercentile(np.abs(csd), 99)) or 1.0
    height, csd = with_gaps(height, csd)
    axis.pcolormesh(time_s * 1000, height, csd, cmap="RdBu", vmin=-limit, vmax=limit, shading="nearest",
                    rasterized=True)  # fmt: skip
    axis.axvline(0, color=style.INK, lw=0.6)
    axis.set(title="current sinks (red)", xlabel=f"ms after {kind or 'event'}")


def with_gaps(height: FloatArray, values: AnyArray) -> tuple[FloatArray, AnyArray]:
    """Rows (n,) and their values (n, ...), with NaN where neighbours are far apart: nothing was measured there."""
    step = np.diff(height)
    usual = np.median(np.abs(step)) if step.size else 0.0
    wide = np.flatnonzero(np.abs(step) > GAP_STEPS * usual)
    edges = np.stack([height[wide] + np.sign(step[wide]) * usual, height[wide + 1] - np.sign(step[wide]) * usual], 1)
    at = np.repeat(wide + 1, 2)
    return np.insert(height, at, edges.ravel()), np.insert(np.asarray(values, float), at, np.nan, axis=0)


def curves(shank: Shank, scale: Scale) -> list[Callable[[Any], None]]:
    """Painters of the features that the recording has, at most five."""
    profile = shank.profile
    if profile is None:
        return []
    height = scale.of_tip(profile.tip_distance_um)
    chosen = [name for name in CURVES if name in profile.features and np.isfinite(profile.features[name]).sum() > 1]
    return [
        lambda axis, name=name: _curve(axis, name, height, profile.features[name])  # type: ignore[misc]
        for name in chosen[:MOST_CURVES]
    ]


def _curve(axis: Any, name: str, height: FloatArray, values: FloatArray) -> None:
    feature = FEATURE_BY_NAME[name]
    known = np.isfinite(values)
    height, values = with_gaps(height[known], values[known])
    axis.plot(values, height, color=style.ACCENT if feature.group == "lfp" else "#b35900", lw=1.1)
    axis.margins(x=0.08)
    unit = name.rsplit("_", 1)[-1] if name.endswith(("_db", "_hz", "_uv", "_s")) else ""
    unit = "per 100 um" if name.endswith("per_100um") else {"db": "dB", "hz": "Hz", "uv": "uV"}.get(unit, unit)
    axis.set_title(feature.words.replace(" ", "\n", 1), fontsize=7.5)
    axis.set_xlabel(unit)
    axis.locator_params(axis="x", nbins=2)
    axis.grid(axis="y", color=style.FAINT, lw=0.5)


def odds(axis: Any, shank: Shank, scale: Scale, atlas: Atlas) -> None:
    """The probability of each region at every contact, as stacked ribbons, most likely depth first."""
    heights, ids, share = shares(shank.odds, shank.channels)
    heights, share = with_gaps(heights, share)
    y = scale.of_tip(heights)
    edges = _edges(y)
    left = np.zeros(len(y))
    for k, region in enumerate(ids):
        structure = atlas.structures[int(region)] if region >= 0 else None
        colour = style.OTHER if structure is None else "#ffffff" if structure.id == 0 else structure.colour
        right = left + share[:, k]
        axis.fill_betweenx(np.repeat(edges, 2)[1:-1], np.repeat(left, 2), np.repeat(right, 2), color=colour, lw=0.25,
                           edgecolor="white")  # fmt: skip
        likely = np.flatnonzero(share[:, k] > max(0.35, 0.9 * float(np.nanmax(share[:, k]))))
        room = abs(edges[likely.max() + 1] - edges[likely.min()]) if likely.size else 0.0
        if structure is not None and room > LEAST_FOR_NAME * (scale.bottom_um - scale.top_um):
            best = int(likely[len(likely) // 2])
            ink = style.SOFT if structure.id == 0 else style.readable_on(structure.colour)
            axis.text((left[best] + right[best]) / 2, y[best], structure.acronym, ha="center", va="center",
                      fontsize=6.5, color=ink, clip_on=True)  # fmt: skip
        left = right
    axis.set(title="odds of regions", xlim=(0, 1), xticks=[0, 0.5, 1], xlabel="probability")


def shares(odds_table: pd.DataFrame, channels: pd.DataFrame) -> tuple[FloatArray, IntArray, FloatArray]:
    """Tip distances (n,) ascending, region ids (k,) from the tip upward, probabilities (n, k).

    Contacts at one height are averaged. Regions that never reach 0.02 are pooled as id -1, at the end.
    """
    joined = odds_table.merge(channels[["channel", "tip_distance_um"]], on="channel")
    wide = joined.pivot_table(index="tip_distance_um", columns="region_id", values="probability", fill_value=0.0,
                              aggfunc="sum")  # fmt: skip
    contacts = joined.groupby("tip_distance_um")["channel"].nunique()
    wide = wide.div(contacts, axis=0)
    heights = wide.index.to_numpy(float)
    large = wide.columns[(wide.max() >= SMALL_SHARE).to_numpy()]
    centre = {c: float((wide[c] * heights).sum() / wide[c].sum()) for c in large}
    ordered = sorted(large, key=lambda c: centre[c])
    share = wide[ordered].to_numpy(float)
    rest = np.clip(1.0 - share.sum(axis=1, keepdims=True), 0.0, 1.0)
    ids = np.array([*ordered, -1], np.int64)
    return heights, ids, np.hstack([share, rest])


def _edges(y: FloatArray) -> FloatArray:
    """Borders (n + 1,) between neighbouring heights (n,)."""
    if len(y) == 1:
        return np.array([y[0] + 10.0, y[0] - 10.0])
    middle = (y[1:] + y[:-1]) / 2
    return np.concatenate([[2 * y[0] - middle[0]], middle, [2 * y[-1] - middle[-1]]])


def _runs(labels: IntArray) -> list[tuple[int, int]]:
    """(start, stop) of every run of one label."""
    cuts = [0, *(np.flatnonzero(np.diff(labels)) + 1).tolist(), len(labels)]
    return list(pairwise(cuts))
