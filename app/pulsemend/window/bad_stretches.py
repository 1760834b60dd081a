"""Bad stretches: the list of them, and marking the stretch that is selected."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from PySide6.QtCore import QEvent, QModelIndex, QPersistentModelIndex, QSignalBlocker, Qt
from PySide6.QtGui import QKeyEvent
from PySide6.QtWidgets import (
    QAbstractItemView,
    QComboBox,
    QHBoxLayout,
    QHeaderView,
    QStyledItemDelegate,
    QStyleOptionViewItem,
    QTableWidget,
    QTableWidgetItem,
    QWidget,
)

from pulsemend.model.marks import BadStretch
from pulsemend.session.found import NOTHING_SELECTED, Selected
from pulsemend.session.view import View
from pulsemend.window.fields import PlainNumber
from pulsemend.window.mark_acts import MarkActs
from pulsemend.window.parts import Card, button, words
from pulsemend.window.traces.clock import clock, duration
from pulsemend.window.workbench import Workbench

KINDS = ("muscle", "movement", "electrode", "pause", "other")
"""What is proposed; any other words of the user's own will do."""
HOW_TO_SELECT = "Select a stretch: drag across the traces with Ctrl held down, or press Shift+Right there."
_KIND = 2
_ROWS_SHOWN = 5
_Index = QModelIndex | QPersistentModelIndex


def view_around(view: View, start_s: float, stop_s: float, whole_s: float) -> View:
    """Bring a stretch into view: in the middle, or its beginning if it is longer than the view."""
    width = view.width_s
    fits = stop_s - start_s <= 0.9 * width
    left = (start_s + stop_s - width) / 2 if fits else start_s - 0.1 * width
    return replace(view, start_s=max(0.0, min(left, whole_s - width)))


class _KindDelegate(QStyledItemDelegate):
    """Edits why a stretch is bad."""

    def createEditor(self, parent: QWidget, option: QStyleOptionViewItem, index: _Index) -> QWidget:
        return kind_field(parent)

    def setEditorData(self, editor: QWidget, index: _Index) -> None:
        if isinstance(editor, QComboBox):
            editor.setCurrentText(str(index.data()))


def kind_field(parent: QWidget | None = None) -> QComboBox:
    """Make a field for why a stretch is bad: a few words to choose from, or one's own."""
    box = QComboBox(parent)
    box.setEditable(True)
    box.addItems(list(KINDS))
    box.setMinimumContentsLength(14)
    edit = box.lineEdit()
    if edit is not None:
        edit.setPlaceholderText("choose or type")
    box.setAccessibleName("Why the stretch is bad")
    box.setToolTip("Choose a word or type your own")
    return box


class _StretchTable(QTableWidget):
    """The list; Delete removes, Return on a time jumps there."""

    def __init__(self, remove: Callable[[], None], jump: Callable[[], None]) -> None:
        super().__init__(0, 3)
        self._remove, self._jump = remove, jump
        self.setAccessibleName("Bad stretches")
        self.setHorizontalHeaderLabels(["From", "To", "Why"])
        self.verticalHeader().hide()
        self.setShowGrid(False)
        self.setTabKeyNavigation(False)
        self.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.setSelectionMode(QAbstractItemView.SelectionMode.SingleSelection)
        self.setItemDelegateForColumn(_KIND, _KindDelegate(self))
        header = self.horizontalHeader()
        header.setSectionResizeMode(QHeaderView.ResizeMode.ResizeToContents)
        header.setSectionResizeMode(_KIND, QHeaderView.ResizeMode.Stretch)
        header.setHighlightSections(False)

    def fit(self) -> None:
        height = self.fontMetrics().height() + 8
        self.verticalHeader().setMinimumSectionSize(1)
        self.verticalHeader().setDefaultSectionSize(height)
        shown = min(max(2, self.rowCount()), _ROWS_SHOWN)
        self.setFixedHeight(shown * height + self.horizontalHeader().sizeHint().height() + 6)

    def changeEvent(self, event: QEvent) -> None:
        super().changeEvent(event)
        if event.type() in (QEvent.Type.FontChange, QEvent.Type.StyleChange):
            self.fit()

    def keyPressEvent(self, event: QKeyEvent) -> None:
        editing = self.state() == QAbstractItemView.State.EditingState
        if event.key() == Qt.Key.Key_Delete and not editing:
            self._remove()
        elif event.key() in (Qt.Key.Key_Return, Qt.Key.Key_Enter) and not editing:
            self._jump()
        else:
            super().keyPressEvent(event)


