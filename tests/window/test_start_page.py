"""The start page, and what is dropped on a window."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from PySide6.QtCore import QMimeData, QPoint, QPointF, Qt, QUrl
from PySide6.QtGui import QDragEnterEvent, QDropEvent
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication, QMainWindow, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.progress import Progress, Work
from pulsemend.session.dropped import Dropped
from pulsemend.session.settings import Recent, Settings
from pulsemend.simulate import sample
from pulsemend.simulate.ready import READY
from pulsemend.simulate.sample import SampleResult
from pulsemend.window.action_bar import ActionBar
from pulsemend.window.drops import Drops
from pulsemend.window.start_page import StartPage
from support.window_bench import Handlers, end_bench, new_bench

LEFT = Qt.MouseButton.LeftButton
RECENT = (Recent("/data/a.vhdr", "/data/lantern.toml"), Recent(f"/data/{'long_' * 30}.edf"))


class Desk:
    """A window with the start page."""

    def __init__(self, qtbot: QtBot, settings: Settings) -> None:
        self.bench = new_bench(settings=settings)
        self.handlers = Handlers()
        self.window = QMainWindow()
        qtbot.addWidget(self.window)
        self.page = StartPage(self.bench, ActionBar(self.bench, self.window, self.handlers))
        self.window.setCentralWidget(self.page)
        self.window.resize(900, 700)
        self.window.show()
        qtbot.waitExposed(self.window)


@pytest.fixture
def desk(qtbot: QtBot) -> Iterator[Desk]:
    desk = Desk(qtbot, Settings(recent=RECENT))
    yield desk
    end_bench(desk.bench)


@pytest.fixture
def small_sample(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let the real sample be written with two trials and twelve channels."""
    whole = sample.write_sample

    def small(folder: Path) -> Work[SampleResult]:
        return whole(folder, spec=READY)

    monkeypatch.setattr(sample, "write_sample", small)


def test_openers_do_their_actions(desk: Desk) -> None:
    for button in desk.page.openers:
        QTest.mouseClick(button, LEFT)
    assert desk.handlers.done == [("open_recording",), ("open_folder",), ("open_plan",)]


def test_recent_recordings_are_offered(desk: Desk) -> None:
    chosen: list[Recent] = []
    desk.page.recent_chosen.connect(chosen.append)
    assert desk.page.recent[0].text() == "a.vhdr with lantern.toml"
    assert "\u2026" in desk.page.recent[1].text()
    assert desk.page.recent[1].toolTip() == RECENT[1].recording
    desk.page.recent[1].setFocus()
    QTest.keyClick(desk.page.recent[1], Qt.Key.Key_Space)
    assert chosen == [RECENT[1]]


def test_sample_is_written_and_offered(qtbot: QtBot, desk: Desk, tmp_path: Path, small_sample: None) -> None:
    page = desk.page
    page.folder.setText(str(tmp_path / "tried"))
    with qtbot.waitSignal(page.sample_written, timeout=20_000) as written:
        QTest.mouseClick(page.write, LEFT)
        assert not page.write.isEnabled()
        assert not page.progress.isHidden()
    result = written.args[0]
    assert result.plan == tmp_path / "tried" / "lantern.toml"
    assert result.recordings[0].is_file()
    qtbot.waitUntil(page.write.isEnabled)
    assert page.progress.isHidden()


def test_sample_that_cannot_be_written_says_why(
    qtbot: QtBot, desk: Desk, tmp_path: Path, small_sample: None
) -> None:
    (tmp_path / "lantern.toml").write_text("mine")
    desk.page.folder.setText(str(tmp_path))
    QTest.mouseClick(desk.page.write, LEFT)
    qtbot.waitUntil(lambda: "in the way" in desk.page.words.text())
    assert (tmp_path / "lantern.toml").read_text() == "mine"
    desk.page.folder.clear()
    qtbot.waitUntil(desk.page.write.isEnabled)
    QTest.mouseClick(desk.page.write, LEFT)
    assert "Name a folder" in desk.page.words.text()


def test_sample_can_be_stopped(
    qtbot: QtBot, desk: Desk, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def endless(_folder: Path) -> Work[SampleResult]:
        while True:
            yield Progress("simulating", 1, 2)

    monkeypatch.setattr(sample, "write_sample", endless)
    desk.page.folder.setText(str(tmp_path / "tried"))
    QTest.mouseClick(desk.page.write, LEFT)
    qtbot.waitUntil(lambda: desk.page.progress.value() == 50)
    QTest.mouseClick(desk.page.stop, LEFT)
    qtbot.waitUntil(desk.page.write.isEnabled)
    assert "nothing half written" in desk.page.words.text()


# Drops


def drop(widget: QWidget, data: QMimeData) -> bool:
    """Drag something over a widget and let go; returns whether the drag was taken."""
    copy, mouse, keys = Qt.DropAction.CopyAction, LEFT, Qt.KeyboardModifier.NoModifier
    enter = QDragEnterEvent(QPoint(5, 5), copy, data, mouse, keys)
    enter.ignore()
    QApplication.sendEvent(widget, enter)
    if enter.isAccepted():
        QApplication.sendEvent(widget, QDropEvent(QPointF(5, 5), copy, data, mouse, keys))
    return enter.isAccepted()


def files(*paths: Path) -> QMimeData:
    data = QMimeData()
    data.setUrls([QUrl.fromLocalFile(str(path)) for path in paths])
    return data


def test_files_are_taken_and_told_apart(qtbot: QtBot, tmp_path: Path) -> None:
    widget = QWidget()
    qtbot.addWidget(widget)
    drops = Drops(widget)
    told: list[Any] = []
    drops.dropped.connect(told.append)
    recording, plan = tmp_path / "a.edf", tmp_path / "p.toml"
    assert drop(widget, files(plan, recording))
    assert told == [Dropped(recording=recording, plan=plan)]
    assert drop(widget, files(tmp_path / "notes.txt"))
    assert told[-1].words.startswith("notes.txt is no recording")


def test_other_drags_are_not_taken(qtbot: QtBot) -> None:
    widget = QWidget()
    qtbot.addWidget(widget)
    Drops(widget)
    text = QMimeData()
    text.setText("hello")
    assert not drop(widget, text)
    web = QMimeData()
    web.setUrls([QUrl("https://example.org/a.edf")])
    assert not drop(widget, web)
