"""The lanes of the probe: its contacts, the odds of every row, and physiology."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from qtpy.QtCore import QPointF, QRectF, Qt
from qtpy.QtGui import QColor, QImage, QPaintEngine, QPainterPath, QPen, QPolygonF

from leadline_napari.views.marks.mark import Mark

if TYPE_CHECKING:
    from qtpy.QtGui import QPainter

    from leadline_napari.states import Lane, Ribbon, Sites
    from leadline_napari.style import Theme

ODDS_COLUMNS = 128
SEEN_PX = 5.0  # gaps between contacts are drawn from this height of a contact on; below it they are only noise


class SitesMark(Mark):
    """Contacts of the shank, where they sit on it, coloured by region."""

    def __init__(self, theme: Theme) -> None:
        super().__init__(theme)
        self.sites: Sites | None = None
        self._rects: list[tuple[QRectF, int]] = []
        self._key: tuple[int, float] = (0, 0.0)
        self._pitch = 20.0

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
        self._pitch = max(pitch, own)
        self._rects = [
            (QRectF(place[x], self.end_um - t - self._pitch / 2, width, self._pitch), int(c))
            for x, t, c in zip(sites.x_um.tolist(), sites.tip_um.tolist(), sites.channel.tolist(), strict=True)
        ]

    def paint(self, painter: QPainter, *_: object) -> None:
        """Fill one box for each contact; a frame about the one that is chosen."""
        if self.sites is None:
            return
        chosen = None
        tall = self._pitch * abs(painter.transform().m22()) > SEEN_PX
        gap = 0.06 * self._pitch if tall else -0.03 * self._pitch
        brushes: dict[tuple[int, ...], QColor] = {}
        for (rect, channel), rgb in zip(self._rects, map(tuple, self.sites.rgb.tolist()), strict=True):
            colour = brushes.get(rgb)
            if colour is None:
                colour = brushes[rgb] = QColor(*rgb)
            painter.fillRect(rect.adjusted(0.0, gap, -0.03, -gap), colour)
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
        self._image: QImage | None = None

    def set_ribbon(self, ribbon: Ribbon) -> None:
        """Draw these odds."""
        self.ribbon, self._image = ribbon, None
        self.update()

    def paint(self, painter: QPainter, *_: object) -> None:
        """Fill the shares of every row, on the screen as one picture; a preview is drawn a little lighter."""
        ribbon = self.ribbon
        if ribbon is None:
            return
        painter.setOpacity(1.0 if ribbon.exact else 0.82)
        steps = np.diff(ribbon.tip_um)
        even = steps.size > 0 and float(np.ptp(steps)) < 0.01
        if even and painter.paintEngine().type() == QPaintEngine.Type.Raster:
            if self._image is None:
                self._image = _picture(ribbon)
            half = float(steps[0]) / 2
            top, bottom = float(ribbon.tip_um[-1]) + half, float(ribbon.tip_um[0]) - half
            painter.drawImage(QRectF(0.0, self.end_um - top, 1.0, top - bottom), self._image)
        else:
            self._rows(painter, ribbon)
        painter.setOpacity(1.0)

    def _rows(self, painter: QPainter, ribbon: Ribbon) -> None:
        """The same as vectors, for figures."""
        colours = [QColor(*rgb) for rgb in ribbon.rgb.tolist()]
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


def _picture(ribbon: Ribbon) -> QImage:
    """The odds as a picture: a row for every row, the uppermost first; as many columns as can be told apart."""
    place = (np.arange(ODDS_COLUMNS, dtype=np.float32) + 0.5) / ODDS_COLUMNS
    ends = np.cumsum(ribbon.share, axis=1)[::-1]
    code = np.zeros((len(ends), ODDS_COLUMNS), np.intp)
    for k in range(ends.shape[1] - 1):
        code += ends[:, k, None] < place
    rgb = np.ascontiguousarray(ribbon.rgb[code])
    return QImage(rgb.tobytes(), ODDS_COLUMNS, len(rgb), 3 * ODDS_COLUMNS, QImage.Format.Format_RGB888).copy()


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
