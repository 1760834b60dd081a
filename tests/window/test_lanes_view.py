"""Lanes through real events: cursor, drags, keys, wheel, tooltips, and what is painted."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import replace

import pytest
from PySide6.QtCore import QPoint, QPointF, Qt
from PySide6.QtGui import QColor, QImage
from PySide6.QtTest import QTest
from pytestqt.qtbot import QtBot

from pulsemend.mending.epoch_lanes import LanesShown, epoch_lanes
from pulsemend.model.marks import EpochKey
from pulsemend.progress import finish
from pulsemend.window.epoch_lanes import LANE_PX, LanesView, Try
from pulsemend.window.lane_picture import ticks
from pulsemend.window.lane_style import PATTERNS, rule_style
from pulsemend.window.theme import DARK, LIGHT
from support.hands import move, pixels, wheel
from support.lane_cases import PLAN, decided, lanes_of, many

LEFT = Qt.MouseButton.LeftButton
ALT, CTRL, SHIFT = (
    Qt.KeyboardModifier.AltModifier,
    Qt.KeyboardModifier.ControlModifier,
    Qt.KeyboardModifier.ShiftModifier,
)
BASELINE, DELAY, AFTER = 0, 1, 2


def put_up(qtbot: QtBot, view: LanesView) -> LanesView:
    qtbot.addWidget(view)
    view.resize(1000, 260)
    view.show_times(tuple(rule.start_s for rule in PLAN.epochs.rule), PLAN.epochs.length_s)
    view.show_rule(0)
    view.show()
    qtbot.waitExposed(view)
    view.activateWindow()
    view.setFocus()
    qtbot.waitUntil(view.hasFocus)
    return view


@pytest.fixture
def view(qtbot: QtBot) -> LanesView:
    view = LanesView(LIGHT)
    view.show_lanes(lanes_of())
    return put_up(qtbot, view)


@pytest.fixture
def long_view(qtbot: QtBot) -> LanesView:
    view = LanesView(LIGHT)
    view.show_lanes(finish(epoch_lanes(decided(many(300)), PLAN)))
    return put_up(qtbot, view)


def box(view: LanesView, trial: int, rule: str, piece: int = 1) -> int:
    found = view._box_of(EpochKey(trial, rule, piece))
    assert found >= 0
    return found


def middle(view: LanesView, number: int) -> QPoint:
    return view.rect_of(number).center().toPoint()


def drag(view: LanesView, start: QPoint, by_px: int, *, let_go: bool = True) -> None:
    """Drag with the mouse in steps, as a hand does."""
    QTest.mousePress(view.viewport(), LEFT, pos=start)
    for part in (0.3, 0.7, 1.0):
        move(view.viewport(), start + QPoint(round(by_px * part), 0), LEFT)
    if let_go:
        QTest.mouseRelease(view.viewport(), LEFT, pos=start + QPoint(by_px, 0))


def heard(signal: object) -> list[tuple[object, ...]]:
    got: list[tuple[object, ...]] = []
    signal.connect(lambda *values: got.append(values))  # type: ignore[attr-defined]
    return got


# Going there


def test_a_click_on_an_epoch_goes_there_and_chooses_its_rule(view: LanesView) -> None:
    wanted, chosen, current = heard(view.wanted), heard(view.chosen), heard(view.current_changed)
    QTest.mouseClick(view.viewport(), LEFT, pos=middle(view, box(view, 2, "delay1")))
    assert wanted == [(2, EpochKey(2, "delay1"))]
    assert chosen == [(DELAY,)]
    assert current == [(EpochKey(2, "delay1"),)]
    assert view.current_trial == 2


def test_a_click_beside_all_epochs_goes_to_the_trial(view: LanesView) -> None:
    wanted = heard(view.wanted)
    QTest.mouseClick(view.viewport(), LEFT, pos=QPoint(12, 2 * view.lane_px + 5))
    assert wanted == [(3, None)]
    QTest.mouseClick(view.viewport(), LEFT, pos=QPoint(12, 7 * view.lane_px + 5))
    assert len(wanted) == 1


def test_keys_choose_lanes_and_epochs(view: LanesView) -> None:
    wanted = heard(view.wanted)
    keys = Qt.Key
    QTest.keyClick(view, keys.Key_Home)
    assert view.current_trial == 1
    for _ in range(2):
        QTest.keyClick(view, keys.Key_Right)
    assert view.current_key == EpochKey(1, "delay1")
    assert view.hand.rule == DELAY
    QTest.keyClick(view, keys.Key_Down)
    assert view.current_key == EpochKey(2, "delay1")
    QTest.keyClick(view, keys.Key_Return)
    assert wanted == [(2, EpochKey(2, "delay1"))]
    QTest.keyClick(view, keys.Key_Left)
    assert view.current_key == EpochKey(2, "baseline")
    QTest.keyClick(view, keys.Key_End)
    assert view.current_trial == 7
    QTest.keyClick(view, keys.Key_Down)
    assert view.current_trial == 7


def test_a_page_of_lanes_is_scrolled_into_sight(long_view: LanesView) -> None:
    QTest.keyClick(long_view, Qt.Key.Key_Home)
    QTest.keyClick(long_view, Qt.Key.Key_PageDown)
    page = long_view.current_trial
    assert page is not None
    assert page > 5
    QTest.keyClick(long_view, Qt.Key.Key_End)
    layout = long_view.layout_now()
    assert long_view.current_trial == 300
    assert layout.top_of(299) + layout.lane_px <= layout.bottom
    QTest.keyClick(long_view, Qt.Key.Key_Home)
    assert long_view.layout_now().top_of(0) == 0


# Dragging


def test_dragging_moves_the_rule_in_whole_samples_in_every_lane(view: LanesView) -> None:
    trying, dropped = heard(view.trying), heard(view.dropped)
    first, other = box(view, 2, "delay1"), box(view, 1, "delay1")
    before = view.rect_of(other)
    drag(view, middle(view, first), 40, let_go=False)
    (last,) = trying[-1]
    assert isinstance(last, Try)
    moved_s = 40 / view.layout_now().px_per_s
    assert last.rule == DELAY
    assert last.start_s == pytest.approx(0.5 + moved_s, abs=0.5 / 500)
    assert (last.start_s * 500).is_integer()
    assert last.length_s == 1.0
    assert view.rect_of(other).left() - before.left() == pytest.approx(40, abs=1)
    assert view.rect_of(box(view, 1, "baseline")).width() == pytest.approx(before.width())
    assert not dropped
    QTest.mouseRelease(view.viewport(), LEFT, pos=middle(view, first))
    assert dropped == [(last, False)]


def test_the_right_edge_changes_the_length_of_all(view: LanesView) -> None:
    dropped = heard(view.dropped)
    rect = view.rect_of(box(view, 2, "delay1"))
    before = view.rect_of(box(view, 1, "baseline")).width()
    drag(view, QPoint(round(rect.right()) - 1, round(rect.center().y())), -30, let_go=False)
    assert view.rect_of(box(view, 1, "baseline")).width() == pytest.approx(before - 30, abs=1)
    QTest.mouseRelease(view.viewport(), LEFT, pos=rect.center().toPoint())
    ((tried, by_keys),) = dropped
    assert isinstance(tried, Try)
    assert tried.start_s == 0.5
    assert tried.length_s == pytest.approx(1.0 - 30 / view.layout_now().px_per_s, abs=0.5 / 500)
    assert not by_keys


def test_the_edge_of_a_later_piece_is_followed_by_the_mouse(view: LanesView) -> None:
    """Two pieces in a row: each becomes longer by half of what the second one's end moves."""
    number = box(view, 1, "after1", 2)
    rect = view.rect_of(number)
    drag(view, QPoint(round(rect.right()) - 1, round(rect.center().y())), 30, let_go=False)
    assert view.rect_of(number).right() - rect.right() == pytest.approx(30, abs=1)
    assert view.rect_of(number).left() - rect.left() == pytest.approx(15, abs=1)
    QTest.mouseRelease(view.viewport(), LEFT, pos=rect.center().toPoint())


