"""The codes of recording and plan: the table of all of them, and the fields for role and labels."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import QItemSelection, QItemSelectionModel, Qt
from PySide6.QtGui import QIcon, QPainter, QPixmap
from PySide6.QtWidgets import QHeaderView, QLineEdit

from pulsemend.errors import PlanError
from pulsemend.mending.marker_edits import (
    labels_text,
    own_labels,
    parse_labels,
    with_labels,
    with_role,
    without_codes,
)
from pulsemend.mending.marker_view import ABSENT, UNPLANNED, CodeRow
from pulsemend.model.plan import Plan
from pulsemend.model.vocabulary import Role
from pulsemend.window.elided import ElidedLabel
from pulsemend.window.fields import Chooser, Field, in_words
from pulsemend.window.marker_hands import MarkerHands, ShortTable
from pulsemend.window.parts import Card, button
from pulsemend.window.tables import RowsModel
from pulsemend.window.theme import Theme
from pulsemend.window.traces.clock import clock, number
from pulsemend.window.traces.shapes import draw_roles

TITLES = ("code", "role", "count", "first", "last", "usually after", "usually before", "labels", "note")
CODE, ROLE, COUNT, FIRST, LAST, BEFORE, AFTER, LABELS, NOTE = range(len(TITLES))
WIDTHS = (
    "a code of usual length",
    "undecided",
    "12345",
    "0:00:00",
    "0:00:00",
    "answer other, 1.5 s",
    "answer other, 1.5 s",
    "match = same",
)
_NUMBERS = (COUNT, FIRST, LAST)
_ON_THE_RIGHT = int(Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter)
_ICON_PX, _FINE = 14, 3
_MOST_ROWS = 9
_LABELS_PX = 190


def role_icon(role: Role, theme: Theme) -> QIcon:
    """Draw a role's shape as an icon."""
    drawn = QPixmap(_ICON_PX * _FINE, _ICON_PX * _FINE)
    drawn.setDevicePixelRatio(_FINE)
    drawn.fill(Qt.GlobalColor.transparent)
    with QPainter(drawn) as painter:
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        draw_roles(painter, [role], ([_ICON_PX / 2], _ICON_PX / 2), 9.0, theme, _FINE)
    return QIcon(drawn)


class CodeModel(RowsModel):
    """Codes as rows of a table.

    Parameters
    ----------
    theme : Theme
        Colours of the shapes.
    """

    def __init__(self, theme: Theme) -> None:
        super().__init__(TITLES)
        self.rows: tuple[CodeRow, ...] = ()
        self._icons = {role: role_icon(role, theme) for role in Role}

    def show_rows(self, rows: Sequence[CodeRow]) -> None:
        """Show others; where the codes are the same, nothing is selected anew."""
        same = [row.code for row in rows] == [row.code for row in self.rows]
        if same:
            self.rows = tuple(rows)
            if rows:
                self.dataChanged.emit(self.index(0, 0), self.index(len(rows) - 1, len(TITLES) - 1))
            return
        self.beginResetModel()
        self.rows = tuple(rows)
        self.endResetModel()

    def set_theme(self, theme: Theme) -> None:
        """Draw the shapes in other colours."""
        self._icons = {role: role_icon(role, theme) for role in Role}
        if self.rows:
            self.dataChanged.emit(self.index(0, CODE), self.index(len(self.rows) - 1, CODE))

    def n_rows(self) -> int:
        """Count the codes."""
        return len(self.rows)

    def text(self, row: int, column: int) -> str:
        """Give a cell's text."""
        one = self.rows[row]
        if column == CODE:
            return one.code
        if column == ROLE:
            return one.role.value
        if column == COUNT:
            return str(one.count)
        if column in (FIRST, LAST):
            at_s = one.first_s if column == FIRST else one.last_s
            return "never" if at_s is None else clock(at_s, 1)
        if column in (BEFORE, AFTER):
            return _neighbour(one.before if column == BEFORE else one.after)
        return labels_text(one.labels) if column == LABELS else one.note

    def more(self, row: int, column: int, role: int) -> object:
        """Give the shape of a role; numbers stand on the right."""
        if column == CODE and role == Qt.ItemDataRole.DecorationRole:
            return self._icons[self.rows[row].role]
        if column in _NUMBERS and role == Qt.ItemDataRole.TextAlignmentRole:
            return _ON_THE_RIGHT
        return None

    def headerData(
        self, section: int, orientation: Qt.Orientation, role: int = Qt.ItemDataRole.DisplayRole
    ) -> object:
        """Give the title of a column, on the side of its numbers."""
        if role == Qt.ItemDataRole.TextAlignmentRole and section in _NUMBERS:
            return _ON_THE_RIGHT
        return super().headerData(section, orientation, role)


