"""The stage Recording on a small recording: all by mouse and by keys, with a real session and workers."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from PySide6.QtCore import QPoint, QRect, Qt
from PySide6.QtTest import QTest
from PySide6.QtWidgets import (
    QAbstractButton,
    QAbstractSpinBox,
    QApplication,
    QComboBox,
    QLineEdit,
    QTableWidgetItem,
    QWidget,
)
from pytestqt.qtbot import QtBot
from shiboken6 import isValid

from pulsemend.model.marks import BadStretch
from pulsemend.model.plan_file import read_plan
from pulsemend.model.recording import RecordingFacts
from pulsemend.model.vocabulary import ChannelType
from pulsemend.readers.opening import open_recording
from pulsemend.session.changed import Changed
from pulsemend.session.found import Selected
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.session.view import Shown
from pulsemend.window.bad_stretches import view_around
from pulsemend.window.channel_table import WHY_FOUND, WHY_PLAN, Column
from pulsemend.window.job import Job
from pulsemend.window.stages.recording import RecordingStage
from pulsemend.window.theme import DARK
from pulsemend.window.workbench import Workbench
from support.small_lantern import SPEC, Study, write_study

LEFT = Qt.MouseButton.LeftButton
NONE, CTRL = Qt.KeyboardModifier.NoModifier, Qt.KeyboardModifier.ControlModifier


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    return write_study(tmp_path_factory.mktemp("study"))


class Desk:
    """A stage on a session, shown in a widget of its own."""

    def __init__(self, qtbot: QtBot, marks: Path, study: Study) -> None:
        self.qtbot, self.study, self.marks = qtbot, study, marks
        self.session = Session(None)
        self.bench = Workbench(self.session, Settings())
        self.stage = RecordingStage(self.bench)
        self.frames: list[QWidget] = [self.stage.settings, self.stage.picture]
        self.stage.settings.resize(330, 1000)
        self.stage.picture.resize(900, 300)
        for frame in self.frames:
            qtbot.addWidget(frame)
            frame.show()
            qtbot.waitExposed(frame)

    def open(self, *, with_plan: bool = True) -> RecordingFacts:
        recording = open_recording(self.study.recording)
        recording.close()
        self.session.open_recording(self.study.recording, recording.facts, None, self.marks)
        if with_plan:
            self.session.open_plan(read_plan(self.study.plan), self.study.plan)
        return recording.facts

    # Channels

    @property
    def table(self) -> QWidget:
        return self.stage.channels.table

    def bad(self) -> tuple[str, ...]:
        return self.session.marks.bad

    def stretches(self) -> tuple[BadStretch, ...]:
        return self.session.marks.bad_stretches

    def names(self) -> list[str]:
        order = self.stage.channels.table.order
        return [order.index(k, Column.NAME).data() for k in range(order.rowCount())]

    def cell(self, name: str, column: Column) -> QRect:
        table = self.stage.channels.table
        index = table.order.index(self.names().index(name), column)
        table.scrollTo(index)
        return table.visualRect(index)

    def click(self, name: str, column: Column, modifier: Qt.KeyboardModifier = NONE) -> None:
        at = self.cell(name, column).topLeft() + QPoint(10, 8)
        QTest.mouseClick(self.stage.channels.table.viewport(), LEFT, modifier, at)

    def focus(self, widget: QWidget) -> None:
        widget.window().activateWindow()
        widget.setFocus()
        self.qtbot.waitUntil(widget.hasFocus)

    def chosen(self) -> set[str]:
        return {row.name for row in self.stage.channels.table.selected_rows()}


@pytest.fixture
def desk(qtbot: QtBot, tmp_path: Path, study: Study) -> Iterator[Desk]:
    desk = Desk(qtbot, tmp_path / "lt01.marks.toml", study)
    yield desk
    desk.bench.close()


# Facts


def test_without_a_recording_it_says_what_to_do(desk: Desk) -> None:
    assert desk.stage.settings.currentIndex() == 0  # type: ignore[attr-defined]
    assert desk.stage.picture.currentIndex() == 0  # type: ignore[attr-defined]
    desk.open()
    assert desk.stage.settings.currentIndex() == 1  # type: ignore[attr-defined]


def test_facts_are_those_of_the_reader(desk: Desk) -> None:
    facts = desk.open()
    card = desk.stage.facts
    assert card.name.text() == facts.stem
    assert card.format.text() == facts.format
    assert card.rate.value.text() == "5000 Hz"
    assert card.channels.value.text() == "8 EEG"
    assert card.breaks.value.text() == "none"
    files = [card.parts.itemAt(k).widget().text() for k in range(card.parts.count())]  # type: ignore[union-attr]
    assert [text.split(", ")[0] for text in files] == [part.name for part in facts.parts]
    assert all(text.endswith(("MiB", "KiB", "bytes")) for text in files)


def test_breaks_and_notes_of_a_reader_are_shown(desk: Desk) -> None:
    facts = replace(desk.open(), boundaries=(5000, 9000), notes=("Two things were unclear.", "One still is."))
    desk.session.open_recording(desk.study.recording, facts)
    assert desk.stage.facts.breaks.value.text() == "2, first at 0:01.0"
    assert desk.stage.facts.notes.text() == "Two things were unclear.\nOne still is."
    desk.open()
    assert desk.stage.facts.breaks.value.text() == "none"
    assert desk.stage.facts.notes.isHidden()


# Bad channels


def test_a_click_on_the_toggle_marks_bad_and_leaves_the_choice_of_rows(desk: Desk) -> None:
    desk.open()
    desk.click("C3", Column.NAME)
    desk.click("Pz", Column.BAD)
    assert desk.bad() == ("Pz",)
    assert desk.chosen() == {"C3"}
    assert desk.stage.channels.note.text() == "1 bad here"
    desk.click("Pz", Column.BAD)
    assert desk.bad() == ()
    assert desk.session.undo()
    assert desk.bad() == ("Pz",)
    index = desk.stage.channels.table.order.index(desk.names().index("Pz"), Column.BAD)
    assert index.data(Qt.ItemDataRole.CheckStateRole) == Qt.CheckState.Checked
    assert index.data(Qt.ItemDataRole.AccessibleTextRole) == "Pz, EEG, bad"


def test_two_quick_clicks_are_two_clicks(desk: Desk) -> None:
    desk.open()
    at = desk.cell("Pz", Column.BAD).center()
    QTest.mouseClick(desk.stage.channels.table.viewport(), LEFT, NONE, at)
    QTest.mouseDClick(desk.stage.channels.table.viewport(), LEFT, NONE, at)
    assert desk.bad() == ()


def test_space_marks_all_rows_chosen(desk: Desk) -> None:
    desk.open()
    desk.click("C3", Column.NAME)
    desk.click("O1", Column.NAME, CTRL)
    QTest.keyClick(desk.table, Qt.Key.Key_Space)
    assert desk.bad() == ("C3", "O1")
    desk.click("Cz", Column.NAME, CTRL)
    QTest.keyClick(desk.table, Qt.Key.Key_Space)
    assert set(desk.bad()) == {"C3", "O1", "Cz"}
    QTest.keyClick(desk.table, Qt.Key.Key_Space)
    assert desk.bad() == ()
    assert desk.chosen() == {"C3", "O1", "Cz"}


def test_keys_alone_reach_a_channel_and_mark_it(desk: Desk) -> None:
    desk.open()
    desk.focus(desk.table)
    QTest.keyClick(desk.table, Qt.Key.Key_Home, CTRL)
    for _ in range(2):
        QTest.keyClick(desk.table, Qt.Key.Key_Down)
    QTest.keyClick(desk.table, Qt.Key.Key_Space)
    assert desk.bad() == (SPEC.channels[2],)


def test_what_the_plan_says_is_shown_as_such_and_not_changed_here(desk: Desk) -> None:
    desk.open()
    plan = desk.session.plan
    assert plan is not None
    desk.session.edit_plan("x", replace(plan, channels=replace(plan.channels, bad=("TP8",))))
    index = desk.stage.channels.table.order.index(desk.names().index("TP8"), Column.BAD)
    assert index.data() == "plan"
    assert index.data(Qt.ItemDataRole.ToolTipRole) == WHY_PLAN
    assert desk.stage.channels.note.text() == "1 bad by the plan"
    assert not desk.stage.channels.in_plan.isHidden()
    assert "TP8" in desk.stage.channels.in_plan.text()
    desk.click("TP8", Column.BAD)
    desk.click("TP8", Column.NAME)
    QTest.keyClick(desk.table, Qt.Key.Key_Space)
    assert desk.bad() == ()
    assert desk.session.plan == replace(plan, channels=replace(plan.channels, bad=("TP8",)))
    assert [message.text for message in desk.session.messages] == [WHY_PLAN] * 2
    desk.session.undo()
    assert desk.stage.channels.in_plan.isHidden()


# Types


def choose_type(desk: Desk, name: str, steps: int) -> None:
    """Open the list of types by Return, and go down or up in it."""
    desk.click(name, Column.NAME)
    desk.focus(desk.table)
    QTest.keyClick(desk.table, Qt.Key.Key_Return)
    table = desk.stage.channels.table
    box = next(iter(table.findChildren(QComboBox)))
    desk.qtbot.waitUntil(lambda: box.view().isVisible())
    for _ in range(abs(steps)):
        QTest.keyClick(box.view(), Qt.Key.Key_Down if steps > 0 else Qt.Key.Key_Up)
    QTest.keyClick(box.view(), Qt.Key.Key_Return)
    desk.qtbot.waitUntil(lambda: not isValid(box))


def test_a_channel_found_bad_is_shown_with_its_evidence_and_called_good_again(desk: Desk) -> None:
    """TP8 only records noise. One click says that it is good after all, one more that it is bad."""
    desk.open()
    desk.qtbot.waitUntil(lambda: "1 found bad (TP8)" in desk.stage.channels.note.text(), timeout=20_000)

    def told(role: Qt.ItemDataRole) -> Any:
        order = desk.stage.channels.table.order
        return order.data(order.index(desk.names().index("TP8"), Column.BAD), role)

    assert told(Qt.ItemDataRole.DisplayRole) == "found"
    assert Qt.CheckState(told(Qt.ItemDataRole.CheckStateRole)) == Qt.CheckState.Checked
    tip = str(told(Qt.ItemDataRole.ToolTipRole))
    assert WHY_FOUND in tip
    assert "loud or dead: " in tip
    assert "limit 6 (in " in tip
    assert "found bad" in str(told(Qt.ItemDataRole.AccessibleTextRole))
    desk.click("TP8", Column.BAD)
    assert (desk.bad(), desk.session.marks.good) == ((), ("TP8",))
    assert desk.stage.channels.note.text() == "none bad"
    assert "loud or dead: " in str(told(Qt.ItemDataRole.ToolTipRole))
    desk.click("TP8", Column.BAD)
    assert (desk.bad(), desk.session.marks.good) == (("TP8",), ())
    assert "1 bad here" in desk.stage.channels.note.text()


def test_a_type_is_chosen_by_keys_and_that_of_the_file_needs_no_mark(desk: Desk) -> None:
    desk.open()
    choose_type(desk, "F3", 2)
    assert desk.session.marks.types == {"F3": ChannelType.EMG}
    assert desk.stage.facts.channels.value.text() == "7 EEG, 1 EMG"
    assert desk.session.next_undo == "F3 records EMG"
    choose_type(desk, "F3", -2)
    assert desk.session.marks.types == {}
    desk.session.undo()
    assert desk.stage.facts.channels.value.text() == "7 EEG, 1 EMG"


# Order, filter, picking


def test_rows_are_ordered_by_header_and_by_list(desk: Desk) -> None:
    desk.open()
    facts = desk.session.recording.facts  # type: ignore[union-attr]
    numbered = replace(
        facts, channels=tuple(replace(one, name=f"E{12 - k}") for k, one in enumerate(facts.channels))
    )
    desk.session.open_recording(desk.study.recording, numbered)
    assert desk.names() == [f"E{12 - k}" for k in range(8)]
    header = desk.stage.channels.table.horizontalHeader()
    at = QPoint(header.sectionViewportPosition(Column.NAME) + 10, header.height() // 2)
    QTest.mouseClick(header.viewport(), LEFT, NONE, at)
    assert desk.names() == [f"E{5 + k}" for k in range(8)]
    assert desk.stage.channels.order.currentText() == "by name"
    desk.session.edit_marks("x", replace(desk.session.marks, bad=("E9",)))
    desk.focus(desk.stage.channels.order)
    QTest.keyClick(desk.stage.channels.order, Qt.Key.Key_Up)
    assert desk.names()[0] == "E9"
    assert desk.stage.channels.order.currentText() == "bad ones first"
    QTest.keyClick(desk.stage.channels.order, Qt.Key.Key_Up)
    assert desk.names() == [f"E{12 - k}" for k in range(8)]


def test_typed_words_choose_rows_and_hidden_ones_stay_picked(desk: Desk) -> None:
    desk.open()
    desk.session.edit_marks("x", replace(desk.session.marks, bad=("Cz",)))
    desk.click("O1", Column.NAME)
    QTest.keyClicks(desk.stage.channels.filter, "eeg BAD")
    assert desk.names() == ["Cz"]
    desk.click("Cz", Column.NAME)
    assert desk.session.view.picked == {"O1", "Cz"}
    QTest.keyClicks(desk.stage.channels.filter, "x")
    assert desk.names() == []
    assert not desk.stage.channels.none.isHidden()
    desk.stage.channels.filter.clear()
    assert desk.names() == list(SPEC.channels)
    assert desk.chosen() == {"O1", "Cz"}
    assert desk.session.view.picked == {"O1", "Cz"}


def test_table_map_and_view_agree_on_what_is_picked(desk: Desk) -> None:
    desk.open()
    desk.click("C3", Column.NAME)
    assert desk.session.view.picked == {"C3"}
    head = desk.stage.map
    spot = head.spot("Pz")
    assert spot is not None
    QTest.mouseClick(head, LEFT, CTRL, spot.toPoint())
    assert desk.session.view.picked == {"C3", "Pz"}
    assert desk.chosen() == {"C3", "Pz"}
    desk.session.set_view(replace(desk.session.view, picked=frozenset({"O1"})))
    assert desk.chosen() == {"O1"}
    assert head._picked == {"O1"}
    desk.stage.channels.table.selectionModel().clear()
    assert desk.session.view.picked == frozenset()


def test_an_edit_keeps_place_and_choice(desk: Desk) -> None:
    desk.open()
    desk.click("P3", Column.NAME)
    desk.session.edit_marks("x", replace(desk.session.marks, bad=("F3",)))
    assert desk.chosen() == {"P3"}
    assert desk.stage.channels.table.currentIndex().siblingAtColumn(Column.NAME).data() == "P3"


# Bad stretches


def item(desk: Desk, row: int, column: int) -> QTableWidgetItem:
    found = desk.stage.stretches.table.item(row, column)
    assert found is not None
    return found


def type_number(field: QWidget, text: str) -> None:
    edit = field.findChild(QLineEdit)
    assert edit is not None
    edit.selectAll()
    QTest.keyClicks(edit, text)
    QTest.keyClick(edit, Qt.Key.Key_Return)


def test_a_stretch_is_selected_marked_changed_and_removed_by_keys(desk: Desk) -> None:
    desk.open()
    card = desk.stage.stretches
    assert not card.mark.isEnabled()
    QTest.keyClick(card.take_view, Qt.Key.Key_Space)
    assert desk.session.selected.stretch == (0, 50_000)
    type_number(card.last, "3.0002")
    type_number(card.first, "2.5")
    assert desk.session.selected.stretch == (12_500, 15_001)
    kind = card.kind.lineEdit()
    assert kind is not None
    QTest.keyClicks(kind, "he coughed")
    QTest.keyClick(card.mark, Qt.Key.Key_Space)
    assert desk.stretches() == (BadStretch(12_500, 15_001, "he coughed"),)
    assert card.note.text() == "1, together 500 ms"
    assert [item(desk, 0, k).text() for k in range(3)] == ["0:02.5", "0:03.0", "he coughed"]

    QTest.mouseClick(card.table.viewport(), LEFT, NONE, card.table.visualItemRect(item(desk, 0, 2)).center())
    assert desk.session.selected.stretch == (12_500, 15_001)
    assert not card.mark.isEnabled()
    desk.focus(card.table)
    QTest.keyClick(card.table, Qt.Key.Key_F2)
    box = next(iter(card.table.findChildren(QComboBox)))
    assert [box.itemText(k) for k in range(box.count())][:2] == ["muscle", "movement"]
    edit = box.lineEdit()
    assert edit is not None
    assert edit.text() == "he coughed"
    edit.selectAll()
    QTest.keyClicks(edit, "movement")
    QTest.keyClick(box, Qt.Key.Key_Return)
    desk.qtbot.waitUntil(lambda: desk.stretches()[0].kind == "movement")
    desk.focus(card.table)
    QTest.keyClick(card.table, Qt.Key.Key_Delete)
    assert desk.stretches() == ()
    assert not card.empty.isHidden()
    assert card.table.isHidden()
    for _ in range(3):
        desk.session.undo()
    assert desk.stretches() == ()


def test_a_stretch_selected_elsewhere_shows_here(desk: Desk) -> None:
    desk.open()
    stretches = (BadStretch(1000, 2000, "pause"), BadStretch(90_000, 95_000, "muscle"))
    desk.session.edit_marks("x", replace(desk.session.marks, bad_stretches=stretches))
    card = desk.stage.stretches
    desk.session.select(Selected(stretch=(90_000, 95_000)))
    assert [one.row() for one in card.table.selectionModel().selectedRows()] == [1]
    assert (card.first.value(), card.last.value()) == (18.0, 19.0)
    assert "marked bad" in card.selected.text()
    QTest.mouseClick(card.jump_button, LEFT)
    view = desk.session.view
    assert view.start_s < 18.0 < 19.0 < view.start_s + view.width_s
    desk.session.select(Selected(stretch=(90_000, 96_000)))
    assert card.table.selectionModel().selectedRows() == []
    assert card.mark.isEnabled()
    assert not card.jump_button.isEnabled()


def test_a_double_click_on_a_time_jumps(desk: Desk) -> None:
    desk.open()
    stretches = (BadStretch(1000, 2000, ""), BadStretch(150_000, 155_000, ""))
    desk.session.edit_marks("x", replace(desk.session.marks, bad_stretches=stretches))
    table = desk.stage.stretches.table
    at = table.visualItemRect(item(desk, 1, 0)).center()
    QTest.mouseClick(table.viewport(), LEFT, NONE, at)
    QTest.mouseDClick(table.viewport(), LEFT, NONE, at)
    assert desk.session.view.start_s == pytest.approx(30.5 - desk.session.view.width_s / 2)


def test_a_view_around_a_stretch_stays_inside() -> None:
    view = replace(Session(None).view, start_s=50.0, width_s=10.0)
    assert view_around(view, 20.0, 22.0, 100.0).start_s == 16.0
    assert view_around(view, 1.0, 2.0, 100.0).start_s == 0.0
    assert view_around(view, 98.0, 99.0, 100.0).start_s == 90.0
    assert view_around(view, 20.0, 60.0, 100.0).start_s == 19.0
    assert view_around(view, 1.0, 2.0, 5.0).start_s == 0.0


def test_ends_that_cross_give_the_shortest_stretch(desk: Desk) -> None:
    desk.open()
    desk.session.select(Selected(stretch=(5000, 10_000)))
    type_number(desk.stage.stretches.last, "0.5")
    assert desk.session.selected.stretch == (5000, 5001)


# Spectrum


def wait_for_spectrum(desk: Desk) -> None:
    card = desk.stage.spectrum
    desk.qtbot.waitUntil(
        lambda: not card.settling.is_waiting and not desk.bench.jobs.under_way, timeout=20_000
    )


def test_the_spectrum_is_that_of_the_part_in_view(desk: Desk) -> None:
    """The broken channel is the loudest at every high frequency, and the line stands out in all others."""
    desk.open()
    desk.stage.show_stage()
    wait_for_spectrum(desk)
    found = desk.stage.spectrum.found
    assert found is not None
    assert found.names == SPEC.channels
    fast = (found.frequency_hz > 60) & (found.frequency_hz < 95)
    loudest = np.argmax(np.median(found.density[:, fast], axis=1))
    assert found.names[loudest] == "TP8"
    shown = desk.stage.spectrum.plot.shown
    assert shown.line_hz == 50.0
    assert shown.spread is not None
    assert shown.curves == ()
    # TP8 was found bad meanwhile.
    assert "7 good EEG channels · as recorded" in desk.stage.spectrum.note.text()
    assert "left out" in desk.stage.spectrum.note.text()


def test_picked_channels_are_drawn_one_by_one_without_computing_again(desk: Desk) -> None:
    desk.open()
    desk.stage.show_stage()
    wait_for_spectrum(desk)
    found = desk.stage.spectrum.found
    desk.session.set_view(replace(desk.session.view, picked=frozenset({"TP8", "Cz"})))
    wait_for_spectrum(desk)
    assert [curve.name for curve in desk.stage.spectrum.plot.shown.curves] == ["Cz", "TP8"]
    desk.session.edit_marks("x", replace(desk.session.marks, bad=("TP8",)))
    wait_for_spectrum(desk)
    assert [curve.bad for curve in desk.stage.spectrum.plot.shown.curves] == [False, True]
    assert desk.stage.spectrum.found is found
    desk.session.set_view(replace(desk.session.view, picked=frozenset(SPEC.channels)))
    assert desk.stage.spectrum.plot.shown.curves == ()
    assert desk.stage.spectrum.note.text().startswith("8 picked channels")


def test_many_moves_of_the_view_are_one_job_of_the_last(desk: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    desk.open()
    desk.stage.show_stage()
    wait_for_spectrum(desk)
    begun: list[str] = []
    submit = desk.bench.jobs.submit

    def counted(kind: str, *args: Any, **named: Any) -> Job:
        begun.append(kind)
        return submit(kind, *args, **named)

    monkeypatch.setattr(desk.bench.jobs, "submit", counted)
    for start_s in np.linspace(0.0, 20.0, 50):
        desk.session.set_view(replace(desk.session.view, start_s=float(start_s)))
    wait_for_spectrum(desk)
    assert begun == ["spectrum"]
    assert desk.stage.spectrum._found is not None
    assert desk.stage.spectrum._found[0].start == 100_000


def test_repaired_and_bad_stretches_and_too_little(desk: Desk) -> None:
    desk.open()
    desk.stage.show_stage()
    desk.session.set_view(replace(desk.session.view, shown=Shown.REPAIRED))
    wait_for_spectrum(desk)
    assert " · repaired" in desk.stage.spectrum.note.text()
    whole = desk.stage.spectrum.found
    assert whole is not None
    desk.session.edit_marks("x", replace(desk.session.marks, bad_stretches=(BadStretch(0, 20_000, ""),)))
    wait_for_spectrum(desk)
    found = desk.stage.spectrum.found
    assert found is not None
    assert found.used_s < whole.used_s - 3
    desk.session.set_view(replace(desk.session.view, start_s=1.0, width_s=2.0))
    wait_for_spectrum(desk)
    assert desk.stage.spectrum.found is None
    assert "show more time" in desk.stage.spectrum.plot.accessibleDescription()


def test_without_a_plan_it_says_that_pulses_are_in_it(desk: Desk) -> None:
    desk.open(with_plan=False)
    desk.session.set_view(replace(desk.session.view, shown=Shown.BOTH))
    desk.stage.show_stage()
    wait_for_spectrum(desk)
    text = desk.stage.spectrum.note.text()
    assert "nothing is repaired yet" in text
    assert "pulses are not known yet" in text
    assert desk.stage.spectrum.plot.shown.line_hz == 0.0


def test_nothing_is_computed_while_another_stage_is_open(desk: Desk) -> None:
    desk.open(with_plan=False)
    desk.stage.show_stage()
    desk.stage.hide_stage()
    desk.session.set_view(replace(desk.session.view, start_s=3.0))
    wait_for_spectrum(desk)
    assert desk.stage.spectrum.found is None
    desk.stage.show_stage()
    wait_for_spectrum(desk)
    assert desk.stage.spectrum.found is not None


def test_a_recording_that_is_gone_is_told_in_the_picture(desk: Desk, tmp_path: Path) -> None:
    facts = desk.open(with_plan=False)
    desk.session.open_recording(tmp_path / "gone.vhdr", facts)
    desk.stage.show_stage()
    wait_for_spectrum(desk)
    assert desk.stage.spectrum.plot.accessibleDescription().startswith("No spectrum: ")


# The whole


def is_part_of_another(control: QWidget) -> bool:
    """Whether it is the inside of a field that has a name itself."""
    parent = control.parent()
    while parent is not None and not isinstance(parent, (QComboBox, QAbstractSpinBox)):
        parent = parent.parent()
    return parent is not None or control.objectName().startswith("qt_")


def test_every_control_has_a_name(desk: Desk) -> None:
    desk.open()
    for frame in desk.frames:
        for control in frame.findChildren(QWidget):
            if control.focusPolicy() & Qt.FocusPolicy.TabFocus and control.parent() is not None:
                text = control.text() if isinstance(control, QAbstractButton) else ""
                assert text or control.accessibleName() or is_part_of_another(control), control


def test_it_paints_in_both_themes_and_with_large_text(desk: Desk) -> None:
    desk.open()
    before = desk.stage.picture.grab().toImage()
    desk.stage.set_theme(DARK)
    assert desk.stage.picture.grab().toImage() != before
    low = desk.stage.channels.table.verticalHeader().defaultSectionSize()
    desk.stage.settings.setStyleSheet("QWidget { font-size: 24pt; }")
    QApplication.sendPostedEvents()
    assert desk.stage.channels.table.verticalHeader().defaultSectionSize() > low
    desk.stage.settings.grab()


def test_a_closed_page_listens_no_more(desk: Desk) -> None:
    """Not to the session, and not for a spectrum that is on its way."""
    desk.open()
    counts = {kind: len(desk.session._observers._callbacks[kind]) for kind in Changed}
    other = RecordingStage(desk.bench)
    assert len(desk.session._observers._callbacks[Changed.MARKS]) > counts[Changed.MARKS]
    other.show_stage()
    other.spectrum.settling.flush()
    other.close()
    for frame in (other.settings, other.picture):
        frame.deleteLater()
    desk.qtbot.waitUntil(lambda: not isValid(other.settings) and not isValid(other.picture))
    assert {kind: len(desk.session._observers._callbacks[kind]) for kind in Changed} == counts
    desk.session.edit_marks("x", replace(desk.session.marks, bad=("C3",)))
    wait_for_spectrum(desk)
    assert desk.session.messages == ()
