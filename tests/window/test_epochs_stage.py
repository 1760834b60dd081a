"""The stage Epochs by hand: rules, refusals, candidates, what is left out."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from PySide6.QtCore import QModelIndex, QPoint, Qt
from PySide6.QtTest import QAbstractItemModelTester, QTest
from PySide6.QtWidgets import QPushButton, QWidget
from pytestqt.qtbot import QtBot
from shiboken6 import isValid

from pulsemend.mending.epoch_rows import EpochRow
from pulsemend.model.marks import EpochKey, Marks
from pulsemend.model.plan import EpochRule
from pulsemend.model.plan_file import parse_plan, plan_text, read_plan
from pulsemend.model.vocabulary import Fate, PulseRule
from pulsemend.session.found import Stage
from pulsemend.window.desk import Desk
from pulsemend.window.epoch_table import ANCHOR, DETAIL, FATE, EpochTable
from pulsemend.window.stages.epochs import EpochsStage
from pulsemend.window.theme import DARK, LIGHT
from pulsemend.window.workbench import Workbench
from support.hands import wheel
from support.small_lantern import Study, write_study
from support.stage_bench import LEARN_MS, new_bench, open_only, open_study, wait_learned


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    return write_study(tmp_path_factory.mktemp("epochs"))


@pytest.fixture
def bench(qtbot: QtBot) -> Iterator[Workbench]:
    bench = new_bench()
    yield bench
    for desk in bench.__dict__.get("desks", ()):
        desk.pages[Stage.EPOCHS].close()
        if isValid(desk):
            desk.close()
            desk.deleteLater()
    bench.close()


def put_up(qtbot: QtBot, bench: Workbench) -> EpochsStage:
    desk = Desk({Stage.EPOCHS: lambda: EpochsStage(bench)})
    # A test holds the page only, and a window that nobody holds is gone.
    bench.__dict__.setdefault("desks", []).append(desk)
    desk.resize(1280, 900)
    page = desk.open_stage(Stage.EPOCHS)
    desk.show()
    qtbot.waitExposed(desk)
    assert isinstance(page, EpochsStage)
    return page


def wait_counted(qtbot: QtBot, page: EpochsStage) -> None:
    """Wait until lanes and table show the plan and marks of this moment."""
    wait_learned(qtbot, page.bench)
    qtbot.waitUntil(lambda: page.is_counted, timeout=LEARN_MS)


@pytest.fixture
def page(qtbot: QtBot, bench: Workbench, study: Study, tmp_path: Path) -> EpochsStage:
    open_study(bench, study, tmp_path)
    page = put_up(qtbot, bench)
    wait_counted(qtbot, page)
    page.lane_page.switch["table"].click()
    return page


def press(qtbot: QtBot, widget: QWidget, key: Qt.Key, times: int = 1) -> None:
    for _ in range(times):
        QTest.keyClick(widget, key)


def type_over(qtbot: QtBot, widget: QWidget, text: str) -> None:
    """Replace what a field holds, as a person does, and leave it by Return."""
    widget.setFocus()
    QTest.keyClick(widget, Qt.Key.Key_A, Qt.KeyboardModifier.ControlModifier)
    QTest.keyClicks(widget, text)
    QTest.keyClick(widget, Qt.Key.Key_Return)


def click(qtbot: QtBot, button: QPushButton) -> None:
    QTest.mouseClick(button, Qt.MouseButton.LeftButton)


def rule(page: EpochsStage, place: int) -> EpochRule:
    plan = page.bench.session.plan
    assert plan is not None
    return plan.epochs.rule[place]


def select(qtbot: QtBot, page: EpochsStage, *wanted: tuple[int, str]) -> None:
    """Choose candidates in the table by clicks."""
    table = page.table.table
    table.clearSelection()
    for row, one in enumerate(page.table.model.shown):
        if (one.trial, one.rule) in wanted:
            index = page.table.model.index(row, 1)
            table.scrollTo(index)
            QTest.mouseClick(
                table.viewport(),
                Qt.MouseButton.LeftButton,
                Qt.KeyboardModifier.ControlModifier,
                table.visualRect(index).center(),
            )
    assert len(page.table.selected) == len(wanted)


def cell(page: EpochsStage, trial: int, name: str, column: int) -> str:
    model = page.table.model
    row = next(i for i, one in enumerate(model.shown) if (one.trial, one.rule) == (trial, name))
    return str(model.index(row, column).data())


# Rules


def test_rules_and_counts_stand_side_by_side(page: EpochsStage) -> None:
    model = page.rules.model
    rows = [[model.index(row, column).data() for column in range(3)] for row in range(model.rowCount())]
    assert rows == [["after2", "pulse2 \u22120.1 s", "2 of 3"], ["delay1", "cue1 +0.5 s", "3 of 3"]]
    assert page.kept.value.text() == "5 of 6"
    assert page.samples.value.text() == "1000 at 1000 Hz"


def test_a_typed_start_is_an_entry_with_a_name_and_is_counted(qtbot: QtBot, page: EpochsStage) -> None:
    page.rules.table.setFocus()
    press(qtbot, page.rules.table, Qt.Key.Key_Down)
    assert page.editor.title.text() == "Rule delay1"
    type_over(qtbot, page.editor.start, "2")
    assert rule(page, 1).start_s == 2.0
    assert page.bench.session.next_undo == "Rule delay1: start 2 s"
    wait_counted(qtbot, page)
    # Two seconds after the cue there is a pulse in every trial, whose gap is refused.
    assert cell(page, 1, "delay1", FATE) == str(Fate.TOUCHES_GAP)
    assert cell(page, 1, "delay1", DETAIL).startswith("pulse1 at ")
    page.bench.session.undo()
    assert page.editor.start.value() == 0.5


def test_steps_of_one_field_are_one_entry(qtbot: QtBot, page: EpochsStage) -> None:
    page.editor.start.setFocus()
    press(qtbot, page.editor.start, Qt.Key.Key_Up, 3)
    assert rule(page, 0).start_s == pytest.approx(0.05)
    page.bench.session.undo()
    assert rule(page, 0).start_s == -0.1
    assert page.bench.session.next_undo == ""


def test_a_refused_start_says_why_beside_the_field_and_changes_nothing(
    qtbot: QtBot, page: EpochsStage
) -> None:
    before = page.bench.session.plan
    type_over(qtbot, page.editor.start, "0.0001")
    said = page.editor.fields["start_s"].refusal
    assert said.isVisible()
    assert "no whole number of output samples at 1000 Hz" in said.text()
    assert "allowed: 0 s | 0.001 s" in said.text()
    assert "plan.toml" not in said.text()
    assert page.editor.start.value() == -0.1
    assert page.editor.start.accessibleDescription() == said.text()
    assert page.bench.session.plan == before
    assert page.bench.session.next_undo == ""
    type_over(qtbot, page.editor.start, "0.1")
    assert not said.isVisible()
    assert rule(page, 0).start_s == 0.1


def test_a_refused_name_and_label_stay_to_be_corrected(qtbot: QtBot, page: EpochsStage) -> None:
    type_over(qtbot, page.editor.name, "delay1")
    assert "earlier rule" in page.editor.fields["name"].refusal.text()
    assert page.editor.name.text() == "delay1"
    type_over(qtbot, page.editor.labels, "asked = cue3.item")
    said = page.editor.fields["labels"].refusal.text()
    assert "cue1.item" in said
    assert "cue2.item" in said
    assert rule(page, 0).labels == {"asked": "cue2.item"}
    type_over(qtbot, page.editor.labels, "asked = cue1.item, other = cue2.item")
    assert rule(page, 0).labels == {"asked": "cue1.item", "other": "cue2.item"}
    type_over(qtbot, page.editor.name, "late")
    assert rule(page, 0).name == "late"
    assert page.editor.title.text() == "Rule late"


def test_choices_by_keys(qtbot: QtBot, page: EpochsStage) -> None:
    QTest.keyClick(page.editor.anchor, Qt.Key.Key_Home)
    assert rule(page, 0).anchor == "sample"
    QTest.keyClick(page.editor.stop, Qt.Key.Key_End)
    assert rule(page, 0).stop_before == "pulse2"
    refuse = page.editor.pulse._buttons[PulseRule.REFUSE.value]
    refuse.setFocus()
    QTest.keyClick(refuse, Qt.Key.Key_Space)
    assert rule(page, 0).pulse is PulseRule.REFUSE
    type_over(qtbot, page.editor.before, "100")
    type_over(qtbot, page.editor.after, "50")
    assert rule(page, 0).clear_ms == (100.0, 50.0)
    type_over(qtbot, page.editor.count, "3")
    assert rule(page, 0).count == 3


def test_each_choice_about_gaps_has_its_count_beside_it(qtbot: QtBot, page: EpochsStage) -> None:
    evidence = page.editor.pulse._evidence
    qtbot.waitUntil(lambda: evidence["refuse"].text() == "keeps 0")
    assert evidence["accept filled"].text() == "keeps 2"


def test_columns_of_the_log_are_offered_as_soon_as_they_are_known(page: EpochsStage) -> None:
    """A log is read after the rule is shown."""
    assert "log." not in page.editor.known_labels.text()
    page.editor.show_log_columns(["log.correct", "log.reaction_s"])
    assert "log.correct, log.reaction_s. Or other(column)" in page.editor.known_labels.text()


def test_add_copy_move_remove(qtbot: QtBot, page: EpochsStage) -> None:
    def names() -> list[str]:
        plan = page.bench.session.plan
        assert plan is not None
        return [one.name for one in plan.epochs.rule]

    click(qtbot, page.rules.buttons["add"])
    assert names() == ["after2", "epoch1", "delay1"]
    assert page.editor.name.hasFocus()
    assert page.editor.title.text() == "Rule epoch1"
    click(qtbot, page.rules.buttons["down"])
    assert names() == ["after2", "delay1", "epoch1"]
    assert not page.rules.buttons["down"].isEnabled()
    page.rules.move_wanted.emit(1)
    assert page.editor.title.text() == "Rule epoch1"
    assert rule(page, page._place).name == "epoch1"
    click(qtbot, page.rules.buttons["copy"])
    assert names() == ["after2", "delay1", "epoch1", "epoch2"]
    for _ in range(3):
        click(qtbot, page.rules.buttons["remove"])
    assert names() == ["after2"]
    click(qtbot, page.rules.buttons["remove"])
    assert names() == ["after2"]
    assert "at least one" in page.rules.refusal.text()
    assert page.bench.session.next_undo == "Remove rule delay1"


def test_plan_without_slots_and_rules_is_shown(
    qtbot: QtBot, bench: Workbench, study: Study, tmp_path: Path
) -> None:
    """The draft of a recording whose trials could not be made out."""
    path = open_study(bench, study, tmp_path)
    page = put_up(qtbot, bench)
    wait_learned(qtbot, bench)
    bare = parse_plan('pulsemend = 1\n[pulses]\ntimes = "none"\n[epochs]\nlength_s = 1.0\n')
    bench.session.open_plan(bare, path)
    qtbot.waitUntil(lambda: bool(bench.problem), timeout=LEARN_MS)
    assert "has no slot" in bench.problem
    assert not page.editor.isVisible()
    assert not page.rules.buttons["remove"].isEnabled()
    assert not page.rules.buttons["copy"].isEnabled()
    click(qtbot, page.rules.buttons["add"])
    assert "has no slot" in page.rules.refusal.text()
    # With slots the first rule can be added, and is the one that is edited.
    slots = read_plan(study.plan).plan
    bench.session.open_plan(
        parse_plan(plan_text(replace(slots, epochs=replace(slots.epochs, rule=())))), path
    )
    click(qtbot, page.rules.buttons["add"])
    assert page.editor.isVisible()
    assert rule(page, 0).name == "epoch1"
    wait_learned(qtbot, bench)


def test_length_of_the_set(qtbot: QtBot, page: EpochsStage) -> None:
    type_over(qtbot, page.length, "0.5")
    plan = page.bench.session.plan
    assert plan is not None
    assert plan.epochs.length_s == 0.5
    assert page.samples.value.text() == "500 at 1000 Hz"
    type_over(qtbot, page.length, "0.50004")
    assert "whole number" in page.length_field.refusal.text()
    assert page.length.value() == 0.5


def test_the_wheel_changes_no_field_without_the_focus(qtbot: QtBot, page: EpochsStage) -> None:
    page.rules.table.setFocus()
    before = page.bench.session.plan
    for field in (page.editor.start, page.editor.anchor):
        assert field.focusPolicy() is Qt.FocusPolicy.StrongFocus
        wheel(field, field.rect().center(), QPoint(0, 120))
    assert page.bench.session.plan == before
    page.editor.start.setFocus()
    wheel(page.editor.start, page.editor.start.rect().center(), QPoint(0, 120))
    assert page.bench.session.plan != before


# Candidates


def test_candidates_in_order_of_time_with_their_fate(page: EpochsStage) -> None:
    shown = page.table.model.shown
    assert [row.near_s for row in shown] == sorted(row.near_s for row in shown)
    assert cell(page, 2, "after2", FATE) == str(Fate.NO_ANCHOR)
    assert cell(page, 2, "after2", ANCHOR) == "none"
    assert cell(page, 2, "after2", DETAIL) == "no pulse2 in this trial"
    assert [line.name.text() for line in page._reason_lines] == [str(Fate.NO_ANCHOR)]


def test_filters_and_orders(qtbot: QtBot, page: EpochsStage) -> None:
    table = page.table
    QTest.keyClicks(table.fates, "no anchor")
    assert [(row.trial, row.rule) for row in table.model.shown] == [(2, "after2")]
    QTest.keyClick(table.fates, Qt.Key.Key_Home)
    QTest.keyClicks(table.rules, "delay1")
    assert [row.trial for row in table.model.shown] == [1, 2, 3]
    QTest.keyClick(table.rules, Qt.Key.Key_Home)
    assert len(table.model.shown) == 6
    table.table.sortByColumn(ANCHOR, Qt.SortOrder.DescendingOrder)
    assert table.model.shown[0].trial == 3
    table.table.sortByColumn(FATE, Qt.SortOrder.DescendingOrder)
    assert table.model.shown[0].fate is Fate.NO_ANCHOR
    assert table.orders.currentText() == "fate"


def test_return_and_double_click_go_there(qtbot: QtBot, page: EpochsStage) -> None:
    session, table = page.bench.session, page.table.table
    session.set_view(replace(session.view, width_s=4.0))
    row = next(i for i, one in enumerate(page.table.model.shown) if (one.trial, one.rule) == (2, "delay1"))
    one = page.table.model.shown[row]
    assert one.span is not None
    select(qtbot, page, (2, "delay1"))
    table.setFocus()
    QTest.keyClick(table, Qt.Key.Key_Return)
    assert session.selected.stretch == one.span
    assert session.view.width_s == 4.0
    assert session.view.start_s + 2.0 == pytest.approx(sum(one.span) / 2 / 5000.0)
    other = next(i for i, two in enumerate(page.table.model.shown) if two.trial == 1)
    at = table.visualRect(page.table.model.index(other, 1)).center()
    QTest.mouseClick(table.viewport(), Qt.MouseButton.LeftButton, pos=at)
    QTest.mouseDClick(table.viewport(), Qt.MouseButton.LeftButton, pos=at)
    assert session.selected.stretch == page.table.model.shown[other].span


def test_a_candidate_without_anchor_is_gone_to_at_its_trial(qtbot: QtBot, page: EpochsStage) -> None:
    select(qtbot, page, (2, "after2"))
    QTest.keyClick(page.table.table, Qt.Key.Key_Return)
    (row,) = page.table.selected
    view = page.bench.session.view
    assert view.start_s <= row.near_s <= view.start_s + view.width_s


def test_left_out_by_hand_and_taken_back(qtbot: QtBot, page: EpochsStage) -> None:
    session, table = page.bench.session, page.table
    assert not table.leave_out.isEnabled()
    select(qtbot, page, (1, "delay1"), (3, "delay1"))
    assert not table.take_back.isEnabled()
    click(qtbot, table.leave_out)
    assert session.marks.epochs_left_out == (EpochKey(1, "delay1"), EpochKey(3, "delay1"))
    assert session.next_undo == "Leave out 2 epochs by hand"
    qtbot.waitUntil(lambda: cell(page, 3, "delay1", FATE) == str(Fate.BY_HAND))
    # What was selected still is, though every row is a new one.
    assert {row.key for row in table.selected} == set(session.marks.epochs_left_out)
    assert not table.leave_out.isEnabled()
    click(qtbot, table.take_back)
    assert not session.marks.epochs_left_out
    session.undo()
    session.undo()
    assert session.marks == Marks()


def test_trials_excluded_by_hand(qtbot: QtBot, page: EpochsStage) -> None:
    session, table = page.bench.session, page.table
    select(qtbot, page, (3, "delay1"), (3, "after2"))
    click(qtbot, table.exclude)
    assert session.marks.trials_excluded == (3,)
    assert session.next_undo == "Exclude trial 3"
    qtbot.waitUntil(lambda: cell(page, 3, "after2", FATE) == str(Fate.TRIAL_EXCLUDED))
    assert page.excluded.value.text() == "1"
    click(qtbot, table.include)
    assert not session.marks.trials_excluded


def many_rows(count: int) -> list[EpochRow]:
    fates = list(Fate)
    return [
        EpochRow(i, f"rule{i % 7}", 1, float(i), float(i), (i, i + 1), fates[i % len(fates)], "")
        for i in range(count)
    ]


def test_five_thousand_rows(qtbot: QtBot) -> None:
    table = EpochTable(LIGHT)
    qtbot.addWidget(table)
    table.show_rows(many_rows(5000), Marks())
    table.show()
    assert table.model.rowCount() == 5000
    table.table.selectAll()
    # Whatever the order and the filter, the same epochs stay selected.
    table.table.sortByColumn(FATE, Qt.SortOrder.DescendingOrder)
    assert len(table.selected) == 5000
    assert table.model.shown[0].fate is list(Fate)[-1]
    table.show_only(Fate.KEPT)
    assert {row.fate for row in table.selected} == {row.fate for row in table.model.shown} == {Fate.KEPT}


def test_the_table_keeps_the_rules_of_the_toolkit(qtbot: QtBot) -> None:
    table = EpochTable(LIGHT)
    qtbot.addWidget(table)
    fatal = QAbstractItemModelTester.FailureReportingMode.Fatal
    tester = QAbstractItemModelTester(table.model, fatal)
    table.show_rows(many_rows(40), Marks())
    table.table.sortByColumn(DETAIL, Qt.SortOrder.AscendingOrder)
    table.show_only(Fate.OUTSIDE)
    table.show_rows((), Marks())
    assert table.model.rowCount(QModelIndex()) == 0
    assert tester.failureReportingMode() is fatal


# Where there is nothing


def test_empty_states_say_what_to_do(qtbot: QtBot, bench: Workbench, study: Study, tmp_path: Path) -> None:
    page = put_up(qtbot, bench)
    assert "Open a recording" in page.empty.text.text()
    assert not page.set_card.isVisible()
    open_only(bench, study, tmp_path / "plan.toml")
    assert "no plan yet" in page.empty.text.text()
    open_study(bench, study, tmp_path)
    assert page.set_card.isVisible()
    wait_learned(qtbot, bench)
    assert page.pages.currentWidget() is page.lane_page


def test_no_trial_is_explained(qtbot: QtBot, page: EpochsStage) -> None:
    session = page.bench.session
    assert session.plan is not None
    markers = tuple(
        replace(marker, code=f"lamp {place}") for place, marker in enumerate(session.plan.markers)
    )
    session.edit_plan("Another code", replace(session.plan, markers=markers))
    qtbot.waitUntil(lambda: page.pages.currentWidget() is page.empty)
    wait_learned(qtbot, page.bench)
    assert "No trial was found" in page.empty.text.text()
    assert "(lamp 0)" in page.empty.text.text()


def test_a_problem_of_the_plan_is_said(qtbot: QtBot, page: EpochsStage) -> None:
    session = page.bench.session
    assert session.plan is not None
    channels = replace(session.plan.channels, reference=("Nowhere",))
    session.edit_plan("Reference", replace(session.plan, channels=channels))
    qtbot.waitUntil(lambda: "Nowhere" in page.empty.text.text())
    assert page.pages.currentWidget() is page.empty


def test_another_theme_keeps_everything(page: EpochsStage) -> None:
    page.set_theme(DARK)
    assert page.table.model.index(0, FATE).data(Qt.ItemDataRole.DecorationRole) is not None
    assert len(page.table.model.shown) == 6


def test_closing_leaves_no_listener(
    qtbot: QtBot, bench: Workbench, page: EpochsStage, caplog: pytest.LogCaptureFixture
) -> None:
    (desk,) = bench.__dict__["desks"]
    page.close()
    desk.deleteLater()
    qtbot.waitUntil(lambda: not isValid(page.settings) and not isValid(page.picture))
    plan = bench.session.plan
    assert plan is not None
    with qtbot.waitSignal(bench.learned_changed, timeout=LEARN_MS):
        bench.session.edit_plan("Shorter", replace(plan, epochs=replace(plan.epochs, length_s=0.5)))
        bench.session.edit_marks("Without one", Marks(trials_excluded=(1,)))
    assert caplog.text == ""
