"""Cards about conditions: epochs of each, equal numbers of them, and how kept and left-out epochs differ."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import QSignalBlocker, Qt, Signal
from PySide6.QtWidgets import QListWidget, QListWidgetItem, QWidget

from pulsemend.model.plan import Balance
from pulsemend.model.vocabulary import Choose
from pulsemend.trials.balance import ConditionCount
from pulsemend.trials.selection import SelectionDifference, overview
from pulsemend.trials.selection import words as in_words
from pulsemend.window.fields import Field, PlainNumber
from pulsemend.window.flow import flow_row
from pulsemend.window.parts import Card, Choices, button, words
from pulsemend.window.tables import RowsModel, RowsTable

MOST_COLUMNS = 5
MOST_ROWS = 9
TIMES = " \u00d7 "


class _CountsModel(RowsModel):
    """Rule, condition, kept of all."""

    def __init__(self) -> None:
        super().__init__(("rule", "condition", "kept"))
        self._counts: tuple[ConditionCount, ...] = ()

    def show_counts(self, counts: Sequence[ConditionCount]) -> None:
        """Show others."""
        if tuple(counts) != self._counts:
            self.beginResetModel()
            self._counts = tuple(counts)
            self.endResetModel()

    def n_rows(self) -> int:
        """Count the rows."""
        return len(self._counts)

    def text(self, row: int, column: int) -> str:
        """Give what stands in a cell."""
        one = self._counts[row]
        if column == 0:
            return one.rule
        return ", ".join(one.values) or "all" if column == 1 else f"{one.kept} of {one.total}"


class ConditionsCard(Card):
    """Epochs per rule and condition.

    Attributes
    ----------
    chosen : Signal()
        Other label columns make the conditions.
    """

    chosen = Signal()

    def __init__(self) -> None:
        super().__init__("Conditions", "kept of all")
        self.columns = QListWidget()
        self.columns.setAccessibleName("Label columns that make the conditions")
        self.columns.setSpacing(2)
        self.model = _CountsModel()
        self.table = RowsTable("Epochs per condition", self.model, ())
        header = self.table.horizontalHeader()
        header.setStretchLastSection(False)
        header.setMinimumSectionSize(40)
        modes = (header.ResizeMode.Stretch, header.ResizeMode.Stretch, header.ResizeMode.ResizeToContents)
        for column, mode in enumerate(modes):
            header.setSectionResizeMode(column, mode)
        self.no_columns = self.add_note("No label column has two values or more.")
        self.add(self.columns)
        self.add(self.table)
        self.columns.itemChanged.connect(lambda _: self.chosen.emit())
        self.show_columns((), ())
        self.show_counts(())

    @property
    def picked(self) -> tuple[str, ...]:
        """Columns that are picked, in the order of the list."""
        items = [self.columns.item(place) for place in range(self.columns.count())]
        return tuple(item.text() for item in items if item.checkState() is Qt.CheckState.Checked)

    def show_columns(self, columns: Sequence[str], picked: Sequence[str]) -> None:
        """Offer label columns, and show which are picked.

        Parameters
        ----------
        columns : sequence of str
            All there are.
        picked : sequence of str
            Those among them that make the conditions.
        """
        now = [self.columns.item(place).text() for place in range(self.columns.count())]
        with QSignalBlocker(self.columns):
            if now != list(columns):
                self.columns.clear()
                for column in columns:
                    item = QListWidgetItem(column)
                    item.setToolTip(column)
                    self.columns.addItem(item)
            for place in range(self.columns.count()):
                item = self.columns.item(place)
                item.setCheckState(
                    Qt.CheckState.Checked if item.text() in picked else Qt.CheckState.Unchecked
                )
        self.columns.setVisible(bool(columns))
        self.no_columns.setVisible(not columns)
        _fit_rows(self.columns, max(1, self.columns.sizeHintForRow(0)) + 4, len(columns), MOST_COLUMNS, 0)

    def show_counts(self, counts: Sequence[ConditionCount]) -> None:
        """Show how many epochs there are."""
        self.model.show_counts(counts)
        header = self.table.horizontalHeader().sizeHint().height()
        _fit_rows(self.table, self.table.row_height(), len(counts), MOST_ROWS, header)
        self.table.setVisible(bool(counts))


class BalanceCard(Card):
    """Equal numbers of epochs per condition.

    Attributes
    ----------
    wanted : Signal(str, object)
        A balance: what is done, and the new Balance.
    """

    wanted = Signal(str, object)

    def __init__(self) -> None:
        super().__init__("Balance", "equal numbers within every rule")
        self._balance = Balance()
        self._picked: tuple[str, ...] = ()
        self.by = self.add_line("equal numbers of")
        self.left_out = self.add_line("left out for balance")
        self.choices = Choices(
            "Which epochs stay",
            (
                (Choose.SPREAD.value, "spread evenly over the recording"),
                (Choose.DRAWN.value, "drawn at random"),
            ),
        )
        self.add(self.choices)
        self.seed = PlainNumber("Seed of the draw", "", 0, 2**31 - 1, 1, 0)
        self.seed_field = Field("seed", self.seed)
        self.add(self.seed_field)
        self.would = self.add_line("by the conditions above")
        self.apply = button(
            "Balance by these", self._apply, tooltip="Keep equally many epochs of every condition above"
        )
        self.end = button("No balance", self._end, tooltip="Keep all epochs again")
        self.add(flow_row(self.apply, self.end))
        self.refusal = words("", "attention")
        self.refusal.setWordWrap(True)
        self.refusal.hide()
        self.add(self.refusal)
        self.choices.chosen.connect(self._choose)
        self.seed.committed.connect(self._draw)

    def show_left_out(self, left_out: int | None) -> None:
        """Show how many epochs the plan's balance leaves out; None: not counted."""
        self.left_out.show_value("not counted" if left_out is None else str(left_out))

    def show_balance(self, balance: Balance) -> None:
        """Show the plan's balance, as edited."""
        self._balance = balance
        self.by.show_value(TIMES.join(balance.by) or "nothing")
        self.choices.show_choice(balance.choose.value)
        self.seed.show_value(balance.seed)
        self.seed_field.setVisible(balance.choose is Choose.DRAWN)
        self.end.setEnabled(bool(balance.by))
        self.apply.setEnabled(bool(self._picked) and self._picked != balance.by)
        self.refuse("")

    def show_would(self, picked: Sequence[str], left_out: int | None) -> None:
        """Show what a balance by other columns would leave out.

        Parameters
        ----------
        picked : sequence of str
            Columns picked above.
        left_out : int or None
            How many epochs; None: not known yet.
        """
        self._picked = tuple(picked)
        known = "being counted" if left_out is None else f"would leave out {left_out}"
        self.would.show_value(known if picked else "none picked")
        self.apply.setEnabled(bool(picked) and self._picked != self._balance.by)

    def refuse(self, text: str) -> None:
        """Say why a balance was not taken over."""
        self.refusal.setText(text)
        self.refusal.setVisible(bool(text))

    def _apply(self) -> None:
        by = self._picked
        self.wanted.emit(
            f"Balance by {TIMES.join(by)}", Balance(by, self._balance.choose, self._balance.seed)
        )

    def _end(self) -> None:
        self.wanted.emit("No balance", Balance((), self._balance.choose, self._balance.seed))

    def _choose(self, word: str) -> None:
        chosen = Balance(self._balance.by, Choose(word), self._balance.seed)
        self.wanted.emit(f"Balance: {word}", chosen)

    def _draw(self, seed: float) -> None:
        chosen = Balance(self._balance.by, self._balance.choose, int(seed))
        self.wanted.emit(f"Balance: seed {seed:g}", chosen)


