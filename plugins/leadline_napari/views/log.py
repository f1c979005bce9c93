"""The log: lanes side by side on one vertical scale, as a borehole is correlated with its strata."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import pyqtgraph as pg
from qtpy.QtCore import QRectF, Qt, Signal
from qtpy.QtGui import QColor, QFontMetricsF

from leadline_napari.views.marks.anatomy import StrataMark, TissueMark
from leadline_napari.views.marks.band import BandMark
from leadline_napari.views.marks.mark import NARROW
from leadline_napari.views.marks.probe import LaneMark, RibbonMark, SitesMark

if TYPE_CHECKING:
    from qtpy.QtCore import QPointF

    from leadline_napari.states import Lane, Readout, SectionState
    from leadline_napari.style import Theme
    from leadline_napari.views.marks.mark import Mark

HEAD_PX = 42
FOOT_PX = 18
AXIS_PX = 44
WIDTHS = {"tissue": 96, "strata": 70, "band": 150, "sites": 46, "odds": 76, "lane": 84}
LEFT = ("tissue", "strata")
ODDS_COLUMN = 60
MIN_PX = 34


TIPS = {
    "tissue": "The stack, or the atlas template, straightened along the track; track depth in um on the left",
    "strata": "Regions of the atlas along the track; pale: how far a border may lie from where it is drawn",
    "band": "Anchors tie contacts to places; blue tint: tissue drawn out, orange: pressed together",
    "sites": "Contacts of this shank, coloured by region",
    "odds": "Probability of each region at every row of contacts, side by side; distance from the tip on the right",
}


def _tip_of(lane: Lane) -> str:
    """A lane's title with its units; for a picture also what its colours mean."""
    if not lane.across_unit:
        return f"{lane.title} ({lane.unit})" if lane.unit else lane.title
    return f"{lane.title} by {lane.across_unit}; colours from {lane.low:.3g} to {lane.high:.3g} {lane.unit}"


class Title(pg.GraphicsWidget):
    """What a lane shows, on two lines, and its unit on a third; the tool tip says it whole."""

    def __init__(self, theme: Theme, text: str = "", unit: str = "") -> None:
        super().__init__()
        self.theme, self.text, self.unit = theme, text, unit
        self.setMinimumHeight(HEAD_PX)
        self.setMaximumHeight(HEAD_PX)

    def set_text(self, text: str, unit: str, tip: str) -> None:
        """Change the words; ``tip`` says it whole."""
        self.text, self.unit = text, unit
        self.setToolTip(tip)
        self.update()

    def paint(self, painter: object, *_: object) -> None:
        """Draw the words, cut only where a single one is too long."""
        box = self.boundingRect().adjusted(0, 1, 0, -2)
        line = box.height() / 3
        font = painter.font()
        font.setPointSizeF(7.5)
        first, second = _two_lines(self.text, QFontMetricsF(font), box.width())
        for k, (text, colour) in enumerate(
            ((first, self.theme.ink), (second, self.theme.ink), (self.unit, self.theme.soft))
        ):
            font.setStretch(100 if QFontMetricsF(font).horizontalAdvance(text) <= box.width() else NARROW)
            painter.setFont(font)
            painter.setPen(QColor(colour))
            short = QFontMetricsF(font).elidedText(text, Qt.TextElideMode.ElideRight, box.width())
            painter.drawText(
                QRectF(box.x(), box.y() + k * line, box.width(), line), Qt.AlignmentFlag.AlignCenter, short
            )


def _two_lines(text: str, measures: QFontMetricsF, width: float) -> tuple[str, str]:
    """Words on two lines: as many on the first as fit, none there where one line is enough."""
    if measures.horizontalAdvance(text) <= width:
        return "", text
    words = text.replace("-", "- ").split()
    count = max(
        (n for n in range(1, len(words)) if measures.horizontalAdvance(" ".join(words[:n])) <= width), default=1
    )
    return " ".join(words[:count]).replace("- ", "-"), " ".join(words[count:]).replace("- ", "-")