def test_the_time_axis_stands_still_while_something_is_dragged(view: LanesView) -> None:
    before = view.layout_now()
    drag(view, middle(view, box(view, 1, "baseline")), -60, let_go=False)
    shifted = replace(PLAN.epochs.rule[0], start_s=-3.0)
    plan = replace(PLAN, epochs=replace(PLAN.epochs, rule=(shifted, *PLAN.epochs.rule[1:])))
    view.show_lanes(lanes_of(plan))
    assert view.layout_now() == before
    QTest.mouseRelease(view.viewport(), LEFT, pos=QPoint(300, 10))
    view.show_lanes(lanes_of(plan))
    assert view.layout_now().start_s < before.start_s


def test_escape_gives_up_a_drag(view: LanesView) -> None:
    dropped, given_up, wanted = heard(view.dropped), heard(view.given_up), heard(view.wanted)
    number = box(view, 2, "delay1")
    before = view.rect_of(number)
    drag(view, middle(view, number), 60, let_go=False)
    assert view.rect_of(number) != before
    QTest.keyClick(view, Qt.Key.Key_Escape)
    assert view.rect_of(number) == before
    QTest.mouseRelease(view.viewport(), LEFT, pos=before.center().toPoint())
    assert (len(given_up), dropped, wanted) == (1, [], [])


