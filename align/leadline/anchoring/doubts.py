"""What a user should know of a posterior, in sentences: disagreement, odd stretch, anchors that do not fit."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import FloatArray

if TYPE_CHECKING:
    from leadline.anchoring.evidence import ShankEvidence

SILENT_BELOW = 0.5
BEYOND_SD = 3.0
ANCHOR_SD = 2.5
STRETCH = (0.75, 1.35)
STRETCH_SPAN_UM = 400.0
NARROWED = 0.8
SHIFT_UM = 15.0


def doubts(
    shank: ShankEvidence, before_um: FloatArray, after_um: FloatArray, informed: float, expected_shift_um: float
) -> tuple[str, ...]:
    """Sentences about one shank. ``before_um``, ``after_um`` : draws ``(S, R)`` without and with the recording;
    ``expected_shift_um`` : by how much another seed would move the median."""
    if informed < SILENT_BELOW:
        return (
            f"the recording does not speak of the labels along this track (probability {informed:.2f}); depths stay "
            "with histology and anchors",
        )
    out = [*_disagreement(shank, before_um, after_um), *_stretch(shank, after_um), *_anchors(shank, after_um)]
    before, after = (np.diff(np.percentile(d, [16, 84], axis=0), axis=0).mean() / 2 for d in (before_um, after_um))
    if after > NARROWED * before:
        out.append(f"the recording hardly narrows the depth map (+-{after:.0f} um, without it +-{before:.0f} um)")
    if expected_shift_um > SHIFT_UM:
        out.append(
            f"so wide a posterior is drawn roughly: another seed would move depths by {expected_shift_um:.0f} um"
        )
    return tuple(out)


def _disagreement(shank: ShankEvidence, before_um: FloatArray, after_um: FloatArray) -> list[str]:
    """Where the recording and histology differ beyond what stretch allows."""
    low, middle, high = np.percentile(before_um, [16, 50, 84], axis=0)
    shift = np.median(after_um, axis=0) - middle
    score = np.abs(shift) / ((high - low) / 2)
    worst = int(score.argmax())
    if score[worst] < BEYOND_SD:
        return []
    way = "deeper" if shift[worst] > 0 else "shallower"
    return [
        f"the recording places contacts up to {abs(shift[worst]):.0f} um {way} than histology and anchors do (at tip "
        f"distance {shank.tip_distance_um[worst]:.0f} um), {score[worst]:.1f} times what stretch and the dye's end "
        "usually explain; check the tip offset, the dye's end and the registration there"
    ]


def _stretch(shank: ShankEvidence, after_um: FloatArray) -> list[str]:
    """Stretches of the median map that tissue seldom shows."""
    tip, depth = shank.tip_distance_um, np.median(after_um, axis=0)
    if np.ptp(tip) < STRETCH_SPAN_UM:
        return []
    starts = np.arange(tip[0], tip[-1] - STRETCH_SPAN_UM + 1, 50.0)
    slope = (np.interp(starts, tip, depth) - np.interp(starts + STRETCH_SPAN_UM, tip, depth)) / STRETCH_SPAN_UM
    odd = int(np.abs(np.log(slope)).argmax())
    if STRETCH[0] <= slope[odd] <= STRETCH[1]:
        return []
    return [
        f"between tip distances {starts[odd]:.0f} and {starts[odd] + STRETCH_SPAN_UM:.0f} um, 1 um of probe is "
        f"{slope[odd]:.2f} um of track, more than tissue usually stretches or shrinks"
    ]


def _anchors(shank: ShankEvidence, after_um: FloatArray) -> list[str]:
    """Anchors that the recording, or other anchors, pull away from."""
    out = []
    for anchor in shank.anchors:
        here = float(np.interp(anchor.tip_distance_um, shank.tip_distance_um, np.median(after_um, axis=0)))
        miss = here - anchor.track_depth_um
        if abs(miss) > ANCHOR_SD * anchor.sd_um:
            name = f" '{anchor.landmark or anchor.note}'" if anchor.landmark or anchor.note else ""
            way = "deeper" if miss > 0 else "shallower"
            out.append(
                f"the anchor{name} at tip distance {anchor.tip_distance_um:g} um disagrees with the rest: everything "
                f"else places that contact {abs(miss):.0f} um {way} ({abs(miss) / anchor.sd_um:.1f} of its sd)"
            )
    return out
