"""Short work in the window's own thread, one step per turn of the event loop, so nothing waits for it.

Long work belongs to the workers; this is for many small steps that need neither them nor a recording.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Generic, TypeVar

from PySide6.QtCore import QObject, QTimer

from pulsemend.progress import Work

T = TypeVar("T")


class Stepper(Generic[T]):
    """Work that runs step by step until it ends or its owner is gone.

    Parameters
    ----------
    work : generator of Progress
        Each step short.
    returned : callable
        Given the result.
    owner : QObject
        While it lives the work goes on.
    """

    def __init__(self, work: Work[T], returned: Callable[[T], None], owner: QObject) -> None:
        self._work = work
        self._returned = returned
        self._timer = QTimer(owner)
        self._timer.setInterval(0)
        self._timer.timeout.connect(self._step)
        self._timer.start()

    def _step(self) -> None:
        try:
            next(self._work)
        except StopIteration as end:
            self._timer.stop()
            self._returned(end.value)
