"""Cycles that hold objects of Qt are broken in the window's thread only."""

from __future__ import annotations

import gc
import threading
import weakref

from PySide6.QtCore import QObject
from pytestqt.qtbot import QtBot

from pulsemend.window.garbage import Garbage


class Knot(QObject):
    """Holds itself, as widgets with functions of their own do, and takes note of the thread it dies in."""

    died_in: list[str] = []  # noqa: RUF012  shared on purpose

    def __init__(self) -> None:
        super().__init__()
        self.me = self

    def __del__(self) -> None:
        self.died_in.append(threading.current_thread().name)


def allocate_much() -> None:
    """Make what would let Python look for cycles several times."""
    kept = [[number] for number in range(200_000)]
    assert len(kept) == 200_000


def in_a_worker() -> None:
    worker = threading.Thread(target=allocate_much, name="worker")
    worker.start()
    worker.join()


def test_worker_does_not_destroy_what_the_window_left(qtbot: QtBot) -> None:
    Knot.died_in.clear()
    gc.enable()
    owner = QObject()
    garbage = Garbage(owner)
    knot = weakref.ref(Knot())
    in_a_worker()
    assert knot() is not None
    kept = [[number] for number in range(5000)]
    qtbot.waitUntil(lambda: knot() is None, timeout=10_000)
    assert len(kept) == 5000
    with qtbot.waitSignal(garbage.destroyed):
        owner.deleteLater()
    assert Knot.died_in == [threading.main_thread().name]
    assert gc.isenabled()


def test_without_it_a_worker_would(qtbot: QtBot) -> None:
    """The trap itself; should it ever go, `window.garbage` may go, too."""
    Knot.died_in.clear()
    gc.collect()
    gc.enable()
    knot = weakref.ref(Knot())
    in_a_worker()
    gc.disable()
    assert knot() is None
    assert Knot.died_in == ["worker"]
