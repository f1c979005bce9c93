"""How figures look: one set of colours that colour-blind readers can tell apart, text that stays text."""

from __future__ import annotations

from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from leadline.base.atomic import whole_file

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

# Okabe & Ito (2008), "Color Universal Design": told apart by all common kinds of colour vision.
CATEGORIES = ("#0072b2", "#e69f00", "#009e73", "#cc79a7", "#56b4e9", "#d55e00", "#b8a800")
OTHER = "#8a8f98"
INK = "#1d2733"
SOFT = "#68737f"
FAINT = "#d5dae0"
ACCENT = "#0072b2"
SEQUENTIAL = "cividis"  # Nunez, Anderton & Renslow (2018), PLoS ONE 13, e0199239
CYCLIC = "twilight"
FIGURE_SUFFIXES = (".png", ".svg", ".pdf")
_RC = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans", "Arial", "Helvetica", "sans-serif"],
    "text.parse_math": False,  # names come from files; "$" is a letter in them
    "font.size": 8.0,
    "axes.titlesize": 8.5,
    "axes.titleweight": "bold",
    "axes.labelsize": 8.0,
    "axes.edgecolor": SOFT,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "text.color": INK,
    "xtick.color": SOFT,
    "ytick.color": SOFT,
    "xtick.labelsize": 7.0,
    "ytick.labelsize": 7.0,
    "legend.frameon": False,
    "legend.fontsize": 7.0,
    "svg.fonttype": "none",  # text stays text, to be edited in a drawing program
    "svg.hashsalt": "leadline",
    "pdf.fonttype": 42,
    "figure.dpi": 100,
    "savefig.dpi": 160,
}


@contextmanager
def drawing() -> Iterator[None]:
    """Draw with this style and without a screen."""
    import matplotlib as mpl

    with mpl.rc_context(_RC):
        yield


def new_figure(width_in: float, height_in: float) -> Any:
    """A figure that belongs to no screen."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width_in, height_in), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def save(figure: Any, path: Path) -> None:
    """Write a figure as PNG, SVG or PDF, whole or not at all; the same figure gives the same bytes."""
    suffix = path.suffix.lower()
    metadata = {".svg": {"Date": None}, ".pdf": {"CreationDate": None, "ModDate": None}}.get(suffix)
    with drawing(), whole_file(path) as part:
        figure.savefig(part, metadata=metadata, facecolor="white")


def readable_on(colour: str) -> str:
    """Black or white, whichever is easier to read on ``colour``, by the relative luminance of WCAG 2.

    Examples
    --------
    >>> readable_on("#ffff00"), readable_on("#0072b2")
    ('#1d2733', '#ffffff')
    """
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    luminance = 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]
    return INK if luminance > 0.3 else "#ffffff"