def test_a_shaking_hand_drags_nothing(view: LanesView) -> None:
    trying, wanted = heard(view.trying), heard(view.wanted)
    at = middle(view, box(view, 2, "delay1"))
    QTest.mousePress(view.viewport(), LEFT, pos=at)
    move(view.viewport(), at + QPoint(2, 1), LEFT)
    QTest.mouseRelease(view.viewport(), LEFT, pos=at + QPoint(2, 1))
    assert trying == []
    assert len(wanted) == 1


@pytest.mark.parametrize(
    ("key", "held", "start_s", "length_s"),
    [
        (Qt.Key.Key_Left, ALT, 0.49, 1.0),
        (Qt.Key.Key_Right, ALT, 0.51, 1.0),
        (Qt.Key.Key_Right, ALT | SHIFT, 0.502, 1.0),
        (Qt.Key.Key_Up, ALT, 0.5, 1.01),
        (Qt.Key.Key_Down, ALT | SHIFT, 0.5, 0.998),
    ],
)
def test_keys_move_the_chosen_rule_and_the_length(
    view: LanesView, key: Qt.Key, held: Qt.KeyboardModifier, start_s: float, length_s: float
) -> None:
    dropped = heard(view.dropped)
    view.show_rule(DELAY)
    QTest.keyClick(view, key, held)
    assert dropped == [(Try(DELAY, start_s, length_s), True)]
    QTest.keyRelease(view, Qt.Key.Key_Alt)


def test_boxes_follow_a_plan_that_was_not_counted_yet(view: LanesView) -> None:
    number = box(view, 1, "after1", 2)
    before, px_per_s = view.rect_of(number), view.layout_now().px_per_s
    view.show_times((-1.0, 0.5, 0.25), 1.5)
    after = view.rect_of(number)
    # Moved itself, and by the longer piece before it.
    assert after.left() - before.left() == pytest.approx((0.25 + 0.5) * px_per_s, abs=1e-6)
    assert after.width() == pytest.approx(1.5 * px_per_s, abs=1e-6)
    # Rules that are other ones move nothing.
    view.show_times((-1.0, 0.5), 1.5)
    assert view.rect_of(number) == before


# View


