"""The section of a shank: tissue, strata, ties, physiology and odds on one depth scale, for pages and papers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.report import lanes, style

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from leadline.base.arrays import FloatArray
    from leadline.model.atlas import Atlas
    from leadline.report.findings import Findings, Shank

ABOVE_UM, BELOW_UM = 250.0, 250.0
HEIGHT_IN = 7.2


@dataclass(frozen=True, slots=True, eq=False)
class Scale:
    """The common vertical scale of a section: track depth in um, growing downward.

    Contacts are drawn at ``reach_um`` less their tip distance, so that ties are level where tissue and shank agree.
    """

    top_um: float
    bottom_um: float
    reach_um: float

    def of_tip(self, tip_distance_um: FloatArray) -> FloatArray:
        """Height of places on the shank."""
        return self.reach_um - np.asarray(tip_distance_um, float)


def scale_of(shank: Shank) -> Scale:
    """The scale that shows the whole track and every contact."""
    rows = shank.channels
    reach = float((rows["track_depth_um"] + rows["tip_distance_um"]).median())
    shown = np.concatenate([rows["track_depth_um"].to_numpy(float), reach - rows["tip_distance_um"].to_numpy(float)])
    assert shank.track is not None
    top = min(0.0, float(np.nanmin(shown))) - ABOVE_UM
    return Scale(top, max(shank.track.length_um, float(np.nanmax(shown))) + BELOW_UM, reach)


def draw_section(findings: Findings, shank: Shank) -> Any:
    """The section of a located shank as a matplotlib figure."""
    scale, atlas = scale_of(shank), findings.bench.atlas
    panels = _panels(findings, shank, scale, atlas)
    with style.drawing():
        figure = style.new_figure(1.0 + sum(width for width, _ in panels), HEIGHT_IN)
        axes = figure.subplots(1, len(panels), sharey=True, gridspec_kw={"width_ratios": [w for w, _ in panels]})
        for axis, (_, draw) in zip(axes, panels, strict=True):
            draw(axis)
            axis.set_ylim(scale.bottom_um, scale.top_um)
            axis.tick_params(axis="y", left=axis is axes[0], labelleft=axis is axes[0])
            axis.spines["left"].set_visible(axis is axes[0])
        axes[0].set_ylabel("track depth (um), 0 at the brain surface")
        tip = axes[-1].secondary_yaxis("right", functions=(scale.of_tip, scale.of_tip))
        tip.set_ylabel("distance from the tip (um)", rotation=270, va="bottom")
        figure.get_layout_engine().set(w_pad=0.01, wspace=0.03)
    return figure


def _panels(findings: Findings, shank: Shank, scale: Scale, atlas: Atlas) -> list[tuple[float, Callable[[Any], None]]]:
    """Width in inches and painter of every lane, from left to right."""
    panels: list[tuple[float, Callable[[Any], None]]] = [
        (1.25, lambda axis: lanes.tissue(axis, findings.bench, shank, scale)),
        (0.95, lambda axis: lanes.strata(axis, shank, scale, atlas)),
        (1.2, lambda axis: lanes.ties(axis, shank, scale)),
    ]
    panels += [(1.25, draw) for draw in lanes.images(shank, scale)]
    panels += [(0.8, draw) for draw in lanes.curves(shank, scale)]
    panels.append((1.6, lambda axis: lanes.odds(axis, shank, scale, atlas)))
    return panels


def write_sections(findings: Findings, folder: Path, suffixes: tuple[str, ...] = (".svg", ".pdf")) -> list[Path]:
    """Write the section of every located shank as ``section_NAME`` in each format; returns the files."""
    written = []
    for name, number in findings.shanks():
        shank = findings.shank(name, number)
        if not shank.located:
            continue
        figure = draw_section(findings, shank)
        stem = f"section_{name}_shank{number}" if shank.of_several else f"section_{name}"
        for suffix in suffixes:
            style.save(figure, folder / (stem + suffix))
            written.append(folder / (stem + suffix))
    return written
