"""The traces under a user's hands: real keys, clicks, drags and wheels, and what is told and shown."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from PySide6.QtCore import QEvent, QPoint, QPointF, Qt
from PySide6.QtGui import QColor, QHelpEvent, QImage, QNativeGestureEvent, QPointingDevice
from PySide6.QtTest import QSignalSpy, QTest
from PySide6.QtWidgets import QApplication, QToolTip, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.session.view import Shown, View
from pulsemend.window.ribbon import Ribbon
from pulsemend.window.theme import DARK, LIGHT
from pulsemend.window.traces.geometry import HEADER
from pulsemend.window.traces.model import Bands, Measure, Overlays, Reading
from pulsemend.window.traces.plot import Hand
from pulsemend.window.traces.source import Detail, RepairedStretch, TraceSource
from pulsemend.window.traces.widget import TracesWidget
from support.hands import move, pixels, wheel
from support.trace_cases import (
    DURATION_S,
    PULSES_S,
    RATE_HZ,
    Model,
    names_of,
    overlays,
    pyramid_of,
    recording,
)

Key, Mod, Button = Qt.Key, Qt.KeyboardModifier, Qt.MouseButton
VIEW = View(start_s=2.0, width_s=8.0, row_uv=60.0)


class Traces:
    """A widget on the screen, with what it rests on."""

    def __init__(self, qtbot: QtBot, folder: Path, n_channels: int = 8, names: tuple[str, ...] = ()) -> None:
        self.recording = recording(folder, n_channels, names)
        self.asked: list[tuple[int, int]] = []
        self.source = TraceSource(self.recording, lambda start, stop: self.asked.append((start, stop)))
        self.source.set_pyramid(pyramid_of(self.recording, folder))
        self.model = Model(replace(VIEW, rows=names_of(self.recording)))
        self.widget = TracesWidget(self.model, self.source, LIGHT)
        qtbot.addWidget(self.widget)
        self.widget.resize(900, 420)
        self.widget.set_overlays(overlays())
        with qtbot.waitExposed(self.widget):
            self.widget.show()
        self.plot, self.names = self.widget.plot, self.widget.names

    @property
    def view(self) -> View:
        return self.model.view

    def key(self, key: Qt.Key, modifiers: Qt.KeyboardModifier = Mod.NoModifier) -> None:
        QTest.keyClick(self.plot, key, modifiers)

    def drag(self, start: QPoint, stop: QPoint, modifiers: Qt.KeyboardModifier = Mod.NoModifier) -> None:
        QTest.mousePress(self.plot, Button.LeftButton, modifiers, start)
        for share in (0.3, 0.7, 1.0):
            move(self.plot, start + (stop - start) * share, Button.LeftButton)
        QTest.mouseRelease(self.plot, Button.LeftButton, modifiers, stop)

    def x(self, time_s: float) -> int:
        return round(self.plot.scale.x_of(time_s))

    def row_y(self, row: int) -> int:
        return round(self.plot.rows.middle(row))

    def image(self) -> QImage:
        return self.widget.grab().toImage()


@pytest.fixture
def traces(qtbot: QtBot, tmp_path: Path) -> Iterator[Traces]:
    built = Traces(qtbot, tmp_path)
    yield built
    built.source.pyramid.close()  # type: ignore[union-attr]


# Keys


@pytest.mark.parametrize(
    ("key", "modifiers", "start_s", "width_s", "row_uv"),
    [
        (Key.Key_Right, Mod.NoModifier, 2.8, 8.0, 60.0),
        (Key.Key_Left, Mod.NoModifier, 1.2, 8.0, 60.0),
        (Key.Key_PageDown, Mod.NoModifier, 10.0, 8.0, 60.0),
        (Key.Key_PageUp, Mod.NoModifier, 0.0, 8.0, 60.0),
        (Key.Key_Home, Mod.NoModifier, 0.0, 8.0, 60.0),
        (Key.Key_End, Mod.NoModifier, DURATION_S - 8.0, 8.0, 60.0),
        (Key.Key_Up, Mod.ControlModifier, 4.0, 4.0, 60.0),
        (Key.Key_Down, Mod.ControlModifier, 0.0, 16.0, 60.0),
        (Key.Key_Up, Mod.ControlModifier | Mod.ShiftModifier, 2.0, 8.0, 50.0),
        (Key.Key_Down, Mod.ControlModifier | Mod.ShiftModifier, 2.0, 8.0, 100.0),
        (Key.Key_Right, Mod.KeypadModifier, 2.8, 8.0, 60.0),
    ],
)
def test_keys_move_the_view(
    traces: Traces, key: Qt.Key, modifiers: Qt.KeyboardModifier, start_s: float, width_s: float, row_uv: float
) -> None:
    traces.key(key, modifiers)
    view = traces.view
    assert (view.start_s, view.width_s, view.row_uv) == pytest.approx((start_s, width_s, row_uv))


@pytest.mark.parametrize("key", [Key.Key_Plus, Key.Key_Minus, Key.Key_B, Key.Key_A, Key.Key_D])
def test_no_letters_and_no_plus_or_minus(traces: Traces, key: Qt.Key) -> None:
    traces.key(key)
    assert traces.model.changes == 0


def test_going_from_event_to_event_and_choosing_one(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.event_clicked)
    traces.key(Key.Key_Right, Mod.ControlModifier)
    assert traces.view.start_s + 4.0 == pytest.approx(13.0), "the first event behind the middle, 6 s"
    traces.key(Key.Key_Right, Mod.ControlModifier)
    assert traces.view.start_s + 4.0 == pytest.approx(15.0)
    assert "pulse" in traces.plot.accessibleDescription()
    traces.key(Key.Key_Left, Mod.ControlModifier)
    assert traces.view.start_s + 4.0 == pytest.approx(13.0)
    traces.key(Key.Key_Return)
    assert [spy.at(i)[0] for i in range(spy.count())] == [102]


def test_a_stretch_by_keys(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.stretch_selected)
    measures = QSignalSpy(traces.widget.measured)
    for _ in range(3):
        traces.key(Key.Key_Right, Mod.ShiftModifier)
    traces.key(Key.Key_Left, Mod.ShiftModifier)
    assert measures.at(3)[0].duration_s == pytest.approx(0.32)
    traces.key(Key.Key_Return)
    assert spy.at(0) == pytest.approx([6.0, 6.32], abs=traces.plot.scale.column_s)
    traces.key(Key.Key_Right, Mod.ShiftModifier)
    traces.key(Key.Key_Escape)
    traces.key(Key.Key_Return)
    assert spy.count() == 1


# Wheel and pinch


def test_the_wheel_scrolls_time_where_all_rows_fit(traces: Traces) -> None:
    wheel(traces.plot, QPoint(400, 200), angle=QPoint(0, -120))
    assert traces.view.start_s == pytest.approx(2.8)
    wheel(traces.plot, QPoint(400, 200), angle=QPoint(0, 240))
    assert traces.view.start_s == pytest.approx(1.2)
    wheel(traces.plot, QPoint(400, 200), angle=QPoint(-120, 0))
    assert traces.view.start_s == pytest.approx(2.0)
    wheel(traces.plot, QPoint(400, 200), pixels=QPoint(-traces.plot.width() // 2, 0))
    assert traces.view.start_s == pytest.approx(6.0, abs=0.02)


def test_the_wheel_with_control_zooms_at_the_cursor(traces: Traces) -> None:
    at = QPoint(300, 200)
    before_s = traces.plot.scale.time_at(300)
    wheel(traces.plot, at, angle=QPoint(0, 120), modifiers=Mod.ControlModifier)
    assert traces.view.width_s == pytest.approx(6.4)
    assert traces.plot.scale.time_at(300) == pytest.approx(before_s, abs=0.02)
    wheel(traces.plot, at, angle=QPoint(0, -120), modifiers=Mod.ControlModifier)
    assert traces.view.width_s == pytest.approx(8.0)


def test_zooming_ends_at_the_limits(traces: Traces) -> None:
    for _ in range(60):
        wheel(traces.plot, QPoint(300, 200), angle=QPoint(0, 240), modifiers=Mod.ControlModifier)
    assert traces.view.width_s == pytest.approx(8 / RATE_HZ)
    traces.image()
    for _ in range(60):
        wheel(traces.plot, QPoint(300, 200), angle=QPoint(0, -240), modifiers=Mod.ControlModifier)
    assert (traces.view.start_s, traces.view.width_s) == (0.0, DURATION_S)
    traces.image()


def test_pinching_zooms(traces: Traces) -> None:
    at = QPointF(300, 200)
    event = QNativeGestureEvent(
        Qt.NativeGestureType.ZoomNativeGesture, QPointingDevice.primaryPointingDevice(), 2, at, at,
        traces.plot.mapToGlobal(at), 0.25, QPointF(),
    )  # fmt: skip
    QApplication.sendEvent(traces.plot, event)
    assert traces.view.width_s == pytest.approx(6.4)


# Drags


def test_dragging_pans_by_whole_pixels(traces: Traces) -> None:
    scale = traces.plot.scale
    traces.drag(QPoint(500, 200), QPoint(437, 203))
    assert traces.plot.scale.grid.first == scale.grid.first + 63
    assert traces.view.start_s == pytest.approx(2.0 + 63 * scale.column_s)


def test_a_pan_moves_the_picture_without_changing_it(traces: Traces) -> None:
    traces.widget.set_overlays(Overlays())
    before = pixels(traces.plot.grab().toImage())
    traces.drag(QPoint(500, 200), QPoint(440, 200))
    traces.plot.clearFocus()
    move_away(traces)
    after = pixels(traces.plot.grab().toImage())
    rows = slice(HEADER + 4, before.shape[0] - 90)
    shift, width = 60, before.shape[1]
    # The outermost columns have lost or won a neighbour to join with.
    np.testing.assert_array_equal(before[rows, shift + 2 : width - 130], after[rows, 2 : width - 130 - shift])


def test_escape_takes_a_pan_back(traces: Traces) -> None:
    QTest.mousePress(traces.plot, Button.LeftButton, Mod.NoModifier, QPoint(500, 200))
    move(traces.plot, QPoint(300, 200), Button.LeftButton)
    assert traces.view.start_s > 3
    traces.key(Key.Key_Escape)
    assert traces.view.start_s == 2.0


def test_dragging_with_shift_measures(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.measured)
    traces.drag(QPoint(200, traces.row_y(2)), QPoint(400, 300), Mod.ShiftModifier)
    measure = spy.at(spy.count() - 1)[0]
    assert isinstance(measure, Measure)
    assert measure.channel == "E3"
    assert measure.duration_s == pytest.approx(200 * traces.plot.scale.column_s, abs=2 / RATE_HZ)
    ends = [round(time_s * RATE_HZ) for time_s in (measure.start_s, measure.stop_s)]
    stored = traces.recording.samples[ends, 2].astype(float)
    assert measure.difference_uv == pytest.approx((stored[1] - stored[0]) * 0.1)
    assert traces.view.start_s == 2.0
    traces.image()


@pytest.mark.parametrize("backwards", [False, True])
def test_dragging_with_control_selects_a_stretch(traces: Traces, backwards: bool) -> None:
    spy = QSignalSpy(traces.widget.stretch_selected)
    ends = [QPoint(traces.x(3.0), 100), QPoint(traces.x(4.5), 120)]
    traces.drag(ends[backwards], ends[not backwards], Mod.ControlModifier)
    assert spy.at(0) == pytest.approx([3.0, 4.5], abs=2 * traces.plot.scale.column_s)


def test_what_plain_dragging_does_can_be_chosen(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.stretch_selected)
    traces.widget.set_hand(Hand.STRETCH)
    traces.drag(QPoint(300, 100), QPoint(400, 100))
    assert spy.count() == 1
    assert traces.view.start_s == 2.0


def test_a_click_selects_and_moves_nothing(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.stretch_selected)
    QTest.mouseClick(traces.plot, Button.LeftButton, Mod.ControlModifier, QPoint(300, 100))
    QTest.mouseClick(traces.plot, Button.LeftButton, Mod.NoModifier, QPoint(300, 100))
    assert spy.count() == 0
    assert traces.model.changes == 0


# Events


def test_clicking_an_event(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.event_clicked)
    QTest.mouseClick(traces.plot, Button.LeftButton, Mod.NoModifier, QPoint(traces.x(5.0) + 3, HEADER // 2))
    QTest.mouseClick(traces.plot, Button.LeftButton, Mod.NoModifier, QPoint(traces.x(7.0), HEADER // 2))
    QTest.mouseClick(traces.plot, Button.LeftButton, Mod.NoModifier, QPoint(traces.x(5.0), 200))
    assert [spy.at(i)[0] for i in range(spy.count())] == [101]


def test_a_pulse_can_be_dragged_where_pulses_are_edited(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.pulse_dragged)
    start, stop = QPoint(traces.x(5.0), HEADER // 2), QPoint(traces.x(5.5), HEADER // 2)
    traces.drag(start, stop)
    assert spy.count() == 0
    traces.model.set_view(replace(traces.view, start_s=2.0))
    traces.widget.set_pulses_editable(editable=True)
    traces.drag(start, stop)
    key, time_s = spy.at(0)
    assert key == 101
    assert time_s == pytest.approx(5.5, abs=2 * traces.plot.scale.column_s)
    assert time_s * RATE_HZ == pytest.approx(round(time_s * RATE_HZ)), "on a sample"
    assert traces.view.start_s == 2.0


def test_other_events_cannot_be_dragged(traces: Traces) -> None:
    traces.widget.set_pulses_editable(editable=True)
    spy = QSignalSpy(traces.widget.pulse_dragged)
    traces.drag(QPoint(traces.x(3.0), HEADER // 2), QPoint(traces.x(4.0), HEADER // 2))
    assert spy.count() == 0


def test_a_double_click_above_the_traces_adds_a_pulse(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.pulse_added)
    at = QPoint(traces.x(7.0), HEADER // 2)
    QTest.mouseDClick(traces.plot, Button.LeftButton, Mod.NoModifier, at)
    assert spy.count() == 0
    traces.widget.set_pulses_editable(editable=True)
    QTest.mouseDClick(traces.plot, Button.LeftButton, Mod.NoModifier, at)
    assert spy.at(0)[0] == pytest.approx(7.0, abs=2 * traces.plot.scale.column_s)
    QTest.mouseDClick(traces.plot, Button.LeftButton, Mod.NoModifier, QPoint(traces.x(5.0), HEADER // 2))
    assert spy.count() == 1, "where there is one already"


def test_labels_without_room_are_counted(traces: Traces) -> None:
    traces.image()
    assert traces.plot.hidden_labels == 0
    traces.model.set_view(replace(traces.view, start_s=0.0, width_s=DURATION_S))
    traces.image()
    # Pairs of cue and pulse 17 pixels apart: the cue's label has no room.
    assert traces.plot.hidden_labels == 10


# Read-out


def test_the_cursor_reads_time_channel_and_value(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.cursor_moved)
    move(traces.plot, QPoint(333, traces.row_y(5)))
    reading = spy.at(0)[0]
    assert isinstance(reading, Reading)
    assert reading.channel == "E6"
    sample = round(traces.plot.scale.time_at(333) * RATE_HZ)
    assert reading.time_s == pytest.approx(sample / RATE_HZ)
    assert reading.value_uv == pytest.approx(traces.recording.samples[sample, 5] * 0.1)
    move(traces.plot, QPoint(333, 5))
    assert spy.at(1)[0] is None


# Names


def name_at(traces: Traces, row: int) -> QPoint:
    return QPoint(40, traces.row_y(row))


def test_clicking_a_name_picks_and_does_not_mark_bad(traces: Traces) -> None:
    bad, picked = QSignalSpy(traces.widget.bad_toggled), QSignalSpy(traces.widget.picked)
    QTest.mouseClick(traces.names, Button.LeftButton, Mod.NoModifier, name_at(traces, 2))
    assert traces.view.picked == {"E3"}
    assert picked.at(0)[0] == {"E3"}
    QTest.mouseClick(traces.names, Button.LeftButton, Mod.ControlModifier, name_at(traces, 5))
    assert traces.view.picked == {"E3", "E6"}
    QTest.mouseClick(traces.names, Button.LeftButton, Mod.ShiftModifier, name_at(traces, 7))
    assert traces.view.picked == {"E6", "E7", "E8"}
    QTest.mouseClick(traces.names, Button.LeftButton, Mod.NoModifier, name_at(traces, 0))
    QTest.mouseClick(traces.names, Button.LeftButton, Mod.NoModifier, name_at(traces, 0))
    assert traces.view.picked == frozenset()
    assert bad.count() == 0


def test_the_toggle_marks_bad_and_good_again(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.bad_toggled)
    at = QPoint(9, traces.row_y(1))
    QTest.mouseClick(traces.names, Button.LeftButton, Mod.NoModifier, at)
    assert spy.at(0) == ["E2", True]
    traces.widget.set_overlays(overlays(frozenset({"E2"})))
    QTest.mouseClick(traces.names, Button.LeftButton, Mod.NoModifier, at)
    assert spy.at(1) == ["E2", False]
    assert traces.view.picked == frozenset()


def test_names_by_keyboard(traces: Traces) -> None:
    spy = QSignalSpy(traces.widget.bad_toggled)
    traces.names.setFocus()
    for key in (Key.Key_Down, Key.Key_Down, Key.Key_Space, Key.Key_Return):
        QTest.keyClick(traces.names, key)
    assert spy.at(0) == ["E3", True]
    assert traces.view.picked == {"E3"}
    assert "E3, picked; row 3 of 8" in traces.names.accessibleDescription()
    QTest.keyClick(traces.names, Key.Key_End)
    assert "row 8 of 8" in traces.names.accessibleDescription()


def test_long_names_are_cut_and_told_in_full(qtbot: QtBot, tmp_path: Path) -> None:
    names = tuple(f"{number:02d} " + "of sixty characters " * 2 + "and a few more..." for number in range(4))
    assert {len(name) for name in names} == {60}
    traces = Traces(qtbot, tmp_path, 4, names)
    assert traces.names.width() < 170
    at = name_at(traces, 3)
    QApplication.sendEvent(traces.names, QHelpEvent(QEvent.Type.ToolTip, at, traces.names.mapToGlobal(at)))
    assert QToolTip.text() == names[3]
    QToolTip.hideText()


# States and sizes


def count_of(image: QImage, colour: str) -> int:
    wanted = QColor(colour).rgb() & 0xFFFFFF
    return int((pixels(image) & 0xFFFFFF == wanted).sum())


def move_away(traces: Traces) -> None:
    QApplication.sendEvent(traces.plot, QEvent(QEvent.Type.Leave))


def test_bad_and_picked_rows_have_their_colours(traces: Traces) -> None:
    before = traces.plot.grab().toImage()
    assert count_of(before, LIGHT.trace) > 1000
    assert count_of(before, LIGHT.trace_bad) == 0
    traces.widget.set_overlays(overlays(frozenset({"E2"})))
    traces.model.set_view(replace(traces.view, picked=frozenset({"E2", "E5"})))
    after = traces.plot.grab().toImage()
    n_rows = len(traces.view.rows)
    for colour in (LIGHT.trace_bad, LIGHT.trace_picked):
        assert 0.5 < n_rows * count_of(after, colour) / count_of(before, LIGHT.trace) < 2.0
    traces.widget.set_theme(DARK)
    assert count_of(traces.plot.grab().toImage(), DARK.trace_bad) > 100


def gap_widths(traces: Traces, rows: Sequence[int]) -> list[int]:
    """Widest run of the gap's colour in some line of each row, where no trace covers it, in pixels."""
    is_gap = (pixels(traces.plot.grab().toImage()) & 0xFFFFFF) == (QColor(LIGHT.gap).rgb() & 0xFFFFFF)
    height = traces.plot.rows.row_height
    tops = [traces.plot.rows.middle(row) - 0.5 * height for row in rows]
    return [int(is_gap[int(top + 2) : int(top + height - 2)].sum(axis=1).max()) for top in tops]


