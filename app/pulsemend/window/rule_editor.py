"""The epoch rules: a list of them, and the fields of the one that is chosen."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

from PySide6.QtCore import QItemSelectionModel, QSignalBlocker, Qt, Signal
from PySide6.QtGui import QFont
from PySide6.QtWidgets import QLineEdit, QVBoxLayout, QWidget

from pulsemend.errors import PlanError
from pulsemend.mending.epoch_rows import RuleCount
from pulsemend.mending.rule_edits import labels_from_text, labels_text
from pulsemend.model.label_columns import known_columns
from pulsemend.model.plan import EpochRule, Plan
from pulsemend.model.trial_kinds import expanded_slots
from pulsemend.model.vocabulary import PulseRule
from pulsemend.window.fields import Chooser, Field, PlainNumber, in_words
from pulsemend.window.flow import flow_row
from pulsemend.window.lane_style import rule_icon
from pulsemend.window.parts import Card, Choices, button, words
from pulsemend.window.tables import RowsModel, RowsTable
from pulsemend.window.theme import Theme

MOST_ROWS = 7
_NOTHING = "nothing"

Edit = Callable[[str, str, EpochRule, str | None], str]
"""Called with field, label of the entry, new rule and merge key; gives a refusal or an empty text."""


class RulesModel(RowsModel):
    """Rules with where they start and how many epochs they keep.

    Parameters
    ----------
    theme : Theme
        Colours of their looks in the lanes.
    """

    def __init__(self, theme: Theme) -> None:
        super().__init__(("rule", "starts", "kept"))
        self._theme = theme
        self._rules: tuple[EpochRule, ...] = ()
        self._counts: dict[str, RuleCount] = {}

    def show_rules(self, rules: Sequence[EpochRule], counts: Sequence[RuleCount]) -> None:
        """Show other rules; counts of rules that are not there any more play no part."""
        self.beginResetModel()
        self._rules = tuple(rules)
        self._counts = {one.rule: one for one in counts}
        self.endResetModel()

    def set_theme(self, theme: Theme) -> None:
        """Draw the looks in other colours."""
        self._theme = theme
        if self._rules:
            self.dataChanged.emit(self.index(0, 0), self.index(len(self._rules) - 1, 0))

    def n_rows(self) -> int:
        """Count the rules."""
        return len(self._rules)

    def text(self, row: int, column: int) -> str:
        """Give what stands in a cell."""
        rule = self._rules[row]
        if column == 0:
            return rule.name
        if column == 1:
            pieces = f", {rule.count} pieces" if rule.count > 1 else ""
            return f"{rule.anchor} {_signed(rule.start_s)} s{pieces}"
        count = self._counts.get(rule.name)
        return "not yet" if count is None else f"{count.kept} of {count.total}"

    def more(self, row: int, column: int, role: int) -> object:
        """Write the names of rules heavier, with their look in the lanes beside them."""
        if column == 0 and role == Qt.ItemDataRole.DecorationRole:
            return rule_icon(row, self._theme)
        if column == 0 and role == Qt.ItemDataRole.FontRole:
            font = QFont()
            font.setWeight(QFont.Weight.DemiBold)
            return font
        return None


class RuleList(Card):
    """The rules in their order.

    Parameters
    ----------
    theme : Theme
        Colours of their looks in the lanes.

    Attributes
    ----------
    chosen : Signal(int)
        Another rule is chosen.
    add_wanted, copy_wanted, remove_wanted : Signal()
        Add one behind the chosen one; copy or remove that.
    move_wanted : Signal(int)
        Move it down (1) or up (-1).
    """

    chosen = Signal(int)
    add_wanted = Signal()
    copy_wanted = Signal()
    remove_wanted = Signal()
    move_wanted = Signal(int)

    def __init__(self, theme: Theme) -> None:
        super().__init__("Rules")
        self.model = RulesModel(theme)
        self.table = RowsTable("Epoch rules", self.model, ())
        # A long name gives way; numbers do not.
        header = self.table.horizontalHeader()
        header.setStretchLastSection(False)
        header.setMinimumSectionSize(40)
        for column, mode in enumerate(
            (header.ResizeMode.Stretch, *2 * (header.ResizeMode.ResizeToContents,))
        ):
            header.setSectionResizeMode(column, mode)
        self.table.setSelectionMode(RowsTable.SelectionMode.SingleSelection)
        self.add(self.table)
        self.buttons = {
            "add": button("Add", self.add_wanted.emit, tooltip="Add a rule behind the chosen one"),
            "copy": button("Copy", self.copy_wanted.emit, tooltip="Add a copy of the chosen rule"),
            "remove": button("Remove", self.remove_wanted.emit, tooltip="Remove the chosen rule"),
            "up": button("Up", lambda: self.move_wanted.emit(-1), tooltip="Move the chosen rule up"),
            "down": button("Down", lambda: self.move_wanted.emit(1), tooltip="Move the chosen rule down"),
        }
        for name, one in self.buttons.items():
            one.setAccessibleName(f"Rule: {name}")
        for row in (("add", "copy", "remove"), ("up", "down")):
            self.add(flow_row(*(self.buttons[name] for name in row)))
        self.refusal = words("", "attention")
        self.refusal.setWordWrap(True)
        self.refusal.hide()
        self.add(self.refusal)
        self.table.selectionModel().currentRowChanged.connect(self._choose)

    @property
    def place(self) -> int:
        """Which rule is chosen, from 0; -1 for none."""
        return self.table.currentIndex().row()

    def show_rules(self, rules: Sequence[EpochRule], counts: Sequence[RuleCount], place: int) -> None:
        """Show rules, and which is chosen.

        Parameters
        ----------
        rules : sequence of EpochRule
            In the plan's order.
        counts : sequence of RuleCount
            What is known of them.
        place : int
            Which is chosen, from 0.
        """
        with QSignalBlocker(self.table.selectionModel()):
            self.model.show_rules(rules, counts)
            flags = QItemSelectionModel.SelectionFlag
            self.table.selectionModel().setCurrentIndex(
                self.model.index(place, 0), flags.ClearAndSelect | flags.Rows
            )
        # Blocked signals include those the view repaints by.
        self.table.viewport().update()
        self.table.scrollTo(self.model.index(place, 0))
        self._fit()
        self._tell()

    def choose(self, place: int) -> None:
        """Choose another rule, and tell so."""
        flags = QItemSelectionModel.SelectionFlag
        self.table.selectionModel().setCurrentIndex(
            self.model.index(place, 0), flags.ClearAndSelect | flags.Rows
        )

    def refuse(self, text: str) -> None:
        """Say why adding, copying, removing or moving was not done."""
        self.refusal.setText(text)
        self.refusal.setVisible(bool(text))

    def _choose(self) -> None:
        self._tell()
        if self.place >= 0:
            self.chosen.emit(self.place)

    def _tell(self) -> None:
        place, last = self.place, self.model.n_rows() - 1
        for name in ("copy", "remove"):
            self.buttons[name].setEnabled(place >= 0)
        self.buttons["up"].setEnabled(place > 0)
        self.buttons["down"].setEnabled(0 <= place < last)

    def _fit(self) -> None:
        rows = min(max(self.model.n_rows(), 2), MOST_ROWS)
        header = self.table.horizontalHeader().sizeHint().height()
        self.table.setFixedHeight(rows * self.table.row_height() + header + 4)


class RuleEditor(Card):
    """The fields of one rule.

    Parameters
    ----------
    edit : callable
        Makes an edit; see `Edit`.
    merged : callable
        Called when a series of steps in one field is over.
    """

    def __init__(self, edit: Edit, merged: Callable[[], None]) -> None:
        super().__init__("Rule")
        self._edit = edit
        self._rule: EpochRule | None = None
        self._place = 0
        self._plan: Plan | None = None
        self._log_columns: tuple[str, ...] = ()
        self.name = QLineEdit()
        self.name.setAccessibleName("Name of the rule")
        self.anchor = Chooser("Anchor of the rule")
        self.start = PlainNumber("Start after the anchor", "s", -3600, 3600, 0.05)
        self.count = PlainNumber("Consecutive pieces", "", 1, 10000, 1, 0)
        self.pulse = Choices(
            "Gaps inside the epoch",
            ((PulseRule.REFUSE.value, "refuse"), (PulseRule.ACCEPT_FILLED.value, "accept filled")),
        )
        self.before = PlainNumber("Kept free before every gap", "ms", 0, 60000, 10)
        self.after = PlainNumber("Kept free after every gap", "ms", 0, 60000, 10)
        self.stop = Chooser("Stop before this slot")
        self.labels = QLineEdit()
        self.labels.setAccessibleName("Labels of the rule")
        self.labels.setPlaceholderText("cued = cue1.item")
        self.known_labels = words("", "quiet")
        self.fields: dict[str, Field] = {
            "name": Field("name", self.name),
            "anchor": Field("anchor", self.anchor),
            "start_s": Field("starts at anchor plus", self.start),
            "count": Field("pieces in a row", self.count),
            "pulse": _stacked("gaps inside the epoch", self.pulse),
            "clear_before": Field("kept free before a gap", self.before),
            "clear_after": Field("kept free after a gap", self.after),
            "stop_before": Field("ends before", self.stop),
            "labels": _stacked("labels", self.labels),
        }
        for one in self.fields.values():
            self.add(one)
        self.add(self.known_labels)
        self._listen(merged)

    def show_rule(self, plan: Plan, place: int) -> None:
        """Show a rule as the plan has it; refusals of edits before are gone.

        Parameters
        ----------
        plan : Plan
            As edited.
        place : int
            Which rule, from 0.
        """
        rule = plan.epochs.rule[place]
        self._rule, self._place, self._plan = rule, place, plan
        slots = [
            (slot.slot, slot.slot if slot.slot == slot.role else f"{slot.slot} ({slot.role})")
            for slot in expanded_slots(plan)
        ]
        self.title.setText(f"Rule {rule.name}" if len(rule.name) <= 24 else f"Rule {rule.name[:23]}\u2026")
        self.title.setToolTip(rule.name)
        self._show_text(self.name, rule.name)
        self.anchor.show_choice(slots, rule.anchor)
        self.start.show_value(rule.start_s)
        self.count.show_value(rule.count)
        self.pulse.show_choice(rule.pulse.value)
        self.before.show_value(rule.clear_ms[0])
        self.after.show_value(rule.clear_ms[1])
        self.stop.show_choice([("", _NOTHING), *slots], rule.stop_before)
        self._show_text(self.labels, labels_text(rule.labels))
        self.known_labels.setText(_offered(plan, self._log_columns))
        for field in self.fields.values():
            field.refuse("")

    def show_log_columns(self, columns: Sequence[str]) -> None:
        """Offer the columns of the log, which only the log knows, as labels from now on."""
        self._log_columns = tuple(columns)
        if self._plan is not None:
            self.known_labels.setText(_offered(self._plan, self._log_columns))

    def show_kept(self, kept: Mapping[PulseRule, int] | None) -> None:
        """Show how many epochs each choice about gaps keeps; None while that is not known."""
        for choice in PulseRule:
            self.pulse.show_evidence(choice.value, "" if kept is None else f"keeps {kept[choice]}")

    def _listen(self, merged: Callable[[], None]) -> None:
        self.name.editingFinished.connect(self._take_name)
        self.labels.editingFinished.connect(self._take_labels)
        self.anchor.chosen.connect(lambda slot: self._take("anchor", f"anchor {slot}", anchor=slot))
        self.stop.chosen.connect(
            lambda slot: self._take("stop_before", f"ends before {slot or _NOTHING}", stop_before=slot)
        )
        self.start.committed.connect(
            lambda value: self._take("start_s", f"start {value:g} s", start_s=value, merge=True)
        )
        self.count.committed.connect(
            lambda value: self._take("count", f"{value:g} pieces", count=int(value), merge=True)
        )
        self.pulse.chosen.connect(lambda word: self._take("pulse", f"{word} gaps", pulse=PulseRule(word)))
        self.before.committed.connect(lambda _: self._take_clear("clear_before"))
        self.after.committed.connect(lambda _: self._take_clear("clear_after"))
        for number in (self.start, self.count, self.before, self.after):
            number.editingFinished.connect(merged)

    def _take_name(self) -> None:
        typed = self.name.text()
        if self._rule is not None and typed != self._rule.name:
            self._take("name", f"now named {typed}", name=typed)
        else:
            self.fields["name"].refuse("")

    def _take_labels(self) -> None:
        if self._rule is None or self.labels.text() == labels_text(self._rule.labels):
            self.fields["labels"].refuse("")
            return
        try:
            labels = labels_from_text(self.labels.text())
        except PlanError as error:
            self.fields["labels"].refuse(in_words(error, "labels"))
            return
        self._take("labels", "labels", labels=labels)

    def _take_clear(self, field: str) -> None:
        clear = (self.before.value(), self.after.value())
        self._take(field, f"clear {clear[0]:g} and {clear[1]:g} ms", clear_ms=clear, merge=True)

    def _take(self, field: str, does: str, *, merge: bool = False, **values: object) -> None:
        """Ask for an edit; what is refused is said, and numbers and choices fall back to the plan's."""
        rule = self._rule
        if rule is None:
            return
        merge_key = f"epochs.rule {self._place} {field}" if merge else None
        refusal = self._edit(field, f"Rule {rule.name}: {does}", replace(rule, **values), merge_key)  # type: ignore[arg-type]
        if refusal:
            # A text that was typed stays to be corrected.
            self._restore(rule)
        self.fields[field].refuse(refusal)

    def _restore(self, rule: EpochRule) -> None:
        self.start.show_value(rule.start_s)
        self.count.show_value(rule.count)
        self.before.show_value(rule.clear_ms[0])
        self.after.show_value(rule.clear_ms[1])
        self.pulse.show_choice(rule.pulse.value)
        for chooser, key in ((self.anchor, rule.anchor), (self.stop, rule.stop_before)):
            chooser.setCurrentIndex(chooser.findData(key))

    @staticmethod
    def _show_text(field: QLineEdit, text: str) -> None:
        if field.text() != text:
            field.setText(text)
            field.setToolTip(text)
            field.setCursorPosition(0)


def _offered(plan: Plan, log_columns: Sequence[str]) -> str:
    """Say what a label may be made from."""
    columns = [*known_columns(plan), *log_columns]
    if not columns:
        return "No code of a slot has labels; a plain word labels all epochs of the rule."
    listed = ", ".join(columns)
    return f"From: {listed}. Or other(column) for the other of two values, or a plain word for all epochs."


def _stacked(name: str, below: QWidget) -> Field:
    """Make a field whose input stands below its name, because it needs the width."""
    field = Field(name, below)
    column = field.layout()
    if isinstance(column, QVBoxLayout):
        column.insertWidget(1, below)
    return field


def _signed(value: float) -> str:
    return f"{value:+.12g}".replace("-", "\u2212")
