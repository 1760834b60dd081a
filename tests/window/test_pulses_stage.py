"""The Pulses stage through real events: list, gap, fill, other gaps, and the picture that follows."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path

import pytest
from PySide6.QtCore import QPoint, QPointF, Qt
from PySide6.QtGui import QColor, QWheelEvent
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QAbstractButton, QApplication, QHBoxLayout, QRadioButton, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.mending.pulse_view import PROPOSED_MS, Pick
from pulsemend.model.marks import NO_MARKS, MovedPulse
from pulsemend.model.plan import Plan, Pulses
from pulsemend.model.plan_file import PlanFile, parse_plan
from pulsemend.model.vocabulary import Fill, Format, PulseTimes, Side
from pulsemend.readers.opening import open_recording
from pulsemend.session.found import Selected
from pulsemend.session.messages import Level
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.window.mark_acts import MarkActs
from pulsemend.window.pulse_canvas import EdgeHandle
from pulsemend.window.pulse_picture import PulsePicture
from pulsemend.window.stages.pulses import PulsesStage
from pulsemend.window.theme import DARK
from pulsemend.window.workbench import Workbench
from support.small_lantern import PLAN, Study, write_study

WAIT_MS = 30_000
N_PULSES = 5
LEFT = Qt.MouseButton.LeftButton
NO_KEYS = Qt.KeyboardModifier.NoModifier


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    """A small recording; it is only read."""
    return write_study(tmp_path_factory.mktemp("pulses"))


@dataclass
class Room:
    """A session with its workers and the stage, as the window would hold them."""

    qtbot: QtBot
    session: Session
    bench: Workbench
    page: PulsesStage
    desk: QWidget

    @property
    def picture(self) -> PulsePicture:
        return self.page.picture

    @property
    def plan(self) -> Plan:
        plan = self.session.plan
        assert plan is not None
        return plan

    @property
    def pulses(self) -> Pulses:
        return self.plan.pulses

    def wait(self, condition: Callable[[], bool]) -> None:
        self.qtbot.waitUntil(condition, timeout=WAIT_MS)

    def wait_shown(self) -> None:
        """Until the picture shows the settings of now, provisional or not."""
        self.wait(lambda: self.picture.canvas.view is not None and not self.is_waiting)

    def wait_final(self) -> None:
        """Until everything is learned and all pulses are shown."""
        self.wait(
            lambda: (
                not self.is_waiting
                and self.picture.canvas.view is not None
                and not self.picture.canvas.view.provisional
                and not self.bench.jobs.under_way
            )
        )

    @property
    def is_waiting(self) -> bool:
        shown = self.picture.canvas.shown
        return shown is None or shown.waiting or self.page._soon.isActive()

    def click(self, button: QAbstractButton) -> None:
        QTest.mouseClick(button, LEFT, NO_KEYS, QPoint(8, button.height() // 2))

    def choose(self, name: str) -> None:
        """Click the option of that accessible name."""
        (button,) = [b for b in self.page.settings.findChildren(QRadioButton) if b.accessibleName() == name]
        self.click(button)

    def type(self, field: QWidget, text: str) -> None:
        field.setFocus()
        QTest.keyClick(field, Qt.Key.Key_A, Qt.KeyboardModifier.ControlModifier)
        QTest.keyClicks(field, text)
        QTest.keyClick(field, Qt.Key.Key_Return)

    def drag(self, handle: EdgeHandle, *by_px: int) -> None:
        """Take a handle, move it by so many pixels in all at each step, and let it go."""
        at = QPoint(handle.width() // 2, handle.height() // 2)
        start = handle.mapTo(self.picture.canvas, at)
        QTest.mousePress(handle, LEFT, NO_KEYS, at)
        for by in by_px:
            QTest.mouseMove(handle, handle.mapFrom(self.picture.canvas, start + QPoint(by, 0)))
            QApplication.processEvents()
        QTest.mouseRelease(handle, LEFT, NO_KEYS, handle.mapFrom(self.picture.canvas, start + QPoint(by, 0)))


def build(qtbot: QtBot, study: Study, plan: PlanFile | None, *, recording: bool = True) -> Room:
    session = Session()
    bench = Workbench(session, Settings())
    page = PulsesStage(bench)
    desk = QWidget()
    row = QHBoxLayout(desk)
    row.addWidget(page.picture, 1)
    row.addWidget(page.settings)
    desk.resize(1100, 600)
    qtbot.addWidget(desk)
    page.show_stage()
    if recording:
        source = open_recording(study.recording)
        session.open_recording(study.recording, source.facts)
        source.close()
    if plan is not None:
        session.open_plan(plan, None)
    assert page.picture.pick is Pick.WORST
    page.picture.choose("all channels (median)")
    desk.show()
    qtbot.waitExposed(desk)
    return Room(qtbot, session, bench, page, desk)


@pytest.fixture
def make(qtbot: QtBot, study: Study) -> Iterator[Callable[..., Room]]:
    rooms: list[Room] = []

    def made(plan: PlanFile | None, *, recording: bool = True) -> Room:
        rooms.append(build(qtbot, study, plan, recording=recording))
        return rooms[-1]

    yield made
    for room in rooms:
        room.page.close()
        room.bench.close()


@pytest.fixture
def room(make: Callable[..., Room]) -> Room:
    room = make(parse_plan(PLAN))
    room.wait_final()
    return room


def undecided() -> PlanFile:
    """A plan as somebody has it who has not decided about the gap."""
    read = parse_plan(PLAN)
    return replace(read, plan=replace(read.plan, pulses=replace(read.plan.pulses, window_ms=None)))


# The picture


def test_all_pulses_are_shown_repaired(room: Room) -> None:
    view = room.picture.canvas.view
    assert view is not None
    assert (view.n_shown, view.n_pulses) == (N_PULSES, N_PULSES)
    assert view.repaired is not None
    assert room.picture.canvas.state_words == ""
    assert "5 pulses" in room.picture.info.toolTip()


def test_drag_of_an_edge_is_one_entry_and_everything_follows(room: Room) -> None:
    canvas = room.picture.canvas
    per_ms = canvas.x_of(1.0) - canvas.x_of(0.0)
    room.drag(canvas.stop, round(2 * per_ms), round(4 * per_ms), round(6 * per_ms))
    window_ms = room.pulses.window_ms
    assert window_ms is not None
    assert window_ms[0] == -2.0
    assert window_ms[1] == pytest.approx(20.0, abs=0.5)
    # On a sample of 0.2 ms.
    assert window_ms[1] * 5.0 == pytest.approx(round(window_ms[1] * 5.0), abs=1e-9)
    assert room.page.gap_card.gap_fields.stop.value() == pytest.approx(window_ms[1])
    assert canvas.shown is not None
    assert canvas.shown.window_ms == window_ms
    room.wait_final()
    view = canvas.view
    assert view is not None
    assert view.windows_s[0][1] * 1000.0 == pytest.approx(window_ms[1])
    room.drag(canvas.start, -round(3 * per_ms))
    assert room.pulses.window_ms is not None
    assert room.pulses.window_ms[0] < -4.0
    room.session.undo()
    assert room.pulses.window_ms == window_ms
    room.session.undo()
    assert room.pulses.window_ms == (-2.0, 14.0)
    assert room.session.next_undo == ""


def test_edges_never_cross(room: Room) -> None:
    canvas = room.picture.canvas
    room.drag(canvas.stop, -round(canvas.x_of(60.0) - canvas.x_of(0.0)))
    assert near(room.pulses.window_ms, -2.0, -1.8)
    room.drag(canvas.start, round(canvas.x_of(60.0) - canvas.x_of(0.0)))
    assert near(room.pulses.window_ms, -2.0, -1.8)


def test_keys_move_an_edge_by_a_sample_or_a_millisecond(room: Room) -> None:
    handle = room.picture.canvas.stop
    handle.setFocus()
    assert handle.hasFocus()
    QTest.keyPress(handle, Qt.Key.Key_Right)
    QTest.keyPress(handle, Qt.Key.Key_Right)
    assert near(room.pulses.window_ms, -2.0, 14.4)
    QTest.keyPress(handle, Qt.Key.Key_Left, Qt.KeyboardModifier.ShiftModifier)
    QTest.keyRelease(handle, Qt.Key.Key_Left, Qt.KeyboardModifier.ShiftModifier)
    assert near(room.pulses.window_ms, -2.0, 13.4)
    # A held key is one entry; the next press is another.
    QTest.keyClick(handle, Qt.Key.Key_Left)
    assert near(room.pulses.window_ms, -2.0, 13.2)
    room.session.undo()
    assert near(room.pulses.window_ms, -2.0, 13.4)
    room.session.undo()
    assert room.pulses.window_ms == (-2.0, 14.0)


def test_numbers_move_the_edges(room: Room) -> None:
    fields = room.page.gap_card.gap_fields
    room.type(fields.start, "-4")
    room.type(fields.stop, "17.2")
    assert room.pulses.window_ms == (-4.0, 17.2)
    canvas = room.picture.canvas
    assert canvas.shown is not None
    assert canvas.shown.window_ms == (-4.0, 17.2)
    line = canvas.stop.mapTo(canvas, QPoint(2, 0)).x()
    assert line == pytest.approx(canvas.x_of(17.2), abs=1.0)
    QTest.keyClick(fields.stop, Qt.Key.Key_Up)
    assert near(room.pulses.window_ms, -4.0, 17.4)


def test_earlier_curves_are_marked_until_those_of_now_are_there(room: Room) -> None:
    room.choose("Fill: cubic")
    assert room.picture.canvas.state_words == "earlier settings, being computed"
    room.wait_shown()
    assert room.picture.canvas.state_words in ("provisional", "")
    room.wait_final()
    assert room.picture.canvas.state_words == ""


def test_provisional_picture_comes_before_anything_is_learned(
    room: Room, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(room.bench, "_learn", lambda: None)
    room.bench._settle.stop()
    room.bench._settle.timeout.disconnect()
    room.choose("Fill: covariance")
    room.wait_shown()
    view = room.picture.canvas.view
    assert view is not None
    assert view.provisional
    assert room.picture.canvas.state_words == "provisional"
    assert room.bench.provisional


def test_result_of_an_earlier_edit_is_never_shown(room: Room) -> None:
    seen: list[tuple[float, float]] = []
    show = room.picture.show_view

    def watch(view: object) -> None:
        show(view)  # type: ignore[arg-type]
        shown = room.picture.canvas.view
        assert shown is not None
        assert room.pulses.window_ms is not None
        seen.append((shown.windows_s[0][1] * 1000.0, room.pulses.window_ms[1]))

    room.picture.show_view = watch  # type: ignore[method-assign]
    field = room.page.gap_card.gap_fields.stop
    for stop_ms in (15.0, 16.0, 17.0, 18.0, 19.0):
        room.type(field, str(stop_ms))
        room.qtbot.wait(20)
    room.wait_final()
    assert seen
    assert all(of == pytest.approx(wanted) for of, wanted in seen)
    assert seen[-1][0] == pytest.approx(19.0)


def test_channel_chosen_by_keys_is_shown(room: Room) -> None:
    chooser = room.picture.chooser
    chooser.setFocus()
    QTest.keyClick(chooser, Qt.Key.Key_Up)
    assert room.picture.pick is Pick.WORST
    room.wait(lambda: _request_pick(room) is Pick.WORST)
    assert "step left at the gap" in room.picture.info.toolTip()
    assert "largest step" in chooser.toolTip()
    QTest.keyClick(chooser, Qt.Key.Key_Down)
    assert chooser.currentText() == "all channels (median)"
    QTest.keyClick(chooser, Qt.Key.Key_Down)
    room.wait(lambda: _channel(room) == "F3")


def test_what_the_gap_leaves_in_the_worst_channel_is_told_beside_it(room: Room) -> None:
    said = room.page.gap_card.left
    room.wait(lambda: said.isVisibleTo(room.page.gap_card))
    room.picture.choose("the worst channel")
    room.wait(lambda: _request_pick(room) is Pick.WORST)
    room.wait_final()
    view = room.picture.canvas.view
    assert view is not None
    assert view.leftover_v is not None
    assert view.leftover_v > 20e-6
    step = f"{view.channel}: {view.leftover_v * 1e6:.0f} \u00b5V step left at the gap's end"
    assert said.text() == f"{step}: decay outlasts the gap"
    # 40 ms outlast the decay.
    room.session.edit_plan("Gap", replace(room.plan, pulses=replace(room.pulses, window_ms=(-2.0, 40.0))))
    room.wait(lambda: not said.isVisibleTo(room.page.gap_card))
    room.wait_final()
    view = room.picture.canvas.view
    assert view is not None
    assert view.leftover_v is not None
    assert view.leftover_v < 20e-6


def test_drag_with_a_channel_that_has_an_exception_changes_that(room: Room) -> None:
    room.picture.choose("P3")
    canvas = room.picture.canvas
    assert canvas.shown is not None
    assert canvas.shown.window_ms == (-2.0, 25.0)
    room.wait_final()
    handle = canvas.stop
    handle.setFocus()
    QTest.keyClick(handle, Qt.Key.Key_Right)
    assert near(room.pulses.channels["P3"], -2.0, 25.2)
    assert room.pulses.window_ms == (-2.0, 14.0)


def test_worst_channel_does_not_change_under_the_hand(room: Room) -> None:
    room.picture.choose("the worst channel")
    room.wait(lambda: _request_pick(room) is Pick.WORST)
    worst = _channel(room)
    handle = room.picture.canvas.stop
    handle.setFocus()
    QTest.keyPress(handle, Qt.Key.Key_Right)
    room.wait_shown()
    assert _channel(room) == worst
    assert _request_pick(room) is Pick.ONE
    QTest.keyRelease(handle, Qt.Key.Key_Right)
    room.wait(lambda: _request_pick(room) is Pick.WORST)


def test_wheel_with_ctrl_zooms_and_without_it_does_not(room: Room) -> None:
    canvas = room.picture.canvas
    whole_ms, whole_uv = canvas.span_ms, canvas.range_uv
    at = QPointF(canvas.x_of(14.0), canvas.height() / 2)
    _turn(canvas, at, Qt.KeyboardModifier.NoModifier)
    assert canvas.span_ms == whole_ms
    _turn(canvas, at, Qt.KeyboardModifier.ControlModifier)
    assert canvas.span_ms[1] - canvas.span_ms[0] == pytest.approx(200.0 / 1.4)
    assert canvas.x_of(14.0) == pytest.approx(at.x())
    _turn(canvas, at, Qt.KeyboardModifier.ControlModifier | Qt.KeyboardModifier.ShiftModifier)
    low, high = canvas.range_uv
    assert canvas.span_ms[1] - canvas.span_ms[0] == pytest.approx(200.0 / 1.4)
    assert high - low < whole_uv[1] - whole_uv[0]


def test_buttons_and_keys_zoom_and_wider_time_is_read(room: Room) -> None:
    canvas = room.picture.canvas
    buttons = {b.accessibleName(): b for b in room.picture.findChildren(QAbstractButton)}
    room.click(buttons["Show more time"])
    assert near(canvas.span_ms, -112.0, 168.0)
    room.wait(lambda: canvas.view is not None and canvas.view.times_s[-1] * 1000.0 > 167.9)
    room.click(buttons["Show less time"])
    assert near(canvas.span_ms, -80.0, 120.0)
    canvas.setFocus()
    QTest.keyClick(canvas, Qt.Key.Key_Right)
    assert near(canvas.span_ms, -60.0, 140.0)
    before = canvas.range_uv
    QTest.keyClick(canvas, Qt.Key.Key_Up)
    assert canvas.range_uv[1] - canvas.range_uv[0] < before[1] - before[0]
    room.click(buttons["Show less voltage"])
    room.click(buttons["Show more voltage"])
    room.click(buttons["Show the usual span and voltage again"])
    assert canvas.span_ms == (-80.0, 120.0)


def test_handle_out_of_view_is_hidden(room: Room) -> None:
    canvas = room.picture.canvas
    canvas.setFocus()
    for _ in range(5):
        QTest.keyClick(canvas, Qt.Key.Key_Right)
    assert canvas.start.isHidden()
    assert canvas.stop.isHidden()


def test_theme_changes_the_paint(room: Room) -> None:
    canvas = room.picture.canvas
    at = QPoint(round(canvas.x_of(6.0)), round(canvas.area.top()) + 60)
    light = canvas.grab().toImage().pixelColor(at)
    room.page.set_theme(DARK)
    dark = canvas.grab().toImage().pixelColor(at)
    assert light != dark
    assert QColor(DARK.attention).name() in _colors(canvas.stop)


# Where the pulses are


def test_counts_and_latency(room: Room) -> None:
    card = room.page.list_card
    assert card.known.value.text() == str(N_PULSES)
    assert card.aligned.value.text() == str(N_PULSES - 1)
    assert card.marked_only.value.text() == "1"
    assert card.lead.text() == "Marker leads artifact by 1.00 ms (median), spread 0.10 ms (middle half)."


def test_click_and_return_bring_a_pulse_into_view(room: Room) -> None:
    room.session.set_view(replace(room.session.view, start_s=0.0, width_s=4.0))
    table = room.page.list_card.table
    row = room.page.list_card.model.rows[2]
    rect = table.visualRect(table.model().index(2, 0))
    QTest.mouseClick(table.viewport(), LEFT, NO_KEYS, rect.center())
    assert room.session.selected == Selected(pulse=row.onset)
    assert room.session.view.start_s + 2.0 == pytest.approx(row.onset / 5000.0)
    table.setFocus()
    QTest.keyClick(table, Qt.Key.Key_Down)
    QTest.keyClick(table, Qt.Key.Key_Return)
    row = room.page.list_card.model.rows[3]
    assert room.session.selected == Selected(pulse=row.onset)
    assert room.session.view.start_s + 2.0 == pytest.approx(row.onset / 5000.0)


def test_list_follows_the_selection(room: Room) -> None:
    row = room.page.list_card.model.rows[1]
    room.session.select(Selected(pulse=row.onset))
    assert room.page.list_card.current == row


def test_pulse_is_added_at_the_selected_time(room: Room) -> None:
    room.session.select(Selected(stretch=(100_000, 101_000)))
    assert room.page.list_card.new_s.value() == pytest.approx(20.0)
    room.click(room.page.list_card.add_button)
    assert room.session.marks.pulses_added == (100_000,)
    room.wait_final()
    assert room.page.list_card.by_hand.value.text() == "1 added"
    view = room.picture.canvas.view
    assert view is not None
    assert view.n_pulses == N_PULSES + 1
    room.session.undo()
    assert room.session.marks == NO_MARKS


def test_a_pulse_is_not_added_beside_another(room: Room) -> None:
    card = room.page.list_card
    onset = card.model.rows[2].onset
    acts = MarkActs(room.bench)
    for sample in (onset, onset - 9, onset + 9):
        room.session.select(Selected(stretch=(sample, sample + 100)))
        room.click(card.add_button)
        acts.add_pulse(sample)
        assert room.session.marks == NO_MARKS
        assert room.session.messages[-1].level is Level.ATTENTION
        assert f"there is one at {onset / 5000.0:.4f} s already" in room.session.messages[-1].text
    assert room.session.next_undo == ""
    # 10 samples are 2 ms: far enough.
    acts.add_pulse(onset + 10)
    assert room.session.marks.pulses_added == (onset + 10,)
    acts.add_pulse(onset + 11)
    assert room.session.marks.pulses_added == (onset + 10,)


def test_delete_in_the_list_removes_the_pulse(room: Room) -> None:
    card = room.page.list_card
    row = card.model.rows[1]
    card.table.setFocus()
    card.table.setCurrentIndex(card.model.index(1, 0))
    QTest.keyClick(card.table, Qt.Key.Key_Delete)
    assert row.marked is not None
    assert room.session.marks.pulses_removed == (round(row.marked),)
    undo = room.session.next_undo
    # It stays in the list as removed; once more changes nothing.
    QTest.keyClick(card.table, Qt.Key.Key_Delete)
    assert room.session.next_undo == undo
    room.session.undo()
    assert room.session.marks == NO_MARKS


def test_pulse_is_moved_removed_and_given_back(room: Room) -> None:
    card = room.page.list_card
    row = card.model.rows[0]
    assert row.marked is not None
    card.table.setCurrentIndex(card.model.index(0, 0))
    room.type(card.chosen.after_marker, "5")
    to = round(row.marked) + 25
    assert room.session.marks.pulses_moved == (MovedPulse(round(row.marked), to),)
    assert card.current is not None
    assert card.current.onset == to
    room.click(card.chosen.back)
    assert room.session.marks == NO_MARKS
    room.click(card.chosen.remove)
    assert room.session.marks.pulses_removed == (round(row.marked),)
    assert card.known.value.text() == str(N_PULSES - 1)
    room.session.undo()
    room.session.undo()
    room.session.undo()
    assert room.session.marks == NO_MARKS
    assert room.session.next_undo == ""


def test_added_pulse_is_moved_by_its_sample_number(room: Room) -> None:
    card = room.page.list_card
    room.session.select(Selected(stretch=(100_000, 101_000)))
    room.click(card.add_button)
    assert card.current is not None
    assert card.current.onset == 100_000
    room.type(card.chosen.sample, "100123")
    assert room.session.marks.pulses_added == (100_123,)
    assert card.current.onset == 100_123
    room.click(card.chosen.remove)
    assert room.session.marks == NO_MARKS


def test_pulses_that_nobody_marked_are_offered(make: Callable[..., Room]) -> None:
    text = PLAN.replace('[markers.pulse]\nrole = "pulse"', '[markers.nobody]\nrole = "pulse"')
    room = make(parse_plan(text))
    card = room.page.list_card
    room.wait(card.add_all.isVisible)
    assert "No pulse is known" in room.picture.message.text()
    # Four of the five markers have an artifact, and one artifact has no marker.
    assert "5 pulse-like events" in card.unmarked.text()
    room.click(card.add_all)
    assert len(room.session.marks.pulses_added) == 5
    room.wait_final()
    assert not card.add_all.isVisible()
    assert room.picture.canvas.isVisible()


# Gap, fill, other gaps


def test_first_drag_decides_an_undecided_gap(make: Callable[..., Room]) -> None:
    room = make(undecided())
    room.wait_shown()
    canvas = room.picture.canvas
    assert canvas.view is not None
    assert canvas.view.repaired is None
    assert canvas.state_words == "gap proposed, not decided yet"
    assert room.page.gap_card.note.text() == "proposed, not decided yet"
    assert canvas.shown is not None
    assert canvas.shown.window_ms == PROPOSED_MS
    assert room.page.list_card.aligned.value.text() == str(N_PULSES - 1)
    canvas.stop.setFocus()
    QTest.keyClick(canvas.stop, Qt.Key.Key_Right)
    assert near(room.pulses.window_ms, PROPOSED_MS[0], PROPOSED_MS[1] + 0.2)
    room.wait_final()
    assert canvas.view.repaired is not None
    assert canvas.state_words == ""
    room.session.undo()
    assert room.session.plan is not None
    assert room.pulses.window_ms is None
    assert canvas.state_words == "gap proposed, not decided yet"


def test_pulses_are_shown_while_other_parts_of_the_plan_are_open(make: Callable[..., Room]) -> None:
    text = PLAN.replace('[markers."arrow left"]\nrole = "cue"', '[markers."arrow left"]\nrole = "undecided"')
    assert text != PLAN
    room = make(parse_plan(text))
    room.wait(lambda: bool(room.bench.problem))
    room.wait_shown()
    view = room.picture.canvas.view
    assert view is not None
    assert view.repaired is not None
    assert (view.n_shown, view.n_pulses) == (N_PULSES, N_PULSES)
    assert room.picture.canvas.state_words == "provisional"
    assert room.page.list_card.aligned.value.text() == str(N_PULSES - 1)
    assert "arrow left" in room.page.effect_card.note.text()


def test_proposed_gap_can_be_taken(make: Callable[..., Room]) -> None:
    room = make(undecided())
    room.click(room.page.gap_card.propose)
    assert room.pulses.window_ms == PROPOSED_MS
    assert not room.page.gap_card.propose.isVisible()


@pytest.mark.parametrize("fill", [fill for fill in Fill if fill not in (Fill.LINE, Fill.LEAVE)])
def test_fill_is_chosen(room: Room, fill: Fill) -> None:
    room.choose(f"Fill: {fill.value}")
    assert room.pulses.fill is fill
    assert room.session.next_undo == f"Fill: {fill.value}"
    room.wait_final()
    assert room.page.fill_card.meaning.text()


def test_gaps_are_left_empty_only_without_fif(room: Room) -> None:
    card = room.page.fill_card
    room.choose("Fill: leave empty")
    assert str(room.pulses.fill) == "line"
    assert "FIF" in card.meaning.text()
    assert card.without_fif.isVisible()
    room.click(card.without_fif)
    assert str(room.pulses.fill) == "leave"
    assert Format.FIF not in room.plan.export.formats
    assert not card.without_fif.isVisible()
    assert "FIF" in card.meaning.text()
    assert not card.flank.isEnabled()
    room.session.undo()
    assert str(room.pulses.fill) == "line"
    assert Format.FIF in room.plan.export.formats


def test_side_and_flank_are_chosen(room: Room) -> None:
    card = room.page.fill_card
    assert card.flank.text() == "usual: one sample"
    room.choose("Flanks a fill learns from: only the flank before")
    assert room.pulses.side is Side.BEFORE
    room.type(card.flank, "12")
    assert room.pulses.flank_ms == 12.0
    room.wait_final()
    view = room.picture.canvas.view
    assert view is not None
    assert view.flanks == (60, 0)
    room.type(card.flank, "0")
    assert room.pulses.flank_ms is None


def test_exceptions_are_added_edited_moved_and_removed(room: Room) -> None:
    card = room.page.gap_card
    assert not card.add_picked.isEnabled()
    room.session.set_view(replace(room.session.view, picked=frozenset({"F3", "Pz"})))
    assert card.add_picked.text() == "Add F3, Pz"
    room.click(card.add_picked)
    assert room.pulses.channels == {"P3": (-2.0, 25.0), "F3": (-2.0, 14.0), "Pz": (-2.0, 14.0)}
    assert card.list.currentItem().text() == "F3: -2 to 14 ms, in every recording"
    room.type(card.own.stop, "30")
    assert room.pulses.channels["F3"] == (-2.0, 30.0)
    room.choose("Where the exception holds: only in this recording")
    assert "F3" not in room.pulses.channels
    assert room.session.marks.gaps_ms == {"F3": (-2.0, 30.0)}
    assert card.list.currentItem().text() == "F3: -2 to 30 ms, only in this recording"
    room.click(card.remove)
    assert room.session.marks.gaps_ms == {}


def test_other_gaps_are_added_edited_and_removed(room: Room) -> None:
    card = room.page.other_card
    room.type(card.new.start, "300")
    room.type(card.new.stop, "305")
    room.click(card.add_button)
    assert [gap.window_ms for gap in room.pulses.also] == [(248.0, 254.0), (300.0, 305.0)]
    room.type(card.rows[1].stop, "310")
    assert room.pulses.also[1].window_ms == (300.0, 310.0)
    buttons = {b.accessibleName(): b for b in card.findChildren(QAbstractButton)}
    room.click(buttons["Remove further gap 1"])
    assert [gap.window_ms for gap in room.pulses.also] == [(300.0, 310.0)]
    assert len(card.rows) == 1
    assert card.rows[0].window_ms == (300.0, 310.0)


def test_effect_is_told(room: Room) -> None:
    card = room.page.effect_card
    room.wait(card.gap.isVisible)
    # -2 to 14 ms at 5 kHz, both ends included.
    assert card.gap.value.text() == "81 samples, 16.2 ms"
    assert card.n_gaps.value.text() == str(2 * N_PULSES)
    assert set(card._lines) == {"after2", "delay1"}
    assert card._lines["after2"].value.text().endswith("%")


def test_refused_edit_is_said_and_the_field_shows_the_old_value(room: Room) -> None:
    room.page._edits.pulses("Gap", replace(room.pulses, window_ms=(5.0, -5.0)))
    assert room.pulses.window_ms == (-2.0, 14.0)
    assert "window_ms" in room.session.messages[-1].text


# Empty states, and being let go


def test_says_what_to_do_without_recording_plan_or_pulses(make: Callable[..., Room]) -> None:
    room = make(None, recording=False)
    assert room.picture.message.text().startswith("Open a recording")
    assert not room.page.gap_card.isEnabled()
    room = make(None)
    assert room.picture.message.text().startswith("Open a plan")
    room = make(parse_plan(PLAN))
    room.wait_final()
    room.choose("Where the pulses are: there are no pulses")
    assert room.pulses.times is PulseTimes.NONE
    assert "there are no pulses" in room.picture.message.text()
    room.choose("Where the pulses are: at their markers")
    room.wait_final()
    assert room.picture.canvas.isVisible()


def test_nothing_is_computed_while_another_stage_is_open(room: Room) -> None:
    room.page.hide_stage()
    before = room.picture.canvas.view
    room.session.edit_plan("fill", replace(room.plan, pulses=replace(room.pulses, fill=Fill.CUBIC)))
    room.wait(lambda: not room.bench.provisional)
    room.wait(lambda: not room.bench.jobs.under_way)
    assert room.picture.canvas.view is before
    room.page.show_stage()
    room.wait_final()
    assert room.picture.canvas.view is not before


def test_every_control_has_a_name(room: Room) -> None:
    for top in (room.page.settings, room.picture):
        for widget in top.findChildren(QWidget):
            if widget.focusPolicy() & Qt.FocusPolicy.TabFocus and not widget.objectName().startswith("qt_"):
                text = widget.text() if isinstance(widget, QAbstractButton) else ""
                assert widget.accessibleName() or text, widget
    assert {"\u2212", "+"}.isdisjoint(
        b.accessibleName() or b.text() for b in room.picture.findChildren(QAbstractButton)
    )


def test_closed_stage_listens_to_nobody(room: Room) -> None:
    observers = room.session._observers._callbacks
    with_page = sum(map(len, observers.values()))
    room.page.close()
    # Plan, marks, recording and view.
    assert sum(map(len, observers.values())) == with_page - 4
    before = room.picture.canvas.shown
    room.session.edit_plan("fill", replace(room.plan, pulses=replace(room.pulses, fill=Fill.CUBIC)))
    room.wait(lambda: not room.bench.provisional)
    assert room.picture.canvas.shown is before
    assert not room.page._soon.isActive()


def test_files_of_the_recording_are_not_touched(room: Room, study: Study) -> None:
    room.wait_final()
    assert not (Path(study.recording).parent / "marks").exists()


def near(window_ms: tuple[float, float] | None, start_ms: float, stop_ms: float) -> bool:
    return window_ms is not None and window_ms == pytest.approx((start_ms, stop_ms))


def _request_pick(room: Room) -> Pick | None:
    view = room.picture.canvas.view
    return None if view is None else view.request.pick


def _channel(room: Room) -> str:
    view = room.picture.canvas.view
    return "" if view is None else view.channel


def _turn(canvas: QWidget, at: QPointF, held: Qt.KeyboardModifier) -> None:
    event = QWheelEvent(
        at,
        canvas.mapToGlobal(at),
        QPoint(),
        QPoint(0, 120),
        Qt.MouseButton.NoButton,
        held,
        Qt.ScrollPhase.NoScrollPhase,
        False,
    )
    QApplication.sendEvent(canvas, event)


def _colors(widget: QWidget) -> set[str]:
    image = widget.grab().toImage()
    return {image.pixelColor(x, y).name() for x in range(image.width()) for y in range(image.height())}