class SelectionCard(Card):
    """Whether kept and left-out epochs of the chosen rule differ: numbers, no verdicts."""

    def __init__(self) -> None:
        super().__init__("Kept against left out", "before balance")
        self.words = self.add_note()
        self._lines: list[tuple[QWidget, QWidget]] = []
        self.show_nothing("Not counted.")

    def show_nothing(self, why: str) -> None:
        """Show a sentence and no numbers."""
        self._clear()
        self.words.setText(why)

    def show_differences(self, rule: str, differences: Sequence[SelectionDifference]) -> None:
        """Show the numbers of one rule.

        Parameters
        ----------
        rule : str
            Its name.
        differences : sequence of NumberDifference or ShareDifference
            Of this rule.
        """
        self._clear()
        if not differences:
            self.words.setText(
                f"Nothing can be compared in {rule}: all its epochs are kept, or none, or nothing varies."
            )
            return
        self.words.setText(f"{rule}: {overview(differences)}")
        for one in differences:
            about, _, numbers = in_words(one).removeprefix(f"{rule}, ").partition(": ")
            name, line = words(about.removeprefix(rule).strip(), "value"), words(numbers, "quiet")
            name.setWordWrap(True)
            self._lines.append((name, line))
            self.add(name)
            self.add(line)

    def _clear(self) -> None:
        for pair in self._lines:
            for one in pair:
                one.hide()
                one.deleteLater()
        self._lines = []


def _fit_rows(widget: QWidget, row_px: int, rows: int, most: int, more_px: int) -> None:
    """Make a list as high as its rows, up to some."""
    widget.setFixedHeight(min(max(rows, 1), most) * row_px + more_px + 6)