def test_wheel_and_keys_change_the_height_of_lanes(long_view: LanesView) -> None:
    usual = long_view.lane_px
    wheel(long_view.viewport(), QPoint(300, 100), QPoint(0, 120), modifiers=CTRL)
    assert long_view.lane_px > usual
    QTest.keyClick(long_view, Qt.Key.Key_PageDown, CTRL)
    QTest.keyClick(long_view, Qt.Key.Key_PageDown, CTRL)
    assert long_view.lane_px < usual
    for _ in range(30):
        wheel(long_view.viewport(), QPoint(300, 100), QPoint(0, -120), modifiers=CTRL)
    assert long_view.lane_px == LANE_PX[0]
    for _ in range(60):
        wheel(long_view.viewport(), QPoint(300, 100), QPoint(0, 120), modifiers=CTRL)
    assert long_view.lane_px == LANE_PX[2]


def test_the_lane_under_the_mouse_stays_when_the_height_changes(long_view: LanesView) -> None:
    long_view.verticalScrollBar().setValue(2000)
    row = long_view.layout_now().row_at(100)
    wheel(long_view.viewport(), QPoint(300, 100), QPoint(0, 240), modifiers=CTRL)
    assert long_view.layout_now().row_at(100) == row


def test_time_is_zoomed_about_the_mouse(view: LanesView) -> None:
    time_s, px_per_s = view.layout_now().time_at(300), view.layout_now().px_per_s
    for _ in range(3):
        wheel(view.viewport(), QPoint(300, 100), QPoint(0, 120), modifiers=CTRL | SHIFT)
    assert view.layout_now().px_per_s > px_per_s
    assert view.layout_now().time_at(300) == pytest.approx(time_s, abs=2 / px_per_s)
    QTest.keyClick(view, Qt.Key.Key_PageDown, CTRL | SHIFT)
    for _ in range(12):
        QTest.keyClick(view, Qt.Key.Key_PageDown, CTRL | SHIFT)
    assert view.layout_now().px_per_s == pytest.approx(px_per_s)


def test_the_axis_is_round_and_has_its_unit(view: LanesView) -> None:
    times = ticks(view.layout_now())
    assert times[-1][1].endswith(" s")
    steps = {round(late - early, 9) for (early, _), (late, _) in itertools.pairwise(times)}
    assert len(steps) == 1
    assert steps <= {0.5, 1.0, 2.0, 5.0}
    assert "\u22121" in [text for _, text in times]


def test_filters_keep_the_cursor_where_it_still_is(view: LanesView) -> None:
    QTest.mouseClick(view.viewport(), LEFT, pos=middle(view, box(view, 5, "delay1")))
    view.show_only(LanesShown.CONFLICTS)
    assert view.n_shown == 2
    assert view.current_key == EpochKey(5, "delay1")
    view.show_only(LanesShown.ALL, "", ("cue1.item", "left"))
    assert view.n_shown == 5
    assert view.current_trial is None


def test_the_cursor_can_be_put_from_outside(view: LanesView) -> None:
    current = heard(view.current_changed)
    view.show_key(EpochKey(3, "delay1"))
    assert view.current_key == EpochKey(3, "delay1")
    assert current == []
    view.show_key(EpochKey(99, "delay1"))
    assert view.current_trial == 3


# Words


def test_tooltips_name_epochs_and_trials(view: LanesView) -> None:
    left_out = view.words_at(QPointF(middle(view, box(view, 1, "delay1"))) - QPointF(8, 0))
    assert left_out.startswith("Trial 1, delay1 touches gap of pulse1 at 7.503 s.")
    assert "7.000 to 8.000 s" in left_out
    assert "baseline kept" in view.words_at(QPointF(middle(view, box(view, 1, "baseline"))))
    assert view.words_at(QPointF(12, 3 * view.lane_px + 4)).endswith("incomplete: no cue2.")
    assert view.words_at(QPointF(12, 240)) == ""


def test_the_cursor_is_described_for_screen_readers(view: LanesView) -> None:
    QTest.keyClick(view, Qt.Key.Key_Home)
    assert view.accessibleName()
    assert "Trial 1, 3 of 4 epochs kept: delay1 touches gap" in view.accessibleDescription()
    QTest.keyClick(view, Qt.Key.Key_Right)
    assert view.accessibleDescription().startswith("Trial 1, baseline kept.")


