"""What every stage is to the window."""

from __future__ import annotations

from PySide6.QtWidgets import QWidget

from pulsemend.session.found import Stage
from pulsemend.window.theme import Theme
from pulsemend.window.workbench import Workbench


class StagePage:
    """One stage: `settings` stands beside the traces, `picture` below them.

    Subclasses build both widgets in `__init__`, subscribe to the session (`bench.session.subscribe`) and to
    `bench.learned_changed`, and change plan and marks only through `session.edit_plan` and `edit_marks`.

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

    def show_stage(self) -> None:
        """Take note that the stage is open; costly pictures are made only while it is."""
        self.shown = True

    def hide_stage(self) -> None:
        """Take note that another stage is open."""
        self.shown = False

    def set_theme(self, theme: Theme) -> None:
        """Take other colours where the style sheet does not reach, such as painted pictures."""
