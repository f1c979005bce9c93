"""The tie band: stretch as a tint, anchors as lines that can be taken hold of."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QLineF, QPointF, QRectF, Qt, Signal
from qtpy.QtGui import QColor, QFontMetricsF, QPen, QPolygonF

from leadline_napari.style import stretch_rgb
from leadline_napari.views.marks.mark import Mark

if TYPE_CHECKING:
    from collections.abc import Iterable

    from qtpy.QtGui import QPainter

    from leadline.model.anchor import Anchor
    from leadline_napari.states import Band, Tie
    from leadline_napari.style import Theme

HANDLE_PX = 5.5
GRIP_PX = 11.0


class BandMark(Mark):
    """The tie band: stretch as a tint, anchors as lines with a handle at either end."""

    chosen = Signal(object)
    dragged = Signal(object, str, float)
    dropped = Signal()

    def __init__(self, theme: Theme) -> None:
        super().__init__(theme)
        self.band: Band | None = None
        self._dragging: tuple[Anchor, str] | None = None
        self.setAcceptHoverEvents(True)

    def set_band(self, band: Band) -> None:
        """Draw this band."""
        self.band = band
        self.update()

    def paint(self, painter: QPainter, *_: object) -> None:
        """Draw tint, then ties, the one in hand last."""
        if self.band is None:
            return
        self._tint(painter)
        transform = painter.transform()
        painter.save()
        painter.resetTransform()
        painter.setRenderHint(painter.RenderHint.Antialiasing)
        taken: list[QRectF] = []
        for tie in self._in_order():
            ends = transform.map(QLineF(0.0, tie.anchor.track_depth_um, 1.0, self.end_um - tie.anchor.tip_distance_um))
            sd_px = abs(transform.m22()) * tie.anchor.sd_um
            self._tie(painter, tie, ends, sd_px)
            self._label(painter, tie, ends, taken)
        painter.restore()

    def _in_order(self) -> Iterable[Tie]:
        order = {"second": 0, "suggested": 1, "fixed": 2, "auto": 3, "user": 3}
        return sorted(self.band.ties, key=lambda t: (t.held, order[t.kind]))

    def _tint(self, painter: QPainter) -> None:
        band = self.band
        depth, level = band.depth_um.tolist(), (self.end_um - band.tip_um).tolist()
        painter.setPen(Qt.PenStyle.NoPen)
        for i, rgb in enumerate(stretch_rgb(band.stretch, self.theme.dark).tolist()):
            painter.setBrush(QColor(*rgb))
            corners = ((0, depth[i]), (0, depth[i + 1]), (1, level[i + 1]), (1, level[i]))
            painter.drawPolygon(QPolygonF([QPointF(x, y) for x, y in corners]))
        pen = QPen(QColor(self.theme.faint), 0.8)
        pen.setCosmetic(True)
        painter.setPen(pen)
        for i in range(0, len(depth), 2):
            painter.drawLine(QLineF(0, depth[i], 1, level[i]))

    def _tie(self, painter: QPainter, tie: Tie, ends: QLineF, sd_px: float) -> None:
        colour = QColor(self.theme.tie("held" if tie.held and tie.kind != "suggested" else tie.kind))
        dashed = tie.kind in ("suggested", "second")
        pen = QPen(colour, 3.0 if tie.held else 2.0, Qt.PenStyle.DashLine if dashed else Qt.PenStyle.SolidLine)
        painter.setPen(pen)
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.drawLine(ends)
        left = ends.p1() + QPointF(HANDLE_PX + 2, 0)
        right = ends.p2() - QPointF(HANDLE_PX + 2, 0)
        painter.setPen(QPen(colour, 1.4))
        if tie.held:
            painter.drawLine(QLineF(left.x(), left.y() - sd_px, left.x(), left.y() + sd_px))
            for sign in (-1, 1):
                painter.drawLine(QLineF(left.x() - 4, left.y() + sign * sd_px, left.x() + 4, left.y() + sign * sd_px))
        painter.setBrush(QColor(self.theme.paper) if dashed else colour)
        for end in (left, right):
            painter.drawEllipse(end, HANDLE_PX, HANDLE_PX)

    def _label(self, painter: QPainter, tie: Tie, ends: QLineF, taken: list[QRectF]) -> None:
        text = self.fitted(painter, tie.label, abs(ends.dx()) - 12)
        measures = QFontMetricsF(painter.font())
        middle = ends.pointAt(0.5)
        box = QRectF(0, 0, measures.horizontalAdvance(text) + 8, measures.height() + 2)
        lift = measures.height() / 2 + HANDLE_PX + abs(ends.dy()) / 2 * min(1.0, box.width() / abs(ends.dx() or 1.0))
        box.moveCenter(middle - QPointF(0, lift))
        if not text or (any(box.intersects(other) for other in taken) and not tie.held):
            return
        taken.append(box)
        paper = QColor(self.theme.paper)
        paper.setAlpha(205)
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(paper)
        painter.drawRoundedRect(box, 3, 3)
        painter.setPen(QColor(self.theme.ink))
        painter.drawText(box, Qt.AlignmentFlag.AlignCenter, text)

    # -- mouse --------------------------------------------------------------------------------------------------

    def grip(self, at: QPointF) -> tuple[Tie, str] | None:
        """The tie, and which part of it ('depth', 'tip' or 'line'), under a place in the lane."""
        if self.band is None:
            return None
        transform = self.sceneTransform()
        point = transform.map(at)
        best, part_of_best = GRIP_PX, None
        for tie in sorted(self.band.ties, key=lambda t: not t.held):
            line = transform.map(QLineF(0.0, tie.anchor.track_depth_um, 1.0, self.end_um - tie.anchor.tip_distance_um))
            left, right = line.p1() + QPointF(HANDLE_PX, 0), line.p2() - QPointF(HANDLE_PX, 0)
            slope = (line.y2() - line.y1()) / ((line.x2() - line.x1()) or 1.0)
            away = {
                "depth": QLineF(point, left).length(),
                "tip": QLineF(point, right).length(),
                "line": abs(line.y1() + slope * (point.x() - line.x1()) - point.y()) + 3.0,
            }
            part = min(away, key=lambda k: away[k])
            if away[part] < best - 0.01:
                best, part_of_best = away[part], (tie, part)
        return part_of_best

    def hoverEvent(self, event: object) -> None:
        """Show what can be taken hold of, and why a suggestion is made."""
        grip = None if event.isExit() else self.grip(event.pos())
        if grip is None:
            self.unsetCursor()
            self.setToolTip("")
            return
        tie, part = grip
        movable = tie.kind in ("user", "auto") and part != "line"
        event.acceptClicks(Qt.MouseButton.LeftButton)
        if movable:
            event.acceptDrags(Qt.MouseButton.LeftButton)
        self.setCursor(Qt.CursorShape.SizeVerCursor if movable else Qt.CursorShape.PointingHandCursor)
        self.setToolTip(tip_of(tie))

    def mouseClickEvent(self, event: object) -> None:
        """Take the tie under the mouse in hand."""
        grip = self.grip(event.pos())
        if grip is not None and event.button() == Qt.MouseButton.LeftButton:
            event.accept()
            if grip[0].kind != "second":
                self.chosen.emit(grip[0].anchor)

    def mouseDragEvent(self, event: object) -> None:
        """Drag an end of a tie."""
        if event.isStart():
            grip = self.grip(event.buttonDownPos())
            movable = grip is not None and grip[0].kind in ("user", "auto") and grip[1] != "line"
            self._dragging = (grip[0].anchor, grip[1]) if movable else None
        if self._dragging is None or event.button() != Qt.MouseButton.LeftButton:
            event.ignore()
            return
        event.accept()
        anchor, end = self._dragging
        y = event.pos().y()
        self.dragged.emit(anchor, end, y if end == "depth" else self.end_um - y)
        if event.isFinish():
            self._dragging = None
            self.dropped.emit()


def tip_of(tie: Tie) -> str:
    """What a tie's tool tip says."""
    a = tie.anchor
    head = {
        "user": "Anchor", "auto": "Accepted suggestion", "fixed": "Anchor of brain.toml (change it there)",
        "suggested": "Suggestion (Enter accepts, Delete refuses)", "second": "Second reader",
    }[tie.kind]  # fmt: skip
    lines = [
        f"{head}: {tie.label}",
        f"{a.tip_distance_um:.0f} um from the tip = depth {a.track_depth_um:.0f} ± {a.sd_um:.0f} um",
    ]
    return "\n".join([*lines, tie.evidence] if tie.evidence else lines)
