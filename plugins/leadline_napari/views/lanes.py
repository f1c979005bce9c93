"""Choosing the physiology lanes: which, in what order, over what range."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QSignalBlocker, Qt, Signal
from qtpy.QtGui import QKeySequence, QShortcut
from qtpy.QtWidgets import (
    QAbstractItemView,
    QDialog,
    QDialogButtonBox,
    QDoubleSpinBox,
    QHBoxLayout,
    QLabel,
    QListWidget,
    QListWidgetItem,
    QPushButton,
    QVBoxLayout,
    QWidget,
)  # fmt: skip

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from leadline_napari.states import Lane

USUAL = {True: (2.0, 98.0), False: (0.0, 100.0)}


class LaneDialog(QDialog):
    """Tick lanes, drag them into order, set their range; every change is shown at once."""

    changed = Signal(object)
    ranged = Signal(str, float, float)

    def __init__(
        self, parent: QWidget, lanes: Sequence[Lane], shown: Sequence[str], ranges: Mapping[str, tuple[float, float]]
    ) -> None:
        super().__init__(parent)
        self.setWindowTitle("Physiology lanes")
        self.ranges = dict(ranges)
        self.pictures = {lane.name: lane.across is not None for lane in lanes}
        layout = QVBoxLayout(self)
        layout.addWidget(QLabel("Tick what is shown; drag, or Alt+Up and Alt+Down, for the order."))
        self.list = QListWidget()
        self.list.setDragDropMode(QAbstractItemView.DragDropMode.InternalMove)
        self.list.setAccessibleName("Lanes")
        self.list.setToolTip("Space ticks a lane; Alt+Up and Alt+Down move it")
        order = {name: i for i, name in enumerate(shown)}
        for lane in sorted(lanes, key=lambda lane: order.get(lane.name, len(order))):
            item = QListWidgetItem(f"{lane.title}  ({lane.unit})" if lane.unit else lane.title)
            item.setData(Qt.ItemDataRole.UserRole, lane.name)
            item.setFlags(item.flags() | Qt.ItemFlag.ItemIsUserCheckable)
            item.setCheckState(Qt.CheckState.Checked if lane.name in order else Qt.CheckState.Unchecked)
            self.list.addItem(item)
        layout.addWidget(self.list)
        layout.addLayout(self._range_row())
        buttons = QDialogButtonBox(QDialogButtonBox.StandardButton.Close)
        buttons.rejected.connect(self.reject)
        layout.addWidget(buttons)
        self.list.itemChanged.connect(lambda _: self._told())
        self.list.model().rowsMoved.connect(lambda *_: self._told())
        self.list.currentRowChanged.connect(lambda _: self._show_range())
        for keys, by in (("Alt+Up", -1), ("Alt+Down", 1)):
            QShortcut(QKeySequence(keys), self.list).activated.connect(lambda by=by: self.move_current(by))
        self.list.setCurrentRow(0)
        self.resize(380, 460)

    def _range_row(self) -> QHBoxLayout:
        row = QHBoxLayout()
        row.addWidget(QLabel("Range, percentiles:"))
        self.low, self.high = QDoubleSpinBox(), QDoubleSpinBox()
        for spin, name in ((self.low, "Lower end"), (self.high, "Upper end")):
            spin.setRange(0.0, 100.0)
            spin.setDecimals(1)
            spin.setToolTip(f"{name} of the range, as a percentile of this lane's values")
            spin.setAccessibleName(f"{name} of the range")
            spin.valueChanged.connect(lambda _: self._set_range())
            row.addWidget(spin)
        reset = QPushButton("Reset")
        reset.setToolTip("Return this lane to its usual range")
        reset.clicked.connect(self._reset_range)
        row.addWidget(reset)
        return row

    def move_current(self, by: int) -> None:
        """Move the lane in hand up or down."""
        row = self.list.currentRow()
        to = row + by
        if row >= 0 and 0 <= to < self.list.count():
            with QSignalBlocker(self.list):
                item = self.list.takeItem(row)
                self.list.insertItem(to, item)
            self.list.setCurrentRow(to)
            self._told()

    def names(self) -> tuple[str, ...]:
        """Ticked lanes in order."""
        items = (self.list.item(i) for i in range(self.list.count()))
        return tuple(
            item.data(Qt.ItemDataRole.UserRole) for item in items if item.checkState() == Qt.CheckState.Checked
        )

    def _told(self) -> None:
        self.changed.emit(self.names())

    def _current(self) -> str | None:
        item = self.list.currentItem()
        return None if item is None else item.data(Qt.ItemDataRole.UserRole)

    def _show_range(self) -> None:
        name = self._current()
        if name is None:
            return
        low, high = self.ranges.get(name, USUAL[self.pictures[name]])
        with QSignalBlocker(self.low), QSignalBlocker(self.high):
            self.low.setValue(low)
            self.high.setValue(high)

    def _set_range(self) -> None:
        name = self._current()
        if name is not None and self.low.value() < self.high.value():
            self.ranges[name] = (self.low.value(), self.high.value())
            self.ranged.emit(name, *self.ranges[name])

    def _reset_range(self) -> None:
        name = self._current()
        if name is not None:
            low, high = USUAL[self.pictures[name]]
            self.ranges[name] = (low, high)
            self._show_range()
            self.ranged.emit(name, low, high)
