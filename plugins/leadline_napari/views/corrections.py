"""The Corrections dock: a track redrawn by hand, a registration corrected by pairs of places."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import Qt, Signal
from qtpy.QtWidgets import QGridLayout, QGroupBox, QLabel, QListWidget, QPushButton, QVBoxLayout, QWidget

if TYPE_CHECKING:
    from leadline_napari.states import CorrectionState
    from leadline_napari.style import Theme

TRACK_HINT = (
    "Blue points lie on the track. Move them with napari's select tool (S), add with the add tool (A), delete with "
    "Delete, in 2-D or 3-D; every change is saved and the track refitted at once."
)
PAIR_HINT = (
    "Go to a place that you know and set a pair there; then drag the cross onto the structure in the stack and the "
    "ring onto the same structure's outline in the atlas."
)
TIPS = {
    "edit": "Show its points on the canvas, to be moved",
    "snap": "Draw every point to the centre of the dye near it",
    "forget": "Forget the points drawn by hand; the dye is traced again at the next run",
    "entry": "The shank entered in the middle of the view, wherever the surface is found; Alt+E: at the cursor",
    "end": "The track ends in the middle of the view; over the canvas, Alt+T: at the cursor",
    "pair": "Name one place in stack and atlas: the middle of the view, or with Alt+P the cursor over the canvas",
    "delete": "Take the chosen pair away",
    "preview": "Draw the atlas as these pairs would refine it",
    "accept": "From the next run on, these pairs refine the registration",
    "withdraw": "From the next run on, the registration is used without pairs",
}


class CorrectionView(QWidget):
    """Shows :class:`CorrectionState`; signals are what the user asks for."""

    edit_asked = Signal(bool)
    snap_asked = Signal()
    entry_asked = Signal()
    end_asked = Signal()
    forget_asked = Signal()
    pair_asked = Signal()
    pair_deleted = Signal(int)
    pair_chosen = Signal(int)
    preview_asked = Signal(bool)
    accept_asked = Signal()
    withdraw_asked = Signal()

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self.setObjectName("leadline-corrections")
        self.theme = theme
        layout = QVBoxLayout(self)
        layout.setContentsMargins(8, 6, 8, 6)
        layout.addWidget(self._track())
        layout.addWidget(self._pairs(), 1)

    def _track(self) -> QGroupBox:
        box = QGroupBox("Track")
        grid = QGridLayout(box)
        self.title = QLabel("Choose a shank in the Section dock")
        self.title.setStyleSheet("font-weight: bold;")
        grid.addWidget(self.title, 0, 0, 1, 3)
        self.edit_button = self._button("Edit this track", "edit", None)
        self.edit_button.setCheckable(True)
        self.edit_button.toggled.connect(self.edit_asked.emit)
        self.snap_button = self._button("Snap to dye", "snap", self.snap_asked)
        self.forget_button = self._button("Return to the dye", "forget", self.forget_asked)
        self.entry_button = self._button("Entry here", "entry", self.entry_asked)
        self.end_button = self._button("End here", "end", self.end_asked)
        for place, button in enumerate(
            (self.edit_button, self.snap_button, self.forget_button, self.entry_button, self.end_button)
        ):
            grid.addWidget(button, 1 + place // 3, place % 3)
        grid.addWidget(self._hint(TRACK_HINT), 3, 0, 1, 3)
        return box

    def _pairs(self) -> QGroupBox:
        box = QGroupBox("Registration")
        grid = QGridLayout(box)
        self.pair_button = self._button("Set pair here", "pair", self.pair_asked)
        self.delete_button = self._button("Delete pair", "delete", None)
        self.delete_button.clicked.connect(lambda: self.pair_deleted.emit(self.list.currentRow()))
        self.preview_button = self._button("Show refined", "preview", None)
        self.preview_button.setCheckable(True)
        self.preview_button.toggled.connect(self.preview_asked.emit)
        self.accept_button = self._button("Use the refined one", "accept", self.accept_asked)
        self.withdraw_button = self._button("Use it as found", "withdraw", self.withdraw_asked)
        for place, button in enumerate(
            (self.pair_button, self.delete_button, self.preview_button, self.accept_button, self.withdraw_button)
        ):
            grid.addWidget(button, place // 3, place % 3)
        self.list = QListWidget()
        self.list.setToolTip("Pairs of places; choose one to go to it")
        self.list.setAccessibleName("Pairs")
        self.list.currentRowChanged.connect(self.pair_chosen.emit)
        grid.addWidget(self.list, 2, 0, 1, 3)
        self.errors = self._hint("")
        self.force = self._hint("")
        grid.addWidget(self.errors, 3, 0, 1, 3)
        grid.addWidget(self.force, 4, 0, 1, 3)
        grid.addWidget(self._hint(PAIR_HINT), 5, 0, 1, 3)
        grid.setRowStretch(2, 1)
        return box

    def _button(self, text: str, tip: str, signal: Signal | None) -> QPushButton:
        button = QPushButton(text)
        button.setToolTip(TIPS[tip])
        if signal is not None:
            button.clicked.connect(lambda _=False: signal.emit())
        return button

    def _hint(self, text: str) -> QLabel:
        label = QLabel(text)
        label.setWordWrap(True)
        label.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        return label

    def show_state(self, state: CorrectionState) -> None:
        """Draw a snapshot."""
        how = (" · drawn by hand" if state.by_hand else "") + (" · entry set by hand" if state.entry_set else "")
        self.title.setText(f"{state.title}{how}" if state.title else "Choose a shank in the Section dock")
        for button, enabled in (
            (self.edit_button, state.can_edit or state.by_hand), (self.snap_button, state.editing),
            (self.entry_button, state.editing), (self.end_button, state.editing), (self.forget_button, state.by_hand),
            (self.pair_button, state.registered), (self.delete_button, bool(state.pairs)),
            (self.preview_button, bool(state.pairs)), (self.accept_button, bool(state.pairs) and not state.same),
            (self.withdraw_button, state.in_force),
        ):  # fmt: skip
            button.setEnabled(enabled)
        if self.edit_button.isChecked() != state.editing:
            self.edit_button.blockSignals(True)
            self.edit_button.setChecked(state.editing)
            self.edit_button.blockSignals(False)
        if tuple(self.list.item(i).text() for i in range(self.list.count())) != state.pairs:
            row = self.list.currentRow()
            self.list.blockSignals(True)
            self.list.clear()
            self.list.addItems(list(state.pairs))
            self.list.setCurrentRow(min(row, len(state.pairs) - 1))
            self.list.blockSignals(False)
        self.errors.setText(state.errors)
        self.force.setText(
            ("These pairs refine" if state.same else "Other pairs refine") + " the registration at the next run"
            if state.in_force
            else "The registration is used as it was found"
        )
