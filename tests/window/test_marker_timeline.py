"""The timeline of all codes: its pixels, and what hands and keys do with it."""

from __future__ import annotations

import numpy as np
import pytest
from PySide6.QtCore import QPoint, QPointF, Qt
from PySide6.QtGui import QImage
from PySide6.QtTest import QTest
from pytestqt.qtbot import QtBot

from pulsemend.mending.marker_view import (
    CodeEvidence,
    Spans,
    TrialState,
    code_evidence,
    code_rows,
)
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Role
from pulsemend.window.marker_lanes import StateLegend, marker_row, trial_row
from pulsemend.window.marker_timeline import Timeline
from pulsemend.window.theme import DARK, LIGHT
from support.hands import move, pixels, wheel
from support.marker_study import PLAN

CUES_S = (10.0, 30.0, 50.0)
PROBES_S = (12.0, 32.0, 90.0)
CTRL = Qt.KeyboardModifier.ControlModifier


def evidence() -> tuple[CodeEvidence, ...]:
    times = [(at_s, "S 11") for at_s in CUES_S] + [(at_s, "S 31") for at_s in PROBES_S]
    return code_evidence([Marker(at_s, code) for at_s, code in sorted(times)], 1.0)


def spans() -> Spans:
    return Spans(
        start_s=np.array([9.0, 29.0, 49.0]),
        stop_s=np.array([13.0, 33.0, 51.0]),
        states=(TrialState.COMPLETE, TrialState.DOUBTFUL, TrialState.INCOMPLETE),
        kinds=("one cue", "two cues", "one cue"),
        numbers=(1, 2, 3),
    )


@pytest.fixture
def timeline(qtbot: QtBot) -> Timeline:
    made = Timeline(LIGHT)
    qtbot.addWidget(made)
    made.resize(700, 220)
    found = evidence()
    made.show_codes(found, code_rows(found, parse_plan(PLAN).plan), 100.0)
    made.show_trials(spans(), ("", "cue at 30 s or 31 s", "no probe"))
    made.show_view(0.0, 10.0)
    made.show()
    qtbot.waitExposed(made)
    return made


def click(timeline: Timeline, x: float, y: float) -> None:
    QTest.mouseClick(timeline.viewport(), Qt.MouseButton.LeftButton, pos=QPoint(round(x), round(y)))


# Pixels


def test_a_few_markers_have_their_shape_and_many_a_tick_each() -> None:
    few = marker_row(np.array([20, 60]), 100, 20, Role.SAMPLE, 9)
    assert few.shape == (20, 100)
    assert few[10, 20] == few[10, 60] == 255
    assert few[10, 40] == 0
    shape = np.flatnonzero(few[10, :40])
    assert shape.min() in (16, 17)
    assert shape.max() in (23, 24)
    many = marker_row(np.arange(0, 100, 3), 100, 20, Role.SAMPLE, 9)
    assert np.flatnonzero(many[10]).tolist() == list(range(0, 100, 3))
    assert not many[0].any()


def test_shapes_at_the_edges_are_cut_and_none_wraps_around() -> None:
    row = marker_row(np.array([-2, 99, 300]), 100, 20, Role.SAMPLE, 9)
    assert row[10, 0] == 255
    assert row[10, 99] == 255
    assert not row[:, 10:90].any()
    assert not marker_row(np.array([], dtype=np.intp), 5, 5, Role.CUE, 3).any()
    # A row lower than a shape shows its middle.
    assert marker_row(np.array([50]), 100, 6, Role.SAMPLE, 9)[3, 50] == 255


def test_overlapping_shapes_are_both_there() -> None:
    both = marker_row(np.array([40, 46]), 100, 20, Role.RESPONSE, 9)
    alone = [marker_row(np.array([at]), 100, 20, Role.RESPONSE, 9) for at in (40, 46)]
    np.testing.assert_array_equal(both, np.maximum(*alone))