def test_gaps_are_as_long_as_the_rows_own(traces: Traces) -> None:
    own = Bands(PULSES_S - 0.002, PULSES_S + 0.025)
    usual = Bands(PULSES_S - 0.002, PULSES_S + 0.014)
    traces.widget.set_overlays(Overlays(gaps=usual, own_gaps={"E4": own, "E5": own, "E7": Bands()}))
    traces.model.set_view(replace(traces.view, start_s=4.95, width_s=0.1))
    names = traces.plot.shown_names
    wanted_s = [{"E4": 0.027, "E5": 0.027, "E7": 0.0}.get(name, 0.016) for name in names]
    px_per_s = traces.plot.width() / 0.1
    assert gap_widths(traces, range(8)) == pytest.approx([px_per_s * wanted for wanted in wanted_s], abs=2)
    # Other rows, other order: the gap goes with its channel.
    traces.model.set_view(replace(traces.view, rows=("E5", "E1", "E4")))
    assert gap_widths(traces, range(3)) == pytest.approx([px_per_s * s for s in (0.027, 0.016, 0.027)], abs=2)


def test_short_gaps_of_a_row_stay_seen(traces: Traces) -> None:
    own = Bands(PULSES_S, PULSES_S + 0.020)
    traces.widget.set_overlays(Overlays(own_gaps={"E4": own}))
    traces.model.set_view(replace(traces.view, start_s=0.0, width_s=20.0))
    place = traces.plot.shown_names.index("E4")
    widths = gap_widths(traces, range(8))
    assert widths[place] >= 2 * 2  # two pulses, each a marker of 3 px across pixels' edges
    assert sum(widths) == widths[place]


