"""Random steps of a user against the real window, as a program of its own: it measures every event.

``python -m support.random_hands FOLDER STEPS SEED``, in the folder of the tests; FOLDER holds the sample.
Prints one JSON object: exceptions, errors logged, events that took long, what grew, steps that undo lost.
"""

from __future__ import annotations

import json
import random
import sys
import time
import traceback
from collections import Counter
from pathlib import Path
from types import TracebackType
from typing import Any

from PySide6.QtCore import QEvent, QObject, QPoint, Qt, QThread, QTimer
from PySide6.QtTest import QTest
from PySide6.QtWidgets import (
    QAbstractButton,
    QAbstractItemView,
    QAbstractSpinBox,
    QApplication,
    QComboBox,
    QDialog,
    QFileDialog,
    QLineEdit,
    QWidget,
)

from pulsemend.session.action_table import ACTIONS
from pulsemend.session.changed import Changed
from pulsemend.session.found import Stage
from pulsemend.session.session import Session
from pulsemend.window.main_window import Folders, MainWindow
from pulsemend.window.program import open_window
from support.hands import move, wheel
from support.whole_window import STEM, census, errors_logged

LONG_S = 0.2
NOT_BY_CHANCE = {"close_window", "quit", "mend", "show_folder", "open_recent"}
"""Ends the window, starts long child processes, or leaves the program."""
NOT_CLICKED = ("Write the set", "Write a sample", "Show the folder", "Save the plan and write", "Replace it")


class Watched(QApplication):
    """Measures the processor time of this thread for every event.

    Wall time would measure the other processes of a busy machine.
    """

    def __init__(self) -> None:
        super().__init__([])
        self.long: list[tuple[float, str]] = []
        self.longest_s = 0.0
        self._inner_s = 0.0
        self._level = -1

    def notify(self, receiver: QObject, event: QEvent) -> bool:
        level = QThread.currentThread().loopLevel()
        if level == self._level:
            return super().notify(receiver, event)
        # Events of an inner loop, as of a question, do not count for the event that began it.
        outer, self._level = self._level, level
        outer_inner_s, self._inner_s = self._inner_s, 0.0
        kind, name = event.type().name, type(receiver).__name__
        start_s = time.thread_time()
        try:
            return super().notify(receiver, event)
        finally:
            whole_s = time.thread_time() - start_s
            took_s = whole_s - self._inner_s
            self._level, self._inner_s = outer, outer_inner_s + whole_s
            self.longest_s = max(self.longest_s, took_s)
            if took_s > LONG_S / 4:
                self.long.append((took_s, f"{name} {kind}"))