def test_every_state_has_a_pattern_of_its_own() -> None:
    rows = {state: trial_row(np.array([10]), np.array([60]), 100, 16, state) for state in TrialState}
    for row in rows.values():
        assert not row[:, :10].any()
        assert not row[:, 61:].any()
        assert (row[:, [10, 60]] == 255).all()
    inner = {state: (row[4:12, 20:50] > 0).mean() for state, row in rows.items()}
    assert inner[TrialState.COMPLETE] == 1.0
    assert inner[TrialState.SET_ASIDE] == 0.0
    hatched, dotted = (rows[state][4:12, 20:50] > 0 for state in (TrialState.INCOMPLETE, TrialState.DOUBTFUL))
    assert 0.2 < hatched.mean() < 0.5
    assert dotted.mean() == pytest.approx(0.5, abs=0.1)


def test_trials_beyond_the_edges_are_cut() -> None:
    row = trial_row(np.array([-50, 95, 400]), np.array([5, 300, 500]), 100, 16, TrialState.COMPLETE)
    assert np.flatnonzero(row[8]).tolist() == [*range(6), *range(95, 100)]


# What is shown


def test_rows_are_trials_by_kind_then_codes(timeline: Timeline) -> None:
    names = ["trials: one cue", "trials: two cues", "S 11", "S 31", "S 1", "S 12", "S 99"]
    middles = [timeline.row_middle(name) for name in names]
    assert middles == sorted(middles)
    x = timeline.x_of(30.0)
    assert timeline.words_at(QPointF(x, middles[2])) == "S 11 (cue) at 0:30.000"
    assert timeline.words_at(QPointF(x, middles[1])) == "trial 2, doubtful: cue at 30 s or 31 s"
    assert timeline.words_at(QPointF(x, middles[0])) == "trials: one cue"
    assert timeline.words_at(QPointF(2, middles[3])) == "S 31 (probe)"
    assert timeline.words_at(QPointF(timeline.x_of(50.0), middles[0])) == "trial 3, incomplete: no probe"
    assert timeline.words_at(QPointF(x, timeline.viewport().height() - 2)) == ""


def painted(timeline: Timeline) -> QImage:
    return timeline.viewport().grab().toImage()


def test_markers_trials_and_the_part_in_view_are_painted(timeline: Timeline) -> None:
    before = pixels(painted(timeline))
    y = round(timeline.row_middle("S 11"))
    assert before[y, round(timeline.x_of(30.0))] != before[y, round(timeline.x_of(70.0))]
    timeline.show_view(60.0, 80.0)
    after = pixels(painted(timeline))
    changed = np.flatnonzero((after != before).any(axis=0))
    assert changed.min() >= timeline.x_of(0.0) - 3
    assert after[y, round(timeline.x_of(70.0))] != before[y, round(timeline.x_of(70.0))]
    timeline.set_theme(DARK)
    assert (pixels(painted(timeline)) != after).mean() > 0.5


def test_the_chosen_codes_stand_out(timeline: Timeline) -> None:
    before = pixels(painted(timeline))
    timeline.show_chosen(["S 31"])
    rows = np.flatnonzero((pixels(painted(timeline)) != before).any(axis=1))
    assert abs(rows.mean() - timeline.row_middle("S 31")) < 3


def test_without_trials_there_is_no_row_for_them(timeline: Timeline) -> None:
    timeline.show_trials(None, ())
    assert timeline.row_middle("S 11") < 20
    assert painted(timeline).width() == timeline.viewport().width()


def test_the_legend_names_what_is_there(qtbot: QtBot) -> None:
    legend = StateLegend(LIGHT)
    qtbot.addWidget(legend)
    legend.show_states((TrialState.COMPLETE, TrialState.DOUBTFUL))
    assert legend.accessibleName() == "Trials: complete, doubtful"
    legend.resize(legend.sizeHint())
    assert len(np.unique(pixels(legend.grab().toImage()))) > 2


# Hands


