"""The table of channels: bad or not, type, position; sorted and filtered by the user."""

from __future__ import annotations

import re
from collections.abc import Sequence
from enum import IntEnum
from typing import Any

from PySide6.QtCore import (
    QAbstractItemModel,
    QAbstractTableModel,
    QEvent,
    QItemSelection,
    QItemSelectionModel,
    QLineF,
    QModelIndex,
    QPersistentModelIndex,
    QRectF,
    QSortFilterProxyModel,
    Qt,
    QTimer,
    Signal,
)
from PySide6.QtGui import QColor, QFont, QKeyEvent, QMouseEvent, QPainter, QPen
from PySide6.QtWidgets import (
    QAbstractItemView,
    QComboBox,
    QHeaderView,
    QStyle,
    QStyledItemDelegate,
    QStyleOptionViewItem,
    QTableView,
    QWidget,
)

from pulsemend.model.vocabulary import ChannelType
from pulsemend.window.channel_rows import TYPE_WORDS, ChannelRow, Condition, Placed
from pulsemend.window.theme import Theme

Index = QModelIndex | QPersistentModelIndex
_ROWS_SEEN = 8
_NOWHERE = QModelIndex()
_ROW = Qt.ItemDataRole.UserRole
# Asked for thousands of times when many rows are chosen.
_CHOOSABLE = Qt.ItemFlag.ItemIsEnabled | Qt.ItemFlag.ItemIsSelectable
_CHECKABLE = _CHOOSABLE | Qt.ItemFlag.ItemIsUserCheckable
_EDITABLE = _CHOOSABLE | Qt.ItemFlag.ItemIsEditable

IN_PLAN = "plan"
FOUND = "found"
WHY_FOUND = "Found bad in the signal. Take the cross away to say that it is good after all."
WHY_PLAN = "Bad in every recording: that is said in the plan (channels.bad) and changed there, not here."
TYPE_TIP = "Double-click or press Return to say what this channel records."


class Column(IntEnum):
    """Columns of the table."""

    BAD = 0
    NAME = 1
    TYPE = 2
    POSITION = 3


_TITLES = {Column.BAD: "Bad", Column.NAME: "Name", Column.TYPE: "Type", Column.POSITION: "Position"}


class ChannelModel(QAbstractTableModel):
    """The channels as Qt's views want them.

    Attributes
    ----------
    bad_asked : Signal(object, bool)
        Names of channels that are to be bad, or good again.
    type_asked : Signal(object, object)
        A ChannelRow and the type it is to have.
    """

    bad_asked = Signal(object, bool)
    type_asked = Signal(object, object)

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.rows: tuple[ChannelRow, ...] = ()

    def show_rows(self, rows: tuple[ChannelRow, ...]) -> None:
        """Show other rows; of the same channels without losing the user's place."""
        if rows == self.rows:
            return
        if [row.name for row in rows] == [row.name for row in self.rows]:
            self.rows = rows
            last = self.index(len(rows) - 1, len(Column) - 1)
            self.dataChanged.emit(self.index(0, 0), last)
            return
        self.beginResetModel()
        self.rows = rows
        self.endResetModel()

    def rowCount(self, parent: Index = _NOWHERE) -> int:
        """Count the channels."""
        return 0 if parent.isValid() else len(self.rows)

    def columnCount(self, parent: Index = _NOWHERE) -> int:
        """Count the columns."""
        return 0 if parent.isValid() else len(Column)

    def headerData(self, section: int, orientation: Qt.Orientation, role: int = 0) -> Any:
        """Title of a column."""
        if orientation is Qt.Orientation.Horizontal and role == Qt.ItemDataRole.DisplayRole:
            return _TITLES[Column(section)]
        return None

    def flags(self, index: Index) -> Qt.ItemFlag:
        """Say what can be done with a cell."""
        if index.column() == Column.TYPE:
            return _EDITABLE
        if index.column() == Column.BAD and self.rows[index.row()].condition is not Condition.BAD_IN_PLAN:
            return _CHECKABLE
        return _CHOOSABLE

    def data(self, index: Index, role: int = Qt.ItemDataRole.DisplayRole) -> Any:
        """Say what a cell shows."""
        row, column = self.rows[index.row()], Column(index.column())
        if role == _ROW:
            return row
        if role == Qt.ItemDataRole.CheckStateRole and column is Column.BAD:
            return Qt.CheckState.Checked if row.is_bad else Qt.CheckState.Unchecked
        if role == Qt.ItemDataRole.DisplayRole:
            return _text(row, column)
        if role == Qt.ItemDataRole.EditRole and column is Column.TYPE:
            return row.type
        if role == Qt.ItemDataRole.FontRole and column is Column.NAME and row.is_bad:
            font = QFont()
            font.setStrikeOut(True)
            return font
        if role == Qt.ItemDataRole.ToolTipRole:
            return _tip(row, column)
        if role == Qt.ItemDataRole.AccessibleTextRole:
            return row.words if column in (Column.BAD, Column.NAME) else _text(row, column)
        return None

    def setData(self, index: Index, value: Any, role: int = Qt.ItemDataRole.EditRole) -> bool:
        """Ask for a change; the session makes it, and new rows come back."""
        row = self.rows[index.row()]
        if role == Qt.ItemDataRole.CheckStateRole:
            self.bad_asked.emit((row.name,), Qt.CheckState(value) == Qt.CheckState.Checked)
        elif role == Qt.ItemDataRole.EditRole:
            # On its way through Qt a word of ours became a plain text.
            self.type_asked.emit(row, ChannelType(value))
        else:
            return False
        return True