class BadStretchesCard(Card):
    """Lists the bad stretches and marks the one selected.

    Whoever makes it calls `show_marks` and `show_selected` when these change.

    Parameters
    ----------
    bench : Workbench
        Its session is shown and edited.
    """

    def __init__(self, bench: Workbench, parent: QWidget | None = None) -> None:
        super().__init__("Bad stretches", parent=parent)
        self.bench = bench
        self.table = _StretchTable(self.remove, self.jump)
        self.empty = words(
            "None. Nothing learns from a bad stretch, and no epoch that touches one is kept.", "quiet"
        )
        self.jump_button = button("Jump to", self.jump, tooltip="Bring this stretch into view (Return)")
        self.remove_button = button("Remove", self.remove, tooltip="This stretch is good again (Delete)")
        self.first = PlainNumber("First second of the selected stretch", "s", 0.0, 0.0, 0.1)
        self.last = PlainNumber("Last second of the selected stretch", "s", 0.0, 0.0, 0.1)
        self.kind = kind_field()
        self.kind.setCurrentIndex(-1)
        self.take_view = button(
            "Select the part in view", self._select_view, tooltip="Then change its ends below, if need be"
        )
        self.mark = button(
            "Mark selected stretch bad",
            self.mark_selected,
            tooltip="Leave it out of everything (Ctrl+Shift+B)",
        )
        self.selected = words("", "quiet")
        self._lay_out()
        self._rows: tuple[BadStretch, ...] = ()
        self.table.itemSelectionChanged.connect(self._row_chosen)
        self.table.itemDoubleClicked.connect(self._double_clicked)
        self.table.itemChanged.connect(self._kind_edited)
        self.first.committed.connect(self._ends_edited)
        self.last.committed.connect(self._ends_edited)
        self.show_marks()

    def _lay_out(self) -> None:
        self.add(self.empty)
        self.add(self.table)
        row = QHBoxLayout()
        row.addWidget(self.jump_button)
        row.addWidget(self.remove_button)
        row.addStretch(1)
        self.body.addLayout(row)
        self.add(self.selected)
        for name, field in (("From", self.first), ("to", self.last), ("because of", self.kind)):
            self.add_field(name, field)
        for one in (self.take_view, self.mark):
            self.body.addWidget(one)

    # What is shown

    def show_marks(self) -> None:
        """Show the stretches of the marks."""
        opened = self.bench.session.recording
        rate_hz = opened.facts.rate_hz if opened else 1.0
        rows = self.bench.session.marks.bad_stretches if opened else ()
        if rows != self._rows or self.table.rowCount() != len(rows):
            self._rows = rows
            with QSignalBlocker(self.table):
                self._fill(rate_hz)
        whole_s = opened.facts.duration_s if opened else 0.0
        for field in (self.first, self.last):
            with QSignalBlocker(field):
                field.setRange(0.0, whole_s)
        total_s = sum(one.stop - one.start for one in rows) / rate_hz
        self.note.setText(f"{len(rows)}, together {duration(total_s)}" if rows else "")
        self.empty.setVisible(not rows)
        for part in (self.table, self.jump_button, self.remove_button):
            part.setVisible(bool(rows))
        self.show_selected()

    def show_selected(self) -> None:
        """Show which stretch is selected."""
        opened, stretch = self.bench.session.recording, self.bench.session.selected.stretch
        has = opened is not None and stretch is not None
        known = has and any((one.start, one.stop) == stretch for one in self._rows)
        for part in (self.first, self.last, self.kind):
            part.setEnabled(has)
        self.mark.setEnabled(has and not known)
        self.take_view.setEnabled(opened is not None)
        place = -1
        if opened is None or stretch is None:
            self.selected.setText(HOW_TO_SELECT)
        else:
            rate_hz = opened.facts.rate_hz
            self.first.show_value(stretch[0] / rate_hz)
            self.last.show_value(stretch[1] / rate_hz)
            length = duration((stretch[1] - stretch[0]) / rate_hz)
            self.selected.setText(f"Selected: {length}{', marked bad' if known else ''}")
            place = next((i for i, one in enumerate(self._rows) if (one.start, one.stop) == stretch), -1)
        if place != self._place():
            with QSignalBlocker(self.table):
                self.table.clearSelection()
                if place >= 0:
                    self.table.selectRow(place)
        for one in (self.jump_button, self.remove_button):
            one.setEnabled(self._place() >= 0)

    def _fill(self, rate_hz: float) -> None:
        self.table.setRowCount(len(self._rows))
        for place, stretch in enumerate(self._rows):
            texts = (clock(stretch.start / rate_hz, 1), clock(stretch.stop / rate_hz, 1), stretch.kind)
            length = duration((stretch.stop - stretch.start) / rate_hz)
            for column, text in enumerate(texts):
                item = QTableWidgetItem(text)
                if column != _KIND:
                    item.setFlags(item.flags() & ~Qt.ItemFlag.ItemIsEditable)
                item.setToolTip(f"{texts[0]} to {texts[1]}, {length}: {stretch.kind or 'no reason given'}")
                self.table.setItem(place, column, item)
        self.table.fit()

    # What is done

    def mark_selected(self) -> None:
        """Mark the selected stretch bad, for the reason shown."""
        MarkActs(self.bench).mark_stretch(self.kind.currentText().strip())

    def remove(self) -> None:
        """Say that the chosen stretch is good."""
        place = self._place()
        if place >= 0:
            kept = [one for one in self._rows if one is not self._rows[place]]
            self._edit("Bad stretch removed", kept)

    def jump(self) -> None:
        """Bring the chosen stretch into view."""
        session, place = self.bench.session, self._place()
        if place < 0 or session.recording is None:
            return
        facts, stretch = session.recording.facts, self._rows[place]
        at = (stretch.start / facts.rate_hz, stretch.stop / facts.rate_hz)
        session.set_view(view_around(session.view, *at, facts.duration_s))

    def _edit(self, label: str, stretches: list[BadStretch]) -> None:
        session = self.bench.session
        session.edit_marks(label, replace(session.marks, bad_stretches=tuple(stretches)))

    def _place(self) -> int:
        chosen = self.table.selectionModel().selectedRows()
        return chosen[0].row() if chosen else -1

    def _row_chosen(self) -> None:
        place = self._place()
        if place >= 0:
            stretch = self._rows[place]
            self.bench.session.select(Selected(stretch=(stretch.start, stretch.stop)))

    def _double_clicked(self, item: QTableWidgetItem) -> None:
        if item.column() != _KIND:
            self.jump()

    def _kind_edited(self, item: QTableWidgetItem) -> None:
        stretch = self._rows[item.row()]
        kind = item.text().strip()
        if item.column() == _KIND and kind != stretch.kind:
            edited = replace(stretch, kind=kind)
            self._edit("Why a stretch is bad", [edited if one is stretch else one for one in self._rows])

    def _select_view(self) -> None:
        session = self.bench.session
        if session.recording is None:
            return
        facts, view = session.recording.facts, session.view
        first = max(0, round(view.start_s * facts.rate_hz))
        last = min(facts.n_samples, round((view.start_s + view.width_s) * facts.rate_hz))
        session.select(Selected(stretch=(first, last)) if first < last else NOTHING_SELECTED)

    def _ends_edited(self) -> None:
        session = self.bench.session
        if session.recording is None or session.selected.stretch is None:
            return
        facts = session.recording.facts
        first = min(round(self.first.value() * facts.rate_hz), facts.n_samples - 1)
        last = min(max(round(self.last.value() * facts.rate_hz), first + 1), facts.n_samples)
        session.select(Selected(stretch=(first, last)))