def test_clicks_go_to_markers_times_and_codes(qtbot: QtBot, timeline: Timeline) -> None:
    y = timeline.row_middle("S 11")
    told: list[object] = []
    timeline.code_wanted.connect(told.append)
    timeline.wanted.connect(told.append)
    click(timeline, timeline.x_of(30.0) + 3, y)
    assert told == ["S 11", 30.0]
    with qtbot.waitSignal(timeline.wanted) as signal:
        click(timeline, timeline.x_of(70.0), y)
    assert signal.args[0] == pytest.approx(70.0, abs=0.2)
    with qtbot.waitSignal(timeline.code_wanted) as signal:
        click(timeline, 4, timeline.row_middle("S 31"))
    assert signal.args == ["S 31"]


def test_ctrl_and_the_wheel_stretch_about_the_mouse(timeline: Timeline) -> None:
    at = QPoint(round(timeline.x_of(30.0)), 50)
    for _ in range(5):
        wheel(timeline.viewport(), at, angle=QPoint(0, 120), modifiers=CTRL)
    start_s, stop_s = timeline.span_s
    assert stop_s - start_s < 60
    assert timeline.x_of(30.0) == pytest.approx(at.x(), abs=1.5)
    assert timeline.words_at(QPointF(timeline.x_of(30.0), timeline.row_middle("S 11"))).endswith("0:30.000")
    timeline.show_whole()
    assert timeline.span_s == (0.0, 100.0)


def test_dragging_moves_and_is_no_click(qtbot: QtBot, timeline: Timeline) -> None:
    timeline.zoom(4.0, 50.0)
    start_s = timeline.span_s[0]
    place = timeline.viewport()
    with qtbot.assertNotEmitted(timeline.wanted):
        QTest.mousePress(place, Qt.MouseButton.LeftButton, pos=QPoint(400, 60))
        move(place, QPoint(300, 60), Qt.MouseButton.LeftButton)
        QTest.mouseRelease(place, Qt.MouseButton.LeftButton, pos=QPoint(300, 60))
    assert timeline.span_s[0] > start_s
    wheel(place, QPoint(300, 60), angle=QPoint(-6000, 0))
    assert timeline.span_s[1] == pytest.approx(100.0)


def test_it_follows_the_traces(timeline: Timeline) -> None:
    timeline.zoom(10.0, 20.0)
    timeline.show_view(80.0, 82.0)
    start_s, stop_s = timeline.span_s
    assert start_s < 80.0 < 82.0 < stop_s
    timeline.show_as_traces()
    assert timeline.span_s == pytest.approx((80.0, 82.0))


def test_keys_go_from_marker_to_marker(qtbot: QtBot, timeline: Timeline) -> None:
    gone: list[float] = []
    timeline.wanted.connect(gone.append)
    timeline.wanted.connect(lambda at_s: timeline.show_view(at_s - 1.0, at_s + 1.0))
    timeline.show_chosen(["S 11"])
    keys = (Qt.Key.Key_Home, Qt.Key.Key_Right, Qt.Key.Key_Right, Qt.Key.Key_Right, Qt.Key.Key_Left)
    for key in (*keys, Qt.Key.Key_End):
        QTest.keyClick(timeline, key)
    assert gone == [10.0, 30.0, 50.0, 50.0, 30.0, 50.0]
    # Somebody else moved the traces: from there on.
    timeline.show_view(0.0, 2.0)
    timeline.show_chosen([])
    QTest.keyClick(timeline, Qt.Key.Key_Right)
    QTest.keyClick(timeline, Qt.Key.Key_Right)
    assert gone[-2:] == [10.0, 12.0]


def test_keys_stretch_and_scroll(timeline: Timeline) -> None:
    QTest.keyClick(timeline, Qt.Key.Key_Up, CTRL)
    width_s = timeline.span_s[1] - timeline.span_s[0]
    assert width_s == pytest.approx(50.0)
    QTest.keyClick(timeline, Qt.Key.Key_PageDown)
    assert timeline.span_s[0] == pytest.approx(45.0, abs=5.1)
    QTest.keyClick(timeline, Qt.Key.Key_Down, CTRL)
    assert timeline.span_s == (0.0, 100.0)
    timeline.resize(700, 90)
    QTest.keyClick(timeline, Qt.Key.Key_Down)
    assert timeline.verticalScrollBar().value() > 0
    assert painted(timeline).height() == timeline.viewport().height()
