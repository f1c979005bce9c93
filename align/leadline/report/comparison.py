"""The picture of a comparison: two readings of every penetration side by side, and the depth between them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.report import style
from leadline.report.lanes import GAP_STEPS

if TYPE_CHECKING:
    import pandas as pd

    from leadline.base.arrays import FloatArray
    from leadline.model.atlas import Structures
    from leadline.pipeline.compare import Comparison

FEWEST_FOR_NAME = 0.02


def draw_comparison(found: Comparison, structures: Structures | None) -> Any:
    """Strips of regions by tip distance, the first reading left and the second right, with what lies between.

    ``structures`` gives the regions' colours; without it they are drawn in turn. Returns a matplotlib figure.
    """
    by = [name for name in ("penetration", "shank_1") if name in found.rows.columns]
    parts = [part for _, part in found.rows.groupby(by, sort=False)]
    colour = _colours(found, structures)
    with style.drawing():
        figure = style.new_figure(max(3.6, 3.1 * len(parts)), 6.6)
        axes = np.atleast_2d(figure.subplots(1, 3 * len(parts), width_ratios=[0.7, 1.1, 0.7] * len(parts)))[0]
        for k, part in enumerate(parts):
            first, middle, second = axes[3 * k : 3 * k + 3]
            rows = part.sort_values(_tip(part), kind="stable")
            _strip(first, rows, "region_1", colour, found.first)
            _between(middle, rows)
            _strip(second, rows, "region_2", colour, found.second)
            several = "shank_1" in by and found.rows["shank_1"].nunique() > 1
            shank = f" / {rows['shank_1'].iloc[0]}" if several else ""
            middle.set_title(f"{rows['penetration'].iloc[0]}{shank}")
            first.set_ylabel("distance from the tip (um)")
            for axis in (middle, second):
                axis.sharey(first)
                axis.tick_params(axis="y", left=False, labelleft=False)
        figure.suptitle(_headline(found), fontsize=9)
    return figure


def _tip(rows: pd.DataFrame) -> str:
    return "tip_distance_um_1" if "tip_distance_um_1" in rows.columns else "tip_distance_um"


def _colours(found: Comparison, structures: Structures | None) -> dict[str, str]:
    names = list(dict.fromkeys([*found.rows.get("region_1", ()), *found.rows.get("region_2", ())]))
    turn = dict(zip(names, (style.CATEGORIES[k % len(style.CATEGORIES)] for k in range(len(names))), strict=True))
    known = {} if structures is None else {row.acronym: row.colour for row in structures.rows}
    return {name: known.get(name, "#ffffff" if name == "outside" else turn[name]) for name in names}


def _strip(axis: Any, rows: pd.DataFrame, column: str, colour: dict[str, str], title: str) -> None:
    tip = rows[_tip(rows)].to_numpy(float)
    if column in rows.columns:
        heights = np.unique(tip)
        named = rows.groupby(_tip(rows))[column].first()
        for bank in _banks(heights):
            names, edges = named.loc[bank.tolist()].to_numpy(object), _edges(bank)
            start = 0
            for stop in [*(np.flatnonzero(names[1:] != names[:-1]) + 1), len(names)]:
                name, low, high = str(names[start]), edges[start], edges[stop]
                axis.axhspan(low, high, color=colour[name], lw=0)
                if high - low > FEWEST_FOR_NAME * np.ptp(heights):
                    axis.text(0.5, (low + high) / 2, name, ha="center", va="center", fontsize=7, fontweight="bold",
                              color=style.readable_on(colour[name]), clip_on=True)  # fmt: skip
                start = stop
    axis.set(xlim=(0, 1), xticks=[])
    axis.set_title(title if len(title) < 13 else title[:12] + "…", fontsize=7.5)


def _between(axis: Any, rows: pd.DataFrame) -> None:
    """Second less first, by contact; grey where the regions agree, orange where they do not."""
    tip = rows[_tip(rows)].to_numpy(float)
    same = np.ones(len(rows), bool)
    if {"region_1", "region_2"} <= set(rows.columns):
        same = (rows["region_1"] == rows["region_2"]).to_numpy()
    depth: FloatArray = np.zeros(len(rows))
    if {"track_depth_um_1", "track_depth_um_2"} <= set(rows.columns):
        depth = rows["track_depth_um_2"].to_numpy(float) - rows["track_depth_um_1"].to_numpy(float)
    axis.axvline(0.0, color=style.FAINT, lw=1)
    axis.scatter(depth[same], tip[same], s=5, color=style.SOFT, label="same region")
    axis.scatter(depth[~same], tip[~same], s=7, color="#d55e00", marker="D", label="other region")
    reach = max(50.0, 1.15 * float(np.nanmax(np.abs(depth), initial=0.0)))
    axis.set(xlim=(-reach, reach), xlabel="deeper by (um)")
    axis.locator_params(axis="x", nbins=3)
    if not same.all():
        axis.legend(loc="upper center", bbox_to_anchor=(0.5, -0.07), handletextpad=0)


def _banks(heights: FloatArray) -> list[FloatArray]:
    """Heights in blocks without wide gaps: between two banks of sites nothing was recorded."""
    step = np.diff(heights)
    wide = step > GAP_STEPS * (np.median(step) if step.size else 1.0)
    return list(np.split(heights, np.flatnonzero(wide) + 1))


def _edges(heights: FloatArray) -> FloatArray:
    if len(heights) == 1:
        return np.array([heights[0] - 10.0, heights[0] + 10.0])
    middle = (heights[1:] + heights[:-1]) / 2
    return np.concatenate([[2 * heights[0] - middle[0]], middle, [2 * heights[-1] - middle[-1]]])


def _headline(found: Comparison) -> str:
    words = [f"{found.first} and {found.second}: {len(found.rows)} channels"]
    if found.difference.depth_abs_median_um is not None:
        words.append(f"median depth difference {found.difference.depth_abs_median_um:.0f} um")
    for name, agreement in found.agreement.items():
        kappa = "" if agreement.kappa is None else f" (kappa {agreement.kappa:.2f})"
        words.append(f"same {name.replace('_', ' ')} {100 * agreement.share:.0f} %{kappa}")
    return "\n".join(words)
