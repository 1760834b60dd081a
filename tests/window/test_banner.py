"""Messages on the window."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from PySide6.QtCore import Qt
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication
from pytestqt.qtbot import QtBot

from pulsemend.session.messages import Level, Message
from pulsemend.window.banner import MOST_HEIGHT_PX, Banner
from pulsemend.window.dialogs.details import DetailsDialog
from pulsemend.window.theme import DARK
from pulsemend.window.workbench import Workbench
from support.window_bench import end_bench, new_bench

NOTE = Message(Level.NOTE, "The work is kept.")
PROBLEM = Message(Level.PROBLEM, "The file ends too early.", "12 s are missing")


@pytest.fixture
def bench(qtbot: QtBot) -> Iterator[Workbench]:
    bench = new_bench()
    yield bench
    end_bench(bench)


@pytest.fixture
def banner(qtbot: QtBot, bench: Workbench) -> Banner:
    banner = Banner(bench)
    qtbot.addWidget(banner)
    return banner


def test_hidden_while_there_is_nothing_to_say(bench: Workbench, banner: Banner) -> None:
    assert banner.isHidden()
    bench.session.say(NOTE)
    assert not banner.isHidden()
    bench.session.put_away(NOTE)
    assert banner.isHidden()


def test_newest_is_shown_with_its_level_in_words(bench: Workbench, banner: Banner) -> None:
    bench.session.say(NOTE)
    bench.session.say(PROBLEM)
    assert [row.message for row in banner.rows] == [PROBLEM]
    assert banner.rows[0].accessibleName() == "problem: The file ends too early."
    assert banner.older.text() == "Show 1 older"


def test_older_ones_on_demand_and_all_put_away(qtbot: QtBot, bench: Workbench, banner: Banner) -> None:
    for number in range(40):
        bench.session.say(Message(Level.NOTE, f"message {number}"))
    banner.resize(600, 100)
    QTest.mouseClick(banner.older, Qt.MouseButton.LeftButton)
    assert len(banner.rows) == 40
    assert banner.rows[0].message.text == "message 39"
    assert banner.sizeHint().height() < MOST_HEIGHT_PX + 80
    QTest.mouseClick(banner.put_all_away, Qt.MouseButton.LeftButton)
    assert bench.session.messages == ()
    assert banner.isHidden()


def test_put_one_away_by_keyboard(qtbot: QtBot, bench: Workbench, banner: Banner) -> None:
    bench.session.say(NOTE)
    bench.session.say(PROBLEM)
    banner.rows[0].away.setFocus()
    QTest.keyClick(banner.rows[0].away, Qt.Key.Key_Space)
    assert bench.session.messages == (NOTE,)
    assert banner.rows[0].message is NOTE
    assert banner.older.isHidden()


def test_details_on_demand_and_copied(qtbot: QtBot, bench: Workbench, banner: Banner) -> None:
    bench.session.say(NOTE)
    assert banner.rows[0].details is None
    bench.session.say(PROBLEM)
    details = banner.rows[0].details
    assert details is not None
    QTest.mouseClick(details, Qt.MouseButton.LeftButton)
    dialog = banner.findChild(DetailsDialog)
    assert dialog is not None
    assert dialog.text.toPlainText() == "12 s are missing"
    QTest.mouseClick(dialog.copy_button, Qt.MouseButton.LeftButton)
    assert QApplication.clipboard().text() == "The file ends too early.\n\n12 s are missing"
    QTest.mouseClick(dialog.close_button, Qt.MouseButton.LeftButton)


def test_other_colours(bench: Workbench, banner: Banner) -> None:
    bench.session.say(PROBLEM)
    banner.set_theme(DARK)
    assert [row.message for row in banner.rows] == [PROBLEM]
