"""The lanes of anatomy: the strata of the atlas, and the tissue along the track."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QLineF, QRectF, Qt
from qtpy.QtGui import QColor, QImage, QPen

from leadline_napari.style import ink_on
from leadline_napari.views.marks.mark import Mark

if TYPE_CHECKING:
    from qtpy.QtGui import QPainter

    from leadline_napari.states import Strata, Tissue
    from leadline_napari.style import Theme


class StrataMark(Mark):
    """The strata lane: runs of structures, their borders as wide as they are uncertain."""

    def __init__(self, theme: Theme) -> None:
        super().__init__(theme)
        self.strata: Strata | None = None

    def set_strata(self, strata: Strata) -> None:
        """Draw these runs."""
        self.strata = strata
        self.update()

    def paint(self, painter: QPainter, *_: object) -> None:
        """Draw runs, then borders, then names where there is room for them."""
        if self.strata is None:
            return
        low, high = self.seen()
        for run in self.strata.runs:
            top, bottom = max(run.top_um, low), min(run.bottom_um, high)
            if bottom > top:
                painter.fillRect(QRectF(0, top, 1, bottom - top), QColor(*run.colour))
        self._borders(painter, low, high)
        transform = painter.transform()
        painter.save()
        painter.resetTransform()
        measures = self.font_of(painter)
        for run in self.strata.runs:
            top, bottom = max(run.top_um, low), min(run.bottom_um, high)
            if bottom <= top:
                continue
            box = transform.mapRect(QRectF(0, top, 1, bottom - top))
            if box.height() > measures.height() * 0.92:
                painter.setPen(QColor(ink_on(run.colour)))
                text = self.fitted(painter, run.acronym, box.width() - 4)
                painter.drawText(box, Qt.AlignmentFlag.AlignCenter, text)
        painter.restore()

    def _borders(self, painter: QPainter, low: float, high: float) -> None:
        """A line at each border and, on both sides, a whisker as long as one standard deviation."""
        sd = self.strata.border_sd_um
        pen = QPen(QColor(self.theme.paper), 1.4)
        pen.setCosmetic(True)
        for run in self.strata.runs[1:]:
            if not low < run.top_um < high:
                continue
            painter.setPen(pen)
            painter.drawLine(QLineF(0, run.top_um, 1, run.top_um))
            veil = QColor(self.theme.paper)
            veil.setAlpha(70)
            painter.fillRect(QRectF(0.86, run.top_um - sd, 0.14, 2 * sd), veil)


class TissueMark(Mark):
    """The tissue lane: a picture."""

    def __init__(self, theme: Theme) -> None:
        super().__init__(theme)
        self.tissue: Tissue | None = None
        self.image: QImage | None = None

    def set_tissue(self, tissue: Tissue) -> None:
        """Draw this picture."""
        height, width, _ = tissue.rgb.shape
        self.tissue = tissue
        self.image = QImage(tissue.rgb.tobytes(), width, height, 3 * width, QImage.Format.Format_RGB888).copy()
        self.update()

    def paint(self, painter: QPainter, *_: object) -> None:
        """Draw the picture and the line of the track."""
        if self.image is None or self.tissue is None:
            return
        painter.setRenderHint(painter.RenderHint.SmoothPixmapTransform)
        top, bottom = self.tissue.top_um, self.tissue.bottom_um
        painter.drawImage(QRectF(0, top, 1, bottom - top), self.image)
        pen = QPen(QColor(255, 255, 255, 90), 1, Qt.PenStyle.DotLine)
        pen.setCosmetic(True)
        painter.setPen(pen)
        painter.drawLine(QLineF(0.5, top, 0.5, 0.0))
        painter.drawLine(QLineF(0.5, self.end_um, 0.5, bottom))
