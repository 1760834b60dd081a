"""Short work in the window's own thread, one step per turn of the event loop, so nothing waits for it.

Long work belongs to the workers; this is for many small steps that need neither them nor a recording.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TypeVar

from PySide6.QtCore import QObject, QTimer

from pulsemend.progress import Work

T = TypeVar("T")


def step_through(work: Work[T], returned: Callable[[T], None], owner: QObject) -> None:
    """Do work step by step until it ends or its owner is gone.

    Parameters
    ----------
    work : generator of Progress
        Each step short.
    returned : callable
        Given the result.
    owner : QObject
        While it lives the work goes on.
    """
    timer = QTimer(owner)

    def step() -> None:
        try:
            next(work)
        except StopIteration as end:
            timer.stop()
            timer.deleteLater()
            returned(end.value)

    timer.timeout.connect(step)
    timer.start(0)
