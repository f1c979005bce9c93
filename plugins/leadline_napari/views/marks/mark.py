"""What every lane's item shares: its place on the scale, and fonts."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pyqtgraph as pg
from qtpy.QtCore import QRectF, Qt
from qtpy.QtGui import QFontMetricsF, QPaintEngine

if TYPE_CHECKING:
    from qtpy.QtGui import QPainter

    from leadline_napari.style import Theme

LABEL_PT = 8.0
SMALLEST_PT = 6.0
NARROW = 75  # per cent of the usual width of letters, where there is little room


class Mark(pg.GraphicsObject):
    """An item that spans its lane: x from 0 to 1, y in um of track depth; ``end_um`` is level with the tip."""

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self.theme = theme
        self.end_um = 0.0
        self._top, self._bottom = 0.0, 1.0

    def set_extent(self, top_um: float, bottom_um: float, end_um: float) -> None:
        """Say what part of the track is shown."""
        if (top_um, bottom_um, end_um) != (self._top, self._bottom, self.end_um):
            self.prepareGeometryChange()
            self._top, self._bottom, self.end_um = top_um, bottom_um, end_um

    def seen(self) -> tuple[float, float]:
        """The part of the scale that is in view: vector figures do not cut off what lies beyond it."""
        box = self.getViewBox()
        low, high = box.viewRange()[1] if box is not None else (self._top, self._bottom)
        return max(low, self._top), min(high, self._bottom)

    def clear(self) -> None:
        """Draw nothing."""
        for name in ("tissue", "image", "strata", "band", "sites", "ribbon", "lane"):
            if hasattr(self, name):
                setattr(self, name, None)
        self.update()

    def boundingRect(self) -> QRectF:
        """The whole lane."""
        return QRectF(0.0, self._top, 1.0, self._bottom - self._top)

    def fitted(self, painter: QPainter, text: str, width: float) -> str:
        """Set the largest font, down to 6 pt and condensed, in which ``text`` fits ``width``; the text, cut only where
        even that is too wide."""
        font = painter.font()
        # SVG knows no narrow letters: what is written there is smaller instead.
        narrow = 100 if painter.paintEngine().type() == QPaintEngine.Type.SVG else NARROW
        for points, stretch in ((LABEL_PT, 100), (LABEL_PT, narrow), (SMALLEST_PT, narrow)):
            font.setPointSizeF(points)
            font.setStretch(stretch)
            measures = QFontMetricsF(font)
            if measures.horizontalAdvance(text) <= width:
                break
        painter.setFont(font)
        return measures.elidedText(text, Qt.TextElideMode.ElideRight, width)

    def font_of(self, painter: QPainter) -> QFontMetricsF:
        """Set the font of labels and return its measures."""
        font = painter.font()
        font.setPointSizeF(LABEL_PT)
        font.setStretch(100)
        painter.setFont(font)
        return QFontMetricsF(font)
