"""Actions as Qt has them: built from the table, done by handlers, up to date with the session."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from PySide6.QtCore import Qt
from PySide6.QtGui import QAction
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QLineEdit, QMainWindow, QVBoxLayout, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.session.action_table import ACTIONS
from pulsemend.session.actions import Menu
from pulsemend.session.settings import Recent, Settings, ThemeChoice
from pulsemend.session.view import Shown
from pulsemend.window.action_bar import ActionBar, missing_handlers
from pulsemend.window.theme import DARK
from pulsemend.window.workbench import Workbench
from support.window_bench import Handlers, end_bench, new_bench


class Desk:
    """A window with menus, a stand-in for the traces, and a field to type in."""

    def __init__(self, qtbot: QtBot, bench: Workbench) -> None:
        self.bench = bench
        self.handlers = Handlers()
        self.window = QMainWindow()
        qtbot.addWidget(self.window)
        self.bar = ActionBar(bench, self.window, self.handlers)
        self.bar.fill(self.window.menuBar())
        self.traces = QWidget()
        self.traces.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.field = QLineEdit()
        central = QWidget()
        column = QVBoxLayout(central)
        column.addWidget(self.traces)
        column.addWidget(self.field)
        self.window.setCentralWidget(central)
        self.bar.serve_traces(self.traces)
        self.window.show()
        qtbot.waitExposed(self.window)
        self.window.activateWindow()

    def action(self, name: str) -> QAction:
        return self.bar.actions[name]


@pytest.fixture
def desk(qtbot: QtBot, tmp_path: Path) -> Iterator[Desk]:
    bench = new_bench(tmp_path)
    yield Desk(qtbot, bench)
    end_bench(bench)


def test_every_action_of_the_table_is_there(desk: Desk) -> None:
    assert set(desk.bar.actions) == {action.id for action in ACTIONS}
    for action in ACTIONS:
        made = desk.action(action.id)
        assert made.objectName() == action.id
        assert made.text() == action.title
        assert made.toolTip()
        assert [keys.toString() for keys in made.shortcuts()] == list(action.keys)
        assert made.icon().isNull() == (not action.icon)


def test_menus_hold_every_action_once_in_order(desk: Desk) -> None:
    bar = desk.window.menuBar()
    titles = [action.text() for action in bar.actions()]
    assert [title.replace("&", "") for title in titles] == [menu.value for menu in Menu]
    letters = [title[title.index("&") + 1].lower() for title in titles]
    assert len(set(letters)) == len(Menu)
    names = [
        entry.objectName()
        for top in bar.actions()
        for entry in top.menu().actions()  # type: ignore[attr-defined]
        if not entry.isSeparator() and entry.menu() is None
    ]
    assert sorted(names) == sorted(action.id for action in ACTIONS if action.id != "open_recent")


def test_keys_of_the_window_count_everywhere(qtbot: QtBot, desk: Desk) -> None:
    desk.field.setFocus()
    QTest.keyClick(desk.field, Qt.Key.Key_O, Qt.KeyboardModifier.ControlModifier)
    assert desk.handlers.done == [("open_recording",)]


def test_keys_of_the_traces_count_there_only(qtbot: QtBot, desk: Desk) -> None:
    desk.field.setFocus()
    QTest.keyClick(desk.field, Qt.Key.Key_Left)
    assert desk.handlers.done == []
    desk.traces.setFocus()
    QTest.keyClick(desk.traces, Qt.Key.Key_Left)
    assert desk.handlers.done == [("earlier",)]


def test_handler_gets_its_argument(desk: Desk) -> None:
    desk.action("show_both").trigger()
    desk.action("stage_epochs").trigger()
    desk.action("theme_dark").trigger()
    assert desk.handlers.done == [("show", "both"), ("open_stage", "Epochs"), ("set_theme", "dark")]


def test_states_follow_the_session(qtbot: QtBot, desk: Desk) -> None:
    session = desk.bench.session
    assert desk.action("show_recorded").isChecked()
    assert not desk.action("hide_picked").isEnabled()
    assert not desk.action("undo").isEnabled()
    session.set_view(replace(session.view, shown=Shown.BOTH, picked=frozenset({"Cz"})))
    assert session.plan is not None
    session.edit_plan(
        "Gap from -3 to 15 ms",
        replace(session.plan, pulses=replace(session.plan.pulses, window_ms=(-3.0, 15.0))),
    )
    qtbot.waitUntil(lambda: desk.action("undo").isEnabled())
    assert desk.action("show_both").isChecked()
    assert not desk.action("show_recorded").isChecked()
    assert desk.action("hide_picked").isEnabled()
    assert desk.action("undo").toolTip() == "Undo gap from -3 to 15 ms (Ctrl+Z)"
    assert desk.action("save_plan").isEnabled()


def test_check_mark_stays_where_the_session_has_it(qtbot: QtBot, desk: Desk) -> None:
    """The stand-in does nothing, so the choice did not change."""
    with qtbot.waitSignal(desk.bar.refreshed):
        desk.action("show_both").trigger()
    assert not desk.action("show_both").isChecked()
    assert desk.action("show_recorded").isChecked()


def test_colours_in_force_are_checked(desk: Desk) -> None:
    assert desk.action("theme_system").isChecked()
    desk.bench.settings = Settings(theme=ThemeChoice.DARK)
    desk.bar.refresh()
    assert desk.action("theme_dark").isChecked()
    assert not desk.action("theme_system").isChecked()


def test_recent_recordings_are_a_menu_of_their_own(qtbot: QtBot, desk: Desk) -> None:
    assert not desk.bar.recent_menu.isEnabled()
    recent = Recent("/data/a&b.vhdr", "/data/lantern.toml")
    desk.bench.settings = Settings(recent=(recent, Recent("/data/c.edf")))
    desk.bar.refresh()
    desk.action("open_recent").trigger()
    entries = desk.bar.recent_menu.actions()
    assert [entry.text() for entry in entries] == ["a&&b.vhdr with lantern.toml", "c.edf"]
    assert entries[0].toolTip() == "/data/a&b.vhdr"
    QTest.keyClick(desk.bar.recent_menu, Qt.Key.Key_Down)
    QTest.keyClick(desk.bar.recent_menu, Qt.Key.Key_Return)
    assert desk.handlers.done == [("open_recent", recent)]


def test_icons_take_the_colours_of_the_theme(desk: Desk) -> None:
    before = desk.action("undo").icon().cacheKey()
    desk.bar.set_theme(DARK)
    assert desk.action("undo").icon().cacheKey() != before


def test_missing_handlers_are_named(qtbot: QtBot) -> None:
    class Half:
        def undo(self) -> None: ...

    missing = missing_handlers(Half())
    assert "undo" not in missing
    assert {"redo", "show", "open_stage"} <= set(missing)
    bench = new_bench()
    window = QMainWindow()
    qtbot.addWidget(window)
    with pytest.raises(AttributeError, match="redo"):
        ActionBar(bench, window, Half())
    end_bench(bench)


def test_a_window_that_is_gone_is_told_nothing(qtbot: QtBot) -> None:
    bench = new_bench()
    window = QMainWindow()
    bar = ActionBar(bench, window, Handlers())
    with qtbot.waitSignal(bar.destroyed):
        window.deleteLater()
    bench.session.set_view(replace(bench.session.view, width_s=3.0))
    end_bench(bench)
