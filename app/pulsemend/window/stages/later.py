"""A stage whose time has not come: it says what will be there."""

from __future__ import annotations

from PySide6.QtWidgets import QVBoxLayout, QWidget

from pulsemend.session.changed import Changed
from pulsemend.session.found import Stage
from pulsemend.session.stages import NOT_YET, stage_states
from pulsemend.window.parts import Card, EmptyState, scrolling_column
from pulsemend.window.stages.base import StagePage
from pulsemend.window.workbench import Workbench


class LaterStage(StagePage):
    """Words about a stage of a later version.

    Parameters
    ----------
    bench : Workbench
        Session and workers.
    stage : Stage
        Which.
    """

    def __init__(self, bench: Workbench, stage: Stage) -> None:
        super().__init__(bench)
        self.stage = stage
        card = Card(stage.value, "not in this version")
        self._words = card.add_note()
        self.settings = scrolling_column(card, name=f"{stage.value}, settings")
        self.picture = QWidget()
        column = QVBoxLayout(self.picture)
        column.addWidget(EmptyState(NOT_YET[stage]))
        self.follow(self._refresh, Changed.RECORDING, Changed.PLAN, Changed.STAGE)
        self._refresh()

    def _refresh(self) -> None:
        state = next(one for one in stage_states(self.bench.session) if one.stage is self.stage)
        self._words.setText(state.words)
