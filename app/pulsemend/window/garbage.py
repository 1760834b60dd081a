"""Objects of Qt die in the window's thread.

Python looks for cycles that nobody holds in whichever thread happens to allocate, a worker too, and an object
of Qt that is destroyed there ends the process. So the window's thread alone looks, once in a while.
"""

from __future__ import annotations

import gc

from PySide6.QtCore import QObject, QTimer

EVERY_MS = 1000


class Garbage(QObject):
    """While it lives, cycles are looked for in the thread that made it, and nowhere else.

    Parameters
    ----------
    parent : QObject
        The application or its first window.
    """

    def __init__(self, parent: QObject) -> None:
        super().__init__(parent)
        # What is loaded by now stays loaded; not looking at it makes every later look short.
        gc.freeze()
        gc.disable()
        self._timer = QTimer(self)
        self._timer.setInterval(EVERY_MS)
        self._timer.timeout.connect(look)
        self._timer.start()
        self.destroyed.connect(gc.enable)


def look() -> None:
    """Look for cycles among the objects of an age of which there are many, as Python itself would."""
    counts, most = gc.get_count(), gc.get_threshold()
    for age in (2, 1, 0):
        if counts[age] > most[age]:
            gc.collect(age)
            break