class Foot(pg.GraphicsWidget):
    """The scale below a lane: what its left and right ends mean, or places in between."""

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self.theme = theme
        self.ticks: tuple[tuple[float, str], ...] = ()
        self.setMinimumHeight(FOOT_PX)
        self.setMaximumHeight(FOOT_PX)

    def set_ticks(self, ticks: tuple[tuple[float, str], ...], left_px: float, right_px: float) -> None:
        """Write these texts at places from 0 to 1 across the lane, which begins and ends so far inside the column."""
        if (ticks, left_px, right_px) != (self.ticks, getattr(self, "left_px", None), getattr(self, "right_px", None)):
            self.ticks, self.left_px, self.right_px = ticks, left_px, right_px
            self.setToolTip("  ".join(text for _, text in ticks))
            self.update()

    def paint(self, painter: object, *_: object) -> None:
        """Write what there is room for, the ends first."""
        if not self.ticks:
            return
        font = painter.font()
        font.setPointSizeF(7.0)
        font.setStretch(NARROW)
        painter.setFont(font)
        painter.setPen(QColor(self.theme.soft))
        measures = QFontMetricsF(font)
        width = self.boundingRect().width() - self.left_px - self.right_px
        taken: list[QRectF] = []
        for place, text in sorted(self.ticks, key=lambda t: -abs(t[0] - 0.5)):
            wide = measures.horizontalAdvance(text)
            left = self.left_px + min(max(place * width - wide / 2, 0.0), width - wide)
            box = QRectF(left, 3, wide, measures.height())
            if not any(box.adjusted(-3, 0, 3, 0).intersects(other) for other in taken):
                taken.append(box)
                painter.drawText(box, Qt.AlignmentFlag.AlignCenter, text)


class TipAxis(pg.AxisItem):
    """Ticks at round tip distances on a scale that is drawn in track depth."""

    end_um = 0.0

    def tickValues(self, low: float, high: float, size: float) -> list[tuple[float, list[float]]]:
        """Places of the ticks, on the drawn scale."""
        levels = super().tickValues(self.end_um - high, self.end_um - low, size)
        return [(step, [self.end_um - v for v in values]) for step, values in levels]

    def tickStrings(self, values: list[float], scale: float, spacing: float) -> list[str]:
        """Tip distances."""
        return [f"{self.end_um - v:.0f}" for v in values]


class DepthAxis(pg.AxisItem):
    """Track depths, in whole um."""

    def tickStrings(self, values: list[float], scale: float, spacing: float) -> list[str]:
        """Plain numbers."""
        return [f"{v:.0f}" for v in values]


@dataclass(frozen=True, slots=True, eq=False)
class Column:
    """One lane with its heading and its scale."""

    kind: str
    at: int
    plot: pg.PlotItem
    title: Title
    mark: Mark
    cursor: pg.InfiniteLine
    foot: Foot


