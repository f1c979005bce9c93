"""What the section's lanes are made of: graphics items that draw one snapshot each."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import pyqtgraph as pg
from qtpy.QtCore import QLineF, QPointF, QRectF, Qt, Signal
from qtpy.QtGui import QColor, QFontMetricsF, QImage, QPainterPath, QPen, QPolygonF

from leadline_napari.style import ink_on, stretch_rgb

if TYPE_CHECKING:
    from collections.abc import Iterable

    from qtpy.QtGui import QPainter

    from leadline.model.anchor import Anchor
    from leadline_napari.states import Band, Lane, Ribbon, Sites, Strata, Tie, Tissue
    from leadline_napari.style import Theme

HANDLE_PX = 5.5
GRIP_PX = 11.0
LABEL_PT = 8.0


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

    def font_of(self, painter: QPainter, *, bold: bool = False) -> QFontMetricsF:
        """Set the font of labels and return its measures."""
        font = painter.font()
        font.setPointSizeF(LABEL_PT)
        font.setBold(bold)
        painter.setFont(font)
        return QFontMetricsF(font)


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
            box = transform.mapRect(QRectF(0, top, 1, bottom - top))
            if box.height() > measures.height() * 0.92:
                painter.setPen(QColor(ink_on(run.colour)))
                text = measures.elidedText(run.acronym, Qt.TextElideMode.ElideRight, box.width() - 6)
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


class SitesMark(Mark):
    """Contacts of the shank, where they sit on it, coloured by region."""

    def __init__(self, theme: Theme) -> None:
        super().__init__(theme)
        self.sites: Sites | None = None
        self._rects: list[tuple[QRectF, int]] = []
        self._key: tuple[int, float] = (0, 0.0)

    def set_sites(self, sites: Sites) -> None:
        """Draw these contacts."""
        key = (id(sites.tip_um), self.end_um)
        if self.sites is None or key != self._key or sites.tip_um is not self.sites.tip_um:
            self._lay_out(sites)
            self._key = key
        self.sites = sites
        self.update()

    def _lay_out(self, sites: Sites) -> None:
        columns = sorted(set(sites.x_um.tolist()))
        rows = sorted(set(sites.tip_um.tolist()))
        pitch = min((b - a for a, b in pairwise(rows)), default=20.0)
        width = 0.76 / len(columns)
        place = {x: 0.12 + width * i for i, x in enumerate(columns)}
        same = [sites.tip_um[sites.x_um == x] for x in columns]
        own = min((abs(float(c[1] - c[0])) for c in same if len(c) > 1), default=pitch)
        height = max(pitch, own) * 0.9
        self._rects = [
            (QRectF(place[x], self.end_um - t - height / 2, width * 0.92, height), int(c))
            for x, t, c in zip(sites.x_um.tolist(), sites.tip_um.tolist(), sites.channel.tolist(), strict=True)
        ]

    def paint(self, painter: QPainter, *_: object) -> None:
        """Fill one box for each contact; a frame about the one that is chosen."""
        if self.sites is None:
            return
        chosen = None
        brushes: dict[tuple[int, ...], QColor] = {}
        for (rect, channel), rgb in zip(self._rects, map(tuple, self.sites.rgb.tolist()), strict=True):
            colour = brushes.get(rgb)
            if colour is None:
                colour = brushes[rgb] = QColor(*rgb)
            painter.fillRect(rect, colour)
            if channel == self.sites.chosen:
                chosen = rect
        if chosen is not None:
            pen = QPen(QColor(self.theme.ink), 2.5)
            pen.setCosmetic(True)
            painter.setPen(pen)
            painter.drawRect(chosen.adjusted(-0.06, -6, 0.06, 6))


class RibbonMark(Mark):
    """The odds lane: for every row the probability of each structure, side by side."""

    def __init__(self, theme: Theme) -> None:
        super().__init__(theme)
        self.ribbon: Ribbon | None = None

    def set_ribbon(self, ribbon: Ribbon) -> None:
        """Draw these odds."""
        self.ribbon = ribbon
        self.update()

    def paint(self, painter: QPainter, *_: object) -> None:
        """Fill the shares of every row; a preview is drawn a little lighter."""
        ribbon = self.ribbon
        if ribbon is None:
            return
        colours = [QColor(*rgb) for rgb in ribbon.rgb.tolist()]
        painter.setOpacity(1.0 if ribbon.exact else 0.82)
        tips = ribbon.tip_um.tolist()
        edges = [tips[0] - 10.0, *((a + b) / 2 for a, b in pairwise(tips)), tips[-1] + 10.0]
        for row, shares in enumerate(ribbon.share.tolist()):
            top = self.end_um - edges[row + 1]
            height = (edges[row + 1] - edges[row]) * 1.04  # a little over the next row: no seams in vector figures
            left = 0.0
            for share, colour in zip(shares, colours, strict=True):
                if share > 0.0:
                    painter.fillRect(QRectF(left, top, share, height), colour)
                    left += share
        painter.setOpacity(1.0)


class LaneMark(Mark):
    """A physiology lane: a picture, or a curve with its area."""

    def __init__(self, theme: Theme) -> None:
        super().__init__(theme)
        self.lane: Lane | None = None
        self.image: QImage | None = None
        self.path = QPainterPath()

    def set_lane(self, lane: Lane) -> None:
        """Draw this lane."""
        self.lane = lane
        if lane.rgba is not None:
            height, width, _ = lane.rgba.shape
            data = lane.rgba.tobytes()
            self.image = QImage(data, width, height, 4 * width, QImage.Format.Format_RGBA8888).copy()
        else:
            self.image = None
        self.update()

    def paint(self, painter: QPainter, *_: object) -> None:
        """Draw the picture or the curve."""
        if self.lane is None:
            return
        if self.image is not None:
            low, high = self.lane.picture_um
            painter.drawImage(QRectF(0, self.end_um - high, 1, high - low), self.image)
        else:
            self._curve(painter, self.lane)

    def _curve(self, painter: QPainter, lane: Lane) -> None:
        span = (lane.high - lane.low) or 1.0
        runs: list[list[QPointF]] = [[]]
        for tip, value in zip(lane.tip_um.tolist(), lane.values.tolist(), strict=True):
            if value == value:
                runs[-1].append(QPointF(min(max((value - lane.low) / span, 0.0), 1.0), self.end_um - tip))
            elif runs[-1]:
                runs.append([])
        accent = QColor(self.theme.accent)
        pen = QPen(accent, 1.5)
        pen.setCosmetic(True)
        painter.setRenderHint(painter.RenderHint.Antialiasing)
        if lane.palette == "cyclic":
            pen.setWidthF(4.0)
            painter.setPen(pen)
            for run in runs:
                painter.drawPoints(QPolygonF(run))
            return
        area = QColor(accent)
        area.setAlpha(60)
        for run in runs:
            if not run:
                continue
            painter.setPen(Qt.PenStyle.NoPen)
            painter.setBrush(area)
            painter.drawPolygon(QPolygonF([QPointF(0, run[0].y()), *run, QPointF(0, run[-1].y())]))
            painter.setPen(pen)
            painter.setBrush(Qt.BrushStyle.NoBrush)
            painter.drawPolyline(QPolygonF(run))


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
        measures = self.font_of(painter, bold=tie.held)
        room = abs(ends.dx()) - 6 * HANDLE_PX
        text = measures.elidedText(tie.label, Qt.TextElideMode.ElideRight, room)
        middle = ends.pointAt(0.5)
        box = QRectF(0, 0, measures.horizontalAdvance(text) + 8, measures.height() + 2)
        box.moveCenter(middle - QPointF(0, measures.height() * 0.85))
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
