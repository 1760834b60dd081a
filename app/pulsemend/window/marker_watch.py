"""Keeps a survey of the open recording's markers up to date, whichever stage is open."""

from __future__ import annotations

from dataclasses import replace

from PySide6.QtCore import QObject, QTimer, Signal

from pulsemend.mending.marker_view import Survey, TrialState, survey, trial_state
from pulsemend.session.changed import Changed
from pulsemend.session.found import FoundMarkers
from pulsemend.window.workbench import Workbench

SOON_MS = 15
"""Changes within this time of each other are looked into together."""


class MarkerWatch(QObject):
    """Has a worker look through the markers whenever something about them changed.

    Where trials can be decided about, it follows the workbench; until then, and where that is not possible
    yet, markers, plan and marks alone are enough for it.

    Parameters
    ----------
    bench : Workbench
        Session and workers.

    Attributes
    ----------
    changed : Signal()
        `survey` is another one.
    """

    changed = Signal()

    def __init__(self, bench: Workbench, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self._bench = bench
        self.survey: Survey | None = None
        self._soon = QTimer(self)
        self._soon.setSingleShot(True)
        self._soon.setInterval(SOON_MS)
        self._soon.timeout.connect(self._ask)
        self._unsubscribe = [
            bench.session.subscribe(Changed.RECORDING, self._forget),
            bench.session.subscribe(Changed.PLAN, self._on_edit),
            bench.session.subscribe(Changed.MARKS, self._on_edit),
        ]
        bench.learned_changed.connect(self._soon.start)
        self._soon.start()

    @property
    def is_current(self) -> bool:
        """Whether the survey is of the plan and marks shown."""
        session = self._bench.session
        found = self.survey
        return found is not None and found.plan == session.plan and found.marks == session.marks

    def close(self) -> None:
        """Look at nothing any more."""
        if not self._unsubscribe:
            return
        for end in self._unsubscribe:
            end()
        self._unsubscribe = []
        self._bench.learned_changed.disconnect(self._soon.start)
        self._soon.stop()

    def _forget(self) -> None:
        self.survey = None
        self.changed.emit()
        self._soon.start()

    def _on_edit(self) -> None:
        # Otherwise the workbench will have decided anew in a moment.
        if self._bench.learned is None:
            self._soon.start()

    def _ask(self) -> None:
        bench = self._bench
        session = bench.session
        if session.recording is None:
            return
        plan, marks, earlier = session.plan, session.marks, self.survey
        decision = None
        if bench.learned is not None and not bench.provisional:
            decision = bench.learned.decision
            if self.is_current and earlier is not None and earlier.decision is decision:
                return
        bench.start(
            "markers", lambda recording: survey(recording, plan, marks, decision, earlier), self._take
        )

    def _take(self, found: Survey) -> None:
        self.survey = found
        session = self._bench.session
        curable = tuple(dict.fromkeys(fault.key for fault in found.faults if fault.cure))
        doubtful = sum(trial_state(trial) is TrialState.DOUBTFUL for trial in found.trials.trials)
        codes = frozenset(one.code for one in found.evidence)
        markers = FoundMarkers(codes, curable, doubtful, found.log.problem)
        session.set_found(replace(session.found, markers=markers))
        self.changed.emit()