def test_crowded_gaps_are_marks_along_the_upper_edge_once(traces: Traces) -> None:
    often_s = np.arange(0.0, 100.0, 0.5)
    own = Bands(often_s, often_s + 0.027)
    traces.widget.set_overlays(Overlays(gaps=Bands(often_s, often_s + 0.016), own_gaps={"E4": own}))
    traces.model.set_view(replace(traces.view, start_s=0.0, width_s=100.0))
    is_gap = (pixels(traces.plot.grab().toImage()) & 0xFFFFFF) == (QColor(LIGHT.gap).rgb() & 0xFFFFFF)
    lines = np.flatnonzero(is_gap.any(axis=1))
    assert lines.min() >= HEADER
    assert lines.max() < HEADER + 6


def test_both_signals_lie_over_each_other(traces: Traces) -> None:
    traces.model.set_view(replace(traces.view, shown=Shown.BOTH))
    traces.plot.grab()
    details = [traces.plot.detail]
    start, stop = traces.asked[-1]
    shifted = traces.recording.samples[start:stop].astype(np.float32) + 200.0
    traces.widget.set_repaired(RepairedStretch(start, shifted, np.arange(8), 0))
    image = traces.plot.grab().toImage()
    details.append(traces.plot.detail)
    assert details == [Detail.NOT_REPAIRED, Detail.EXACT]
    assert count_of(image, LIGHT.trace_recorded) > 1000
    assert count_of(image, LIGHT.trace) > 1000


