"""A table of rows for reading and choosing: whole rows, plain text, quick with thousands of them."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import (
    QAbstractTableModel,
    QEvent,
    QItemSelectionModel,
    QModelIndex,
    QPersistentModelIndex,
    Qt,
    Signal,
)
from PySide6.QtGui import QKeyEvent
from PySide6.QtWidgets import QAbstractItemView, QHeaderView, QTableView, QWidget

Index = QModelIndex | QPersistentModelIndex
ROOM_PX = 8
"""Room above and below the text of a row, together."""


class RowsModel(QAbstractTableModel):
    """Columns with titles; subclasses say what stands in them.

    Parameters
    ----------
    titles : sequence of str
        One per column.
    """

    def __init__(self, titles: Sequence[str]) -> None:
        super().__init__()
        self._titles = tuple(titles)

    def n_rows(self) -> int:
        """Count the rows."""
        raise NotImplementedError

    def text(self, row: int, column: int) -> str:
        """Give what stands in a cell."""
        raise NotImplementedError

    def more(self, row: int, column: int, role: int) -> object:
        """Give a cell's icon, weight or other data; None for none."""
        del row, column, role
        return None

    def rowCount(self, parent: Index | None = None) -> int:
        """Count the rows, for the view."""
        return 0 if parent is not None and parent.isValid() else self.n_rows()

    def columnCount(self, parent: Index | None = None) -> int:
        """Count the columns, for the view."""
        return 0 if parent is not None and parent.isValid() else len(self._titles)

    def data(self, index: Index, role: int = Qt.ItemDataRole.DisplayRole) -> object:
        """Give what a cell shows; its tooltip is its text, which may be too long for the cell."""
        if not index.isValid():
            return None
        if role in (Qt.ItemDataRole.DisplayRole, Qt.ItemDataRole.ToolTipRole):
            return self.text(index.row(), index.column())
        return self.more(index.row(), index.column(), role)

    def headerData(
        self, section: int, orientation: Qt.Orientation, role: int = Qt.ItemDataRole.DisplayRole
    ) -> object:
        """Give the title of a column."""
        if role == Qt.ItemDataRole.DisplayRole and orientation is Qt.Orientation.Horizontal:
            return self._titles[section]
        if role == Qt.ItemDataRole.TextAlignmentRole:
            return int(Qt.AlignmentFlag.AlignLeft | Qt.AlignmentFlag.AlignVCenter)
        return None


class RowsTable(QTableView):
    """A view of rows.

    Parameters
    ----------
    name : str
        Accessible name.
    model : RowsModel
        What it shows.
    widths : sequence of str
        For every column but the last a text that fits into it; the last takes the rest.

    Attributes
    ----------
    opened : Signal(int)
        Return or a double click on this row.
    """

    opened = Signal(int)

    def __init__(
        self, name: str, model: RowsModel, widths: Sequence[str], parent: QWidget | None = None
    ) -> None:
        super().__init__(parent)
        self.setAccessibleName(name)
        self._widths = tuple(widths)
        # Kept here: a view does not own its model.
        self._rows_model = model
        self.setModel(model)
        # Of its own and always empty: else the header asks row by row whether whole columns are selected.
        self.horizontalHeader().setSelectionModel(QItemSelectionModel(model, self))
        self.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
        self.setVerticalScrollMode(QAbstractItemView.ScrollMode.ScrollPerPixel)
        self.setTabKeyNavigation(False)
        self.setWordWrap(False)
        self.setShowGrid(False)
        self.setAlternatingRowColors(True)
        self.setCornerButtonEnabled(False)
        self.verticalHeader().hide()
        self.verticalHeader().setSectionResizeMode(QHeaderView.ResizeMode.Fixed)
        self.horizontalHeader().setStretchLastSection(True)
        self.horizontalHeader().setHighlightSections(False)
        self.doubleClicked.connect(lambda index: self.opened.emit(index.row()))
        self._fit()

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Open the current row by Return."""
        if event.key() in (Qt.Key.Key_Return, Qt.Key.Key_Enter) and self.currentIndex().isValid():
            self.opened.emit(self.currentIndex().row())
            return
        super().keyPressEvent(event)

    def changeEvent(self, event: QEvent) -> None:
        """Follow the size of the text."""
        super().changeEvent(event)
        if event.type() in (QEvent.Type.FontChange, QEvent.Type.StyleChange):
            self._fit()

    def selected_rows(self) -> list[int]:
        """List the selected rows, in order."""
        chosen = self.selectionModel().selection()
        # By spans: asking row by row takes seconds where thousands are selected.
        spans = [chosen.at(place) for place in range(chosen.size())]
        return sorted({row for span in spans for row in range(span.top(), span.bottom() + 1)})

    def row_height(self) -> int:
        """Height of every row in the units of the layout."""
        return self.fontMetrics().height() + ROOM_PX

    def _fit(self) -> None:
        self.verticalHeader().setMinimumSectionSize(1)
        self.verticalHeader().setDefaultSectionSize(self.row_height())
        for column, text in enumerate(self._widths):
            self.setColumnWidth(column, self.fontMetrics().horizontalAdvance(text) + 24)
