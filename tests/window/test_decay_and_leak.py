"""Decay and leak in the Pulses stage through real events: the choice, its evidence, undo, and the picture."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
import pytest
from PySide6.QtCore import QPoint, QPointF, Qt
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QAbstractButton, QHBoxLayout, QRadioButton, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.mending.decay_evidence import AbsorptionView
from pulsemend.mending.leak_view import leak_per_rule
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.vocabulary import AcrossPulses, Decay, PulseTimes
from pulsemend.progress import finish
from pulsemend.readers.opening import open_recording
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.window.absorption_plot import AbsorptionPlot
from pulsemend.window.decay_card import NO_PULSE, NONE_FITTED, NOTHING_FITTED, DecayCard
from pulsemend.window.leak_card import LeakCard, uv_words
from pulsemend.window.stages.pulses import PulsesStage
from pulsemend.window.theme import DARK, LIGHT
from pulsemend.window.workbench import Workbench
from support.small_lantern import PLAN, Study, changed, write_study

WAIT_MS = 60_000
SHORT_GAP = changed(PLAN, ("[-2.0, 14.0]", "[-2.0, 6.0]"), ("P3 = [-2.0, 25.0]\n", ""))
"""Decays outlast it in some channels."""

LEFT = Qt.MouseButton.LeftButton
NO_KEYS = Qt.KeyboardModifier.NoModifier


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    """A small recording; it is only read."""
    return write_study(tmp_path_factory.mktemp("decays"))


@dataclass
class Room:
    """A session with its workers and the stage, as the window would hold them."""

    qtbot: QtBot
    session: Session
    bench: Workbench
    page: PulsesStage
    desk: QWidget

    @property
    def plan(self) -> Plan:
        assert self.session.plan is not None
        return self.session.plan

    @property
    def decay(self) -> DecayCard:
        return self.page.decay_card

    @property
    def leak(self) -> LeakCard:
        return self.page.leak_card

    def wait(self, condition: Callable[[], bool]) -> None:
        self.qtbot.waitUntil(condition, timeout=WAIT_MS)

    def wait_calm(self) -> None:
        """Until everything that was asked for is there."""
        self.wait(
            lambda: (
                self.bench.learned is not None
                and not self.bench.provisional
                and not self.bench.jobs.under_way
                and not self.page._soon.isActive()
            )
        )

    def click(self, button: QAbstractButton) -> None:
        QTest.mouseClick(button, LEFT, NO_KEYS, QPoint(8, button.height() // 2))

    def choose(self, name: str) -> None:
        """Click the option of that accessible name."""
        (button,) = [b for b in self.page.settings.findChildren(QRadioButton) if b.accessibleName() == name]
        self.click(button)

    def is_chosen(self, name: str) -> bool:
        (button,) = [b for b in self.page.settings.findChildren(QRadioButton) if b.accessibleName() == name]
        return button.isChecked()

    def evidence(self, of: DecayCard | LeakCard, key: str) -> str:
        choices = of.shape if isinstance(of, DecayCard) else of.across
        return choices._evidence[key].text()

    def type(self, field: QWidget, text: str) -> None:
        field.setFocus()
        QTest.keyClick(field, Qt.Key.Key_A, Qt.KeyboardModifier.ControlModifier)
        QTest.keyClicks(field, text)
        QTest.keyClick(field, Qt.Key.Key_Return)


@pytest.fixture
def make(qtbot: QtBot, study: Study) -> Iterator[Callable[[str], Room]]:
    rooms: list[Room] = []

    def made(text: str) -> Room:
        session = Session()
        bench = Workbench(session, Settings())
        page = PulsesStage(bench)
        desk = QWidget()
        row = QHBoxLayout(desk)
        row.addWidget(page.picture, 1)
        row.addWidget(page.settings)
        desk.resize(1100, 2400)
        qtbot.addWidget(desk)
        page.show_stage()
        source = open_recording(study.recording)
        session.open_recording(study.recording, source.facts)
        source.close()
        session.open_plan(parse_plan(text), None)
        page.picture.choose("all channels (median)")
        desk.show()
        qtbot.waitExposed(desk)
        rooms.append(Room(qtbot, session, bench, page, desk))
        return rooms[-1]

    yield made
    for room in rooms:
        room.page.close()
        room.bench.close()


@pytest.fixture
def room(make: Callable[[str], Room]) -> Room:
    room = make(SHORT_GAP)
    room.wait_calm()
    return room


# Decay


def test_without_a_decay_the_card_says_what_to_do(room: Room) -> None:
    assert room.is_chosen("Decay: none")
    assert room.decay.plot.message == NOTHING_FITTED
    assert room.decay.plot.accessibleDescription() == NOTHING_FITTED
    assert not room.decay.length.isEnabled()
    assert not room.decay.least.isEnabled()
    assert not room.decay.fitted.isVisible()
    assert not room.decay.marked.isVisible()
    left = room.evidence(room.decay, "none")
    assert left.startswith("leaves ")
    assert left.endswith(" \u00b5V")


def test_choosing_a_shape_fits_shows_its_price_and_is_undone(room: Room) -> None:
    before = room.evidence(room.decay, "none")
    room.choose("Decay: one exponential")
    assert room.plan.pulses.decay is Decay.EXPONENTIAL
    assert room.decay.note.text() == "being fitted"
    room.wait_calm()
    learned = room.bench.learned
    assert learned is not None
    decay = learned.estimates.decay
    assert decay is not None
    assert decay.columns.size > 0
    assert room.decay.note.text() == ""
    assert room.decay.fitted.value.text() == f"{decay.columns.size} of 8 channels"
    n_left_alone = sum(int(label.text().split()[0]) for label in room.decay.reasons)
    assert n_left_alone == 8 - decay.columns.size
    for label in room.decay.reasons:
        assert label.text().split()[0] == str(len(label.toolTip().split(", ")))
        assert "decay_least_uv" not in label.text()
    shown = room.decay.plot.shown
    assert shown is not None
    assert shown.n_channels == decay.columns.size
    assert room.decay.marked.isVisible()
    # Both shapes' evidence stays beside them, as long as nothing else changes.
    assert room.evidence(room.decay, "none") == before
    assert room.evidence(room.decay, "exponential").startswith(f"{decay.columns.size} ch., leaves ")
    room.session.undo()
    assert room.plan.pulses.decay.value == "none"
    assert room.is_chosen("Decay: none")
    assert room.decay.plot.message == NOTHING_FITTED


def test_picture_follows_the_decay_before_everything_is_learned(room: Room) -> None:
    canvas = room.page.picture.canvas
    room.page.picture.choose("Pz")
    room.wait_calm()
    assert canvas.view is not None
    assert canvas.view.repaired is not None
    plain = canvas.view.repaired.median_v
    room.choose("Decay: power law")
    room.wait(lambda: canvas.view is not None and canvas.view.provisional)
    first = canvas.view.repaired
    assert first is not None
    room.wait_calm()
    assert not canvas.view.provisional
    final = canvas.view.repaired
    assert final is not None
    learned = room.bench.learned
    assert learned is not None
    assert learned.estimates.decay is not None
    names = [learned.setup.channels[column].name for column in learned.estimates.decay.columns]
    assert "Pz" in names
    behind = (canvas.view.times_s > 0.015) & (canvas.view.times_s < 0.03)
    change = np.abs(final.median_v - plain)[behind].max()
    assert change > 10e-6
    # What came first is nearer to what came last than to the picture without a decay.
    assert np.abs(first.median_v - final.median_v)[behind].max() < 0.5 * change


def test_channel_of_the_picture_is_that_of_the_price(room: Room) -> None:
    room.choose("Decay: one exponential")
    room.wait_calm()
    learned = room.bench.learned
    assert learned is not None
    assert learned.estimates.decay is not None
    decay = learned.estimates.decay
    names = [channel.name for channel in learned.setup.channels]
    one = names[decay.columns[0]]
    room.page.picture.choose(one)
    room.wait(lambda: room.decay.plot.shown is not None and room.decay.plot.shown.channel == one)
    assert one in room.decay.what.text()
    (other,) = [name for name in names if name == "TP8"]
    assert decay.reasons[names.index(other)]
    room.page.picture.choose(other)
    room.wait(lambda: "left alone" in room.decay.what.text())
    shown = room.decay.plot.shown
    assert shown is not None
    assert shown.channel == ""
    assert room.decay.what.text().startswith(f"{other} is left alone: ")


def test_stretch_and_least_size_are_typed_and_stepped(room: Room) -> None:
    room.choose("Decay: one exponential")
    room.type(room.decay.length, "120")
    assert room.plan.pulses.decay_ms == 120.0
    room.decay.length.setFocus()
    for _ in range(3):
        QTest.keyClick(room.decay.length, Qt.Key.Key_Up)
    assert room.plan.pulses.decay_ms == 135.0
    QTest.keyClick(room.decay.length, Qt.Key.Key_Return)
    room.session.undo()
    assert room.plan.pulses.decay_ms == 120.0
    room.type(room.decay.least, "100000")
    assert room.plan.pulses.decay_least_uv == 100_000.0
    room.wait_calm()
    assert room.decay.plot.message == NONE_FITTED
    assert room.decay.fitted.value.text() == "0 of 8 channels"
    assert any("100000 \u00b5V" in label.text() for label in room.decay.reasons)


def test_steps_of_one_row_are_one_entry(room: Room) -> None:
    room.choose("Decay: one exponential")
    room.decay.length.setFocus()
    for _ in range(3):
        QTest.keyClick(room.decay.length, Qt.Key.Key_Up)
    assert room.plan.pulses.decay_ms == 95.0
    room.session.undo()
    assert room.plan.pulses.decay_ms == 80.0
    assert room.plan.pulses.decay is Decay.EXPONENTIAL
    assert room.decay.length.value() == 80.0


def test_where_there_are_no_pulses_the_card_says_so(room: Room) -> None:
    room.choose("Decay: one exponential")
    room.session.edit_plan(
        "none", replace(room.plan, pulses=replace(room.plan.pulses, times=PulseTimes.NONE))
    )
    room.wait_calm()
    assert room.decay.plot.message == NO_PULSE
    assert not room.decay.fitted.isVisible()
    assert room.leak.table.cells == {}
    assert room.evidence(room.leak, "filled").startswith("no pulse")


# Leak


def test_leak_by_rule_is_what_was_measured(room: Room, study: Study) -> None:
    learned = room.bench.learned
    assert learned is not None
    source = open_recording(study.recording)
    found = finish(leak_per_rule(source, learned))
    source.close()
    assert found.n_pulses > 0
    assert {rule for rule, _ in room.leak.table.cells} == {"after2", "delay1"}
    for name, rule in found.rules.items():
        largest, above = room.leak.table.cells[name, AcrossPulses.FILLED]
        assert rule.n_epochs > 0
        assert largest.text() == uv_words(rule.largest_v)
        assert above.text() == f"{rule.n_above} of {rule.n_epochs}"
        assert name in largest.accessibleName()
    assert room.evidence(room.leak, "filled") == f"{found.n_above} of {found.n_epochs} above"
    assert room.evidence(room.leak, "split") == ""


def test_other_way_is_measured_on_request_and_stays_beside_the_choice(room: Room) -> None:
    assert room.leak.other.isVisible()
    room.click(room.leak.other)
    assert room.evidence(room.leak, "split") == "being measured"
    assert not room.leak.other.isEnabled()
    room.wait_calm()
    assert not room.leak.other.isVisible()
    evidence = room.evidence(room.leak, "split")
    assert evidence.endswith(" above")
    assert ("delay1", AcrossPulses.SPLIT) in room.leak.table.cells
    before = {key: cells[0].text() for key, cells in room.leak.table.cells.items()}
    room.choose("Filters run: each stretch alone")
    assert room.plan.filter.across_pulses is AcrossPulses.SPLIT
    room.wait_calm()
    # Nothing else has changed: both are known already.
    assert {key: cells[0].text() for key, cells in room.leak.table.cells.items()} == before
    room.session.undo()
    assert room.plan.filter.across_pulses.value == "filled"
    assert room.is_chosen("Filters run: across the filled gaps")


def test_another_gap_is_measured_anew(room: Room) -> None:
    room.click(room.leak.other)
    room.wait_calm()
    before = room.leak.table.cells["after2", AcrossPulses.FILLED][0].text()
    wider = replace(room.plan.pulses, window_ms=(-2.0, 40.0))
    room.session.edit_plan("gap", replace(room.plan, pulses=wider))
    assert room.evidence(room.leak, "filled") == ""
    room.wait_calm()
    assert room.leak.table.cells["after2", AcrossPulses.FILLED][0].text() != before
    assert ("after2", AcrossPulses.SPLIT) not in room.leak.table.cells
    assert room.leak.other.isVisible()


def test_a_way_chosen_while_it_is_measured_is_measured_all_the_same(room: Room) -> None:
    room.click(room.leak.other)
    room.choose("Filters run: each stretch alone")
    room.wait_calm()
    assert ("delay1", AcrossPulses.SPLIT) in room.leak.table.cells


def test_nothing_is_measured_while_another_stage_is_open(room: Room) -> None:
    room.click(room.leak.other)
    room.page.hide_stage()
    wider = replace(room.plan.pulses, window_ms=(-2.0, 20.0))
    room.session.edit_plan("gap", replace(room.plan, pulses=wider))
    room.wait_calm()
    assert room.leak._jobs == {}
    before = room.leak.table.cells["after2", AcrossPulses.FILLED][0].text()
    room.page.show_stage()
    room.wait_calm()
    assert room.evidence(room.leak, "filled").endswith(" above")
    assert room.leak.table.cells["after2", AcrossPulses.FILLED][0].text() != before


# The plot alone


def view(channel: str = "Cz", marked: tuple[tuple[float, float], ...] = ((0.015, 0.09),)) -> AbsorptionView:
    latencies_s = np.array([0.02, 0.05, 0.1, 0.2])
    share = np.array([0.2, 0.5, 0.9, 1.0])
    return AbsorptionView(channel, 1, latencies_s, share, share - 0.1, share + 0.1, marked)


@pytest.fixture
def plot(qtbot: QtBot) -> AbsorptionPlot:
    plot = AbsorptionPlot(LIGHT)
    plot.resize(320, 200)
    qtbot.addWidget(plot)
    plot.show()
    qtbot.waitExposed(plot)
    return plot


def test_plot_is_read_off_by_keys_and_pointer(plot: AbsorptionPlot) -> None:
    plot.show_view(view())
    assert plot.accessibleDescription() == "Least at 20 ms: 20 % of a response comes back"
    plot.setFocus()
    QTest.keyClick(plot, Qt.Key.Key_Right)
    assert plot.reading() == "20 ms: 20 % (10 to 30)"
    QTest.keyClick(plot, Qt.Key.Key_Right)
    assert plot.accessibleDescription() == "50 ms: 50 % (40 to 60)"
    QTest.keyClick(plot, Qt.Key.Key_End)
    QTest.keyClick(plot, Qt.Key.Key_Right)
    assert plot.reading() == "200 ms: 100 % (90 to 110)"
    QTest.keyClick(plot, Qt.Key.Key_Home)
    assert plot.reading().startswith("20 ms")
    at = QPointF(float(plot._x(103.0)), plot._area.center().y())
    QTest.mouseMove(plot, at.toPoint())
    assert plot.reading().startswith("100 ms: 90 %")


def test_marked_stretch_is_hatched(plot: AbsorptionPlot) -> None:
    def differing(start_ms: float, stop_ms: float) -> int:
        left, right = (round(float(plot._x(ms))) for ms in (start_ms, stop_ms))
        top = round(plot._area.top()) + 2
        image = plot.grab().toImage()
        ground = LIGHT.panel.lower()
        return sum(
            image.pixelColor(x, y).name() not in (ground, "#ffffff", image.pixelColor(0, 0).name())
            for x in range(left, right)
            for y in range(top, top + 10)
        )

    plot.show_view(view(marked=()))
    assert differing(30.0, 80.0) == 0
    plot.show_view(view())
    assert differing(30.0, 80.0) > 100
    assert differing(110.0, 150.0) == 0


def test_plot_takes_another_theme_and_words(plot: AbsorptionPlot) -> None:
    plot.show_view(view())
    light = plot.grab().toImage()
    plot.set_theme(DARK)
    assert plot.grab().toImage() != light
    plot.show_view(None, "Nothing yet.")
    assert plot.reading() == ""
    assert plot.accessibleDescription() == "Nothing yet."


def test_uncommon_shares_stay_within_the_axes(plot: AbsorptionPlot) -> None:
    wild = np.array([-3.0, 0.5, 7.0, 1.0])
    plot.show_view(AbsorptionView("Cz", 1, np.array([0.02, 0.05, 0.1, 0.2]), wild, wild, wild, ((0.0, 5.0),)))
    area = plot._area
    assert area.top() <= float(plot._y(700.0)) <= area.bottom()
    assert area.top() <= float(plot._y(-300.0)) <= area.bottom()
    assert not plot.grab().isNull()
