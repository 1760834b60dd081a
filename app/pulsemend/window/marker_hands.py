"""What all parts of the Markers stage do with their hands: change plan and marks, and go somewhere."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

from PySide6.QtCore import QEvent, Qt, Signal
from PySide6.QtWidgets import QVBoxLayout, QWidget

from pulsemend.errors import InputError, SettingError
from pulsemend.model.epochs import nearest_sample
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.session.found import Selected
from pulsemend.window.fields import Chooser, in_words
from pulsemend.window.tables import RowsModel, RowsTable
from pulsemend.window.traces.clock import clock
from pulsemend.window.workbench import Workbench

_MOST_ROWS = 6
_ROOM = 1.6
"""Part in view when a stretch is gone to, at least, in lengths of the stretch."""


class MarkerHands:
    """Changes plan and marks, and goes to places.

    Parameters
    ----------
    bench : Workbench
        Session and workers.
    """

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench

    def change_plan(self, label: str, change: Callable[[Plan], Plan], field: str = "") -> str:
        """Change the plan; gives the words of a refusal, empty if there is none."""
        plan = self.bench.session.plan
        if plan is None:
            return ""
        try:
            self.bench.session.edit_plan(label, change(plan))
        except SettingError as error:
            return in_words(error, field)
        except InputError as error:
            return str(error)
        return ""

    def change_marks(self, label: str, marks: Marks) -> None:
        """Change the marks."""
        try:
            self.bench.session.edit_marks(label, marks)
        except InputError as error:
            self.bench.tell(error)

    def go_to(self, start_s: float, stop_s: float | None = None) -> None:
        """Bring an instant or a stretch into the middle of the traces, and select it."""
        session = self.bench.session
        if session.recording is None:
            return
        facts, view = session.recording.facts, session.view
        stop_s = start_s if stop_s is None else stop_s
        width_s = min(max(view.width_s, _ROOM * (stop_s - start_s)), facts.duration_s)
        left_s = min(max((start_s + stop_s - width_s) / 2, 0.0), facts.duration_s - width_s)
        session.set_view(replace(view, start_s=left_s, width_s=width_s))
        start, stop = nearest_sample(start_s * facts.rate_hz), nearest_sample(stop_s * facts.rate_hz) + 1
        start, stop = max(0, start), min(facts.n_samples, stop)
        session.select(Selected(stretch=(start, stop) if start < stop else None))


@dataclass(frozen=True)
class Item:
    """A line of a list of places.

    Parameters
    ----------
    what : str
    start_s, stop_s : float or None
        Where it is; None: nobody knows.
    key : object
        What the list's owner knows it by.
    """

    what: str
    start_s: float | None
    stop_s: float | None = None
    key: object = None


class ItemModel(RowsModel):
    """Places with their times."""

    def __init__(self) -> None:
        super().__init__(("time", "what"))
        self.items: tuple[Item, ...] = ()

    def show_items(self, items: Sequence[Item]) -> None:
        """Show others."""
        if tuple(items) != self.items:
            self.beginResetModel()
            self.items = tuple(items)
            self.endResetModel()

    def n_rows(self) -> int:
        """Count the items."""
        return len(self.items)

    def text(self, row: int, column: int) -> str:
        """Give a cell's text."""
        item = self.items[row]
        if column:
            return item.what
        return "not known" if item.start_s is None else clock(item.start_s, 3)


class ShortTable(RowsTable):
    """A table as high as its rows, up to a number of them; above, it scrolls.

    Parameters
    ----------
    name : str
        Accessible name.
    model : RowsModel
        What it shows.
    widths : sequence of str
        As for `RowsTable`.
    most : int
        Rows shown at once.
    """

    def __init__(self, name: str, model: RowsModel, widths: Sequence[str], most: int) -> None:
        self._most = most
        super().__init__(name, model, widths)
        self.setTextElideMode(Qt.TextElideMode.ElideMiddle)
        self.fit_rows()

    def fit_rows(self) -> None:
        """Take the height of the rows there are."""
        rows = min(max(1, self.model().rowCount()), self._most)
        head = self.horizontalHeader().sizeHint().height()
        self.setFixedHeight(head + rows * self.row_height() + 4)

    def changeEvent(self, event: QEvent) -> None:
        """Follow the size of the text."""
        super().changeEvent(event)
        if event.type() in (QEvent.Type.FontChange, QEvent.Type.StyleChange) and self.model() is not None:
            self.fit_rows()


class ItemLists(QWidget):
    """Several lists of which one is shown, chosen by name; a click or Return on an item goes there.

    Parameters
    ----------
    name : str
        What the lists are of.
    hands : MarkerHands
        Goes there.

    Attributes
    ----------
    changed : Signal()
        Another list is shown, or other items are selected.
    """

    changed = Signal()

    def __init__(self, name: str, hands: MarkerHands) -> None:
        super().__init__()
        self._hands = hands
        self._lists: dict[str, tuple[str, tuple[Item, ...]]] = {}
        self.chooser = Chooser(f"{name}: which list")
        self.model = ItemModel()
        self.table = ShortTable(name, self.model, ("0:00:00.000", ""), _MOST_ROWS)
        self.table.setToolTip("A click, or Return, brings it into view")
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.addWidget(self.chooser)
        column.addWidget(self.table)
        self.chooser.chosen.connect(lambda _key: self._show())
        self.table.opened.connect(self._go)
        self.table.clicked.connect(lambda index: self._go(index.row()))
        self.table.selectionModel().selectionChanged.connect(lambda: self.changed.emit())

    @property
    def shown(self) -> str:
        """Key of the list shown; empty for none."""
        return self.chooser.currentData() or ""

    @property
    def selected(self) -> list[Item]:
        """The selected items."""
        return [self.model.items[row] for row in self.table.selected_rows()]

    def show_lists(self, lists: Sequence[tuple[str, str, Sequence[Item]]]) -> None:
        """Offer other lists, those with items only: key, name, items."""
        self._lists = {key: (name, tuple(items)) for key, name, items in lists if items}
        options = [(key, f"{name} ({len(items)})") for key, (name, items) in self._lists.items()]
        chosen = self.shown if self.shown in self._lists else next(iter(self._lists), "")
        self.chooser.show_choice(options, chosen)
        self.setVisible(bool(options))
        self._show()

    def choose(self, key: str) -> None:
        """Show one of the lists."""
        self.chooser.setCurrentIndex(self.chooser.findData(key))
        self._show()

    def _show(self) -> None:
        items = self._lists.get(self.shown, ("", ()))[1]
        self.model.show_items(items)
        self.table.fit_rows()
        self.changed.emit()

    def _go(self, row: int) -> None:
        item = self.model.items[row]
        if item.start_s is not None:
            self._hands.go_to(item.start_s, item.stop_s)