# Painting


def picture(view: LanesView) -> QImage:
    """Picture with all words, which come with later frames if they are many."""
    image = view.viewport().grab().toImage()
    while view._words.owed:
        image = view.viewport().grab().toImage()
    return image


def test_kept_is_filled_and_left_out_is_hollow(view: LanesView) -> None:
    image = picture(view)
    view.clearFocus()
    kept, hollow = view.rect_of(box(view, 2, "baseline")), view.rect_of(box(view, 4, "baseline"))
    quarter = [QPoint(round(one.left() + one.width() / 4), round(one.top() + 7)) for one in (kept, hollow)]
    assert QColor(image.pixel(quarter[0])).name() == rule_style(BASELINE, LIGHT).inside
    assert QColor(image.pixel(quarter[1])) == QColor(LIGHT.panel)


def test_a_gap_can_be_seen_however_narrow(view: LanesView) -> None:
    image = picture(view)
    lanes, layout = view.lanes, view.layout_now()
    assert lanes is not None
    x = layout.x_of(float(lanes.gap_start_s[1] - lanes.zero_s[0]))
    row = pixels(image)[2 * 0 + 2, round(x) : round(x) + 4]
    assert (row == QColor(LIGHT.gap).rgb()).sum() >= 2


@pytest.mark.parametrize("lane_px", [7, 22])
@pytest.mark.parametrize("steps", [(13, 40, 9, -25, 3), (90, -60, 1, 400, -2)])
def test_scrolled_pictures_are_those_painted_anew(
    long_view: LanesView, lane_px: int, steps: tuple[int, ...]
) -> None:
    long_view.set_lane_px(lane_px)
    QTest.keyClick(long_view, Qt.Key.Key_Down)
    bar = long_view.verticalScrollBar()
    bar.setValue(500)
    picture(long_view)
    for step in steps:
        bar.setValue(bar.value() + step)
        scrolled = pixels(picture(long_view))
        long_view._image_key = None
        anew = pixels(picture(long_view))
        # A slanted line that is cut off at an edge may take its steps a pixel aside.
        assert (scrolled != anew).sum() <= 6


def test_new_words_are_spread_over_frames(
    qtbot: QtBot, long_view: LanesView, monkeypatch: pytest.MonkeyPatch
) -> None:
    whole = pixels(picture(long_view))
    long_view._words = type(long_view._words)()
    start = long_view._words.start
    monkeypatch.setattr(long_view._words, "start", lambda _: start(-1.0))
    long_view._image_key = None
    first = pixels(long_view.viewport().grab().toImage())
    assert (first != whole).any()
    qtbot.waitUntil(lambda: not long_view._words.owed)
    assert (pixels(long_view.viewport().grab().toImage()) == whole).all()


def test_other_colours(view: LanesView) -> None:
    before = pixels(picture(view))
    view.set_theme(DARK)
    after = pixels(picture(view))
    assert (before != after).mean() > 0.5


def test_rules_differ_by_more_than_colour() -> None:
    looks = [rule_style(place, LIGHT) for place in range(42)]
    assert len(set(looks)) == 42
    assert len({look.pattern for look in looks[:7]}) == len(PATTERNS)
    assert len({look.edge for look in looks[:6]}) == 6


def test_nothing_to_show(qtbot: QtBot) -> None:
    view = put_up(qtbot, LanesView(LIGHT))
    acts: list[Callable[[], None]] = [
        lambda: QTest.keyClick(view, Qt.Key.Key_Down),
        lambda: QTest.keyClick(view, Qt.Key.Key_Return),
        lambda: QTest.mouseClick(view.viewport(), LEFT, pos=QPoint(50, 50)),
        lambda: move(view.viewport(), QPoint(60, 60)),
    ]
    for act in acts:
        act()
    assert view.current_trial is None
    assert view.n_shown == 0
    view.show_lanes(finish(epoch_lanes(decided([]), PLAN)))
    for act in acts:
        act()
    assert view.current_trial is None
