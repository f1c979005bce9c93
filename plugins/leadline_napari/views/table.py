"""The channel table: sorted by a click, filtered by words, copied to the clipboard."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QAbstractTableModel, QModelIndex, QSortFilterProxyModel, Qt, Signal
from qtpy.QtGui import QColor, QGuiApplication, QKeySequence, QShortcut
from qtpy.QtWidgets import (
    QAbstractItemView,
    QHBoxLayout,
    QLabel,
    QLineEdit,
    QPushButton,
    QTableView,
    QVBoxLayout,
    QWidget,
)

from leadline_napari.states import TableState

if TYPE_CHECKING:
    from leadline_napari.style import Theme


class ChannelModel(QAbstractTableModel):
    """Rows of :class:`TableState`."""

    def __init__(self) -> None:
        super().__init__()
        self.state = TableState()

    def set_state(self, state: TableState) -> None:
        """Take new rows."""
        self.beginResetModel()
        self.state = state
        self.endResetModel()

    def rowCount(self, parent: QModelIndex | None = None) -> int:
        """Channels."""
        return 0 if parent is not None and parent.isValid() else len(self.state.rows)

    def columnCount(self, parent: QModelIndex | None = None) -> int:
        """Columns."""
        return 0 if parent is not None and parent.isValid() else len(self.state.columns)

    def headerData(self, section: int, orientation: Qt.Orientation, role: int = Qt.ItemDataRole.DisplayRole) -> object:
        """Names of columns."""
        if orientation == Qt.Orientation.Horizontal and role in (
            Qt.ItemDataRole.DisplayRole,
            Qt.ItemDataRole.ToolTipRole,
        ):
            return self.state.columns[section]
        return None

    def data(self, index: QModelIndex, role: int = Qt.ItemDataRole.DisplayRole) -> object:
        """A cell; numbers stay numbers, so that they sort as numbers."""
        value = self.state.rows[index.row()][index.column()]
        if role == Qt.ItemDataRole.DisplayRole:
            return text_of(value)
        if role == Qt.ItemDataRole.UserRole:
            return value
        if role == Qt.ItemDataRole.TextAlignmentRole and isinstance(value, int | float):
            return int(Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter)
        if role == Qt.ItemDataRole.DecorationRole and self.state.columns[index.column()] == "region":
            return QColor(*self.state.colours[index.row()])
        return None


def text_of(value: object) -> str:
    """A cell as people read it."""
    if value is None:
        return ""
    return f"{value:.10g}" if isinstance(value, float) else str(value)


class Filter(QSortFilterProxyModel):
    """Keeps rows in which every word is found in some column; sorts by value."""

    words: tuple[str, ...] = ()

    def set_words(self, text: str) -> None:
        """Keep rows with these words."""
        self.words = tuple(text.casefold().split())
        self.invalidate()

    def filterAcceptsRow(self, row: int, parent: QModelIndex) -> bool:
        """Whether a row is kept."""
        if not self.words:
            return True
        cells = " ".join(text_of(v) for v in self.sourceModel().state.rows[row]).casefold()
        return all(word in cells for word in self.words)

    def lessThan(self, left: QModelIndex, right: QModelIndex) -> bool:
        """Numbers by size, words by alphabet, missing values last."""
        a, b = left.data(Qt.ItemDataRole.UserRole), right.data(Qt.ItemDataRole.UserRole)
        if a is None or b is None:
            return b is None and a is not None
        if isinstance(a, int | float) and isinstance(b, int | float):
            return bool(a < b)
        return str(a) < str(b)


class TableView(QWidget):
    """Shows :class:`TableState`."""

    channel_chosen = Signal(str, int)

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self.setObjectName("leadline-channels")
        self.theme = theme
        self.model, self.filter = ChannelModel(), Filter()
        self.filter.setSourceModel(self.model)
        layout = QVBoxLayout(self)
        layout.setContentsMargins(6, 6, 6, 6)
        top = QHBoxLayout()
        self.words = QLineEdit()
        self.words.setPlaceholderText("Filter: words of any column, such as a region and 'between'")
        self.words.setClearButtonEnabled(True)
        self.words.setToolTip("Keep the rows in which every word is found")
        self.words.setAccessibleName("Filter")
        self.words.textChanged.connect(self._filtered)
        self.count = QLabel("")
        self.copy_button = QPushButton("Copy")
        self.copy_button.setToolTip("Copy the selected rows, or all rows shown, to the clipboard as a table (Ctrl+C)")
        self.copy_button.clicked.connect(self.copy)
        for widget in (self.words, self.count, self.copy_button):
            top.addWidget(widget, 1 if widget is self.words else 0)
        layout.addLayout(top)
        self.table = QTableView()
        self.table.setModel(self.filter)
        self.table.setSortingEnabled(True)
        self.table.sortByColumn(-1, Qt.SortOrder.AscendingOrder)
        self.table.horizontalHeader().setResizeContentsPrecision(8)
        self.table.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.table.verticalHeader().hide()
        self.table.verticalHeader().setDefaultSectionSize(self.fontMetrics().height() + 6)
        self.table.setToolTip("Click a heading to sort; click a row to show that channel everywhere")
        self.table.setAccessibleName("Channels")
        self.table.clicked.connect(self._clicked)
        self.table.activated.connect(self._clicked)
        layout.addWidget(self.table)
        shortcut = QShortcut(QKeySequence.StandardKey.Copy, self.table)
        shortcut.setContext(Qt.ShortcutContext.WidgetShortcut)
        shortcut.activated.connect(self.copy)

    def show_state(self, state: TableState) -> None:
        """Draw a snapshot; only what is chosen is changed where the rows are the same."""
        old = self.model.state
        if state.rows is not old.rows:
            self.model.set_state(state)
            self.table.resizeColumnsToContents()
            self._filtered(self.words.text())
        self.model.state = state
        if state.chosen != old.chosen and state.chosen is not None:
            self._select(state.chosen)

    def _select(self, chosen: tuple[str, int]) -> None:
        columns = self.model.state.columns
        name, channel = columns.index("penetration"), columns.index("channel")
        for i, row in enumerate(self.model.state.rows):
            if (row[name], row[channel]) == chosen:
                index = self.filter.mapFromSource(self.model.index(i, 0))
                if index.isValid():
                    self.table.selectRow(index.row())
                    self.table.scrollTo(index)
                return

    def _filtered(self, text: str) -> None:
        self.filter.set_words(text)
        self.count.setText(f"{self.filter.rowCount()} of {len(self.model.state.rows)}")

    def _clicked(self, index: QModelIndex) -> None:
        row = self.model.state.rows[self.filter.mapToSource(index).row()]
        columns = self.model.state.columns
        self.channel_chosen.emit(str(row[columns.index("penetration")]), int(row[columns.index("channel")]))

    def text(self) -> str:
        """Selected rows, or all rows shown, as tab-separated text with a heading."""
        rows = sorted({i.row() for i in self.table.selectionModel().selectedRows()})
        shown = rows if len(rows) > 1 else range(self.filter.rowCount())
        lines = ["\t".join(self.model.state.columns)]
        for row in shown:
            source = self.filter.mapToSource(self.filter.index(row, 0)).row()
            lines.append("\t".join(text_of(v) for v in self.model.state.rows[source]))
        return "\n".join(lines) + "\n"

    def copy(self) -> None:
        """Put the rows on the clipboard."""
        QGuiApplication.clipboard().setText(self.text())