class Hands:
    """Does one thing after the other.

    Parameters
    ----------
    window : MainWindow
        With a recording and a plan.
    seed : int
        Of all chance.
    """

    def __init__(self, window: MainWindow, seed: int) -> None:
        self.window = window
        self.chance = random.Random(seed)
        self.done: list[str] = []
        self.lost: list[str] = []

    def step(self) -> None:
        """Do something."""
        acts = (
            (self.action, 30),
            (self.stage, 6),
            (self.click, 16),
            (self.turn_wheel, 12),
            (self.drag, 10),
            (self.type_number, 8),
            (self.step_number, 10),
            (self.toggle_bad, 4),
            (self.undo_and_redo, 8),
            (self.key, 8),
            (self.resize, 2),
        )
        act = self.chance.choices([one for one, _ in acts], [weight for _, weight in acts])[0]
        self.done.append(act.__name__)
        act()
        self.leave_dialogs()
        QTest.qWait(self.chance.choice((0, 0, 0, 5, 40)))

    def note(self, what: str) -> None:
        self.done[-1] += f" {what}"

    def action(self) -> None:
        action = self.chance.choice([one for one in ACTIONS if one.id not in NOT_BY_CHANCE])
        self.note(action.id)
        made = self.window.actions_.actions[action.id]
        if action.keys:
            QTest.keySequence(self.window.focusWidget() or self.window, made.shortcut())
        else:
            made.trigger()

    def stage(self) -> None:
        stage = self.chance.choice(list(Stage))
        self.note(stage)
        QTest.mouseClick(self.window.rail.buttons[stage], Qt.MouseButton.LeftButton)

    def visible(self, *kinds: type[QWidget]) -> QWidget | None:
        shown = [
            one
            for kind in kinds
            for one in self.window.findChildren(kind)
            if one.isVisible() and one.isEnabled() and not one.visibleRegion().isEmpty()
        ]
        return self.chance.choice(shown) if shown else None

    def click(self) -> None:
        widget = self.visible(QAbstractButton, QAbstractItemView, QComboBox)
        if widget is None or (isinstance(widget, QAbstractButton) and widget.text() in NOT_CLICKED):
            return
        self.note(f"{type(widget).__name__} {widget.accessibleName() or getattr(widget, 'text', str)()}")
        if isinstance(widget, QComboBox):
            QTest.keyClick(widget, self.chance.choice((Qt.Key.Key_Down, Qt.Key.Key_Up)))
            return
        target = widget.viewport() if isinstance(widget, QAbstractItemView) else widget
        QTest.mouseClick(target, Qt.MouseButton.LeftButton, pos=self.place(target))

    def place(self, widget: QWidget) -> QPoint:
        if isinstance(widget, QAbstractButton):
            return widget.rect().center()
        return QPoint(
            self.chance.randrange(max(widget.width(), 1)), self.chance.randrange(max(widget.height(), 1))
        )

    def picture(self) -> QWidget | None:
        """Something painted: traces, names, ribbon, or a picture of a stage."""
        traces, ribbon = self.window.traces, self.window.ribbon
        if traces is None or ribbon is None:
            return None
        page = self.window.desk.pages[self.window.session.stage]
        painted = [
            w for w in page.picture.findChildren(QWidget) if w.isVisible() and not w.findChildren(QWidget)
        ]
        return self.chance.choice([traces.plot, traces.plot, traces.names, ribbon, *painted])

    def turn_wheel(self) -> None:
        widget = self.picture()
        if widget is None:
            return
        modifiers = self.chance.choice(
            (
                Qt.KeyboardModifier.NoModifier,
                Qt.KeyboardModifier.ControlModifier,
                Qt.KeyboardModifier.ShiftModifier,
            )
        )
        self.note(f"{type(widget).__name__} {modifiers.name}")
        for _ in range(self.chance.randint(1, 5)):
            wheel(widget, self.place(widget), QPoint(0, self.chance.choice((-120, 120))), modifiers=modifiers)

    def drag(self) -> None:
        widget = self.picture()
        if widget is None:
            return
        modifiers = self.chance.choice(
            (
                Qt.KeyboardModifier.NoModifier,
                Qt.KeyboardModifier.ControlModifier,
                Qt.KeyboardModifier.ShiftModifier,
            )
        )
        self.note(f"{type(widget).__name__} {modifiers.name}")
        QTest.mousePress(widget, Qt.MouseButton.LeftButton, modifiers, self.place(widget))
        for _ in range(self.chance.randint(1, 6)):
            move(widget, self.place(widget), Qt.MouseButton.LeftButton)
        QTest.mouseRelease(widget, Qt.MouseButton.LeftButton, modifiers, self.place(widget))

    def type_number(self) -> None:
        field = self.visible(QAbstractSpinBox, QLineEdit)
        if field is None:
            return
        self.note(f"{type(field).__name__} {field.accessibleName()}")
        field.setFocus()
        QTest.keySequence(field, "Ctrl+A")
        QTest.keyClicks(field, self.chance.choice(("0", "-3", "12.5", "1", "0.4", "999999", "x", "")))
        QTest.keyClick(field, self.chance.choice((Qt.Key.Key_Return, Qt.Key.Key_Tab, Qt.Key.Key_Escape)))

    def step_number(self) -> None:
        """Press the arrow up or down in a number, which always gives another one."""
        page = self.window.desk.pages[self.window.session.stage]
        fields = [f for f in page.settings.findChildren(QAbstractSpinBox) if f.isVisible() and f.isEnabled()]
        if not fields:
            return
        field = self.chance.choice(fields)
        self.note(field.accessibleName())
        field.setFocus()
        for _ in range(self.chance.randint(1, 3)):
            QTest.keyClick(field, self.chance.choice((Qt.Key.Key_Up, Qt.Key.Key_Down)))
        QTest.keyClick(field, Qt.Key.Key_Return)

    def toggle_bad(self) -> None:
        traces = self.window.traces
        if traces is None:
            return
        row = self.chance.randrange(len(traces.plot.shown_names))
        at = QPoint(8, round(traces.plot.rows.middle(row)))
        QTest.mouseClick(traces.names, Qt.MouseButton.LeftButton, pos=at)

    def key(self) -> None:
        key = self.chance.choice(
            (
                Qt.Key.Key_Tab,
                Qt.Key.Key_Backtab,
                Qt.Key.Key_Space,
                Qt.Key.Key_Down,
                Qt.Key.Key_Right,
                Qt.Key.Key_Escape,
            )
        )
        focused = self.window.focusWidget() or self.window
        if isinstance(focused, QAbstractButton) and focused.text() in NOT_CLICKED:
            return
        self.note(f"{key.name} {type(focused).__name__}")
        QTest.keyClick(focused, key)

    def resize(self) -> None:
        self.window.resize(self.chance.choice((900, 1280, 1920)), self.chance.choice((600, 800, 1080)))

    def undo_and_redo(self) -> None:
        """Take a few steps back and make them again: nothing is lost on the way."""
        session = self.window.session
        before = (session.plan, session.marks, session.next_undo)
        steps = self.chance.randint(1, 4)
        taken = sum(bool(session.undo()) for _ in range(steps))
        again = sum(bool(session.redo()) for _ in range(taken))
        if (session.plan, session.marks, session.next_undo) != before or again != taken:
            self.lost.append(f"after {self.done[-4:]}")
        if self.chance.random() < 0.3:
            session.undo()

    def leave_dialogs(self) -> None:
        """Do something in a dialog that came up, then leave it."""
        for dialog in [w for w in QApplication.topLevelWidgets() if isinstance(w, QDialog) and w.isVisible()]:
            focused = dialog.focusWidget() or dialog
            QTest.keyClick(focused, self.chance.choice((Qt.Key.Key_Down, Qt.Key.Key_Tab, Qt.Key.Key_Right)))
            if self.chance.random() < 0.5:
                QTest.keyClick(focused, Qt.Key.Key_Return)
            if dialog.isVisible():
                QTest.keyClick(dialog, Qt.Key.Key_Escape)
        popup = QApplication.activePopupWidget()
        if popup is not None:
            QTest.keyClick(popup, Qt.Key.Key_Escape)