class ShortCodeTable(ShortTable):
    """The codes where there is little room: code, role and count.

    Parameters
    ----------
    model : CodeModel
        What it shows.
    """

    def __init__(self, model: CodeModel) -> None:
        super().__init__("Codes with their roles", model, WIDTHS, _MOST_ROWS)
        for column in range(COUNT + 1, len(TITLES)):
            self.setColumnHidden(column, True)
        self.horizontalHeader().setStretchLastSection(False)
        self.horizontalHeader().setSectionResizeMode(CODE, QHeaderView.ResizeMode.Stretch)
        self.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)


class CodesCard(Card):
    """The codes, and what the chosen ones are.

    Parameters
    ----------
    hands : MarkerHands
        Changes the plan.
    theme : Theme
        Colours of the shapes.
    """

    def __init__(self, hands: MarkerHands, theme: Theme) -> None:
        super().__init__("Codes")
        self._hands = hands
        self._theme = theme
        self._chosen: list[str] = []
        self.advice = self.add_note()
        self.model = CodeModel(theme)
        self.table = ShortCodeTable(self.model)
        self.add(self.table)
        self.name = ElidedLabel("", "title")
        self.add(self.name)
        self.role = Chooser("Role of the chosen code")
        self.role_field = Field("role", self.role)
        self.add(self.role_field)
        self.labels = QLineEdit()
        self.labels.setAccessibleName("Labels of the chosen code")
        self.labels.setPlaceholderText("item = left, match = same")
        self.labels.setMinimumWidth(_LABELS_PX)
        self.labels_field = Field("labels", self.labels)
        self.add(self.labels_field)
        self.evidence = self.add_note()
        self.take_out = button(
            "Take out of the plan", self._take_out, tooltip="Where it occurs, it counts as other"
        )
        self.take_out.setAutoDefault(False)
        self.body.addWidget(self.take_out, 0, Qt.AlignmentFlag.AlignLeft)
        self.role.chosen.connect(self._give_role)
        self.labels.editingFinished.connect(self._give_labels)
        self.table.selectionModel().selectionChanged.connect(self._on_selected)
        self.show_codes((), None, "")

    @property
    def chosen(self) -> list[str]:
        """Codes that are chosen."""
        return [self.model.rows[row].code for row in self.table.selected_rows()]

    def show_codes(self, rows: Sequence[CodeRow], plan: Plan | None, advice: str) -> None:
        """Show the codes under a plan; what is chosen stays chosen."""
        chosen = self._chosen
        counts = ((ABSENT, "of the plan not in this recording"), (UNPLANNED, "not in the plan: other"))
        found = [(sum(row.note == note for row in rows), text) for note, text in counts]
        open_ends = [f"{_codes(count)} {text}." for count, text in found if count]
        self.advice.setText("\n".join(filter(None, (advice, *open_ends))))
        self.advice.setVisible(bool(self.advice.text()))
        self.model.show_rows(rows)
        if self.chosen != chosen:
            self.choose(chosen)
        undecided = sum(row.role is Role.UNDECIDED for row in rows) if plan is not None else 0
        self.note.setText(f"{undecided} undecided" if undecided else "")
        self.table.setVisible(bool(rows))
        self.table.fit_rows()
        self._show_chosen()

    def choose(self, codes: Sequence[str]) -> None:
        """Choose codes."""
        selection, found = self.table.selectionModel(), QItemSelection()
        rows = [row for row, one in enumerate(self.model.rows) if one.code in codes]
        for row in rows:
            found.select(self.model.index(row, 0), self.model.index(row, len(TITLES) - 1))
        selection.select(found, QItemSelectionModel.SelectionFlag.ClearAndSelect)
        if rows:
            first = self.model.index(rows[0], 0)
            selection.setCurrentIndex(first, QItemSelectionModel.SelectionFlag.NoUpdate)
            self.table.scrollTo(first)

    def set_theme(self, theme: Theme) -> None:
        """Draw the shapes in other colours."""
        self._theme = theme
        self.model.set_theme(theme)

    def _on_selected(self) -> None:
        self._chosen = self.chosen
        self.role_field.refuse("")
        self.labels_field.refuse("")
        self._show_chosen()

    def _show_chosen(self) -> None:
        rows = [row for row in self.model.rows if row.code in self._chosen]
        plan = self._hands.bench.session.plan
        for widget in (self.name, self.role_field, self.evidence):
            widget.setVisible(bool(rows))
        self.labels_field.setVisible(len(rows) == 1)
        self.take_out.setVisible(plan is not None and any(_is_named(plan, row.code) for row in rows))
        if not rows:
            return
        self.name.show_text(rows[0].code if len(rows) == 1 else f"{len(rows)} codes")
        roles = {row.role for row in rows}
        self.role.show_choice([(role.value, role.value) for role in Role], rows[0].role.value)
        if len(roles) > 1:
            self.role.setCurrentIndex(-1)
        self.role.setEnabled(plan is not None)
        self.labels.setEnabled(plan is not None)
        self.evidence.setText(_evidence(rows[0], plan) if len(rows) == 1 else "")
        self.evidence.setVisible(len(rows) == 1)
        if plan is not None and not (self.labels.hasFocus() and self.labels.isModified()):
            self.labels.setText(labels_text(own_labels(plan, rows[0].code)))

    def _give_role(self, key: str) -> None:
        codes, role = list(self._chosen), Role(key)
        name = codes[0] if len(codes) == 1 else f"{len(codes)} codes"
        refusal = self._hands.change_plan(
            f"{name}: role {role.value}", lambda plan: with_role(plan, codes, role), "role"
        )
        self.role_field.refuse(refusal)
        if refusal:
            self._show_chosen()

    def _give_labels(self) -> None:
        plan = self._hands.bench.session.plan
        if plan is None or len(self._chosen) != 1 or not self.labels.isModified():
            return
        code = self._chosen[0]
        self.labels.setModified(False)
        try:
            labels = parse_labels(self.labels.text())
        except PlanError as error:
            self.labels_field.refuse(in_words(error, "labels"))
            return
        if labels == own_labels(plan, code):
            self.labels_field.refuse("")
            return
        self.labels_field.refuse(
            self._hands.change_plan(f"{code}: labels", lambda plan: with_labels(plan, code, labels), "labels")
        )

    def _take_out(self) -> None:
        codes = list(self._chosen)
        name = codes[0] if len(codes) == 1 else f"{len(codes)} codes"
        self.role_field.refuse(
            self._hands.change_plan(
                f"{name}: out of the plan", lambda plan: without_codes(plan, codes), "markers"
            )
        )


