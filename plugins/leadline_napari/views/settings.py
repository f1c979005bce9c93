"""Run settings: what people change, with defaults and a way back to them."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import Signal
from qtpy.QtWidgets import (
    QCheckBox,
    QDialog,
    QDialogButtonBox,
    QDoubleSpinBox,
    QFormLayout,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QScrollArea,
    QSpinBox,
    QVBoxLayout,
    QWidget,
)  # fmt: skip

if TYPE_CHECKING:
    from collections.abc import Mapping

TITLES = {
    "register": "Registration", "trace": "Tracing", "profile": "Profiles", "anchor": "Depth maps", "locate": "Locating",
}  # fmt: skip
UNITS = ("_um", "_hz", "_s")


class SettingsDialog(QDialog):
    """Edits ``[settings.STAGE]``; ``accepted_changes`` carries stage -> key -> value, None where a default returns."""

    accepted_changes = Signal(object)

    def __init__(
        self, parent: QWidget, values: Mapping[str, Mapping[str, object]], defaults: Mapping[str, Mapping[str, object]]
    ) -> None:
        super().__init__(parent)
        self.setWindowTitle("Run settings")
        self.values, self.defaults = values, defaults
        self.boxes: dict[tuple[str, str], tuple[QWidget, ...]] = {}
        inner = QWidget()
        form = QFormLayout(inner)
        form.setVerticalSpacing(3)
        for stage, keys in values.items():
            heading = QLabel(TITLES[stage])
            heading.setStyleSheet("font-weight: bold; padding-top: 6px;")
            form.addRow(heading)
            for key, value in keys.items():
                form.addRow(words_of(key), self._row(stage, key, value))
        area = QScrollArea()
        area.setWidget(inner)
        area.setWidgetResizable(True)
        layout = QVBoxLayout(self)
        layout.addWidget(QLabel("Kept in brain.toml; only stages that depend on a change run again."))
        layout.addWidget(area)
        layout.addWidget(self._buttons())
        self.resize(max(460, inner.sizeHint().width() + 60), 560)

    def _buttons(self) -> QDialogButtonBox:
        kinds = QDialogButtonBox.StandardButton
        buttons = QDialogButtonBox(kinds.Ok | kinds.Cancel | kinds.RestoreDefaults)
        buttons.accepted.connect(self._accepted)
        buttons.rejected.connect(self.reject)
        reset = buttons.button(kinds.RestoreDefaults)
        reset.setToolTip("Return every setting to its default")
        reset.clicked.connect(self.reset)
        return buttons

    def _row(self, stage: str, key: str, value: object) -> QWidget:
        row = QWidget()
        line = QHBoxLayout(row)
        line.setContentsMargins(0, 0, 0, 0)
        parts = value if isinstance(value, tuple | list) else (value,)
        boxes = tuple(_box(v) for v in parts)
        default = self.defaults[stage][key]
        for box in boxes:
            box.setToolTip(f"{key} of [settings.{stage}]; default {default}")
            box.setAccessibleName(f"{stage}: {words_of(key)}")
            line.addWidget(box)
        back = QPushButton("Default")
        back.setToolTip(f"Return to {default}")
        back.clicked.connect(lambda _=False: self._fill(stage, key, default))
        line.addStretch(1)
        line.addWidget(back)
        self.boxes[stage, key] = boxes
        return row

    def _fill(self, stage: str, key: str, value: object) -> None:
        parts = value if isinstance(value, tuple | list) else (value,)
        for box, part in zip(self.boxes[stage, key], parts, strict=True):
            box.setChecked(part) if isinstance(box, QCheckBox) else box.setValue(part)

    def reset(self) -> None:
        """Return every setting to its default."""
        for stage, keys in self.defaults.items():
            for key, value in keys.items():
                self._fill(stage, key, value)

    def changes(self) -> dict[str, dict[str, object]]:
        """What differs from the values that were shown; None where it is the default again."""
        found: dict[str, dict[str, object]] = {}
        for (stage, key), boxes in self.boxes.items():
            parts = tuple(b.isChecked() if isinstance(b, QCheckBox) else b.value() for b in boxes)
            old = self.values[stage][key]
            new = parts if isinstance(old, tuple | list) else parts[0]
            if new != (tuple(old) if isinstance(old, list) else old):
                default = self.defaults[stage][key]
                found.setdefault(stage, {})[key] = None if new == default else new
        return found

    def _accepted(self) -> None:
        self.accepted_changes.emit(self.changes())
        self.accept()


def words_of(key: str) -> str:
    """A key as words with its unit."""
    for unit in UNITS:
        if key.endswith(unit):
            return f"{key.removesuffix(unit).replace('_', ' ').capitalize()} ({unit[1:].replace('hz', 'Hz')})"
    return key.replace("_", " ").capitalize()


def _box(value: object) -> QWidget:
    if isinstance(value, bool):
        box = QCheckBox()
        box.setChecked(value)
        return box
    if isinstance(value, int):
        whole = QSpinBox()
        whole.setRange(0, 10**6)
        whole.setValue(value)
        return whole
    number = QDoubleSpinBox()
    number.setRange(-1e5, 1e5)
    number.setDecimals(2)
    number.setMinimumWidth(number.fontMetrics().horizontalAdvance("-00000.00") + 76)
    number.setValue(float(value))
    return number
