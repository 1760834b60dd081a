"""Dialogs through clicks and keys: what they ask, refuse and do."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from PySide6.QtCore import Qt
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication, QLabel, QPlainTextEdit, QTreeWidget
from pytestqt.qtbot import QtBot

from pulsemend.errors import ChangedOnDisk
from pulsemend.model.vocabulary import Role
from pulsemend.notice import SAFETY_NOTICE
from pulsemend.session.event_choice import ALL_EVENTS, EventChoice
from pulsemend.session.lock import Holder
from pulsemend.session.messages import Level
from pulsemend.session.recovery import Recovery
from pulsemend.session.settings import Settings
from pulsemend.window.dialogs import questions
from pulsemend.window.dialogs.about import AboutDialog
from pulsemend.window.dialogs.details import copy_details
from pulsemend.window.dialogs.go_to_time import GoToTime
from pulsemend.window.dialogs.keys import KeysDialog
from pulsemend.window.dialogs.notice import NoticeDialog, first_start_notice
from pulsemend.window.dialogs.pick_channels import PickChannels
from pulsemend.window.dialogs.sheet import Question, Sheet
from pulsemend.window.dialogs.which_events import WhichEvents
from pulsemend.window.theme import LIGHT
from pulsemend.window.workbench import Workbench
from support.window_bench import end_bench, new_bench

LEFT = Qt.MouseButton.LeftButton


@pytest.fixture
def bench(qtbot: QtBot, tmp_path: Path) -> Iterator[Workbench]:
    bench = new_bench(tmp_path)
    yield bench
    end_bench(bench)


def opened(qtbot: QtBot, dialog: Sheet) -> Sheet:
    """Open a dialog that stays alive after it closed."""
    dialog.setAttribute(Qt.WidgetAttribute.WA_DeleteOnClose, False)
    qtbot.addWidget(dialog)
    dialog.open()
    qtbot.waitExposed(dialog)
    return dialog


def all_texts(dialog: Sheet) -> str:
    return " ".join(label.text() for label in dialog.findChildren(QLabel))


def answers_of(question: Question) -> list[str]:
    answers: list[str] = []
    question.answered.connect(answers.append)
    return answers


# Questions


def test_question_is_answered_once_by_a_click(qtbot: QtBot) -> None:
    question = questions.recovery_question(Recovery(3, "Gap from -2 to 16 ms", 1.7e9))
    opened(qtbot, question)
    answers = answers_of(question)
    QTest.mouseClick(question.answers[questions.THROW_AWAY], LEFT)
    assert answers == [questions.THROW_AWAY]
    assert question.isHidden()


def test_return_takes_the_main_answer_and_escape_loses_nothing(qtbot: QtBot, bench: Workbench) -> None:
    for key, expected in ((Qt.Key.Key_Return, questions.SAVE), (Qt.Key.Key_Escape, questions.STAY)):
        question = questions.unsaved_question(bench.session)
        opened(qtbot, question)
        answers = answers_of(question)
        QTest.keyClick(question, key)
        assert answers == [expected]


@pytest.mark.parametrize("n_tabs", [0, 1, 2])
def test_answers_by_keyboard_alone(qtbot: QtBot, bench: Workbench, n_tabs: int) -> None:
    question = questions.unsaved_question(bench.session)
    opened(qtbot, question)
    question.activateWindow()
    qtbot.waitUntil(question.isActiveWindow)
    answers = answers_of(question)
    for _ in range(n_tabs):
        QTest.keyClick(question, Qt.Key.Key_Tab)
    focused = question.focusWidget()
    assert focused is not None
    QTest.keyClick(focused, Qt.Key.Key_Space)
    assert answers == [(questions.SAVE, questions.GIVE_UP, questions.STAY)[n_tabs]]


def test_recovery_words_are_shown(qtbot: QtBot) -> None:
    recovery = Recovery(3, "Gap from -2 to 16 ms", 1.7e9, plan_changed=True)
    question = questions.recovery_question(recovery)
    qtbot.addWidget(question)
    assert recovery.words in all_texts(question)


def test_unsaved_plan_without_a_file_is_saved_as(qtbot: QtBot, bench: Workbench) -> None:
    plan = bench.session.plan
    assert plan is not None
    bench.session.edit_plan("Another name", replace(plan, about=replace(plan.about, name="other")))
    question = questions.unsaved_question(bench.session)
    qtbot.addWidget(question)
    assert "lantern.toml was changed" in all_texts(question)
    assert "Another name" in all_texts(question)
    bench.session._plan_path = None
    question = questions.unsaved_question(bench.session)
    qtbot.addWidget(question)
    assert question.answers[questions.SAVE].text().startswith("Save as")
    assert "never saved" in all_texts(question)


def test_changed_file_shows_what_differs(qtbot: QtBot) -> None:
    error = ChangedOnDisk("lantern.toml", ours="a = 1\nb = 2\n", theirs="a = 1\nb = 3\n")
    question = questions.changed_question(error)
    qtbot.addWidget(question)
    difference = question.findChild(QPlainTextEdit)
    assert difference is not None
    assert "-b = 3\n+b = 2" in difference.toPlainText()
    assert list(question.answers) == [
        questions.WRITE_OVER,
        questions.TAKE_THEIRS,
        questions.SAVE_AS,
        questions.STAY,
    ]
    marks = questions.changed_question(error, is_plan=False)
    qtbot.addWidget(marks)
    assert list(marks.answers) == [questions.WRITE_OVER, questions.STAY]


def test_second_window_and_running_job_default_to_staying(qtbot: QtBot) -> None:
    for question in (
        questions.second_window_question(Holder(4711, "lab")),
        questions.running_question("writing the set"),
    ):
        opened(qtbot, question)
        answers = answers_of(question)
        QTest.keyClick(question, Qt.Key.Key_Return)
        assert answers == [questions.STAY]
    second = questions.second_window_question(Holder(4711, "lab"))
    qtbot.addWidget(second)
    assert "process 4711 on lab" in all_texts(second)


# Notice, About, keys, details


def test_notice_of_the_first_start_is_shown_once(qtbot: QtBot) -> None:
    assert first_start_notice(Settings(notice_shown=True)) is None
    dialog = first_start_notice(Settings())
    assert dialog is not None
    opened(qtbot, dialog)
    assert all(paragraph in all_texts(dialog) for paragraph in SAFETY_NOTICE)
    with qtbot.waitSignal(dialog.accepted):
        QTest.keyClick(dialog, Qt.Key.Key_Return)
    again = NoticeDialog(first=True)
    opened(qtbot, again)
    with qtbot.waitSignal(again.rejected):
        QTest.keyClick(again, Qt.Key.Key_Escape)


def test_about_tells_versions_licences_and_the_notice(qtbot: QtBot) -> None:
    dialog = AboutDialog(LIGHT)
    opened(qtbot, dialog)
    assert "Pulsemend 0.1.0" in all_texts(dialog)
    assert SAFETY_NOTICE[0] in all_texts(dialog)
    qtbot.waitUntil(lambda: dialog.libraries.topLevelItemCount() > 10)
    QTest.mouseClick(dialog.parts["Libraries"], LEFT)
    numpy = dialog.libraries.findItems("numpy", Qt.MatchFlag.MatchExactly)[0]
    assert "BSD" in numpy.text(2)
    dialog.libraries.setCurrentItem(numpy)
    assert "Redistribution" in dialog.licence.toPlainText()
    QTest.mouseClick(dialog.parts["Licence"], LEFT)
    own = dialog.pages.currentWidget()
    assert isinstance(own, QPlainTextEdit)
    assert "Redistribution" in own.toPlainText()


def shown_rows(tree: QTreeWidget) -> list[str]:
    groups = [tree.topLevelItem(row) for row in range(tree.topLevelItemCount())]
    rows = [
        group.child(row)
        for group in groups
        if group is not None and not group.isHidden()
        for row in range(group.childCount())
    ]
    return [row.text(0) for row in rows if row is not None and not row.isHidden()]


def test_keys_are_listed_narrowed_and_copied(qtbot: QtBot) -> None:
    dialog = KeysDialog()
    opened(qtbot, dialog)
    everything = shown_rows(dialog.list)
    assert {"Undo", "Write the set", "Move the traces along"} <= set(everything)
    QTest.keyClicks(dialog.filter, "ctrl+k")
    assert shown_rows(dialog.list) == ["Find an action"]
    dialog.filter.clear()
    assert shown_rows(dialog.list) == everything


def test_details_for_a_fault_report_are_copied(qtbot: QtBot, bench: Workbench) -> None:
    window = Sheet("stand-in")
    qtbot.addWidget(window)
    copy_details(bench, window)
    qtbot.waitUntil(lambda: bool(bench.session.messages))
    text = QApplication.clipboard().text()
    assert text.startswith("Pulsemend 0.1.0")
    assert "numpy" in text
    assert "lt01" not in text
    assert bench.session.messages[-1].level is Level.NOTE


# Go to, pick, which


def test_go_to_a_time(qtbot: QtBot, bench: Workbench) -> None:
    session = bench.session
    session.set_view(replace(session.view, width_s=2.0))
    dialog = GoToTime(session)
    opened(qtbot, dialog)
    QTest.keyClicks(dialog.field, "0:12.5")
    QTest.keyClick(dialog.field, Qt.Key.Key_Return)
    assert session.view.start_s == pytest.approx(11.5)
    assert dialog.isHidden()


def test_a_time_that_is_none_is_refused_in_words(qtbot: QtBot, bench: Workbench) -> None:
    before = bench.session.view
    dialog = GoToTime(bench.session)
    opened(qtbot, dialog)
    QTest.keyClicks(dialog.field, "9:00:00")
    QTest.mouseClick(dialog.go, LEFT)
    assert not dialog.refusal.isHidden()
    assert dialog.refusal.text().startswith("The recording ends at")
    assert not dialog.isHidden()
    QTest.keyClicks(dialog.field, "1")
    assert dialog.refusal.isHidden()
    QTest.keyClick(dialog, Qt.Key.Key_Escape)
    assert bench.session.view == before


def test_pick_channels_by_name_and_group(qtbot: QtBot, bench: Workbench) -> None:
    session = bench.session
    dialog = PickChannels(session)
    opened(qtbot, dialog)
    assert len(dialog.listed) == 12
    QTest.keyClicks(dialog.typed, "c3 o")
    assert dialog.listed == ("C3", "O1", "O2")
    QTest.mouseClick(dialog.pick_shown, LEFT)
    dialog.typed.clear()
    QTest.keyClicks(dialog.group, "midline")
    assert dialog.listed == ("Fz", "Cz", "Pz")
    dialog.list.setCurrentRow(1)
    QTest.keyClick(dialog.list, Qt.Key.Key_Space)
    assert dialog.checked == {"C3", "O1", "O2", "Fz"}
    assert "4 of 12" in dialog.count.text()
    QTest.mouseClick(dialog.pick, LEFT)
    assert session.view.picked == {"C3", "O1", "O2", "Fz"}


def test_bad_channels_are_a_group(qtbot: QtBot, bench: Workbench) -> None:
    dialog = PickChannels(bench.session)
    opened(qtbot, dialog)
    dialog.group.setCurrentText("marked bad")
    assert dialog.listed == ("TP8",)  # the plan's
    QTest.mouseClick(dialog.pick_shown, LEFT)
    QTest.keyClick(dialog, Qt.Key.Key_Escape)
    assert bench.session.view.picked == frozenset()


def test_events_to_look_for_are_chosen(qtbot: QtBot, bench: Workbench) -> None:
    dialog = WhichEvents(bench.session, ALL_EVENTS, LIGHT)
    opened(qtbot, dialog)
    chosen: list[EventChoice] = []
    dialog.chosen.connect(chosen.append)
    texts = [dialog.list.item(row).text() for row in range(dialog.list.count())]
    assert texts[0].startswith("all events")
    row = next(place for place, text in enumerate(texts) if text.startswith("role pulse"))
    for _ in range(row):
        QTest.keyClick(dialog.list, Qt.Key.Key_Down)
    QTest.keyClick(dialog.list, Qt.Key.Key_Return)
    assert chosen == [EventChoice(role=Role.PULSE)]
    again = WhichEvents(bench.session, chosen[0], LIGHT)
    qtbot.addWidget(again)
    assert again.list.currentRow() == row