def _codes(count: int) -> str:
    return "1 code" if count == 1 else f"{count} codes"


def _is_named(plan: Plan, code: str) -> bool:
    return any(marker.code == code for marker in plan.markers)


def _neighbour(neighbour: tuple[str, float] | None) -> str:
    return "" if neighbour is None else f"{neighbour[0]}, {number(neighbour[1])} s"


def _evidence(row: CodeRow, plan: Plan | None) -> str:
    if row.first_s is None or row.last_s is None:
        return f"{ABSENT[0].upper()}{ABSENT[1:]}."
    times = "Once" if row.count == 1 else f"{row.count} times"
    lines = [f"{times}, from {clock(row.first_s, 1)} to {clock(row.last_s, 1)}."]
    if row.before is not None:
        lines.append(f"Usually {number(row.before[1])} s after {row.before[0]}.")
    if row.after is not None:
        lines.append(f"Usually {number(row.after[1])} s before {row.after[0]}.")
    if row.note:
        lines.append(f"{row.note[0].upper()}{row.note[1:]}.")
    own = {} if plan is None else own_labels(plan, row.code)
    of_bits = {name: value for name, value in row.labels.items() if name not in own}
    if of_bits:
        lines.append(f"Labels of its bits: {labels_text(of_bits)}.")
    return "\n".join(lines)
