"""The Epochs stage with its lanes: drags with counts following, both views in step, balance."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from PySide6.QtCore import QPoint, Qt
from PySide6.QtTest import QTest
from pytestqt.qtbot import QtBot
from shiboken6 import isValid

from pulsemend.model.marks import EpochKey
from pulsemend.model.plan import EpochRule, Group, Plan
from pulsemend.model.plan_file import read_plan
from pulsemend.model.vocabulary import Choose, Fate
from pulsemend.session.found import Stage
from pulsemend.window.desk import Desk
from pulsemend.window.sign_icons import fate_icon
from pulsemend.window.stages.epochs import EpochsStage
from pulsemend.window.theme import DARK, LIGHT
from pulsemend.window.workbench import Workbench
from support.hands import move, pixels
from support.small_lantern import Study, write_study
from support.stage_bench import LEARN_MS, new_bench, open_study, wait_learned

LEFT = Qt.MouseButton.LeftButton
ALT = Qt.KeyboardModifier.AltModifier


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    return write_study(tmp_path_factory.mktemp("lanes"))


@pytest.fixture
def page(qtbot: QtBot, study: Study, tmp_path: Path) -> Iterator[EpochsStage]:
    bench = new_bench()
    open_study(bench, study, tmp_path)
    desk = Desk({Stage.EPOCHS: lambda: EpochsStage(bench)})
    desk.resize(1280, 900)
    page = desk.open_stage(Stage.EPOCHS)
    assert isinstance(page, EpochsStage)
    desk.show()
    qtbot.waitExposed(desk)
    wait_counted(qtbot, page)
    yield page
    page.close()
    if isValid(desk):
        desk.close()
        desk.deleteLater()
    bench.close()


def wait_counted(qtbot: QtBot, page: EpochsStage) -> None:
    wait_learned(qtbot, page.bench)
    qtbot.waitUntil(lambda: page.is_counted, timeout=LEARN_MS)
    qtbot.waitUntil(lambda: not page.bench.jobs.under_way, timeout=LEARN_MS)


def plan_of(page: EpochsStage) -> Plan:
    plan = page.bench.session.plan
    assert plan is not None
    return plan


def rule(page: EpochsStage, place: int) -> EpochRule:
    return plan_of(page).epochs.rule[place]


def middle(page: EpochsStage, trial: int, name: str) -> QPoint:
    return page.lanes.rect_of(page.lanes._box_of(EpochKey(trial, name))).center().toPoint()


def start_drag(page: EpochsStage, trial: int, name: str, by_s: float) -> QPoint:
    """Take hold of an epoch and move it; gives where the mouse is."""
    at = middle(page, trial, name)
    QTest.mousePress(page.lanes.viewport(), LEFT, pos=at)
    to = at + QPoint(round(by_s * page.lanes.layout_now().px_per_s), 0)
    for place in (at + (to - at) / 2, to):
        move(page.lanes.viewport(), place, LEFT)
    return to


def kept_in_list(page: EpochsStage) -> list[str]:
    return [str(page.rules.model.index(row, 2).data()) for row in range(page.rules.model.rowCount())]


# Dragging


def test_counts_and_lanes_follow_a_drag_and_the_drop_is_one_entry(qtbot: QtBot, page: EpochsStage) -> None:
    session, before = page.bench.session, plan_of(page)
    assert kept_in_list(page) == ["2 of 3", "3 of 3"]
    to = start_drag(page, 1, "delay1", 1.4)
    # The plan stays until the hand lets go; numbers do not wait.
    assert page.editor.title.text() == "Rule delay1"
    assert page.editor.start.value() == pytest.approx(1.9, abs=0.05)
    qtbot.waitUntil(lambda: kept_in_list(page)[1] == "0 of 3", timeout=LEARN_MS)
    assert page.kept.value.text() == "2 of 6"
    assert [line.name.text() for line in page._reason_lines] == [str(Fate.NO_ANCHOR), str(Fate.TOUCHES_GAP)]
    assert session.plan == before
    assert session.next_undo == ""
    QTest.mouseRelease(page.lanes.viewport(), LEFT, pos=to)
    start_s = rule(page, 1).start_s
    assert start_s == pytest.approx(1.9, abs=0.05)
    assert (start_s * 1000).is_integer()
    assert session.next_undo == f"Rule delay1: start {start_s:g} s"
    # Nothing jumps back while the plan is learned from.
    assert kept_in_list(page)[1] == "0 of 3"
    wait_counted(qtbot, page)
    assert kept_in_list(page) == ["2 of 3", "0 of 3"]
    session.undo()
    assert session.plan == before
    wait_counted(qtbot, page)
    assert kept_in_list(page) == ["2 of 3", "3 of 3"]


def test_escape_restores_numbers_and_lanes(qtbot: QtBot, page: EpochsStage) -> None:
    before, place = plan_of(page), middle(page, 1, "delay1")
    start_drag(page, 1, "delay1", 1.4)
    qtbot.waitUntil(lambda: kept_in_list(page)[1] == "0 of 3", timeout=LEARN_MS)
    QTest.keyClick(page.lanes, Qt.Key.Key_Escape)
    QTest.mouseRelease(page.lanes.viewport(), LEFT)
    assert kept_in_list(page) == ["2 of 3", "3 of 3"]
    assert page.kept.value.text() == "5 of 6"
    assert page.editor.start.value() == 0.5
    assert middle(page, 1, "delay1") == place
    assert (plan_of(page), page.bench.session.next_undo) == (before, "")


def test_steps_by_keys_are_one_entry(qtbot: QtBot, page: EpochsStage) -> None:
    page.lanes.setFocus()
    page.rules.choose(1)
    for _ in range(3):
        QTest.keyPress(page.lanes, Qt.Key.Key_Right, ALT)
    assert rule(page, 1).start_s == 0.53
    QTest.keyRelease(page.lanes, Qt.Key.Key_Right, ALT)
    QTest.keyClick(page.lanes, Qt.Key.Key_Up, ALT)
    assert plan_of(page).epochs.length_s == 1.01
    page.bench.session.undo()
    assert (plan_of(page).epochs.length_s, rule(page, 1).start_s) == (1.0, 0.53)
    page.bench.session.undo()
    assert rule(page, 1).start_s == 0.5
    wait_counted(qtbot, page)


def test_a_drag_of_the_edge_changes_the_length(qtbot: QtBot, page: EpochsStage) -> None:
    rect = page.lanes.rect_of(page.lanes._box_of(EpochKey(1, "delay1")))
    at = QPoint(round(rect.right()) - 1, round(rect.center().y()))
    QTest.mousePress(page.lanes.viewport(), LEFT, pos=at)
    for by in (-8, -16):
        move(page.lanes.viewport(), at + QPoint(by, 0), LEFT)
    assert page.length.value() < 1.0
    QTest.mouseRelease(page.lanes.viewport(), LEFT, pos=at + QPoint(-16, 0))
    length_s = plan_of(page).epochs.length_s
    assert length_s < 1.0
    assert page.bench.session.next_undo == f"Epochs {length_s:g} s long"
    wait_counted(qtbot, page)


# Lanes and table


def test_a_click_in_a_lane_goes_there(page: EpochsStage) -> None:
    session = page.bench.session
    session.set_view(replace(session.view, width_s=4.0))
    QTest.mouseClick(page.lanes.viewport(), LEFT, pos=middle(page, 2, "delay1"))
    row = next(one for one in page.table.model.shown if one.key == EpochKey(2, "delay1"))
    assert session.selected.stretch == row.span
    QTest.mouseClick(page.lanes.viewport(), LEFT, pos=QPoint(10, 2 * page.lanes.lane_px + 4))
    third = next(one for one in page.table.model.shown if one.key == EpochKey(3, "delay1"))
    assert third.span is not None
    assert session.selected.stretch is not None
    assert session.selected.stretch[0] < third.span[0]


def test_lanes_and_table_are_in_step(page: EpochsStage) -> None:
    assert not page.table.isVisible()
    QTest.mouseClick(page.lanes.viewport(), LEFT, pos=middle(page, 3, "delay1"))
    QTest.mouseClick(page.lane_page.switch["table"], LEFT)
    assert page.table.isVisible()
    assert not page.lanes.isVisible()
    assert not page.lane_page.zeros.isVisible()
    assert [one.key for one in page.table.selected] == [EpochKey(3, "delay1")]
    page.table.table.setFocus()
    QTest.keyClick(page.table.table, Qt.Key.Key_Up)
    (chosen,) = page.table.selected
    assert chosen.key != EpochKey(3, "delay1")
    QTest.mouseClick(page.lane_page.switch["lanes"], LEFT)
    assert page.lanes.current_trial == chosen.trial
    assert page.lanes.current_key == chosen.key


def test_zero_and_filters(page: EpochsStage) -> None:
    lane_page = page.lane_page
    zero = [lane_page.zeros.itemText(place) for place in range(lane_page.zeros.count())]
    assert zero == ["first slot", "anchor of the rule", "sample", "cue1", "pulse1", "cue2", "pulse2"]
    assert page.lanes.lanes is not None
    assert page.lanes.lanes.zero == "sample"
    QTest.keyClick(lane_page.zeros, Qt.Key.Key_Down)
    assert page.lanes.lanes.zero == "pulse2"
    page.rules.choose(1)
    assert page.lanes.lanes.zero == "cue1"
    QTest.keyClick(lane_page.shown, Qt.Key.Key_End)
    assert lane_page.count.text() == "1 of 3 trials"
    QTest.keyClick(lane_page.shown, Qt.Key.Key_Home)
    assert lane_page.count.text() == "3 trials"
    offered = [lane_page.conditions.itemText(place) for place in range(lane_page.conditions.count())]
    assert "cue1.item = left" in offered
    while lane_page.conditions.currentText() != "cue1.item = right":
        QTest.keyClick(lane_page.conditions, Qt.Key.Key_Down)
    assert lane_page.count.text() == "1 of 3 trials"


def test_the_rule_list_and_lanes_agree_on_the_rule(page: EpochsStage) -> None:
    QTest.mouseClick(page.lanes.viewport(), LEFT, pos=middle(page, 1, "delay1"))
    assert page.rules.place == 1
    assert page.editor.title.text() == "Rule delay1"
    page.rules.table.setFocus()
    QTest.keyClick(page.rules.table, Qt.Key.Key_Up)
    assert page.lanes.hand.rule == 0
    assert page.rules.model.index(0, 0).data(Qt.ItemDataRole.DecorationRole) is not None


# Conditions, balance, differences


def test_conditions_are_counted_live(qtbot: QtBot, page: EpochsStage) -> None:
    card = page.conditions
    assert card.picked == ("asked",)
    model = card.model

    def rows() -> list[list[str]]:
        return [
            [str(model.index(row, column).data()) for column in range(3)] for row in range(model.rowCount())
        ]

    assert ["delay1", "left", "2 of 2"] in rows()
    assert ["delay1", "right", "1 of 1"] in rows()
    item = next(
        card.columns.item(row)
        for row in range(card.columns.count())
        if card.columns.item(row).text() == "asked"
    )
    card.columns.setCurrentItem(item)
    QTest.keyClick(card.columns, Qt.Key.Key_Space)
    qtbot.waitUntil(lambda: rows() == [["after2", "all", "2 of 3"], ["delay1", "all", "3 of 3"]])
    assert not page.balance.apply.isEnabled()


def test_a_balance_says_what_it_would_leave_out_and_can_be_undone(qtbot: QtBot, page: EpochsStage) -> None:
    card, session = page.balance, page.bench.session
    before = plan_of(page)
    assert card.would.value.text() == "would leave out 1"
    assert card.by.value.text() == "nothing"
    QTest.mouseClick(card.apply, LEFT)
    assert plan_of(page).balance.by == ("asked",)
    assert session.next_undo == "Balance by asked"
    wait_counted(qtbot, page)
    assert card.left_out.value.text() == "1"
    assert page.kept.value.text() == "4 of 6"
    assert str(Fate.BALANCE) in [line.name.text() for line in page._reason_lines]
    assert not card.seed_field.isVisible()
    drawn = card.choices._buttons[Choose.DRAWN.value]
    QTest.mouseClick(drawn, LEFT, pos=QPoint(6, drawn.height() // 2))
    assert plan_of(page).balance.choose is Choose.DRAWN
    assert card.seed_field.isVisibleTo(card)
    card.seed.setFocus()
    QTest.keyClick(card.seed, Qt.Key.Key_Up)
    assert plan_of(page).balance.seed == 2
    QTest.mouseClick(card.end, LEFT)
    assert plan_of(page).balance.by == ()
    while session.next_undo:
        session.undo()
    assert plan_of(page) == before
    wait_counted(qtbot, page)


def test_differences_of_the_chosen_rule_are_numbers(qtbot: QtBot, page: EpochsStage) -> None:
    card = page.selection
    assert card.note.text() == "before balance"
    # Two epochs of the first rule are kept and one is not; of the second all are.
    qtbot.waitUntil(lambda: card.words.text().startswith("after2: "))
    page.rules.choose(1)
    qtbot.waitUntil(lambda: "Nothing can be compared in delay1" in card.words.text())
    assert card._lines == []


# Rules of other plans


def test_slots_of_groups_are_offered_with_their_numbers(
    qtbot: QtBot, page: EpochsStage, study: Study
) -> None:
    plan = read_plan(study.plan).plan
    grouped = tuple(
        replace(slot, group="question", slot=slot.slot.removesuffix("1"), after="")
        for slot in plan.trial
        if slot.slot in ("cue1", "pulse1")
    )
    rules = (EpochRule("late", "cue2", 0.5), EpochRule("delay", "cue1", 0.5, stop_before="pulse1"))
    new = replace(
        plan,
        trial=(plan.trial[0], *grouped),
        groups=(Group("question", (1, 2), (2.0, 9.0)),),
        epochs=replace(plan.epochs, rule=rules),
    )
    page.bench.session.edit_plan("Groups", new)
    for chooser in (page.editor.anchor, page.editor.stop):
        keys = [chooser.itemData(place) for place in range(chooser.count())]
        assert [key for key in keys if key] == ["sample", "cue1", "pulse1", "cue2", "pulse2"]
    assert page.editor.anchor.currentData() == "cue2"
    wait_counted(qtbot, page)


def test_labels_of_every_kind(page: EpochsStage) -> None:
    for text, labels in (
        ("order = first", {"order": "first"}),
        ("uncued = other(cue1.item), order = first", {"uncued": "other(cue1.item)", "order": "first"}),
        ('note = "left, then right"', {"note": "left, then right"}),
    ):
        type_labels(page, text)
        assert rule(page, 0).labels == labels
        assert page.editor.labels.text() == text


def test_labels_that_cannot_be_are_refused_in_one_line(page: EpochsStage) -> None:
    before = plan_of(page)
    for text, part in (
        ("said = log.answer", "the plan has none"),
        ("uncued = other(cue9.item)", "slot.label"),
        ("first", "each label needs a column"),
        ('note = "left', "each label needs a column"),
    ):
        type_labels(page, text)
        said = page.editor.fields["labels"].refusal.text()
        assert part in said
        assert "\n" not in said
        assert plan_of(page) == before
        assert page.editor.labels.text() == text


def type_labels(page: EpochsStage, text: str) -> None:
    field = page.editor.labels
    field.setFocus()
    QTest.keyClick(field, Qt.Key.Key_A, Qt.KeyboardModifier.ControlModifier)
    QTest.keyClicks(field, text)
    QTest.keyClick(field, Qt.Key.Key_Return)


# Fates


@pytest.mark.parametrize("theme", [LIGHT, DARK], ids=["light", "dark"])
def test_what_was_wanted_what_is_wrong_and_what_is_in_doubt_have_shapes_of_their_own(theme: object) -> None:
    assert theme in (LIGHT, DARK)
    groups = (
        (Fate.KEPT,),
        (Fate.BY_HAND, Fate.TRIAL_EXCLUDED),
        (Fate.SET_ASIDE, Fate.BALANCE),
        (Fate.TRIAL_DOUBTFUL,),
        (Fate.TRIAL_INCOMPLETE, Fate.TOUCHES_GAP, Fate.OUTSIDE),
    )
    used = LIGHT if theme is LIGHT else DARK
    shapes = [
        {(pixels(fate_icon(fate, used).pixmap(14, 14).toImage()) != 0xFF000000).tobytes() for fate in group}
        for group in groups
    ]
    assert [len(one) for one in shapes] == [1] * len(groups)
    assert len(set.union(*shapes)) == len(groups)


def test_closing_while_something_is_dragged(page: EpochsStage, caplog: pytest.LogCaptureFixture) -> None:
    start_drag(page, 1, "delay1", 0.5)
    page.close()
    assert caplog.text == ""


def test_workers_are_not_asked_by_a_stage_that_is_not_shown(qtbot: QtBot, page: EpochsStage) -> None:
    page.hide_stage()
    bench: Workbench = page.bench
    bench.session.edit_plan(
        "Shorter", replace(plan_of(page), epochs=replace(plan_of(page).epochs, length_s=0.5))
    )
    wait_learned(qtbot, bench)
    assert not page.is_counted
    page.show_stage()
    wait_counted(qtbot, page)
    assert page.lanes.lanes is not None
    assert page.lanes.lanes.length_s == 0.5
