"""Suggested gaps, offered recharges and pulses by the signal, through real events in the Pulses stage."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import pytest
from PySide6.QtCore import QPoint, Qt
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QAbstractButton, QHBoxLayout, QPushButton, QRadioButton, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.mending.gap_suggestion import ChannelEnd
from pulsemend.mending.pulse_list import with_removed
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import OtherGap, Pulses
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.vocabulary import PulseState, PulseTimes
from pulsemend.readers.opening import open_recording
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.window.stages.pulses import PulsesStage
from pulsemend.window.workbench import Workbench
from support.small_lantern import PLAN, Study, write_study

WAIT_MS = 30_000


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    """Five pulses are in the signal, one of them without a marker; one marker has none."""
    return write_study(tmp_path_factory.mktemp("suggested"))


class Room:
    """The stage with its workers, the plan without further gaps and exceptions."""

    def __init__(self, qtbot: QtBot, study: Study) -> None:
        self._qtbot = qtbot
        self.session = Session()
        self.bench = Workbench(self.session, Settings())
        self.page = PulsesStage(self.bench)
        self.desk = QWidget()
        row = QHBoxLayout(self.desk)
        row.addWidget(self.page.picture, 1)
        row.addWidget(self.page.settings)
        self.desk.resize(1100, 600)
        qtbot.addWidget(self.desk)
        self.page.show_stage()
        source = open_recording(study.recording)
        self.session.open_recording(study.recording, source.facts)
        source.close()
        read = parse_plan(PLAN)
        pulses = replace(read.plan.pulses, also=(), channels={}, times=PulseTimes.BOTH)
        self.session.open_plan(replace(read, plan=replace(read.plan, pulses=pulses)), None)
        self.desk.show()
        qtbot.waitExposed(self.desk)
        self.rest()

    @property
    def pulses(self) -> Pulses:
        plan = self.session.plan
        assert plan is not None
        return plan.pulses

    def rest(self) -> None:
        """Wait until everything is learned and nobody works."""
        self._qtbot.waitUntil(
            lambda: (
                not self.bench.provisional
                and not self.bench.jobs.under_way
                and not self.page._soon.isActive()
            ),
            timeout=WAIT_MS,
        )

    def click(self, button: QAbstractButton) -> None:
        QTest.mouseClick(
            button, Qt.MouseButton.LeftButton, Qt.KeyboardModifier.NoModifier, QPoint(8, button.height() // 2)
        )

    def choose_times(self, text: str) -> None:
        name = f"Where the pulses are: {text}"
        (button,) = [b for b in self.page.settings.findChildren(QRadioButton) if b.accessibleName() == name]
        self.click(button)


@pytest.fixture
def room(qtbot: QtBot, study: Study) -> Iterator[Room]:
    made = Room(qtbot, study)
    yield made
    made.page.close()
    made.bench.close()


def test_the_suggested_gap_is_taken_and_taken_back(room: Room) -> None:
    shown = room.page.suggested
    assert shown.isVisible()
    assert "The signal suggests -2 to" in shown.text.text()
    suggested_ms = room.page._suggestion.window_ms
    assert suggested_ms != room.pulses.window_ms
    room.click(shown.take)
    assert room.pulses.window_ms == suggested_ms
    assert not shown.take.isVisible()
    room.session.undo()
    assert room.pulses.window_ms == (-2.0, 14.0)
    assert shown.take.isVisible()


def test_channels_that_need_it_get_longer_gaps(room: Room) -> None:
    shown = room.page.suggested
    # Of five pulses in eight channels none stands out enough.
    longer = {"P3": (-2.0, 31.5), "O1": (-2.0, 24.0)}
    ends = (ChannelEnd("P3", 31.5, "clipped"), *room.page._suggestion.ends[1:])
    suggestion = replace(room.page._suggestion, exceptions=longer, ends=ends)
    room.page._take_suggestion(suggestion, room.page._suggestion_of)
    assert shown.longer.isVisible()
    room.click(shown.longer)
    assert room.pulses.channels == longer
    assert not shown.longer.isVisible()
    room.session.undo()
    assert room.pulses.channels == {}
    room.page.picture.choose("P3")
    assert shown.channel.text() == "P3: until 31.5 ms (clipped)."


def test_the_recharge_is_offered_until_it_is_a_gap(room: Room) -> None:
    offered = room.page.offered
    assert offered.isVisible()
    (add,) = [one for one in offered.findChildren(QPushButton) if one.isVisible()]
    room.click(add)
    (also,) = room.pulses.also
    assert isinstance(also, OtherGap)
    assert also.window_ms[0] < 250.0 < also.window_ms[1]
    room.rest()
    assert not offered.isVisible()
    room.session.undo()
    assert room.pulses.also == ()
    room.rest()
    assert offered.isVisible()


def test_sources_of_pulses_are_chosen_and_told_apart(room: Room) -> None:
    card = room.page.list_card
    assert card.found_only.value.text() == "1"
    assert card.marked_only.value.text() == "1"
    assert "1 pulse in the signal has no marker" in card.told.text()
    room.choose_times("at their markers")
    room.rest()
    assert not card.found_only.isVisible()
    room.choose_times("where the signal shows them")
    assert room.pulses.times is PulseTimes.SIGNAL
    room.rest()
    assert (card.known.value.text(), card.found_only.value.text()) == ("5", "1")
    assert "counts for nothing" in card.told.text()
    assert len(card.model.rows) == 6
    index = card.model.index(0, 2)
    assert float(card.model.data(index).split()[0]) > 100.0
    assert "spike" in card.model.data(index, Qt.ItemDataRole.ToolTipRole)


def test_a_found_pulse_is_refused_and_taken_back(room: Room) -> None:
    card = room.page.list_card
    (row,) = [row for row in card.model.rows if row.state is PulseState.FOUND]
    room.session.edit_marks("Pulse removed", with_removed(room.session.marks, row))
    room.rest()
    assert card.known.value.text() == "5"
    assert not card.found_only.isVisible()
    place = next(place for place, one in enumerate(card.model.rows) if one.is_removed)
    card.table.setCurrentIndex(card.model.index(place, 0))
    room.click(card.chosen.back)
    assert room.session.marks == NO_MARKS
    room.rest()
    assert card.found_only.value.text() == "1"