def test_order_and_hiding_follow_the_view(traces: Traces) -> None:
    traces.model.set_view(replace(traces.view, rows=("E7", "not in the recording", "E1")))
    assert traces.plot.shown_names == ["E7", "E1"]
    spy = QSignalSpy(traces.widget.cursor_moved)
    move(traces.plot, QPoint(333, traces.row_y(1)))
    assert spy.at(0)[0].channel == "E1"
    traces.model.set_view(replace(traces.view, rows=()))
    traces.image()
    move(traces.plot, QPoint(340, 200))
    assert spy.at(1)[0] is None
    for modifiers in (Mod.NoModifier, Mod.ShiftModifier, Mod.ControlModifier):
        traces.drag(QPoint(300, 100), QPoint(400, 200), modifiers)
    QTest.keyClick(traces.names, Key.Key_Space)


def test_256_channels_scroll(qtbot: QtBot, tmp_path: Path) -> None:
    traces = Traces(qtbot, tmp_path, 256)
    assert traces.plot.rows.scroll_range > 0
    first = traces.plot.rows.visible
    wheel(traces.plot, QPoint(400, 200), angle=QPoint(0, -1200))
    assert traces.plot.rows.visible.start > first.start
    assert traces.view.start_s == 2.0
    wheel(traces.plot, QPoint(400, 200), angle=QPoint(0, -120), modifiers=Mod.ShiftModifier)
    assert traces.view.start_s == pytest.approx(2.8)
    traces.key(Key.Key_Up)
    traces.names.setFocus()
    QTest.keyClick(traces.names, Key.Key_End)
    assert 255 in traces.plot.rows.visible
    spy = QSignalSpy(traces.widget.cursor_moved)
    move(traces.plot, QPoint(333, traces.row_y(255)))
    assert spy.at(0)[0].channel == "E256"
    traces.image()


