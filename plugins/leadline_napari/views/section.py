"""The section dock: the log, a tool bar above it, what is in hand and what lies under the cursor below it."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from qtpy.QtCore import QEvent, QKeyCombination, QSignalBlocker, Qt, Signal
from qtpy.QtGui import QKeySequence
from qtpy.QtWidgets import (
    QComboBox,
    QDoubleSpinBox,
    QHBoxLayout,
    QLabel,
    QPlainTextEdit,
    QSizePolicy,
    QToolButton,
    QVBoxLayout,
    QWidget,
)

from leadline_napari.views.log import Log

if TYPE_CHECKING:
    from qtpy.QtCore import QObject

    from leadline.model.anchor import Anchor
    from leadline_napari.states import InHand, Readout, SectionState
    from leadline_napari.style import Theme

KEYS: dict[str, tuple[str, tuple[object, ...]]] = {
    "Up": ("nudge", ("depth", -5.0)),
    "Down": ("nudge", ("depth", 5.0)),
    "Shift+Up": ("nudge", ("depth", -1.0)),
    "Shift+Down": ("nudge", ("depth", 1.0)),
    "Alt+Up": ("nudge", ("tip", 5.0)),
    "Alt+Down": ("nudge", ("tip", -5.0)),
    "Alt+Shift+Up": ("nudge", ("tip", 1.0)),
    "Alt+Shift+Down": ("nudge", ("tip", -1.0)),
    "PgDown": ("stepped", (1,)),
    "PgUp": ("stepped", (-1,)),
    "Del": ("deleted", ()),
    "Return": ("accepted", ()),
    "Enter": ("accepted", ()),
    "Esc": ("let_go", ()),
    "Ins": ("insert_asked", ()),
    "Ctrl+Z": ("undo_asked", ()),
    "Ctrl+Shift+Z": ("redo_asked", ()),
    "Ctrl+Y": ("redo_asked", ()),
    "Ctrl+S": ("update_asked", ()),
    "Home": ("whole_asked", ()),
}
READOUT_LINES = 5
HINT = (
    "Double-click in a lane adds an anchor; drag either end; arrow keys nudge by 5 um (Shift: 1 um, Alt: the contact's "
    "end); Page Up/Down goes from anchor to anchor, Insert adds one at the chosen contact."
)


class Line(QLabel):
    """One line of words, cut where there is no more room; the tool tip says it whole."""

    def __init__(self) -> None:
        super().__init__()
        self.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)

    def say(self, words: str) -> None:
        """Show these words."""
        self.setToolTip(words)
        room = max(self.width() - 8, 100)
        self.setText(self.fontMetrics().elidedText(words, Qt.TextElideMode.ElideRight, room))

    def resizeEvent(self, event: object) -> None:
        """Cut anew."""
        super().resizeEvent(event)
        self.say(self.toolTip())


class SectionView(QWidget):
    """Shows :class:`SectionState`; every signal is something the user did."""

    nudge = Signal(str, float)
    stepped = Signal(int)
    deleted = Signal()
    accepted = Signal()
    let_go = Signal()
    insert_asked = Signal()
    undo_asked = Signal()
    redo_asked = Signal()
    update_asked = Signal()
    whole_asked = Signal()
    lanes_asked = Signal()
    second_asked = Signal()
    save_asked = Signal()
    restore_asked = Signal()
    shank_chosen = Signal(str, int)
    tissue_chosen = Signal(int)
    anchor_chosen = Signal(object)
    anchor_changed = Signal(object, object)
    dragged = Signal(object, str, float)
    dropped = Signal()

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self.setObjectName("leadline-section")
        self.log = Log(theme)
        self.theme = theme
        self._state: SectionState | None = None
        self._shown_in_hand: InHand | None = None
        layout = QVBoxLayout(self)
        layout.setContentsMargins(6, 4, 6, 4)
        layout.setSpacing(4)
        layout.addLayout(self._bar())
        # Always there, or the lanes would jump under the mouse when a warning comes up in the middle of a drag.
        self.banner = Line()
        self.banner.setObjectName("leadline-banner")
        layout.addWidget(self.banner)
        layout.addWidget(self.log, 1)
        layout.addWidget(self._hand())
        self.readout = QPlainTextEdit()
        self.readout.setObjectName("leadline-readout")
        self.readout.setAccessibleName("Under the cursor, or the evidence for a suggestion")
        self.readout.setToolTip("What lies under the cursor; for a suggestion in hand, the evidence for and against it")
        self.readout.setReadOnly(True)
        self.readout.setTabChangesFocus(True)
        self.readout.setFrameShape(QPlainTextEdit.Shape.NoFrame)
        self.readout.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self.readout.setStyleSheet("background: transparent;")
        self.readout.document().setDocumentMargin(2)
        self.readout.setFixedHeight(self.fontMetrics().lineSpacing() * READOUT_LINES + 6)
        layout.addWidget(self.readout)
        self._watch_keys()
        self._wire_band()
        self.whole_asked.connect(self.log.whole)
        self.show_readout(None)

    # -- building -----------------------------------------------------------------------------------------------

    def _bar(self) -> QHBoxLayout:
        bar = QHBoxLayout()
        bar.setSpacing(4)
        self.shank = QComboBox()
        self.shank.setToolTip("Which penetration is shown, and which of its shanks")
        self.shank.setAccessibleName("Shank")
        self.shank.setMinimumContentsLength(5)
        self.shank.activated.connect(lambda i: self.shank_chosen.emit(*self.shank.itemData(i)))
        bar.addWidget(self.shank, 1)
        self.tissue = QComboBox()
        self.tissue.addItems(["Stack", "Template"])
        self.tissue.setToolTip("What the tissue lane shows: the stack with its dye, or the atlas template")
        self.tissue.setAccessibleName("Tissue lane")
        self.tissue.activated.connect(self.tissue_chosen.emit)
        bar.addWidget(self.tissue)
        for name, text, tip, signal in (
            ("undo", "↶", "Undo (Ctrl+Z)", self.undo_asked),
            ("redo", "↷", "Redo (Ctrl+Shift+Z)", self.redo_asked),
            ("whole", "⤢", "Show the whole track (Home); the wheel zooms, dragging pans", self.whole_asked),
            ("lanes", "Lanes…", "Choose and order the physiology lanes, set their ranges", self.lanes_asked),
            ("second", "Compare…", "Show a second reader's anchors beside yours", self.second_asked),
            ("save", "Save…", "Save this section as PNG, SVG or PDF", self.save_asked),
            ("update", "Update", "Write channels.csv and all other tables anew with these anchors and tracks "
             "(Ctrl+S); anchors themselves are saved at once", self.update_asked),
        ):  # fmt: skip
            button = QToolButton()
            button.setText(text)
            button.setToolTip(tip)
            button.setAccessibleName(tip)
            button.setFocusPolicy(Qt.FocusPolicy.TabFocus)
            button.clicked.connect(signal.emit)
            setattr(self, f"{name}_button", button)
            bar.addWidget(button)
        return bar

    def _hand(self) -> QWidget:
        self.hand = QWidget()
        rows = QVBoxLayout(self.hand)
        rows.setContentsMargins(0, 0, 0, 0)
        rows.setSpacing(3)
        self.landmark = QComboBox()
        self.landmark.setEditable(True)
        self.landmark.setInsertPolicy(QComboBox.InsertPolicy.NoInsert)
        self.landmark.setToolTip("What this anchor marks: choose a border or landmark, or write your own words")
        self.landmark.setAccessibleName("Landmark")
        self.landmark.lineEdit().setPlaceholderText("What the anchor in hand marks")
        self.landmark.setMinimumContentsLength(12)
        self.landmark.lineEdit().editingFinished.connect(self._edited)
        self.landmark.activated.connect(lambda _: self._edited())
        self.depth = self._spin("Depth", "Track depth of this anchor, um", -2000.0, 20000.0)
        self.tip = self._spin("From tip", "Distance of its contact from the tip, um", -2000.0, 20000.0)
        self.sd = self._spin("±", "Standard deviation of this anchor, um: how sure you are", 1.0, 1000.0)
        delete = "Delete this anchor, or refuse this suggestion (Delete)"
        self.accept_button = self._button("Accept", "Make this suggestion an anchor (Enter)", self.accepted)
        self.delete_button = self._button("Delete", delete, self.deleted)
        restore = "Show refused suggestions of this shank again"
        self.restore_button = self._button("Show refused", restore, self.restore_asked)
        for widgets in (
            (self.landmark, self.accept_button, self.delete_button),
            (self.depth, self.tip, self.sd, self.restore_button),
        ):
            row = QHBoxLayout()
            row.setSpacing(4)
            for widget in widgets:
                row.addWidget(widget, 0 if isinstance(widget, QToolButton) else 1)
            rows.addLayout(row)
        return self.hand

    def _button(self, text: str, tip: str, signal: Signal) -> QToolButton:
        button = QToolButton()
        button.setText(text)
        button.setToolTip(tip)
        button.setAccessibleName(tip)
        button.setFocusPolicy(Qt.FocusPolicy.TabFocus)
        button.clicked.connect(signal.emit)
        return button

    def _spin(self, prefix: str, tip: str, low: float, high: float) -> QDoubleSpinBox:
        spin = QDoubleSpinBox()
        spin.setRange(low, high)
        spin.setDecimals(1)
        spin.setSingleStep(5.0)
        spin.setPrefix(f"{prefix} ")
        spin.setSpecialValueText(prefix)  # shown at the lowest value: nothing is in hand
        spin.setSuffix(" um")
        spin.setToolTip(tip)
        spin.setAccessibleName(tip)
        spin.setKeyboardTracking(False)
        spin.setButtonSymbols(QDoubleSpinBox.ButtonSymbols.NoButtons)
        spin.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        spin.editingFinished.connect(self._edited)
        return spin

    def eventFilter(self, watched: QObject, event: QEvent) -> bool:
        """Keys over the log: they are taken before the window's own shortcuts, some of which are the same."""
        kind = event.type()
        if watched is self.log and kind in (QEvent.Type.ShortcutOverride, QEvent.Type.KeyPress):
            modifiers = event.modifiers() & ~Qt.KeyboardModifier.KeypadModifier
            keys = QKeySequence(QKeyCombination(modifiers, Qt.Key(event.key()))).toString(
                QKeySequence.SequenceFormat.PortableText
            )
            if keys in KEYS:
                event.accept()
                if kind == QEvent.Type.KeyPress:
                    name, values = KEYS[keys]
                    getattr(self, name).emit(*values)
                return True
        return super().eventFilter(watched, event)

    def _watch_keys(self) -> None:
        self.log.installEventFilter(self)
        self.log.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.log.setAccessibleName("Section of the track")

    def _wire_band(self) -> None:
        self.log.band.chosen.connect(self._chosen)
        self.log.band.dragged.connect(self.dragged)
        self.log.band.dropped.connect(self.dropped)

    def _chosen(self, anchor: Anchor) -> None:
        self.log.setFocus()
        self.anchor_chosen.emit(anchor)

    # -- showing ------------------------------------------------------------------------------------------------

    def set_theme(self, theme: Theme) -> None:
        """Change colours."""
        self.theme = theme
        self.log.set_theme(theme)
        if self._state is not None:
            self._show_banner(self._state)

    def show_state(self, state: SectionState) -> None:
        """Draw a snapshot."""
        before, self._state = self._state, state
        if before is None or before.shanks != state.shanks or before.shank != state.shank:
            self._show_shanks(state)
        self.undo_button.setEnabled(state.can_undo)
        self.redo_button.setEnabled(state.can_redo)
        self._show_banner(state)
        if state.in_hand != self._shown_in_hand or before is None:
            self._show_in_hand(state.in_hand)
        self.log.draw(state)

    def _show_banner(self, state: SectionState) -> None:
        """What is being done, or a warning."""
        words = state.message or (state.band.out_of_range if state.band else "")
        warning = bool(words and not state.message)
        look = f"color: {self.theme.warning if warning else self.theme.soft}; padding: 1px 3px;"
        if words != self.banner.toolTip():
            self.banner.say(words)
        if look != self.banner.styleSheet():
            self.banner.setStyleSheet(look)

    def _say(self, words: str) -> None:
        if words != self.readout.toPlainText():
            self.readout.setPlainText(words)

    def _show_shanks(self, state: SectionState) -> None:
        with QSignalBlocker(self.shank):
            self.shank.clear()
            names = [name for name, _ in state.shanks]
            for name, shank in state.shanks:
                self.shank.addItem(name if names.count(name) == 1 else f"{name} · {shank}", (name, shank))
            if state.shank in state.shanks:
                self.shank.setCurrentIndex(state.shanks.index(state.shank))

    def _show_in_hand(self, held: InHand | None) -> None:
        self._shown_in_hand = held
        boxes = (self.landmark, self.depth, self.tip, self.sd)
        blockers = [QSignalBlocker(box) for box in boxes]
        editable = held is not None and held.editable
        for box in boxes:
            box.setEnabled(editable)
        self.accept_button.setVisible(held is not None and held.kind == "suggested")
        self.delete_button.setText("Refuse" if held is not None and held.kind == "suggested" else "Delete")
        self.delete_button.setEnabled(held is not None and held.kind != "fixed")
        self.landmark.clear()
        if held is not None:
            self.landmark.addItems(list(held.landmarks))
            self.landmark.setEditText(held.anchor.landmark)
            self.landmark.lineEdit().setCursorPosition(0)
            for spin, value in (
                (self.depth, held.anchor.track_depth_um),
                (self.tip, held.anchor.tip_distance_um),
                (self.sd, held.anchor.sd_um),
            ):
                if not spin.hasFocus() or abs(spin.value() - value) > 0.05:
                    spin.setValue(value)
        else:
            self.landmark.setEditText("")
            for spin in (self.depth, self.tip, self.sd):
                spin.setValue(spin.minimum())
        del blockers
        self._say(held.evidence if held is not None and held.evidence else HINT)

    def _edited(self) -> None:
        """A box of the strip was changed; boxes that still show what they showed keep the exact value."""
        held = self._shown_in_hand
        if held is None or not held.editable:
            return
        old = held.anchor
        changes: dict[str, object] = {}
        for name, spin in (("track_depth_um", self.depth), ("tip_distance_um", self.tip), ("sd_um", self.sd)):
            if abs(spin.value() - getattr(old, name)) > 0.051:
                changes[name] = spin.value()
        if self.landmark.currentText() != old.landmark:
            changes["landmark"] = self.landmark.currentText()
        if changes:
            self.anchor_changed.emit(old, replace(old, **changes))

    def show_readout(self, readout: Readout | None) -> None:
        """Tell what lies under the cursor; without one, the evidence of a suggestion in hand, or how to begin."""
        held = self._shown_in_hand
        if readout is None:
            self._say(held.evidence if held is not None and held.evidence else HINT)
        else:
            self._say(readout.text)
        self.log.show_cursor(readout)