def undone_to_the_start(session: Session) -> tuple[int, bool]:
    """Undo everything and do it again; gives the steps and whether the end was found again."""
    # The last random step may have been an undo: what it left to be done again is part of the way.
    while session.redo():
        pass
    end = (session.plan, session.marks)
    steps = 0
    while session.undo():
        steps += 1
    again = 0
    while session.redo():
        again += 1
    return steps, again == steps and (session.plan, session.marks) == end


def answer_questions() -> None:
    """Leave a question by Escape: none of them is meant by chance."""
    asked = QApplication.activeModalWidget()
    if asked is not None and type(asked).__name__ == "Question":
        QTest.keyClick(asked, Qt.Key.Key_Escape)


def wait_until_quiet(window: MainWindow, least_s: float = 0.3, most_s: float = 60.0) -> None:
    until_s, calm = time.monotonic() + most_s, 0.0
    while calm < least_s and time.monotonic() < until_s:
        QTest.qWait(20)
        busy = window.bench.jobs.under_way or window.children_.under_way
        calm = 0.0 if busy else calm + 0.02


def main(folder: Path, steps: int, seed: int) -> dict[str, Any]:
    """Do the steps and tell what came of them."""
    for name in ("getOpenFileName", "getSaveFileName"):
        setattr(QFileDialog, name, staticmethod(lambda *_a, **_k: ("", "")))
    QFileDialog.getExistingDirectory = staticmethod(lambda *_a, **_k: "")  # type: ignore[method-assign]
    raised: list[str] = []

    def hook(kind: type[BaseException], error: BaseException, trace: TracebackType | None) -> None:
        raised.append("".join(traceback.format_exception(kind, error, trace)))

    sys.excepthook = hook
    application = Watched()
    user = folder / "user"
    folders = Folders(user / "data", user / "state", user / "cache", user / "settings.json")
    with errors_logged() as errors:
        window = open_window(folders, folder / f"{STEM}_eeg.vhdr", folder / "lantern.toml")
        window.resize(1280, 800)
        window.show()
        asking = QTimer()
        asking.timeout.connect(answer_questions)
        asking.start(5)
        until_s = time.monotonic() + 60
        while window.bench.learned is None and time.monotonic() < until_s:
            QTest.qWait(20)
        for stage in Stage:
            window.session.open_stage(stage)
            wait_until_quiet(window)
        hands = Hands(window, seed)
        edits = 0

        def count() -> None:
            nonlocal edits
            edits += 1

        window.session.subscribe(Changed.PLAN, count)
        window.session.subscribe(Changed.MARKS, count)
        first = census(window)
        kinds = Counter(type(one).__name__ for one in window.findChildren(QObject))
        application.long.clear()
        application.longest_s = 0.0
        at: list[str] = []
        for number in range(steps):
            n_raised, n_errors, n_long = len(raised), len(errors), len(application.long)
            hands.step()
            if len(raised) > n_raised or len(errors) > n_errors:
                at.append(f"step {number}: {hands.done[-3:]}")
            for took_s, what in application.long[n_long:]:
                at.append(f"step {number}: {took_s * 1000:.0f} ms in {what}; {hands.done[-2:]}")
        wait_until_quiet(window)
        longest_s, long = application.longest_s, list(application.long)
        n_undone, found_again = undone_to_the_start(window.session)
        while window.session.undo():
            pass
        wait_until_quiet(window)
        for stage in Stage:
            window.session.open_stage(stage)
        wait_until_quiet(window)
        last = census(window)
        kinds.subtract(Counter(type(one).__name__ for one in window.findChildren(QObject)))
        words = [message.text for message in window.session.messages]
        asking.stop()
        QTimer.singleShot(100, lambda: _give_up(window))
        window.close()
    return {
        "raised": raised,
        "errors": errors,
        "at": at,
        "longest_ms": round(longest_s * 1000),
        "too_long": [f"{took_s * 1000:.0f} ms in {what}" for took_s, what in long if took_s > LONG_S],
        "over_50_ms": len(long),
        "before": first,
        "after": last,
        "grew": {kind: -count for kind, count in kinds.items() if count},
        "lost": hands.lost,
        "undone": n_undone,
        "found_again": found_again,
        "words": words,
        "edits": edits,
    }


def _give_up(window: MainWindow) -> None:
    question = QApplication.activeModalWidget()
    answers = getattr(question, "answers", {})
    for key in ("give up", "stop and close"):
        if key in answers:
            answers[key].click()


if __name__ == "__main__":
    print(json.dumps(main(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3])), indent=1))