def test_the_focus_is_seen_and_tab_reaches_everything(traces: Traces) -> None:
    traces.names.setFocus()
    names_focused = traces.image()
    QTest.keyClick(traces.names, Key.Key_Tab)
    assert QApplication.focusWidget() is traces.plot
    assert pixels(traces.image()).tolist() != pixels(names_focused).tolist()


def test_every_control_has_a_name_for_screen_readers(traces: Traces) -> None:
    for widget in (traces.plot, traces.names, traces.widget._bar):
        assert widget.accessibleName()
    traces.model.set_view(replace(traces.view, start_s=60.0))
    assert traces.plot.accessibleDescription() == "as recorded, 8 s from 1:00, 60 µV a row"


def test_the_widget_leaves_its_model_alone_when_it_is_gone(traces: Traces, qtbot: QtBot) -> None:
    other = TracesWidget(traces.model, traces.source, LIGHT)
    assert len(traces.model.listeners) == 2
    other.deleteLater()
    qtbot.waitUntil(lambda: len(traces.model.listeners) == 1)
    traces.model.set_view(replace(traces.view, start_s=9.0))


def test_three_hundred_random_acts_leave_everything_whole(traces: Traces, qtbot: QtBot) -> None:
    rng = np.random.default_rng(17)
    ribbon = Ribbon(traces.model, traces.source, LIGHT)
    qtbot.addWidget(ribbon)
    ribbon.resize(700, ribbon.sizeHint().height())
    ribbon.set_overlays(overlays())
    traces.widget.set_pulses_editable(editable=True)
    keys = [
        *(Key.Key_Left, Key.Key_Right, Key.Key_Up, Key.Key_Down, Key.Key_PageUp, Key.Key_PageDown),
        *(Key.Key_Home, Key.Key_End, Key.Key_Return, Key.Key_Escape, Key.Key_Space),
    ]
    modifiers = [Mod.NoModifier, Mod.NoModifier, Mod.ControlModifier, Mod.ShiftModifier]
    names = names_of(traces.recording)

    def somewhere(widget: QWidget) -> QPoint:
        return QPoint(int(rng.integers(widget.width())), int(rng.integers(widget.height())))

    for _ in range(300):
        widget = (traces.plot, traces.plot, traces.names, ribbon)[rng.integers(4)]
        held = modifiers[rng.integers(4)]
        act = rng.integers(6)
        if act <= 1:
            QTest.keyClick(widget, keys[rng.integers(len(keys))], held)
        elif act == 2:
            wheel(widget, somewhere(widget), QPoint(0, int(rng.integers(-4, 5)) * 60), modifiers=held)
        elif act == 3:
            QTest.mousePress(widget, Button.LeftButton, held, somewhere(widget))
            move(widget, somewhere(widget), Button.LeftButton)
            QTest.mouseRelease(widget, Button.LeftButton, held, somewhere(widget))
        elif act == 4:
            QTest.mouseClick(widget, Button.LeftButton, held, somewhere(widget))
        else:
            shown = list(Shown)[rng.integers(3)]
            rows = tuple(rng.permutation(names)[: rng.integers(0, 9)].tolist())
            traces.model.set_view(replace(traces.view, shown=shown, rows=rows))
        traces.widget.repaint()
        ribbon.repaint()
        view = traces.view
        assert view.start_s >= 0
        assert view.start_s + view.width_s <= DURATION_S * (1 + 1e-9)
        assert traces.plot.scale.grid.count == traces.plot.width()
