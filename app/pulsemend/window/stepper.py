"""Short work in the window's own thread, one step per turn of the event loop, so nothing waits for it.

Long work belongs to the workers; this is for many small steps that need neither them nor a recording.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

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
    _Steps(work, returned, owner)


class _Steps(QTimer):
    """Takes a step whenever there is nothing else to do; lives as long as its owner, or until the end."""

    def __init__(self, work: Work[Any], returned: Callable[[Any], None], owner: QObject) -> None:
        super().__init__(owner)
        self._work = work
        self._returned: Callable[[Any], None] | None = returned
        self.timeout.connect(self._step)
        self.start(0)

    def _step(self) -> None:
        try:
            next(self._work)
        except StopIteration as end:
            self.stop()
            # Let go of before the timer dies: what it calls may hold the owner, whose child the timer is.
            returned, self._returned = self._returned, None
            if returned is not None:
                returned(end.value)
            self.deleteLater()
