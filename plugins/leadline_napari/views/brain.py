"""The Brain dock: penetrations, stages and what they said, runs and their settings."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

from qtpy.QtCore import QSignalBlocker, Qt, Signal
from qtpy.QtWidgets import (
    QAbstractItemView,
    QComboBox,
    QGridLayout,
    QHBoxLayout,
    QHeaderView,
    QLabel,
    QListWidget,
    QProgressBar,
    QPushButton,
    QSizePolicy,
    QTableWidget,
    QTableWidgetItem,
    QToolButton,
    QVBoxLayout,
    QWidget,
)

from leadline_napari.style import STAGE_MARKS

if TYPE_CHECKING:
    from leadline_napari.states import BrainState, Legend
    from leadline_napari.style import Theme

WORDS = {"done": "done", "changed": "out of date", "missing": "to do", "running": "running"}
STAGE_ORDER = ("register", "trace", "profile", "anchor", "locate")
LEGEND_MOST = 9
COLUMNS = ("Penetration", "Tracks", "Recording", "Anchors", "Suggested")


class BrainView(QWidget):
    """Shows :class:`BrainState`; signals are what the user asks for."""

    run_asked = Signal(str)
    cancel_asked = Signal()
    open_asked = Signal()
    settings_asked = Signal()
    penetration_chosen = Signal(str)
    view_3d_asked = Signal()
    plane_asked = Signal()
    units_asked = Signal()
    unit_column_chosen = Signal(str)
    save_asked = Signal()

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self.setObjectName("leadline-brain")
        self.theme = theme
        self._state: BrainState | None = None
        layout = QVBoxLayout(self)
        layout.setContentsMargins(8, 6, 8, 6)
        layout.setSpacing(6)
        self.title = QLabel("No brain is open")
        self.title.setStyleSheet("font-weight: bold; font-size: 12pt;")
        self.folder = QLabel("Open a brain.toml or its folder to begin.")
        self.folder.setWordWrap(True)
        self.folder.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        layout.addWidget(self.title)
        layout.addWidget(self.folder)
        layout.addLayout(self._doors())
        layout.addWidget(self._unit_row())
        layout.addWidget(self._heading("Penetrations"))
        layout.addWidget(self._table(), 2)
        layout.addWidget(self._heading("Stages"))
        layout.addLayout(self._stages())
        layout.addLayout(self._run_row())
        layout.addWidget(self._heading("Messages"))
        self.messages = QListWidget()
        self.messages.setWordWrap(True)
        self.messages.setToolTip("What the last run said, and how to mend what went wrong")
        self.messages.setAccessibleName("Messages")
        self.messages.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        layout.addWidget(self.messages, 3)

    def _heading(self, text: str) -> QLabel:
        label = QLabel(text)
        label.setStyleSheet("font-weight: bold;")
        return label

    def _doors(self) -> QGridLayout:
        grid = QGridLayout()
        for place, (name, text, tip, signal) in enumerate((
            ("open", "Open brain…", "Open a brain.toml or its folder", self.open_asked),
            ("settings", "Settings…", "Bands, sensitivity, resolution; kept in brain.toml", self.settings_asked),
            ("save", "Save canvas…", "Save the canvas as PNG, SVG or PDF, at print resolution", self.save_asked),
            ("surfaces", "3-D", "Brain, regions that the tracks cross, and tracks in 3-D; again: back to sections",
             self.view_3d_asked),
            ("plane", "Plane along track", "Lay the slice plane along the selected track, in 3-D", self.plane_asked),
            ("units", "Units", "Show every unit where it sat, coloured by a column of the unit table; again: hide them",
             self.units_asked),
        )):  # fmt: skip
            button = QPushButton(text)
            button.setToolTip(tip)
            button.clicked.connect(signal.emit)
            setattr(self, f"{name}_button", button)
            grid.addWidget(button, place // 3, place % 3)
        return grid

    def _unit_row(self) -> QWidget:
        """What units are coloured by, and what the colours mean; hidden while no units are shown."""
        self.unit_row = QWidget()
        row = QHBoxLayout(self.unit_row)
        row.setContentsMargins(0, 0, 0, 0)
        self.unit_column = QComboBox()
        self.unit_column.setToolTip("The column of the unit table that colours the units on the canvas")
        self.unit_column.setAccessibleName("Units coloured by")
        self.unit_column.textActivated.connect(self.unit_column_chosen.emit)
        self.legend = QLabel()
        self.legend.setWordWrap(True)
        self.legend.setTextFormat(Qt.TextFormat.RichText)
        row.addWidget(QLabel("Units by"))
        row.addWidget(self.unit_column)
        row.addWidget(self.legend, 1)
        self.unit_row.hide()
        return self.unit_row

    def show_units(self, columns: tuple[str, ...], legend: Legend | None) -> None:
        """Offer columns and say what the colours of the chosen one mean; None: no units are shown."""
        self.unit_row.setVisible(legend is not None)
        if legend is None:
            return
        with QSignalBlocker(self.unit_column):
            self.unit_column.clear()
            self.unit_column.addItems(list(columns))
            self.unit_column.setCurrentText(legend.column)
        swatch = "<span style='color:{1}'>●</span>&nbsp;{0}"
        shown = [swatch.format(escape(name), colour) for name, colour in legend.entries[:LEGEND_MOST]]
        more = f" and {len(legend.entries) - LEGEND_MOST} more" if len(legend.entries) > LEGEND_MOST else ""
        self.legend.setText((" … " if legend.is_range else "&ensp; ").join(shown) + more)

    def _table(self) -> QTableWidget:
        self.table = QTableWidget(0, len(COLUMNS))
        self.table.setHorizontalHeaderLabels(list(COLUMNS))
        self.table.verticalHeader().hide()
        self.table.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.table.setSelectionMode(QAbstractItemView.SelectionMode.SingleSelection)
        self.table.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
        self.table.setToolTip("Choose a penetration (Enter) to show it in the Section dock")
        self.table.setAccessibleName("Penetrations")
        header = self.table.horizontalHeader()
        header.setSectionResizeMode(QHeaderView.ResizeMode.Stretch)
        header.setHighlightSections(False)
        self.table.setMinimumHeight(90)
        self.table.cellActivated.connect(self._chosen)
        self.table.cellClicked.connect(self._chosen)
        return self.table

    def _chosen(self, row: int, _column: int) -> None:
        self.penetration_chosen.emit(self.table.item(row, 0).text())

    def _stages(self) -> QGridLayout:
        grid = QGridLayout()
        grid.setVerticalSpacing(3)
        grid.setColumnStretch(1, 1)
        self.marks: dict[str, tuple[QLabel, QLabel, QLabel, QToolButton]] = {}
        for row, stage in enumerate(STAGE_ORDER):
            mark, title, word = QLabel(STAGE_MARKS["missing"]), QLabel(stage), QLabel("")
            button = QToolButton()
            button.setText("Run to here")
            button.setToolTip(f"Run every stage up to '{stage}' that is not up to date")
            button.setAccessibleName(f"Run to {stage}")
            button.setFocusPolicy(Qt.FocusPolicy.TabFocus)
            button.clicked.connect(lambda _=False, stage=stage: self.run_asked.emit(stage))
            for column, widget in enumerate((mark, title, word, button)):
                grid.addWidget(widget, row, column)
            self.marks[stage] = (mark, title, word, button)
        return grid

    def _run_row(self) -> QHBoxLayout:
        row = QHBoxLayout()
        self.run_button = QPushButton("Run all stages")
        self.run_button.setToolTip("Run whatever is missing or out of date, up to the channel table")
        self.run_button.clicked.connect(lambda: self.run_asked.emit("locate"))
        self.cancel_button = QPushButton("Cancel")
        self.cancel_button.setToolTip("Stop at the next step; finished stages are kept")
        self.cancel_button.clicked.connect(self.cancel_asked.emit)
        self.bar = QProgressBar()
        self.bar.setTextVisible(True)
        self.bar.setFormat("")
        self.bar.setRange(0, 1)
        self.bar.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)
        self.bar.setToolTip("Progress of the stage that runs now; also in napari's activity dock")
        for widget in (self.run_button, self.bar, self.cancel_button):
            row.addWidget(widget, 1 if widget is self.bar else 0)
        return row

    def show_state(self, state: BrainState) -> None:
        """Draw a snapshot."""
        before, self._state = self._state, state
        if before == state:
            return
        self.title.setText(state.name)
        self.folder.setText(state.folder)
        if before is None or before.penetrations != state.penetrations or before.selected != state.selected:
            self._show_table(state)
        for stage in state.stages:
            mark, title, word, _ = self.marks[stage.name]
            mark.setText(STAGE_MARKS[stage.state])
            title.setText(stage.title)
            word.setText(WORDS[stage.state])
            for label in (mark, title, word):
                label.setToolTip(stage.note or f"{stage.title}: {WORDS[stage.state]}")
        idle = not state.running
        for *_, button in self.marks.values():
            button.setEnabled(idle)
        self.run_button.setEnabled(idle)
        self.settings_button.setEnabled(idle)
        self.cancel_button.setEnabled(not idle)
        if idle:
            self.show_progress("", 0, 1)
        if before is None or before.messages != state.messages:
            self.messages.clear()
            self.messages.addItems(list(state.messages))
            self.messages.scrollToTop()

    def _show_table(self, state: BrainState) -> None:
        self.table.setRowCount(len(state.penetrations))
        for row, p in enumerate(state.penetrations):
            for column, text in enumerate((p.name, p.traced, p.recording, str(p.anchors), str(p.suggestions))):
                item = QTableWidgetItem(text)
                item.setToolTip(text)
                self.table.setItem(row, column, item)
            if p.name == state.selected[0]:
                self.table.selectRow(row)

    def show_progress(self, label: str, done: float, total: float) -> None:
        """Move the bar; a total of 0 means that nobody knows how long."""
        self.bar.setRange(0, 0 if total <= 0 else 1000)
        if total > 0:
            self.bar.setValue(round(1000 * min(done / total, 1.0)))
        self.bar.setFormat(label)