class Log(pg.GraphicsLayoutWidget):
    """All lanes. Signals speak of ``side`` 'depth' (left lanes, um of track depth) or 'tip' (right lanes, um from
    the tip). Columns are made on first need and then hidden or shown: nothing is torn down while the window lives."""

    hovered = Signal(str, object)
    double_clicked = Signal(str, float)
    picked = Signal(float)

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self.theme = theme
        self.ci.layout.setContentsMargins(4, 2, 4, 2)
        self.ci.layout.setHorizontalSpacing(4)
        self.ci.layout.setVerticalSpacing(0)
        self.end_um = 0.0
        self._extent: tuple[float, float, float] | None = None
        self._shown = 0
        self.tip_axis, self.depth_axis = TipAxis("right"), DepthAxis("left")
        self.tissue, self.strata = TissueMark(theme), StrataMark(theme)
        self.band, self.sites, self.odds = BandMark(theme), SitesMark(theme), RibbonMark(theme)
        fixed = (("tissue", self.tissue), ("strata", self.strata), ("band", self.band), ("sites", self.sites))
        self._fixed: list[Column] = []
        for at, (kind, mark) in enumerate(fixed):
            axes = {"left": self.depth_axis} if at == 0 else {}
            self._fixed.append(self._column(at, kind, mark, axes))
        self._lanes: list[Column] = []
        self._odds = self._column(ODDS_COLUMN, "odds", self.odds, {"right": self.tip_axis})
        self.set_theme(theme)
        self.scene().sigMouseMoved.connect(self._moved)
        self.scene().sigMouseClicked.connect(self._clicked)
        self.setMinimumSize(360, 240)

    @property
    def columns(self) -> list[Column]:
        """Columns that are shown, from left to right."""
        return [*self._fixed, *self._lanes[: self._shown], self._odds]

    # -- laying out ---------------------------------------------------------------------------------------------

    def _column(self, at: int, kind: str, mark: Mark, axes: dict[str, pg.AxisItem]) -> Column:
        title, foot = Title(self.theme), Foot(self.theme)
        self.addItem(title, row=0, col=at)
        plot = self.addPlot(row=1, col=at, axisItems=axes)
        self.addItem(foot, row=2, col=at)
        for name in ("left", "right", "top", "bottom"):
            plot.showAxis(name, name in axes)
        box = plot.getViewBox()
        box.setMouseEnabled(x=False, y=True)
        box.setMenuEnabled(False)
        box.setDefaultPadding(0)
        box.invertY(True)
        box.setXRange(0, 1, padding=0)
        plot.hideButtons()
        if at:
            plot.setYLink(self._fixed[0].plot)
        plot.addItem(mark)
        cursor = pg.InfiniteLine(angle=0)
        cursor.setZValue(50)
        cursor.hide()
        plot.addItem(cursor)
        column = Column(kind, at, plot, title, mark, cursor, foot)
        self._make_room(column, shown=True)
        for axis in axes.values():
            axis.setWidth(AXIS_PX)
        return column

    def _make_room(self, column: Column, *, shown: bool) -> None:
        axis = AXIS_PX if column.kind in ("tissue", "odds") else 0
        width = WIDTHS[column.kind]
        layout = self.ci.layout
        layout.setColumnMinimumWidth(column.at, max(width * 0.42, MIN_PX) + axis if shown else 0)
        layout.setColumnPreferredWidth(column.at, width + axis if shown else 0)
        layout.setColumnStretchFactor(column.at, width if shown else 0)
        layout.setColumnMaximumWidth(column.at, 10_000 if shown else 0)

    def _show_lanes(self, count: int) -> None:
        """Show so many physiology columns."""
        while len(self._lanes) < count:
            lane = self._column(len(self._fixed) + len(self._lanes), "lane", LaneMark(self.theme), {})
            self._dress(lane)
            if self._extent is not None:
                self._stretch(lane, self._extent)
            self._lanes.append(lane)
        for k, lane in enumerate(self._lanes):
            for item in (lane.title, lane.plot, lane.foot):
                item.setVisible(k < count)
            self._make_room(lane, shown=k < count)
        self._shown = count

    def set_theme(self, theme: Theme) -> None:
        """Change colours."""
        self.theme = theme
        self.setBackground(theme.paper)
        for column in (*self._fixed, *self._lanes, self._odds):
            self._dress(column)
        font = self.font()
        font.setPointSizeF(7.5)
        for axis in (self.tip_axis, self.depth_axis):
            axis.setStyle(tickFont=font, tickLength=-4, hideOverlappingLabels=True, autoExpandTextSpace=False)
            axis.setPen(pg.mkPen(theme.faint))
            axis.setTextPen(pg.mkPen(theme.soft))

    def _dress(self, column: Column) -> None:
        for part in (column.mark, column.title, column.foot):
            part.theme = self.theme
            part.update()
        column.plot.getViewBox().setBorder(pg.mkPen(self.theme.faint, width=1))
        column.cursor.setPen(pg.mkPen(self.theme.ink, width=1, style=Qt.PenStyle.DotLine))

    # -- showing ------------------------------------------------------------------------------------------------

    def draw(self, state: SectionState) -> None:
        """Draw a snapshot; parts that are the same object as before stay as they are."""
        if len(state.lanes) != self._shown:
            self._show_lanes(len(state.lanes))
        self._set_extent(state)
        for mark, value, give in (
            (self.tissue, state.tissue, "tissue"),
            (self.strata, state.strata, "strata"),
            (self.band, state.band, "band"),
            (self.sites, state.sites, "sites"),
            (self.odds, state.ribbon, "ribbon"),
        ):
            if getattr(mark, give) is not value:
                if value is None:
                    mark.clear()
                else:
                    getattr(mark, f"set_{give}")(value)
        for column, lane in zip(self._lanes, state.lanes, strict=False):
            if column.mark.lane is not lane:
                column.mark.set_lane(lane)
        self._set_titles(state)

    def _set_extent(self, state: SectionState) -> None:
        extent = (state.top_um, state.bottom_um, state.end_um)
        if extent == self._extent:
            return
        self._extent, self.end_um = extent, state.end_um
        self.tip_axis.end_um = state.end_um
        for column in (*self._fixed, *self._lanes, self._odds):
            self._stretch(column, extent)
        self.whole()

    def _stretch(self, column: Column, extent: tuple[float, float, float]) -> None:
        column.mark.set_extent(*extent)
        column.plot.getViewBox().setLimits(yMin=extent[0], yMax=extent[1], minYRange=100.0)

    def whole(self) -> None:
        """Show the whole track."""
        if self._extent:
            self._fixed[0].plot.getViewBox().setYRange(*self._extent[:2], padding=0)

    def _set_titles(self, state: SectionState) -> None:
        exact = "exact" if state.ribbon and state.ribbon.exact else "preview"
        heads = {
            "tissue": (state.tissue.title if state.tissue else "Tissue", "± 400 um"),
            "strata": ("Strata", "atlas"),
            "band": ("Anchors", "depth ↔ tip"),
            "sites": ("Sites", ""),
            "odds": ("Odds", exact),
        }
        lanes = iter(state.lanes)
        for column in self.columns:
            ticks: tuple[tuple[float, str], ...] = ()
            if column.kind == "lane":
                lane = next(lanes)
                words, tip, ticks = (lane.title, lane.across_unit or lane.unit), _tip_of(lane), lane.ticks
            else:
                words, tip = heads[column.kind], TIPS[column.kind]
                ticks = ((0.0, "0"), (1.0, "1")) if column.kind == "odds" else ()
            if (column.title.text, column.title.unit, column.title.toolTip()) != (*words, tip):
                column.title.set_text(*words, tip)
            left, right = AXIS_PX if column.kind == "tissue" else 0.0, AXIS_PX if column.kind == "odds" else 0.0
            column.foot.set_ticks(ticks, left, right)

    def show_cursor(self, readout: Readout | None) -> None:
        """A line across every lane, at the depth on the left and at the contact on the right."""
        for column in self.columns:
            if readout is None or column.kind == "band":
                column.cursor.hide()
                continue
            column.cursor.setPos(readout.depth_um if column.kind in LEFT else self.end_um - readout.tip_um)
            column.cursor.show()

    # -- mouse --------------------------------------------------------------------------------------------------

    def side_at(self, at: QPointF) -> tuple[str, float] | None:
        """Side and um under a place in the scene; in the tie band the nearer side counts."""
        for column in self.columns:
            box = column.plot.getViewBox()
            if box.sceneBoundingRect().contains(at):
                view = box.mapSceneToView(at)
                left = column.kind in LEFT or (column.kind == "band" and view.x() < 0.5)
                return ("depth", view.y()) if left else ("tip", self.end_um - view.y())
        return None

    def _moved(self, at: QPointF) -> None:
        found = self.side_at(at)
        self.hovered.emit(*(found or ("", None)))

    def leaveEvent(self, event: object) -> None:
        """The cursor has left."""
        super().leaveEvent(event)
        self.hovered.emit("", None)

    def _clicked(self, event: object) -> None:
        if event.button() != Qt.MouseButton.LeftButton:
            return
        found = self.side_at(event.scenePos())
        if found is None:
            return
        if event.double():
            event.accept()
            self.double_clicked.emit(*found)
        elif not event.isAccepted() and found[0] == "tip":
            self.picked.emit(found[1])
