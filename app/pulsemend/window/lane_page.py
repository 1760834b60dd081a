"""The picture of the Epochs stage: lanes or table, what the lanes show, and both in step."""

from __future__ import annotations

from PySide6.QtCore import Signal
from PySide6.QtWidgets import (
    QButtonGroup,
    QLabel,
    QPushButton,
    QStackedWidget,
    QToolTip,
    QVBoxLayout,
    QWidget,
)

from pulsemend.mending.epoch_lanes import Lanes, LanesShown, with_zero
from pulsemend.model.marks import EpochKey
from pulsemend.window.epoch_lanes import LanesView
from pulsemend.window.epoch_table import EpochTable
from pulsemend.window.fields import Chooser
from pulsemend.window.flow import flow_row
from pulsemend.window.parts import button, words
from pulsemend.window.theme import Theme

OF_RULE = "*rule"
"""Stands for the anchor of the rule that is chosen; no slot is called so."""

_KIND = "kind "
_KEYS = (
    "Click or Return goes there. Drag an epoch to move its rule, its right edge to change the length of all. "
    "Keys: arrows choose; with Alt they move the rule and change the length by 10 ms, with Shift besides by "
    "one sample; Ctrl with Page Up and Down, or the wheel, changes the height of lanes, with Shift besides "
    "it zooms the time."
)


class LanePage(QWidget):
    """Lanes and table behind one switch.

    Parameters
    ----------
    theme : Theme
        Colours.

    Attributes
    ----------
    shown_changed : Signal()
        The other of the two is shown.
    """

    shown_changed = Signal()

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._lanes: Lanes | None = None
        self._anchor = ""
        self.view = LanesView(theme)
        self.view.setWhatsThis(_KEYS)
        self.table = EpochTable(theme)
        self.switch = {
            "lanes": _switch("Lanes", "One lane per trial"),
            "table": _switch("Table", "All epochs"),
        }
        self._group = QButtonGroup(self)
        for one in self.switch.values():
            self._group.addButton(one)
        self.switch["lanes"].setChecked(True)
        self.zeros = Chooser("Zero of every lane")
        self.shown = Chooser("Which lanes are shown")
        self.conditions = Chooser("Lanes of which condition")
        self.count = words("", "quiet")
        self.count.setWordWrap(False)
        self.hint = button("Keys", self._show_keys, tooltip=_KEYS)
        self.hint.setAutoDefault(False)
        self.hint.setAccessibleName("Keys and mouse in the lanes")
        self.hint.setAccessibleDescription(_KEYS)
        for chooser in (self.zeros, self.shown, self.conditions):
            chooser.setMinimumContentsLength(9)
        self._lay_out()
        self._listen()
        self.show_lanes(None)

    @property
    def shows_table(self) -> bool:
        """Whether the table is shown."""
        return self.switch["table"].isChecked()

    def show_lanes(self, lanes: Lanes | None) -> None:
        """Show other lanes; zero and filters stay where they still exist."""
        self._lanes = lanes
        slots = () if lanes is None else lanes.slots
        zeros = [("", "first slot"), (OF_RULE, "anchor of the rule"), *((slot, slot) for slot in slots)]
        _offer(self.zeros, zeros)
        kinds = () if lanes is None else lanes.kinds
        shown = [(str(one), str(one)) for one in LanesShown]
        _offer(self.shown, [*shown, *((f"{_KIND}{kind}", f"of kind {kind}") for kind in kinds)])
        conditions = () if lanes is None else tuple(lanes.conditions)
        named = [(f"{column}\t{value}", f"{column} = {value}") for column, value in conditions]
        _offer(self.conditions, [("", "any condition"), *named])
        self._filter()
        self._place()

    def show_anchor(self, slot: str) -> None:
        """Take note of the chosen rule's anchor."""
        if slot != self._anchor:
            self._anchor = slot
            if self.zeros.currentData() == OF_RULE:
                self._place()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self.view.set_theme(theme)
        self.table.set_theme(theme)

    def _lay_out(self) -> None:
        self._of_lanes: list[QWidget] = [
            part
            for name, field in (("zero at", self.zeros), ("show", self.shown), ("of", self.conditions))
            for part in (_name_of(name, field), field)
        ]
        self._of_lanes += [self.count, self.hint]
        self.pages = QStackedWidget()
        self.pages.addWidget(self.view)
        self.pages.addWidget(self.table)
        above = flow_row(*self.switch.values(), *self._of_lanes)
        above.setContentsMargins(8, 6, 8, 0)
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 6, 0, 0)
        column.setSpacing(2)
        column.addWidget(above)
        column.addWidget(self.pages, 1)

    def _listen(self) -> None:
        for one in self.switch.values():
            one.toggled.connect(self._switch_page)
        self.zeros.chosen.connect(lambda _: self._place())
        self.shown.chosen.connect(lambda _: self._filter())
        self.conditions.chosen.connect(lambda _: self._filter())
        self.view.current_changed.connect(self._tell_table)
        self.table.current_changed.connect(self._tell_lanes)

    def _show_keys(self) -> None:
        below = self.hint.mapToGlobal(self.hint.rect().bottomLeft())
        QToolTip.showText(below, _KEYS, self.hint)

    def _switch_page(self, is_on: bool) -> None:
        if not is_on:
            return
        self.pages.setCurrentWidget(self.table if self.shows_table else self.view)
        for one in self._of_lanes:
            one.setVisible(not self.shows_table)
        self.shown_changed.emit()

    def _place(self) -> None:
        """Show the lanes with the zero that is chosen."""
        lanes = self._lanes
        if lanes is not None:
            chosen = self.zeros.currentData()
            slot = self._anchor if chosen == OF_RULE else chosen
            lanes = with_zero(lanes, slot or "")
        self.view.show_lanes(lanes)
        self._tell_count()

    def _filter(self) -> None:
        shown, kind = self.shown.currentData() or str(LanesShown.ALL), ""
        if shown.startswith(_KIND):
            shown, kind = str(LanesShown.ALL), shown.removeprefix(_KIND)
        column, tab, value = (self.conditions.currentData() or "").partition("\t")
        self.view.show_only(LanesShown(shown), kind, (column, value) if tab else None)
        self._tell_count()

    def _tell_count(self) -> None:
        total = 0 if self._lanes is None else len(self._lanes.lanes)
        shown = self.view.n_shown
        self.count.setText(f"{total} trials" if shown == total else f"{shown} of {total} trials")

    def _tell_table(self, key: EpochKey | None) -> None:
        if key is not None:
            self.table.show_key(key)

    def _tell_lanes(self, key: EpochKey) -> None:
        self.view.show_key(key)


def _switch(text: str, tooltip: str) -> QPushButton:
    made = QPushButton(text)
    made.setCheckable(True)
    made.setAutoDefault(False)
    made.setToolTip(tooltip)
    made.setAccessibleName(f"Show as {text.lower()}")
    return made


def _name_of(text: str, field: QWidget) -> QLabel:
    label = QLabel(text)
    label.setBuddy(field)
    return label


def _offer(chooser: Chooser, options: list[tuple[str, str]]) -> None:
    """Offer other choices; what is chosen stays if it is still there."""
    chosen = chooser.currentData()
    known = [key for key, _ in options]
    chooser.show_choice(options, chosen if chosen in known else known[0])
