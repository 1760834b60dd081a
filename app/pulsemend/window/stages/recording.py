"""The stage Recording: what is in the file, which channels and stretches are bad, what channels record."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from PySide6.QtCore import Qt
from PySide6.QtWidgets import (
    QHBoxLayout,
    QLineEdit,
    QSizePolicy,
    QSplitter,
    QStackedWidget,
    QVBoxLayout,
    QWidget,
)

from pulsemend.model.recording import RecordingFacts
from pulsemend.model.vocabulary import ChannelType
from pulsemend.session.changed import Changed
from pulsemend.session.found import Stage
from pulsemend.session.messages import Level, Message
from pulsemend.signal.head_plane import lay_flat
from pulsemend.window.bad_stretches import BadStretchesCard
from pulsemend.window.channel_rows import (
    TYPE_WORDS,
    ChannelRow,
    Condition,
    channel_rows,
    counts_of_types,
    listed,
    with_type,
)
from pulsemend.window.channel_table import WHY_PLAN, ChannelTable, Column
from pulsemend.window.elided import ElidedLabel
from pulsemend.window.fields import Chooser
from pulsemend.window.head_map import HeadMap, MapChannel
from pulsemend.window.mark_acts import MarkActs
from pulsemend.window.parts import Card, EmptyState, scrolling_column
from pulsemend.window.spectrum_card import SpectrumCard
from pulsemend.window.stages.base import StagePage
from pulsemend.window.theme import Theme
from pulsemend.window.traces.clock import clock, duration, number
from pulsemend.window.workbench import Workbench

OPEN_FIRST = "No recording is open. Open one with Ctrl+O, or drop its file onto this window."
_AS_IN_FILE = "-1"
_ORDERS = (
    (_AS_IN_FILE, "as in the file"),
    (str(Column.BAD.value), "bad ones first"),
    (str(Column.NAME.value), "by name"),
    (str(Column.TYPE.value), "by type"),
    (str(Column.POSITION.value), "by position"),
)


class FactsCard(Card):
    """What the reader found in the file."""

    def __init__(self) -> None:
        super().__init__("What was recorded")
        self.name = ElidedLabel(kind="value")
        self.add(self.name)
        self.format = ElidedLabel(kind="quiet")
        self.add(self.format)
        self.rate = self.add_line("Sampling rate")
        self.length = self.add_line("Duration")
        self.channels = self.add_line("Channels")
        self.markers = self.add_line("Markers")
        self.breaks = self.add_line("Breaks")
        self.parts = QVBoxLayout()
        self.parts.setSpacing(2)
        self.body.addLayout(self.parts)
        self.notes = self.add_note()

    def show_facts(self, facts: RecordingFacts) -> None:
        """Show the facts of a recording."""
        self.name.show_text(facts.stem)
        self.format.show_text(facts.format)
        self.rate.show_value(f"{number(facts.rate_hz)} Hz")
        self.length.show_value(duration(facts.duration_s))
        self.markers.show_value(str(len(facts.markers)))
        self.breaks.show_value(_breaks(facts), attention=bool(facts.boundaries))
        while (item := self.parts.takeAt(0)) is not None:
            widget = item.widget()
            if widget is not None:
                widget.deleteLater()
        for part in facts.parts:
            self.parts.addWidget(ElidedLabel(f"{part.name}, {_size(part.size)}", "quiet"))
        self.notes.setText("\n".join(facts.notes))
        self.notes.setVisible(bool(facts.notes))

    def show_types(self, rows: tuple[ChannelRow, ...]) -> None:
        """Show the channels per type, as the marks have them."""
        self.channels.show_value(counts_of_types(rows))


class ChannelsCard(Card):
    """The table of channels with what orders and filters it."""

    def __init__(self, theme: Theme) -> None:
        super().__init__("Channels")
        self.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Expanding)
        self.filter = QLineEdit()
        self.filter.setPlaceholderText("Show only, e.g. eog bad")
        self.filter.setAccessibleName("Show only channels with these words")
        self.filter.setClearButtonEnabled(True)
        self.order = Chooser("Order of the channels")
        self.order.show_choice(_ORDERS, _AS_IN_FILE)
        row = QHBoxLayout()
        row.addWidget(self.filter, 1)
        row.addWidget(self.order)
        self.body.addLayout(row)
        self.table = ChannelTable(theme)
        self.body.addWidget(self.table, 1)
        self.none = self.add_note("No channel has these words. Clear the field above to see all.")
        self.none.hide()
        self.in_plan = self.add_note()
        self.keys = self.add_note("Space: bad or good. Return: type. Rows chosen here are picked everywhere.")
        self.filter.textChanged.connect(self._filter)
        self.order.chosen.connect(self._order)
        self.table.horizontalHeader().sortIndicatorChanged.connect(self._ordered)

    def show_rows(self, rows: tuple[ChannelRow, ...]) -> None:
        """Show the channels and count the bad ones."""
        self.table.show_rows(rows)
        ours = sum(row.condition is Condition.BAD for row in rows)
        theirs = [row.name for row in rows if row.condition is Condition.BAD_IN_PLAN]
        counts = [f"{ours} bad here"] if ours else []
        counts += [f"{len(theirs)} bad by the plan"] if theirs else []
        found = [row.name for row in rows if row.condition is Condition.FOUND_BAD]
        counts += [f"{len(found)} found bad ({listed(found)})"] if found else []
        self.note.setText(", ".join(counts) or "none bad")
        self.in_plan.setText(f"{listed(theirs)}: {WHY_PLAN[0].lower()}{WHY_PLAN[1:]}" if theirs else "")
        self.in_plan.setVisible(bool(theirs))
        self._filter(self.filter.text())

    def _filter(self, text: str) -> None:
        self.table.show_matching(text)
        self.none.setVisible(self.table.order.rowCount() == 0)

    def _order(self, column: str) -> None:
        self.table.sortByColumn(int(column), Qt.SortOrder.AscendingOrder)

    def _ordered(self, column: int) -> None:
        self.order.show_choice(_ORDERS, str(column))


class RecordingStage(StagePage):
    """The stage Recording.

    Parameters
    ----------
    bench : Workbench
        Session, workers, theme.
    """

    stage = Stage.RECORDING

    def __init__(self, bench: Workbench) -> None:
        super().__init__(bench)
        self.facts = FactsCard()
        self.channels = ChannelsCard(bench.theme)
        self.stretches = BadStretchesCard(bench)
        self.map = HeadMap(bench.theme)
        self.spectrum = SpectrumCard(bench)
        self._rows: tuple[ChannelRow, ...] = ()
        self._picked: frozenset[str] = frozenset()
        self.settings = self._make_settings()
        self.picture = self._make_picture()
        table = self.channels.table
        table.picked.connect(self._pick)
        table.refused.connect(self._say_why)
        table.channels.bad_asked.connect(self._mark_bad)
        table.channels.type_asked.connect(self._give_type)
        self.map.picked.connect(self._pick)
        self.follow(self._show_recording, Changed.RECORDING)
        self.follow(self._show_channels, Changed.PLAN, Changed.MARKS)
        self.follow(self._show_view, Changed.VIEW)
        self.follow(self.stretches.show_marks, Changed.RECORDING, Changed.MARKS)
        self.follow(self.stretches.show_selected, Changed.VIEW)
        self.hear(bench.learned_changed, self._show_channels)
        self._show_recording()

    def close(self) -> None:
        """Listen to nobody, and want no spectrum, any more."""
        super().close()
        self.spectrum.set_open(False)

    def show_stage(self) -> None:
        """Take note that the stage is open."""
        super().show_stage()
        self.spectrum.set_open(True)

    def hide_stage(self) -> None:
        """Take note that another stage is open."""
        super().hide_stage()
        self.spectrum.set_open(False)

    def set_theme(self, theme: Theme) -> None:
        """Paint in other colours."""
        self.map.set_theme(theme)
        self.channels.table.set_theme(theme)
        self.spectrum.plot.set_theme(theme)

    # Putting it together

    def _make_settings(self) -> QWidget:
        column = scrolling_column(self.facts, self.channels, self.stretches, name="Settings of the recording")
        inside = self.channels.parentWidget()
        layout = None if inside is None else inside.layout()
        if isinstance(layout, QVBoxLayout):
            # The table takes the height that is left over.
            layout.setStretchFactor(self.channels, 1)
            layout.setStretch(layout.count() - 1, 0)
        stack = QStackedWidget()
        stack.addWidget(EmptyState(OPEN_FIRST))
        stack.addWidget(column)
        return stack

    def _make_picture(self) -> QWidget:
        head = Card("Channels on the head")
        head.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        head.body.addWidget(self.map, 1)
        self.head_note = head.add_note()
        both = QSplitter(Qt.Orientation.Horizontal)
        both.setChildrenCollapsible(False)
        both.addWidget(head)
        both.addWidget(self.spectrum)
        for card in (head, self.spectrum):
            # The place of pictures has a frame already.
            card.setProperty("card", "framed")
        both.setStretchFactor(0, 2)
        both.setStretchFactor(1, 3)
        stack = QStackedWidget()
        stack.addWidget(EmptyState("Channels on the head and the spectrum of the part in view will be here."))
        stack.addWidget(both)
        return stack

    # What is shown

    def _show_recording(self) -> None:
        opened = self.bench.session.recording
        for part in (self.settings, self.picture):
            if isinstance(part, QStackedWidget):
                part.setCurrentIndex(0 if opened is None else 1)
        if opened is not None:
            self.facts.show_facts(opened.facts)
        self._show_channels()
        self._show_view()
        self.spectrum.forget()

    def _show_channels(self) -> None:
        session = self.bench.session
        opened = session.recording
        learned = self.bench.learned
        against = {} if learned is None else learned.against
        rows = channel_rows(opened.facts, session.plan, session.marks, against) if opened is not None else ()
        if rows != self._rows:
            self._rows = rows
            self.facts.show_types(rows)
            self.channels.show_rows(rows)
            self._show_map()
            self.spectrum.show_rows(rows)
        self.spectrum.request()

    def _show_map(self) -> None:
        rows = [row for row in self._rows if row.type is not ChannelType.TRIGGER]
        known = [row for row in rows if row.position_m is not None]
        flat = lay_flat(np.array([row.position_m for row in known], dtype=np.float64).reshape(-1, 3))
        places = {row.name: (float(x), float(y)) for row, (x, y) in zip(known, flat, strict=True)}
        self.map.show_channels(
            [MapChannel(row.name, places.get(row.name), row.is_bad, row.words) for row in rows]
        )
        self.head_note.setText(
            "From above. Dot: good. Crossed square: bad. Ring: picked."
            if known
            else "No position is known; names of the extended 10-20 system give one by themselves."
        )

    def _show_view(self) -> None:
        picked = self.bench.session.view.picked
        if picked != self._picked:
            self._picked = picked
            self.channels.table.show_picked(picked)
            self.map.show_picked(picked)
            self.spectrum.show_picked()
        self.spectrum.request()

    # What is done

    def _pick(self, picked: frozenset[str]) -> None:
        session = self.bench.session
        session.set_view(replace(session.view, picked=picked))

    def _mark_bad(self, names: tuple[str, ...], bad: bool) -> None:
        MarkActs(self.bench).set_bad(frozenset(names), bad=bad)

    def _give_type(self, row: ChannelRow, kind: ChannelType) -> None:
        session = self.bench.session
        session.edit_marks(f"{row.name} records {TYPE_WORDS[kind]}", with_type(session.marks, row, kind))

    def _say_why(self) -> None:
        self.bench.session.say(Message(Level.NOTE, WHY_PLAN))


def _breaks(facts: RecordingFacts) -> str:
    if not facts.boundaries:
        return "none"
    first = clock(facts.boundaries[0] / facts.rate_hz, 1)
    count = len(facts.boundaries)
    return f"at {first}" if count == 1 else f"{count}, first at {first}"


def _size(size_bytes: int) -> str:
    for unit, power in (("GiB", 30), ("MiB", 20), ("KiB", 10)):
        if size_bytes >= 1 << power:
            return f"{number(size_bytes / (1 << power))} {unit}"
    return f"{size_bytes} bytes"
