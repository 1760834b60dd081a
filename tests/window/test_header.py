"""The line at the top, and the action finder in it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from PySide6.QtCore import Qt
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QMainWindow, QPlainTextEdit, QVBoxLayout, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.session.view import Shown
from pulsemend.window.action_bar import ActionBar
from pulsemend.window.header import Header
from pulsemend.window.workbench import Workbench
from support.window_bench import Handlers, end_bench, new_bench


class Desk:
    """A window with a header above a place that can have the focus."""

    def __init__(self, qtbot: QtBot, bench: Workbench) -> None:
        self.bench = bench
        self.session = bench.session
        self.handlers = Handlers()
        self.window = QMainWindow()
        qtbot.addWidget(self.window)
        self.bar = ActionBar(bench, self.window, self.handlers)
        self.header = Header(bench, self.bar)
        self.below = QPlainTextEdit()
        central = QWidget()
        column = QVBoxLayout(central)
        column.addWidget(self.header)
        column.addWidget(self.below, 1)
        self.window.setCentralWidget(central)
        self.window.resize(1280, 600)
        self.window.show()
        qtbot.waitExposed(self.window)
        self.window.activateWindow()
        self.below.setFocus()

    def change_plan(self) -> None:
        plan = self.session.plan
        assert plan is not None
        pulses = replace(plan.pulses, window_ms=(-3.0, 15.0))
        self.session.edit_plan("Gap from -3 to 15 ms", replace(plan, pulses=pulses))


@pytest.fixture
def desk(qtbot: QtBot, tmp_path: Path) -> Iterator[Desk]:
    bench = new_bench(tmp_path)
    yield Desk(qtbot, bench)
    end_bench(bench)


def test_name_and_saved(desk: Desk) -> None:
    header = desk.header
    assert header.name.text() == "sub-lt01_task-lantern_eeg.vhdr"
    assert "lantern.toml" in header.name.toolTip()
    assert header.saved.text() == "saved"
    desk.change_plan()
    assert header.saved.text() == "unsaved"
    assert "plan" in header.saved.toolTip()
    desk.session.save_plan()
    assert header.saved.text() == "saved"


def test_long_name_gives_way_and_the_tooltip_has_it(qtbot: QtBot, desk: Desk) -> None:
    opened = desk.session.recording
    assert opened is not None
    path = Path("/data") / f"{'long_' * 30}name.vhdr"
    desk.session.open_recording(path, opened.facts)
    assert desk.header.name.text() != path.name
    assert "\u2026" in desk.header.name.text()
    assert str(path) in desk.header.name.toolTip()
    assert path.name in desk.header.name.accessibleName()
    assert desk.header.width() <= 1280


def test_without_a_recording(qtbot: QtBot) -> None:
    bench = new_bench()
    desk = Desk(qtbot, bench)
    assert desk.header.name.text() == "Pulsemend"
    assert not desk.header.across.isEnabled()
    assert desk.header.saved.text() == ""
    end_bench(bench)


def test_segments_ask_and_follow(qtbot: QtBot, desk: Desk) -> None:
    both = desk.header.shown[Shown.BOTH]
    QTest.mouseClick(both, Qt.MouseButton.LeftButton)
    assert desk.handlers.done == [("show", "both")]
    desk.session.set_view(replace(desk.session.view, shown=Shown.BOTH))
    recorded = desk.header.shown[Shown.RECORDED]
    qtbot.waitUntil(lambda: both.isChecked() and not recorded.isChecked())


def test_seconds_across_keep_the_middle(qtbot: QtBot, desk: Desk) -> None:
    desk.session.set_view(replace(desk.session.view, start_s=4.0, width_s=10.0))
    field = desk.header.across
    assert field.text() == "10 s across"
    field.setFocus()
    field.selectAll()
    QTest.keyClicks(field, "2.5")
    QTest.keyClick(field, Qt.Key.Key_Return)
    assert desk.session.view.width_s == 2.5
    assert desk.session.view.start_s == pytest.approx(9.0 - 1.25)
    assert field.text() == "2.5 s across"


def test_microvolts_a_row(qtbot: QtBot, desk: Desk) -> None:
    field = desk.header.row_height
    field.setFocus()
    QTest.keyClick(field, Qt.Key.Key_Up)
    assert desk.session.view.row_uv == 61.0


def test_narrow_header_shortens_units(qtbot: QtBot, desk: Desk) -> None:
    desk.window.resize(760, 600)
    qtbot.waitUntil(lambda: desk.header.across.text() == "10 s")
    desk.window.resize(1400, 600)
    qtbot.waitUntil(lambda: desk.header.across.text() == "10 s across")


def test_undo_names_what_it_takes_back(qtbot: QtBot, desk: Desk) -> None:
    undo = desk.header.buttons["undo"]
    assert not undo.isEnabled()
    desk.change_plan()
    qtbot.waitUntil(undo.isEnabled)
    assert "gap from -3 to 15 ms" in undo.toolTip()
    QTest.mouseClick(undo, Qt.MouseButton.LeftButton)
    assert desk.handlers.done == [("undo",)]


def test_finder_finds_by_letters_and_does_on_return(qtbot: QtBot, desk: Desk) -> None:
    finder = desk.header.finder
    finder.open()
    assert finder.hasFocus()
    assert not finder.popup.isHidden()
    QTest.keyClicks(finder, "guide")
    assert finder.popup.chosen == "help"
    row = finder.popup.found.topLevelItem(0)
    assert row is not None
    assert row.text(1) == "F1"
    QTest.keyClick(finder, Qt.Key.Key_Return)
    assert desk.handlers.done == [("help",)]
    assert finder.popup.isHidden()
    assert finder.text() == ""
    assert desk.below.hasFocus()


def test_finder_moves_with_arrows_and_takes_a_click(qtbot: QtBot, desk: Desk) -> None:
    finder = desk.header.finder
    finder.open()
    QTest.keyClicks(finder, "open a")
    found = finder.popup.found
    first = finder.popup.chosen
    QTest.keyClick(finder, Qt.Key.Key_Down)
    second = finder.popup.chosen
    assert first != second
    QTest.keyClick(finder, Qt.Key.Key_Up)
    assert finder.popup.chosen == first
    item = found.topLevelItem(1)
    assert item is not None
    QTest.mouseClick(found.viewport(), Qt.MouseButton.LeftButton, pos=found.visualItemRect(item).center())
    assert desk.handlers.done == [(second,)]


def test_finder_says_what_cannot_be_done_now(qtbot: QtBot, desk: Desk) -> None:
    finder = desk.header.finder
    finder.open()
    QTest.keyClicks(finder, "hide picked")
    row = finder.popup.found.topLevelItem(0)
    assert row is not None
    assert row.text(0).endswith("(not now)")
    QTest.keyClick(finder, Qt.Key.Key_Return)
    assert desk.handlers.done == []
    QTest.keyClick(finder, Qt.Key.Key_Escape)
    assert finder.popup.isHidden()
    assert desk.below.hasFocus()


def test_finder_that_finds_nothing_says_so(qtbot: QtBot, desk: Desk) -> None:
    finder = desk.header.finder
    finder.open()
    QTest.keyClicks(finder, "zzqx")
    assert finder.popup.chosen is None
    assert "No action" in finder.popup.hint.text()
    QTest.keyClick(finder, Qt.Key.Key_Return)
    assert desk.handlers.done == []
