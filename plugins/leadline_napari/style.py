"""Colours of the screens: few, calm, told apart by colour-blind readers, in light and dark.

The set is that of Okabe & Ito (2008), "Color Universal Design"; atlas colours are the atlas's own.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray

ORANGE = "#e69f00"
SKY = "#56b4e9"
BLUE = "#0072b2"
VERMILION = "#d55e00"
PINK = "#cc79a7"
OUTSIDE_RGB = (116, 122, 131)
CATEGORIES = (ORANGE, SKY, "#009e73", "#f0e442", BLUE, VERMILION, PINK)
NO_VALUE = "#8a8f98"

# Role -> (dark, light). The anchor in hand, a user's anchor, an accepted suggestion, one of brain.toml, an open
# suggestion, a second reader's.
TIES = {
    "held": ("#ffffff", "#000000"),
    "user": (SKY, BLUE),
    "auto": ("#f28e5c", VERMILION),
    "fixed": ("#8a8f98", "#5b626d"),
    "suggested": (ORANGE, "#a66f00"),
    "second": ("#a78bfa", "#5e3c99"),
}
STAGE_MARKS = {"done": "●", "changed": "◐", "missing": "○", "running": "◌"}


@dataclass(frozen=True, slots=True)
class Theme:
    """Colours of one appearance, as hexadecimal text."""

    dark: bool
    paper: str
    ink: str
    soft: str
    faint: str
    accent: str
    warning: str

    def tie(self, kind: str) -> str:
        """Colour of a kind of anchor."""
        return TIES[kind][0 if self.dark else 1]


DARK = Theme(True, "#1b1d22", "#eceef1", "#a3a9b3", "#3a3e47", SKY, "#f0b429")
LIGHT = Theme(False, "#fbfaf8", "#1d2733", "#5d6672", "#d5d8dc", BLUE, "#9a5b00")


def rgb_of(colour: str) -> tuple[int, int, int]:
    """``#rrggbb`` as three bytes."""
    return int(colour[1:3], 16), int(colour[3:5], 16), int(colour[5:7], 16)


def ink_on(rgb: tuple[int, int, int]) -> str:
    """Black or white, whichever reads better on ``rgb`` (WCAG 2.2 relative luminance)."""
    linear = [(c / 255 / 12.92) if c <= 10 else ((c / 255 + 0.055) / 1.055) ** 2.4 for c in rgb]
    light = 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]
    return "#000000" if light > 0.18 else "#ffffff"


def stretch_rgb(stretch: FloatArray, dark: bool) -> AnyArray:
    """Tint ``(n, 3)`` of the tie band: blue where the tissue is drawn out, orange where it is pressed together."""
    amount = np.clip(np.log2(np.asarray(stretch, float)) / np.log2(1.35), -1, 1)
    middle = np.array(rgb_of(DARK.paper if dark else LIGHT.paper), float)
    blue, orange = np.array(rgb_of("#2f7fc1"), float), np.array(rgb_of("#dc7a1e"), float)
    end = np.where(amount[:, None] > 0, blue, orange)
    share = np.abs(amount)[:, None] ** 0.8 * 0.75
    return np.asarray(middle + (end - middle) * share, np.uint8)


# Nunez, Anderton & Renslow (2018), PLoS ONE 13, e0199239: cividis, every 32nd of its 256 entries.
_CIVIDIS = (
    "#00224e",
    "#123570",
    "#3b496c",
    "#575d6d",
    "#707173",
    "#8a8678",
    "#a59c74",
    "#c3b369",
    "#e1cc55",
    "#fee838",
)
_TWO_SIDED = ("#1f6fb5", "#5e9fd0", "#a9cbe4", "#f3f1ec", "#edc28f", "#dc8f3c", "#b55f0a")
_ROUND = ("#e2d9e2", "#9ebbc9", "#6785be", "#5e43a5", "#2f1436", "#5f1d4b", "#a5455d", "#c98a77", "#e2d9e2")


def lookup(palette: str) -> AnyArray:
    """Colours ``(256, 3)`` uint8 of a palette: 'sequential', 'diverging' (blue is low, a sink) or 'cyclic'."""
    stops = {"sequential": _CIVIDIS, "diverging": _TWO_SIDED, "cyclic": _ROUND}[palette]
    values = np.array([rgb_of(c) for c in stops], float)
    at = np.linspace(0, len(stops) - 1, 256)
    return np.stack([np.interp(at, np.arange(len(stops)), values[:, k]) for k in range(3)], axis=1).astype(np.uint8)
