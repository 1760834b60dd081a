"""The real window on a small recording in a folder of its own, and what is watched while it is used."""

from __future__ import annotations

import gc
import logging
import shutil
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from PySide6.QtCore import QEvent, QObject, Qt, QTimer
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication, QDialog, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.resources import sample_folder
from pulsemend.session.found import Stage
from pulsemend.session.session import Session
from pulsemend.window.dialogs.sheet import Question
from pulsemend.window.main_window import Folders, MainWindow
from pulsemend.window.program import open_window

STEM = "sub-lt01_task-lantern"
LONG_MS = 20_000
"""How long something that a worker or a child does may take on a busy machine."""


class Errors(logging.Handler):
    """Everything that was logged as an error: observers that failed, faults of workers."""

    def __init__(self) -> None:
        super().__init__(logging.ERROR)
        self.found: list[str] = []

    def emit(self, record: logging.LogRecord) -> None:
        self.found.append(self.format(record))


@contextmanager
def errors_logged() -> Iterator[list[str]]:
    """Collect what is logged as an error."""
    handler = Errors()
    log = logging.getLogger("pulsemend")
    log.addHandler(handler)
    try:
        yield handler.found
    finally:
        log.removeHandler(handler)


@dataclass
class Place:
    """A folder with the ready sample, and the user's folders beside it."""

    folder: Path
    qtbot: QtBot
    windows: list[MainWindow] = field(default_factory=list)

    def __post_init__(self) -> None:
        for path in sample_folder().iterdir():
            if path.is_file():
                shutil.copy(path, self.folder)

    @property
    def recording(self) -> Path:
        return self.folder / f"{STEM}_eeg.vhdr"

    @property
    def plan(self) -> Path:
        return self.folder / "lantern.toml"

    @property
    def marks(self) -> Path:
        return self.folder / "marks" / f"{STEM}.marks.toml"

    @property
    def sets(self) -> Path:
        return self.folder / "sets"

    @property
    def folders(self) -> Folders:
        user = self.folder / "user"
        return Folders(user / "data", user / "state", user / "cache", user / "settings.json")

    def another_recording(self) -> Path:
        """Copy the recording under another name."""
        for ending in ("vhdr", "vmrk", "eeg"):
            source = self.recording.with_suffix(f".{ending}")
            target = self.folder / f"sub-lt02_task-lantern_eeg.{ending}"
            if ending == "eeg":
                shutil.copy(source, target)
            else:
                target.write_text(source.read_text("utf-8").replace("sub-lt01", "sub-lt02"), "utf-8")
        return self.folder / "sub-lt02_task-lantern_eeg.vhdr"

    def show(self, recording: Path | None = None, plan: Path | None = None) -> MainWindow:
        """Start the window as the program does."""
        window = open_window(self.folders, recording, plan)
        window.resize(1280, 800)
        window.show()
        self.windows.append(window)
        self.qtbot.waitExposed(window)
        return window

    def learned(self) -> MainWindow:
        """Start the window on recording and plan, and wait until everything is known."""
        window = self.show(self.recording, self.plan)
        self.wait_learned(window)
        return window

    def wait_learned(self, window: MainWindow) -> None:
        self.wait(lambda: window.bench.learned is not None and not window.bench.provisional)

    def wait(self, condition: Callable[[], bool], timeout_ms: int = LONG_MS) -> None:
        self.qtbot.waitUntil(condition, timeout=timeout_ms)

    def wait_quiet(self, window: MainWindow) -> None:
        """Wait until no worker and no child is at work, and nothing waits to be begun."""

        def quiet() -> bool:
            busy = window.bench.jobs.under_way or window.children_.under_way
            due = [t for t in window.findChildren(QTimer) if t.isActive() and t.isSingleShot()]
            return not busy and not due

        self.wait(quiet)

    def close(self) -> None:
        """Close every window without being asked, and let Qt delete them."""
        for window in self.windows:
            with answering("give up", "stop and close", "stay"):
                window.close()
            forget(window)
        self.windows.clear()


def forget(window: QWidget) -> None:
    """Let Qt delete a closed window now."""
    window.deleteLater()
    QApplication.sendPostedEvents(None, QEvent.Type.DeferredDelete)


def press(action: str, window: MainWindow) -> None:
    """Do an action by its first key, sent to whatever has the focus in the window."""
    made = window.actions_.actions[action]
    keys = made.shortcut()
    assert not keys.isEmpty(), action
    # States of actions follow the session a moment later.
    rounds = 0
    while not made.isEnabled() and rounds < 200:
        QTest.qWait(10)
        rounds += 1
    assert made.isEnabled(), f"{action} is not possible now"
    QTest.keySequence(window.focusWidget() or window, keys)


@contextmanager
def answering(*keys: str) -> Iterator[list[str]]:
    """Click the first of some answers in every question that opens meanwhile; gives the titles asked.

    The question has an event loop of its own, so it is answered from a timer.
    """
    asked: list[str] = []

    def look() -> None:
        question = QApplication.activeModalWidget()
        if not isinstance(question, Question) or not question.isVisible():
            return
        known = [key for key in keys if key in question.answers]
        asked.append(question.windowTitle())
        button = question.answers[known[0]] if known else list(question.answers.values())[-1]
        QTest.mouseClick(button, Qt.MouseButton.LeftButton)

    timer = QTimer()
    timer.timeout.connect(look)
    timer.start(5)
    try:
        yield asked
    finally:
        timer.stop()


def click_stage(window: MainWindow, stage: Stage) -> None:
    """Click a stage in the rail."""
    QTest.mouseClick(window.rail.buttons[stage], Qt.MouseButton.LeftButton)


def n_callbacks(session: Session) -> int:
    """Subscriptions to a session."""
    return sum(len(callbacks) for callbacks in session._observers._callbacks.values())


def census(window: MainWindow) -> dict[str, int]:
    """Count what must not grow while a window is used: objects, timers, windows, threads, subscriptions."""
    QApplication.sendPostedEvents(None, QEvent.Type.DeferredDelete)
    gc.collect()
    objects = window.findChildren(QObject)
    return {
        "objects": len(objects),
        "timers": sum(isinstance(one, QTimer) for one in objects),
        "windows": len([w for w in QApplication.topLevelWidgets() if isinstance(w, MainWindow | QDialog)]),
        "threads": threading.active_count(),
        "subscriptions": n_callbacks(window.session),
    }
