"""What every stage is to the window."""

from __future__ import annotations

from collections.abc import Callable

from PySide6.QtCore import SignalInstance
from PySide6.QtWidgets import QWidget

from pulsemend.session.changed import Changed
from pulsemend.session.found import Stage
from pulsemend.window.theme import Theme
from pulsemend.window.workbench import Workbench


class StagePage:
    """One stage: `settings` stands beside the traces, `picture` below them.

    Subclasses build both widgets in `__init__`, listen to the session with `follow` and to signals of others
    with `hear`, and change plan and marks only through `session.edit_plan` and `edit_marks`.

    Parameters
    ----------
    bench : Workbench
        Session, workers, theme.
    """

    stage: Stage
    settings: QWidget
    picture: QWidget

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.shown = False
        self._ends: list[Callable[[], object]] = []

    def follow(self, callback: Callable[[], None], *kinds: Changed) -> None:
        """Have a function called after each change of some kinds, until the page is closed."""
        self._ends += [self.bench.session.subscribe(kind, callback) for kind in kinds]

    def hear(self, signal: SignalInstance, slot: Callable[..., object]) -> None:
        """Connect a signal of something that may outlive the page, until the page is closed."""
        signal.connect(slot)
        self._ends.append(lambda: signal.disconnect(slot))

    def close(self) -> None:
        """Listen to nobody any more: the window closes while everything it listens to is still there."""
        ends, self._ends = self._ends, []
        for end in ends:
            end()

    def show_stage(self) -> None:
        """Take note that the stage is open; costly pictures are made only while it is."""
        self.shown = True

    def hide_stage(self) -> None:
        """Take note that another stage is open."""
        self.shown = False

    def set_theme(self, theme: Theme) -> None:
        """Take other colours where the style sheet does not reach, such as painted pictures."""