class ChannelOrder(QSortFilterProxyModel):
    """Order and choice of the rows shown."""

    def __init__(self, model: ChannelModel, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._words: list[str] = []
        self.setSourceModel(model)

    def show_matching(self, text: str) -> None:
        """Show the rows in which every word stands somewhere."""
        self._words = text.casefold().split()
        self.invalidate()

    def filterAcceptsRow(self, source_row: int, source_parent: Index) -> bool:
        """Say whether a row is shown."""
        row: ChannelRow = self.sourceModel().index(source_row, 0, source_parent).data(_ROW)
        text = f"{row.words} {row.placed}".casefold()
        return all(word in text for word in self._words)

    def lessThan(self, left: Index, right: Index) -> bool:
        """Compare two rows by the column the user chose."""
        column = Column(left.column())
        return _sort_key(left.data(_ROW), column) < _sort_key(right.data(_ROW), column)


class BadDelegate(QStyledItemDelegate):
    """Draws the toggle as it is in the traces: a square, crossed for a bad channel."""

    def __init__(self, theme: Theme, parent: QWidget) -> None:
        super().__init__(parent)
        self.theme = theme

    def paint(self, painter: QPainter, option: QStyleOptionViewItem, index: Index) -> None:
        """Draw the row's ground, the square, and who else says so."""
        row: ChannelRow = index.data(_ROW)
        plain = QStyleOptionViewItem(option)
        self.initStyleOption(plain, index)
        plain.features = plain.features & ~QStyleOptionViewItem.ViewItemFeature.HasCheckIndicator
        plain.text = ""
        if plain.widget is not None:
            style = plain.widget.style()
            style.drawControl(QStyle.ControlElement.CE_ItemViewItem, plain, painter, plain.widget)
        size = plain.fontMetrics.ascent() * 0.9
        left, middle = plain.rect.left() + 6.5, plain.rect.center().y() + 0.5
        box = QRectF(left, round(middle - size / 2) + 0.5, round(size), round(size))
        painter.save()
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        painter.setPen(QPen(QColor(self.theme.trace_bad if row.is_bad else self.theme.quiet), 1.3))
        painter.drawRect(box)
        if row.is_bad:
            painter.drawLine(QLineF(box.topLeft(), box.bottomRight()))
            painter.drawLine(QLineF(box.topRight(), box.bottomLeft()))
        who = _text(row, Column.BAD)
        if who:
            painter.setPen(QColor(self.theme.quiet))
            beside = QRectF(plain.rect).adjusted(box.width() + 12, 0, 0, 0)
            painter.drawText(beside, Qt.AlignmentFlag.AlignLeft | Qt.AlignmentFlag.AlignVCenter, who)
        painter.restore()

    def editorEvent(
        self, _event: QEvent, _model: QAbstractItemModel, _option: QStyleOptionViewItem, _index: Index
    ) -> bool:
        """Leave clicks to the table, which keeps the rows chosen."""
        return False


class TypeDelegate(QStyledItemDelegate):
    """Chooses a channel's type from a list."""

    def createEditor(self, parent: QWidget, option: QStyleOptionViewItem, index: Index) -> QWidget:
        """Open the list."""
        row: ChannelRow = index.data(_ROW)
        box = QComboBox(parent)
        box.setAccessibleName(f"Type of {row.name}")
        for kind, text in TYPE_WORDS.items():
            box.addItem(text, kind)
        box.activated.connect(lambda _=0: self._chosen(box))
        QTimer.singleShot(0, box, box.showPopup)
        return box

    def setEditorData(self, editor: QWidget, index: Index) -> None:
        """Show the present type."""
        if isinstance(editor, QComboBox):
            editor.setCurrentIndex(list(TYPE_WORDS).index(index.data(_ROW).type))

    def setModelData(self, editor: QWidget, model: QAbstractItemModel, index: Index) -> None:
        """Ask for the type chosen."""
        if isinstance(editor, QComboBox):
            model.setData(index, editor.currentData(), Qt.ItemDataRole.EditRole)

    def _chosen(self, box: QComboBox) -> None:
        self.commitData.emit(box)
        self.closeEditor.emit(box)


class ChannelTable(QTableView):
    """The table itself. Space marks the chosen rows bad or good, Return chooses a type.

    Attributes
    ----------
    picked : Signal(object)
        Frozenset of the names picked.
    refused : Signal()
        Somebody tried to change what the plan says.
    """

    picked = Signal(object)
    refused = Signal()

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.channels = ChannelModel(self)
        self.order = ChannelOrder(self.channels, self)
        self._picked: frozenset[str] = frozenset()
        self._is_showing = False
        self.setModel(self.order)
        self.setAccessibleName("Channels")
        self.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.setSelectionMode(QAbstractItemView.SelectionMode.ExtendedSelection)
        triggers = QAbstractItemView.EditTrigger
        self.setEditTriggers(triggers.DoubleClicked | triggers.EditKeyPressed)
        self._toggles = BadDelegate(theme, self)
        self.setItemDelegateForColumn(Column.BAD, self._toggles)
        self.setItemDelegateForColumn(Column.TYPE, TypeDelegate(self))
        self.setShowGrid(False)
        self.setWordWrap(False)
        self.setTextElideMode(Qt.TextElideMode.ElideMiddle)
        self.setTabKeyNavigation(False)
        self.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self.verticalHeader().hide()
        header = self.horizontalHeader()
        header.setSectionResizeMode(QHeaderView.ResizeMode.Fixed)
        header.setSectionResizeMode(Column.NAME, QHeaderView.ResizeMode.Stretch)
        header.setHighlightSections(False)
        header.setSortIndicatorClearable(True)
        header.setSortIndicator(-1, Qt.SortOrder.AscendingOrder)
        self.setSortingEnabled(True)
        self.selectionModel().selectionChanged.connect(self._selection_changed)
        self.fit_rows()

    def show_rows(self, rows: tuple[ChannelRow, ...]) -> None:
        """Show the channels."""
        self._is_showing = True
        self.channels.show_rows(rows)
        self._is_showing = False
        self._show_selection()

    def show_picked(self, picked: frozenset[str]) -> None:
        """Show which channels are picked."""
        if picked != self._picked:
            self._picked = picked
            self._show_selection()
            chosen = self.selectionModel().selectedRows()
            if chosen:
                self.scrollTo(min(chosen, key=lambda index: index.row()))

    def show_matching(self, text: str) -> None:
        """Show the rows in which every word stands somewhere; hidden ones stay picked."""
        self._is_showing = True
        self.order.show_matching(text)
        self._is_showing = False
        self._show_selection()

    def fit_rows(self) -> None:
        """Make rows as high and columns as wide as the text wants."""
        metrics, header = self.fontMetrics(), self.horizontalHeader()
        self.verticalHeader().setMinimumSectionSize(1)
        self.verticalHeader().setDefaultSectionSize(metrics.height() + 8)
        self.setMinimumHeight(_ROWS_SEEN * (metrics.height() + 8))
        header.resizeSection(Column.BAD, metrics.ascent() + metrics.horizontalAdvance(FOUND) + 18)
        header.resizeSection(Column.TYPE, metrics.horizontalAdvance(TYPE_WORDS[ChannelType.TRIGGER]) + 18)
        places = max(metrics.horizontalAdvance(text) for text in (*Placed, _TITLES[Column.POSITION]))
        header.resizeSection(Column.POSITION, places + 18)

    def changeEvent(self, event: QEvent) -> None:
        """Follow the size of the text."""
        super().changeEvent(event)
        if event.type() in (QEvent.Type.FontChange, QEvent.Type.StyleChange):
            self.fit_rows()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self._toggles.theme = theme
        self.viewport().update()

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """Toggle without choosing the row; all else as in every table."""
        index = self.indexAt(event.position().toPoint())
        if event.button() == Qt.MouseButton.LeftButton and index.column() == Column.BAD:
            flag = QItemSelectionModel.SelectionFlag.NoUpdate
            self.selectionModel().setCurrentIndex(index, flag)
            self._toggle([index.data(_ROW)])
        else:
            super().mousePressEvent(event)

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Choose rows by dragging, unless the drag began on a toggle."""
        if self.state() != QAbstractItemView.State.NoState:
            super().mouseMoveEvent(event)

    def mouseDoubleClickEvent(self, event: QMouseEvent) -> None:
        """Take a second quick click on a toggle for a click."""
        if self.indexAt(event.position().toPoint()).column() == Column.BAD:
            self.mousePressEvent(event)
        else:
            super().mouseDoubleClickEvent(event)

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Mark with Space, choose a type with Return; all else as in every table."""
        if event.key() == Qt.Key.Key_Space:
            self._toggle(self.selected_rows())
        elif event.key() in (Qt.Key.Key_Return, Qt.Key.Key_Enter) and self.currentIndex().isValid():
            self.edit(self.currentIndex().siblingAtColumn(Column.TYPE))
        else:
            super().keyPressEvent(event)

    def selected_rows(self) -> list[ChannelRow]:
        """Channels of the rows chosen; the current one if none is."""
        indexes: Sequence[QModelIndex] = self.selectionModel().selectedRows()
        if not indexes and self.currentIndex().isValid():
            indexes = [self.currentIndex()]
        return [index.data(_ROW) for index in indexes]

    def _toggle(self, rows: list[ChannelRow]) -> None:
        ours = [row for row in rows if row.condition is not Condition.BAD_IN_PLAN]
        if len(ours) < len(rows):
            self.refused.emit()
        if ours:
            bad = not all(row.is_bad for row in ours)
            self.channels.bad_asked.emit(tuple(row.name for row in ours), bad)

    def _selection_changed(self) -> None:
        if self._is_showing:
            return
        every = self.order.rowCount()
        shown = {self.order.index(place, 0).data(_ROW).name for place in range(every)}
        chosen = {index.data(_ROW).name for index in self.selectionModel().selectedRows()}
        self._picked = frozenset((self._picked - shown) | chosen)
        self.picked.emit(self._picked)

    def _show_selection(self) -> None:
        selection = QItemSelection()
        last = len(Column) - 1
        for place in range(self.order.rowCount()):
            first = self.order.index(place, 0)
            if first.data(_ROW).name in self._picked:
                selection.select(first, first.siblingAtColumn(last))
        self._is_showing = True
        self.selectionModel().select(selection, QItemSelectionModel.SelectionFlag.ClearAndSelect)
        self._is_showing = False


def _text(row: ChannelRow, column: Column) -> str:
    if column is Column.BAD:
        return {Condition.BAD_IN_PLAN: IN_PLAN, Condition.FOUND_BAD: FOUND}.get(row.condition, "")
    if column is Column.TYPE:
        return TYPE_WORDS[row.type]
    return row.name if column is Column.NAME else str(row.placed)


def _tip(row: ChannelRow, column: Column) -> str:
    if row.condition is Condition.BAD_IN_PLAN and column is Column.BAD:
        return WHY_PLAN
    if column is Column.TYPE:
        of_file = "" if row.type is row.type_of_file else f" The file says {TYPE_WORDS[row.type_of_file]}."
        return TYPE_TIP + of_file
    why = [WHY_FOUND] if row.condition is Condition.FOUND_BAD and column is Column.BAD else []
    return "\n".join([*why, f"{row.name}, {TYPE_WORDS[row.type]}, {row.condition}", *row.evidence])


def _sort_key(row: ChannelRow, column: Column) -> tuple[Any, ...]:
    natural = tuple((int(part), "") if part.isdigit() else (-1, part) for part in _parts(row.name))
    if column is Column.BAD:
        return (not row.is_bad, natural)
    if column is Column.TYPE:
        return (list(TYPE_WORDS).index(row.type), natural)
    if column is Column.POSITION:
        return (list(Placed).index(row.placed), natural)
    return natural


def _parts(name: str) -> list[str]:
    """Letters and numbers apart, so that E10 comes behind E9."""
    return re.findall(r"\d+|\D+", name.casefold())
