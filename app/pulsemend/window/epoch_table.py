"""The table of all candidate epochs with their fates: filtered, sorted, gone to, left out by hand."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

from PySide6.QtCore import QItemSelection, QItemSelectionModel, QSignalBlocker, Qt, Signal
from PySide6.QtWidgets import QComboBox, QLabel, QPushButton, QVBoxLayout, QWidget

from pulsemend.mending.epoch_rows import EpochRow
from pulsemend.model.marks import EpochKey, Marks
from pulsemend.model.vocabulary import Fate
from pulsemend.window.flow import flow_row
from pulsemend.window.parts import button, words
from pulsemend.window.sign_icons import fate_icon
from pulsemend.window.tables import RowsModel, RowsTable
from pulsemend.window.theme import Theme

TITLES = ("trial", "rule", "piece", "anchor", "fate", "what exactly")
TRIAL, RULE, PIECE, ANCHOR, FATE, DETAIL = range(6)
_WIDTHS = ("trial 8", "after probe 12", "piece", "12345.678 s", "  across a break in the recording")
_ORDERS = ((ANCHOR, "time"), (TRIAL, "trial"), (RULE, "rule"), (FATE, "fate"))
_FATE_ORDER = {fate: place for place, fate in enumerate(Fate)}
_SORT_KEYS: Mapping[int, Callable[[EpochRow], object]] = {
    TRIAL: lambda row: row.trial,
    RULE: lambda row: row.rule.casefold(),
    PIECE: lambda row: row.piece,
    ANCHOR: lambda row: row.near_s,
    FATE: lambda row: _FATE_ORDER[row.fate],
    DETAIL: lambda row: row.detail,
}


class EpochModel(RowsModel):
    """Candidates as rows of a table.

    Parameters
    ----------
    theme : Theme
        Colours of the shapes.
    """

    def __init__(self, theme: Theme) -> None:
        super().__init__(TITLES)
        self._all: tuple[EpochRow, ...] = ()
        self._shown: list[EpochRow] = []
        self._fate: Fate | None = None
        self._rule = ""
        self._order = (ANCHOR, Qt.SortOrder.AscendingOrder)
        self._icons = {fate: fate_icon(fate, theme) for fate in Fate}

    @property
    def shown(self) -> Sequence[EpochRow]:
        """Rows as the table has them."""
        return self._shown

    def show_rows(self, rows: Sequence[EpochRow], fate: Fate | None, rule: str) -> None:
        """Show others, given in order of time: those of a fate (None: all) and of a rule (empty: all)."""
        self._all = tuple(rows)
        self.show_only(fate, rule)

    def show_only(self, fate: Fate | None, rule: str) -> None:
        """Show those of a fate (None: all) and of a rule (empty: all)."""
        self._fate, self._rule = fate, rule
        self._arrange()

    def set_theme(self, theme: Theme) -> None:
        """Draw the shapes in other colours."""
        self._icons = {fate: fate_icon(fate, theme) for fate in Fate}
        if self._shown:
            self.dataChanged.emit(self.index(0, FATE), self.index(len(self._shown) - 1, FATE))

    def sort(self, column: int, order: Qt.SortOrder = Qt.SortOrder.AscendingOrder) -> None:
        """Sort by a column; equal ones stay in order of time."""
        self._order = (column, order)
        self._arrange()

    def n_rows(self) -> int:
        """Count the rows shown."""
        return len(self._shown)

    def text(self, row: int, column: int) -> str:
        """Give what stands in a cell."""
        one = self._shown[row]
        if column == TRIAL:
            return str(one.trial)
        if column == RULE:
            return one.rule
        if column == PIECE:
            return str(one.piece)
        if column == ANCHOR:
            return "none" if one.anchor_s is None else f"{one.anchor_s:.3f} s"
        return str(one.fate) if column == FATE else one.detail

    def more(self, row: int, column: int, role: int) -> object:
        """Give the shape of a fate."""
        if column == FATE and role == Qt.ItemDataRole.DecorationRole:
            return self._icons[self._shown[row].fate]
        return None

    def _arrange(self) -> None:
        column, order = self._order
        found = [
            row
            for row in self._all
            if (self._fate is None or row.fate is self._fate) and self._rule in ("", row.rule)
        ]
        self.beginResetModel()
        # Sorting keeps the order of equals both ways, so that time orders them.
        found.sort(key=_SORT_KEYS[column], reverse=order is Qt.SortOrder.DescendingOrder)  # type: ignore[arg-type]
        self._shown = found
        self.endResetModel()


class EpochTable(QWidget):
    """The table with its filters and what can be done by hand.

    Parameters
    ----------
    theme : Theme
        Colours of the shapes.

    Attributes
    ----------
    wanted : Signal(object)
        Go to this EpochRow.
    marks_wanted : Signal(str, object)
        Change the marks: what is done, and the new Marks.
    current_changed : Signal(object)
        The EpochKey of the row that has become the current one.
    """

    wanted = Signal(object)
    current_changed = Signal(object)
    marks_wanted = Signal(str, object)

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._marks = Marks()
        self.model = EpochModel(theme)
        self.table = RowsTable("Candidate epochs", self.model, _WIDTHS)
        self._selection = _Selection(self.table, self.model)
        self.table.setSortingEnabled(True)
        self.table.sortByColumn(ANCHOR, Qt.SortOrder.AscendingOrder)
        self.fates = _combo("Show fates")
        self.rules = _combo("Show rules")
        self.orders = _combo("In order of")
        for column, name in _ORDERS:
            self.orders.addItem(name, column)
        self.count = words("", "quiet")
        self.count.setWordWrap(False)
        self.leave_out = self._act("Leave out by hand", self._leave_out, "The selected epochs, whatever else")
        self.take_back = self._act("Take back", self._take_back, "Epochs left out by hand are judged again")
        self.exclude = self._act("Exclude the trial", self._exclude, "All epochs of the selected trials")
        self.include = self._act("Take the trial back", self._include, "Trials excluded by hand count again")
        self._lay_out()
        self._listen()
        self.show_rows((), Marks())

    def show_rows(self, rows: Sequence[EpochRow], marks: Marks) -> None:
        """Show candidates and what the marks say of them; what is selected stays selected.

        Parameters
        ----------
        rows : sequence of EpochRow
            In order of time.
        marks : Marks
            As edited.
        """
        self._marks = marks
        _fill(self.fates, "all fates", [(str(fate), fate, n) for fate, n in _fate_counts(rows)], len(rows))
        rules = Counter(row.rule for row in rows)
        _fill(self.rules, "all rules", [(rule, rule, n) for rule, n in rules.items()], len(rows))
        self.model.show_rows(rows, *self._filters())
        self._tell()

    def show_marks(self, marks: Marks) -> None:
        """Show what can be done with other marks."""
        self._marks = marks
        self._tell()

    def show_key(self, key: EpochKey) -> None:
        """Make an epoch the current and only selected one, without telling anybody; unless it is filtered."""
        selection = self.table.selectionModel()
        for row, one in enumerate(self.model.shown):
            if (one.trial, one.rule, one.piece) == (key.trial, key.rule, key.piece):
                index = self.model.index(row, 0)
                flags = QItemSelectionModel.SelectionFlag
                with QSignalBlocker(self):
                    selection.setCurrentIndex(index, flags.ClearAndSelect | flags.Rows)
                self.table.scrollTo(index)
                return

    def show_only(self, fate: Fate | None) -> None:
        """Show one fate only; None for all."""
        self.fates.setCurrentIndex(max(0, self.fates.findData(fate)))

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self.model.set_theme(theme)

    @property
    def selected(self) -> list[EpochRow]:
        """Rows that are selected."""
        return [self.model.shown[row] for row in self.table.selected_rows()]

    def _act(self, text: str, does: Callable[[], object], tooltip: str) -> QPushButton:
        made = button(text, does, tooltip=tooltip)
        made.setAutoDefault(False)
        return made

    def _lay_out(self) -> None:
        filters = (("Show", self.fates), ("of", self.rules), ("in order of", self.orders))
        above = [one for label, field in filters for one in (_name_of(label, field), field)]
        below = (self.leave_out, self.take_back, self.exclude, self.include)
        column = QVBoxLayout(self)
        column.setContentsMargins(8, 6, 8, 6)
        column.setSpacing(6)
        column.addWidget(flow_row(*above, self.count))
        column.addWidget(self.table, 1)
        column.addWidget(flow_row(*below))

    def _listen(self) -> None:
        self.fates.currentIndexChanged.connect(self._filter)
        self.rules.currentIndexChanged.connect(self._filter)
        self.orders.activated.connect(
            lambda: self.table.sortByColumn(self.orders.currentData(), Qt.SortOrder.AscendingOrder)
        )
        self.table.horizontalHeader().sortIndicatorChanged.connect(self._show_order)
        self.table.selectionModel().selectionChanged.connect(self._tell)
        self.table.selectionModel().currentRowChanged.connect(self._tell_current)
        self.table.opened.connect(lambda row: self.wanted.emit(self.model.shown[row]))

    def _tell_current(self) -> None:
        index = self.table.currentIndex()
        if index.isValid():
            self.current_changed.emit(self.model.shown[index.row()].key)

    def _show_order(self, column: int) -> None:
        with QSignalBlocker(self.orders):
            self.orders.setCurrentIndex(self.orders.findData(column))

    def _filter(self) -> None:
        self.model.show_only(*self._filters())
        self._tell()

    def _filters(self) -> tuple[Fate | None, str]:
        # The toolkit hands words of a list back as plain text.
        fate = self.fates.currentData()
        return Fate(fate) if fate else None, self.rules.currentData() or ""

    def _tell(self) -> None:
        """Say how many there are, and what can be done with the selected ones."""
        rows = self.selected
        chosen = f", {len(rows)} selected" if rows else ""
        self.count.setText(f"{len(self.model.shown)} epochs{chosen}")
        left_out, excluded = set(self._marks.epochs_left_out), set(self._marks.trials_excluded)
        by_hand = sum(row.key in left_out for row in rows)
        self.leave_out.setEnabled(by_hand < len(rows))
        self.take_back.setEnabled(by_hand > 0)
        self.exclude.setEnabled(any(row.trial not in excluded for row in rows))
        self.include.setEnabled(any(row.trial in excluded for row in rows))

    def _leave_out(self) -> None:
        known = self._marks.epochs_left_out
        new = tuple(row.key for row in self.selected if row.key not in known)
        self._want(f"Leave out {_epochs(len(new))} by hand", epochs=(*known, *new))

    def _take_back(self) -> None:
        chosen = {row.key for row in self.selected}
        stay = tuple(key for key in self._marks.epochs_left_out if key not in chosen)
        n_back = len(self._marks.epochs_left_out) - len(stay)
        self._want(f"Take {_epochs(n_back)} back", epochs=stay)

    def _exclude(self) -> None:
        known = self._marks.trials_excluded
        new = sorted({row.trial for row in self.selected} - set(known))
        self._want(f"Exclude {_trials(new)}", trials=tuple(sorted((*known, *new))))

    def _include(self) -> None:
        chosen = {row.trial for row in self.selected}
        back = sorted(chosen & set(self._marks.trials_excluded))
        stay = tuple(trial for trial in self._marks.trials_excluded if trial not in chosen)
        self._want(f"Take {_trials(back)} back", trials=stay)

    def _want(
        self, label: str, *, epochs: tuple[EpochKey, ...] | None = None, trials: tuple[int, ...] | None = None
    ) -> None:
        marks = self._marks
        marks = marks if epochs is None else replace(marks, epochs_left_out=epochs)
        marks = marks if trials is None else replace(marks, trials_excluded=trials)
        self.marks_wanted.emit(label, marks)


class _Selection:
    """Keeps the same epochs selected and current while the rows of a table change.

    Parameters
    ----------
    table : RowsTable
        Its model is set already: what Qt does with a selection then comes before this.
    model : EpochModel
    """

    def __init__(self, table: RowsTable, model: EpochModel) -> None:
        self._table, self._model = table, model
        self._keys: set[EpochKey] = set()
        self._current: EpochKey | None = None
        model.modelAboutToBeReset.connect(self.remember)
        model.modelReset.connect(self.restore)

    def remember(self) -> None:
        """Take note of what is selected."""
        shown = self._model.shown
        self._keys = {shown[row].key for row in self._table.selected_rows()}
        current = self._table.currentIndex()
        self._current = shown[current.row()].key if current.isValid() else None

    def restore(self) -> None:
        """Select what is still there."""
        selection = self._table.selectionModel()
        for row, one in enumerate(self._model.shown if self._current else ()):
            if one.key == self._current:
                selection.setCurrentIndex(
                    self._model.index(row, 0), QItemSelectionModel.SelectionFlag.NoUpdate
                )
        chosen = QItemSelection()
        rows = [
            row for row, one in enumerate(self._model.shown if self._keys else ()) if one.key in self._keys
        ]
        for first, last in _runs(rows):
            chosen.select(self._model.index(first, 0), self._model.index(last, len(TITLES) - 1))
        selection.select(chosen, QItemSelectionModel.SelectionFlag.ClearAndSelect)


def _runs(rows: Sequence[int]) -> list[tuple[int, int]]:
    """Put rows that follow each other together: Qt takes long over thousands of single ones."""
    runs: list[tuple[int, int]] = []
    for row in rows:
        if runs and row == runs[-1][1] + 1:
            runs[-1] = (runs[-1][0], row)
        else:
            runs.append((row, row))
    return runs


def _name_of(text: str, field: QWidget) -> QLabel:
    label = QLabel(text)
    label.setBuddy(field)
    return label


def _combo(name: str) -> QComboBox:
    made = QComboBox()
    made.setAccessibleName(name)
    # A long name must not make the window wide.
    made.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
    made.setMinimumContentsLength(14)
    return made


def _fill(combo: QComboBox, everything: str, items: Sequence[tuple[str, object, int]], total: int) -> None:
    """Offer other choices, with their counts, and keep the chosen one if it is still there."""
    chosen = combo.currentData()
    with QSignalBlocker(combo):
        combo.clear()
        combo.addItem(f"{everything} ({total})", None)
        for text, data, count in items:
            combo.addItem(f"{text} ({count})", data)
        combo.setCurrentIndex(0 if chosen is None else max(0, combo.findData(chosen)))


def _fate_counts(rows: Sequence[EpochRow]) -> list[tuple[Fate, int]]:
    counts = Counter(row.fate for row in rows)
    return [(fate, counts[fate]) for fate in Fate if counts[fate]]


def _epochs(count: int) -> str:
    return "1 epoch" if count == 1 else f"{count} epochs"


def _trials(numbers: Sequence[int]) -> str:
    return f"trial {numbers[0]}" if len(numbers) == 1 else f"{len(numbers)} trials"
