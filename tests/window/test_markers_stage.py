"""The stage Markers by hand: roles, labels, cures, trials, the log, and its pictures."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest
from PySide6.QtCore import QPoint, QPointF, Qt
from PySide6.QtTest import QAbstractItemModelTester, QTest
from PySide6.QtWidgets import QFileDialog, QPushButton, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.mending.marker_edits import own_labels
from pulsemend.mending.marker_view import TrialState
from pulsemend.model.marks import MarkerKey
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan, plan_text
from pulsemend.model.vocabulary import Role
from pulsemend.session.changed import Changed
from pulsemend.session.found import Stage
from pulsemend.session.stages import stage_states
from pulsemend.window.desk import Desk
from pulsemend.window.marker_hands import ItemLists
from pulsemend.window.marker_watch import MarkerWatch
from pulsemend.window.stages.markers import MarkersStage
from pulsemend.window.tables import RowsTable
from pulsemend.window.theme import DARK
from pulsemend.window.workbench import Workbench
from support.marker_study import (
    DOUBLED_TRIAL,
    LOST_TRIAL,
    N_TRIALS,
    PLAN,
    RATE_HZ,
    STRAY_S,
    UNLOGGED_TRIAL,
    MarkerStudy,
    write_marker_study,
)
from support.stage_bench import LEARN_MS, new_bench


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> MarkerStudy:
    return write_marker_study(tmp_path_factory.mktemp("markers"))


@pytest.fixture
def bench(qtbot: QtBot) -> Iterator[Workbench]:
    bench = new_bench()
    yield bench
    for desk, watch in bench.__dict__.get("desks", ()):
        desk.pages[Stage.MARKERS].close()
        watch.close()
        desk.close()
        desk.deleteLater()
    bench.close()


def put_up(qtbot: QtBot, bench: Workbench) -> MarkersStage:
    watch = MarkerWatch(bench)
    desk = Desk({Stage.MARKERS: lambda: MarkersStage(bench, watch)})
    # A test holds the page only, and a window that nobody holds is gone.
    bench.__dict__.setdefault("desks", []).append((desk, watch))
    desk.resize(1280, 1400)
    page = desk.open_stage(Stage.MARKERS)
    desk.show()
    qtbot.waitExposed(desk)
    desk.activateWindow()
    qtbot.waitUntil(desk.isActiveWindow)
    assert isinstance(page, MarkersStage)
    return page


def wait(qtbot: QtBot, page: MarkersStage) -> None:
    """Wait until everything shown is of the plan and marks of now."""
    bench = page.bench

    def settled() -> bool:
        survey = page._watch.survey
        learned = bench.learned
        return (
            page._watch.is_current
            and survey is not None
            and not bench.jobs.under_way
            and (bench.problem != "" or (learned is not None and survey.decision is learned.decision))
        )

    qtbot.waitUntil(settled, timeout=LEARN_MS)


@pytest.fixture
def page(qtbot: QtBot, bench: Workbench, study: MarkerStudy, tmp_path: Path) -> MarkersStage:
    study.open(bench.session, tmp_path)
    page = put_up(qtbot, bench)
    wait(qtbot, page)
    return page


def plan_of(page: MarkersStage) -> Plan:
    plan = page.bench.session.plan
    assert plan is not None
    return plan


def click_row(table: RowsTable, row: int, *, more: bool = False) -> None:
    index = table.model().index(row, 0)
    table.scrollTo(index)
    keys = Qt.KeyboardModifier.ControlModifier if more else Qt.KeyboardModifier.NoModifier
    QTest.mouseClick(table.viewport(), Qt.MouseButton.LeftButton, keys, table.visualRect(index).center())


def choose(page: MarkersStage, code: str, *, more: bool = False) -> None:
    rows = [row.code for row in page.codes.model.rows]
    click_row(page.codes.table, rows.index(code), more=more)


def fault(page: MarkersStage, key: str) -> None:
    click_row(page.faults.table, [one.key for one in page.faults.model.faults].index(key))


def click(button: QPushButton) -> None:
    assert button.isEnabled()
    assert button.isVisible()
    QTest.mouseClick(button, Qt.MouseButton.LeftButton)


def type_over(widget: QWidget, text: str) -> None:
    widget.setFocus()
    QTest.keyClick(widget, Qt.Key.Key_A, Qt.KeyboardModifier.ControlModifier)
    QTest.keyClicks(widget, text)
    QTest.keyClick(widget, Qt.Key.Key_Return)


def in_view(page: MarkersStage, time_s: float) -> bool:
    view = page.bench.session.view
    return view.start_s <= time_s <= view.start_s + view.width_s


def state(page: MarkersStage) -> tuple[int, str]:
    found = next(one for one in stage_states(page.bench.session) if one.stage is Stage.MARKERS)
    return found.count, found.words


def cells(page: MarkersStage) -> list[list[str]]:
    model = page.codes.model
    return [[model.text(row, column) for column in range(3)] for row in range(model.n_rows())]


def items(lists: ItemLists) -> list[str]:
    return [item.what for item in lists.model.items]


# Codes


def test_all_codes_stand_in_the_table(page: MarkersStage) -> None:
    assert cells(page) == [
        ["S 1", "sample", str(N_TRIALS)],
        ["S 0", "other", str(3 * N_TRIALS)],
        ["S 12", "cue", "7"],
        ["S 31", "probe", str(N_TRIALS)],
        ["S 11", "cue", "6"],
        ["S 99", "other", "0"],
    ]
    assert "1 code of the plan not in this recording." in page.codes.advice.text()
    assert "1 code not in the plan: other." in page.codes.advice.text()
    choose(page, "S 99")
    assert page.codes.evidence.text() == "Not in this recording."
    choose(page, "S 0")
    assert "Not in the plan: counts as other." in page.codes.evidence.text()


def test_the_models_keep_the_rules_of_qt(page: MarkersStage) -> None:
    for model in (page.codes.model, page.faults.model, page.trials.lists.model):
        QAbstractItemModelTester(model, QAbstractItemModelTester.FailureReportingMode.Fatal)
    choose(page, "S 0")
    QTest.keyClick(page.codes.role, Qt.Key.Key_End)
    assert cells(page)[0][0] == "S 0"
    page.bench.session.undo()
    assert cells(page)[0][0] == "S 1"


def test_a_role_by_keyboard_names_a_code_in_the_plan_and_can_be_undone(
    qtbot: QtBot, page: MarkersStage
) -> None:
    choose(page, "S 0")
    page.codes.role.setFocus()
    # One further than "other" is "ignore".
    QTest.keyClick(page.codes.role, Qt.Key.Key_Down)
    assert plan_of(page).names("S 0")
    assert plan_of(page).role_of("S 0") is Role.IGNORE
    assert page.bench.session.next_undo == "S 0: role ignore"
    assert page.codes.chosen == ["S 0"]
    assert cells(page)[1] == ["S 0", "ignore", str(3 * N_TRIALS)]
    assert '[markers."S 0"]' in plan_text(plan_of(page))
    click(page.codes.take_out)
    assert not plan_of(page).names("S 0")
    page.bench.session.undo()
    page.bench.session.undo()
    assert plan_of(page) == parse_plan(PLAN).plan


def test_several_codes_get_a_role_at_once(page: MarkersStage) -> None:
    choose(page, "S 0")
    choose(page, "S 99", more=True)
    assert page.codes.name.text() == "2 codes"
    assert not page.codes.labels_field.isVisible()
    QTest.keyClick(page.codes.role, Qt.Key.Key_Down)
    assert {plan_of(page).role_of(code) for code in ("S 0", "S 99")} == {Role.IGNORE}
    assert page.bench.session.next_undo == "2 codes: role ignore"


def test_a_role_that_the_slots_need_is_not_given_away(page: MarkersStage) -> None:
    choose(page, "S 31")
    QTest.keyClick(page.codes.role, Qt.Key.Key_Down)
    assert plan_of(page).role_of("S 31") is Role.PROBE
    assert page.codes.role.currentText() == "probe"
    assert "no code under [markers] has this role" in page.codes.role_field.refusal.text()
    choose(page, "S 11")
    assert not page.codes.role_field.refusal.isVisible()


def test_labels_are_typed_as_one_line(page: MarkersStage) -> None:
    choose(page, "S 11")
    assert page.codes.labels.text() == "item = left"
    type_over(page.codes.labels, "item = left, side = 1")
    assert own_labels(plan_of(page), "S 11") == {"item": "left", "side": "1"}
    assert page.bench.session.next_undo == "S 11: labels"
    type_over(page.codes.labels, "item left")
    assert own_labels(plan_of(page), "S 11") == {"item": "left", "side": "1"}
    assert page.codes.labels_field.refusal.text() == (
        "Not taken over: cannot be read; allowed: name = value, name = value; received: item left"
    )
    page.bench.session.undo()
    choose(page, "S 12")
    choose(page, "S 11")
    assert page.codes.labels.text() == "item = left"


def test_undecided_codes_stand_on_top_and_the_rest_still_works(qtbot: QtBot, page: MarkersStage) -> None:
    choose(page, "S 0")
    page.codes.role.setFocus()
    QTest.keyClick(page.codes.role, Qt.Key.Key_End)
    assert cells(page)[0] == ["S 0", "undecided", str(3 * N_TRIALS)]
    assert page.codes.note.text() == "1 undecided"
    wait(qtbot, page)
    assert page.bench.problem
    assert page.trials.found.value.text() == str(N_TRIALS)
    assert page.log.joined.value.text() == f"{N_TRIALS - 1} of {N_TRIALS}"
    assert "Code 'S 0' has no role yet." in state(page)[1]


# Faults


def test_a_fault_is_gone_to_and_its_cure_accepted_and_taken_back(
    qtbot: QtBot, page: MarkersStage, study: MarkerStudy
) -> None:
    assert page.faults.note.text() == "2 open"
    assert state(page)[0] == 4  # an absent code, two cures, a doubtful trial
    fault(page, "doubled marker S 12")
    cue_s = study.cues_s[DOUBLED_TRIAL - 1]
    assert in_view(page, cue_s)
    assert "comes again" in page.faults.what.text()
    click(page.faults.accept)
    assert page.faults.table.hasFocus()
    assert page.bench.session.marks.cures_accepted == ("doubled marker S 12",)
    assert page.bench.session.next_undo == "Accept the cure of doubled marker S 12"
    wait(qtbot, page)
    assert page.trials.lines[TrialState.DOUBTFUL].value.text() == "0"
    assert state(page)[0] == 2
    assert page.faults.current is not None
    assert page.faults.current.key == "doubled marker S 12"
    click(page.faults.back)
    wait(qtbot, page)
    assert page.trials.lines[TrialState.DOUBTFUL].value.text() == "1"
    page.bench.session.undo()
    assert page.bench.session.marks.cures_accepted == ("doubled marker S 12",)


def test_a_refused_cure_is_decided_too(qtbot: QtBot, page: MarkersStage) -> None:
    fault(page, "zero codes of S")
    click(page.faults.refuse)
    wait(qtbot, page)
    assert page.faults.table.hasFocus()  # not the opposite decision, which the next Space would take
    assert page.faults.model.text(0, 0) == "refused"
    assert "zero codes" not in state(page)[1]
    assert ["S 0", "other", str(3 * N_TRIALS)] in cells(page)


def test_places_of_a_fault_one_after_the_other(page: MarkersStage) -> None:
    fault(page, "zero codes of S")
    found = page.faults.current
    assert found is not None
    assert not page.faults.previous.isEnabled()
    for place in (1, 2):
        click(page.faults.following)
        assert in_view(page, found.at[place] / RATE_HZ)
    assert page.faults.place.text().startswith(f"Place 3 of {len(found.at)}: ")
    click(page.faults.previous)
    assert page.faults.place.text().startswith("Place 2 of")


def test_a_fault_without_a_cure_offers_none(page: MarkersStage) -> None:
    fault(page, "absent code S 99")
    assert not page.faults.accept.isVisible()
    assert not page.faults.following.isVisible()


# Trials


def test_trials_are_counted_and_doubtful_ones_listed(page: MarkersStage, study: MarkerStudy) -> None:
    shown = {name: line.value.text() for name, line in page.trials.lines.items()}
    assert shown == {"complete": "10", "incomplete": "1", "doubtful": "1", "set aside": "0"}
    assert page.trials.extra.value.text() == "2"
    lists = page.trials.lists
    assert lists.shown == "doubtful"
    assert items(lists) == [f"trial {DOUBLED_TRIAL}: cue at 19.352 s or 19.360 s"]
    click_row(lists.table, 0)
    assert in_view(page, study.cues_s[DOUBLED_TRIAL - 1])
    lists.chooser.setFocus()
    QTest.keyClick(lists.chooser, Qt.Key.Key_Down)
    assert items(lists) == [f"trial {LOST_TRIAL}: no probe"]
    QTest.keyClick(lists.table, Qt.Key.Key_Down)
    QTest.keyClick(lists.table, Qt.Key.Key_Return)
    assert in_view(page, study.cues_s[LOST_TRIAL - 1])


def test_a_marker_of_no_trial_is_ignored_and_counted_again(qtbot: QtBot, page: MarkersStage) -> None:
    lists = page.trials.lists
    lists.choose("extra")
    assert not page.trials.ignore.isEnabled()
    click_row(lists.table, 1)
    assert in_view(page, STRAY_S)
    click(page.trials.ignore)
    assert page.bench.session.marks.markers_ignored == (MarkerKey(round(STRAY_S * RATE_HZ), "S 31"),)
    assert page.bench.session.next_undo == "Ignore marker S 31"
    wait(qtbot, page)
    assert lists.table.hasFocus()
    assert page.trials.extra.value.text() == "1"
    lists.choose("ignored")
    click_row(lists.table, 0)
    click(page.trials.count_again)
    assert not page.bench.session.marks.markers_ignored
    wait(qtbot, page)
    assert page.trials.extra.value.text() == "2"


# Log


def test_the_log_says_how_it_was_joined(page: MarkersStage, study: MarkerStudy) -> None:
    card = page.log
    assert card.file.text() == "sub-lt01_task-markers_log.tsv"
    assert card.columns.text() == f"{N_TRIALS} rows; columns number, cue_s"
    assert card.joined.value.text() == f"{N_TRIALS - 1} of {N_TRIALS}"
    assert card.by.value.text() == "time"
    assert card.drift.value.text().startswith("+50.")
    assert card.drift.value.text().endswith(" ppm")
    assert card.offset.value.text().startswith("\u22124710.7")
    assert items(card.lists) == [f"row {N_TRIALS}"]
    click_row(card.lists.table, 0)
    assert in_view(page, 77.0)
    card.lists.choose("trials")
    assert items(card.lists) == [f"trial {UNLOGGED_TRIAL}"]
    assert not card.exclude.isVisible()


def test_a_row_is_excluded_and_joined_again(qtbot: QtBot, page: MarkersStage) -> None:
    card = page.log
    click_row(card.lists.table, 0)
    click(card.exclude)
    assert page.bench.session.marks.log_rows_excluded == (N_TRIALS,)
    wait(qtbot, page)
    assert card.lists.shown == "trials"
    card.lists.choose("excluded")
    click_row(card.lists.table, 0)
    click(card.include)
    assert not page.bench.session.marks.log_rows_excluded


def test_another_log_is_chosen(
    qtbot: QtBot, page: MarkersStage, study: MarkerStudy, monkeypatch: pytest.MonkeyPatch
) -> None:
    other = study.recording.parent / "other.tsv"
    other.write_bytes(b"cue_s\n1.0\n")
    monkeypatch.setattr(QFileDialog, "getOpenFileName", lambda *_: (str(other), ""))
    click(page.log.other)
    assert page.bench.session.marks.log_file == "other.tsv"
    wait(qtbot, page)
    assert page.log.problem.isVisible()
    assert "The log was not joined." in state(page)[1]
    page.show_picture("Log")
    assert page.log_picture.empty.isVisible()
    click(page.log.as_planned)
    wait(qtbot, page)
    assert page.log.joined.isVisible()
    monkeypatch.setattr(QFileDialog, "getOpenFileName", lambda *_: ("", ""))
    click(page.log.other)
    assert page.bench.session.marks.log_file == ""


def test_without_log_the_card_says_what_to_write(
    qtbot: QtBot, bench: Workbench, study: MarkerStudy, tmp_path: Path
) -> None:
    study.open(bench.session, tmp_path)
    start = PLAN.index("[log]")
    text = PLAN[:start] + PLAN[PLAN.index("[pulses]") :]
    bench.session.open_plan(parse_plan(text), None)
    page = put_up(qtbot, bench)
    wait(qtbot, page)
    assert "[log]" in page.log.advice.text()
    assert not page.log.other.isVisible()
    page.show_picture("Log")
    assert "[log]" in page.log_picture.empty.text.text()


# Pictures


def switch(page: MarkersStage, name: str) -> None:
    made = next(one for one in page.switch.buttons() if one.text() == name)
    QTest.mouseClick(made, Qt.MouseButton.LeftButton)
    assert page.shown_picture == name


def test_the_pictures_are_switched_and_share_what_is_chosen(page: MarkersStage) -> None:
    choose(page, "S 31")
    switch(page, "Codes")
    assert page.table.isVisible()
    assert page.table.selected_rows() == page.codes.table.selected_rows()
    click_row(page.table, 4)
    assert page.codes.chosen == ["S 11"]
    assert page.codes.name.text() == "S 11"
    for name, widget in (
        ("Intervals", page.intervals),
        ("Log", page.log_picture.residuals),
        ("Timeline", page.timeline),
    ):
        switch(page, name)
        assert widget.isVisible()
    page.set_theme(DARK)
    assert page.picture.grab().width() > 0


def test_a_click_on_the_timeline_goes_there(page: MarkersStage, study: MarkerStudy) -> None:
    timeline = page.timeline
    cue_s = study.cues_s[7]
    at = QPoint(round(timeline.x_of(cue_s)), round(timeline.row_middle("S 11")))
    QTest.mouseClick(timeline.viewport(), Qt.MouseButton.LeftButton, pos=at)
    assert page.codes.chosen == ["S 11"]
    selected = page.bench.session.selected.stretch
    assert selected == (round(cue_s * RATE_HZ), round(cue_s * RATE_HZ) + 1)
    assert in_view(page, cue_s)
    start, stop = timeline._view_s
    assert (start, stop - start) == pytest.approx(
        (page.bench.session.view.start_s, page.bench.session.view.width_s)
    )


def test_intervals_with_the_plans_limits(page: MarkersStage) -> None:
    switch(page, "Intervals")
    said = page.intervals.said.toolTip()
    assert said.startswith(f"sample to cue: {N_TRIALS} intervals, median 1.0")
    assert said.endswith("the plan allows 0.8 to 1.4 s; outside: 0 (0 shorter, 0 longer).")
    assert not page.intervals.next_outside.isEnabled()
    page.intervals.what.setFocus()
    QTest.keyClick(page.intervals.what, Qt.Key.Key_End)
    assert page.intervals.first.isVisible()
    page.intervals.choose_codes("S 12", "S 31")
    assert "outside: 1 (0 shorter, 1 longer)." in page.intervals.said.toolTip()
    click(page.intervals.next_outside)
    selected = page.bench.session.selected.stretch
    assert selected is not None
    assert (selected[1] - selected[0]) / RATE_HZ > 2.0


def test_a_click_on_a_bar_goes_to_its_first_interval(page: MarkersStage, study: MarkerStudy) -> None:
    switch(page, "Intervals")
    canvas = page.intervals.histogram
    # Trial 5 has the shortest one.
    length_s = page.intervals._intervals.length_s.min()
    at = QPoint(round(canvas.x_of(float(length_s))) + 2, canvas.height() // 2)
    QTest.mouseClick(canvas, Qt.MouseButton.LeftButton, pos=at)
    assert in_view(page, study.cues_s[LOST_TRIAL - 1])


def test_a_click_on_a_pair_of_the_log_goes_there(page: MarkersStage, study: MarkerStudy) -> None:
    switch(page, "Log")
    residuals = page.log_picture.residuals
    view = page._watch.survey.log  # type: ignore[union-attr]
    place = residuals.place_of(float(view.time_s[9]), float(view.residual_s[9]))
    found = residuals.thing_at(place)
    assert found is not None
    assert found[1].startswith("row 10 at ")
    QTest.mouseClick(residuals, Qt.MouseButton.LeftButton, pos=place.toPoint())
    assert in_view(page, float(view.time_s[9]))
    below = QPointF(residuals.place_of(study.cues_s[UNLOGGED_TRIAL - 1], 0).x(), residuals.height() - 30)
    alone = residuals.thing_at(below)
    assert alone is not None
    assert alone[1].startswith(f"trial {UNLOGGED_TRIAL}, without a row")


# Nothing there yet


def test_without_a_recording(qtbot: QtBot, bench: Workbench) -> None:
    page = put_up(qtbot, bench)
    assert page.empty.isVisible()
    assert "Open a recording" in page.empty.text.text()
    assert not page.faults.isVisible()


def test_without_a_plan_codes_are_shown_and_cures_can_be_accepted(
    qtbot: QtBot, bench: Workbench, study: MarkerStudy, tmp_path: Path
) -> None:
    study.open(bench.session, tmp_path, with_plan=False)
    page = put_up(qtbot, bench)
    qtbot.waitUntil(lambda: page._watch.is_current, timeout=LEARN_MS)
    assert "There is no plan yet" in page.codes.advice.text()
    assert {row[1] for row in cells(page)} == {"undecided"}
    choose(page, "S 11")
    assert not page.codes.role.isEnabled()
    fault(page, "zero codes of S")
    click(page.faults.accept)
    qtbot.waitUntil(lambda: page._watch.is_current, timeout=LEARN_MS)
    assert "S 0" not in [row[0] for row in cells(page)]


def test_a_page_that_is_not_shown_waits(qtbot: QtBot, page: MarkersStage) -> None:
    page.hide_stage()
    session = page.bench.session
    session.open_plan(parse_plan(f'{PLAN}[markers."S 0"]\nrole = "ignore"\n'), None)
    assert ["S 0", "other", str(3 * N_TRIALS)] in cells(page)
    page.show_stage()
    assert ["S 0", "ignore", str(3 * N_TRIALS)] in cells(page)


def test_a_closed_page_listens_to_nobody(qtbot: QtBot, page: MarkersStage) -> None:
    callbacks = page.bench.session._observers._callbacks
    before = sum(len(callbacks[kind]) for kind in Changed)
    page.close()
    # To plan and recording, marks, view.
    assert before - sum(len(callbacks[kind]) for kind in Changed) == 4
