"""What a drag would do, counted while the hand moves: in a worker, a few times a second."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from PySide6.QtCore import QObject, QTimer

from pulsemend.mending.epoch_lanes import Lanes, epoch_lanes
from pulsemend.mending.epoch_rows import recounted
from pulsemend.mending.learned import Learned
from pulsemend.mending.prepare import Decision
from pulsemend.mending.rule_edits import with_length, with_rule
from pulsemend.model.plan import Plan
from pulsemend.progress import Work
from pulsemend.window.epoch_lanes import Try
from pulsemend.window.workbench import Workbench

PAUSE_MS = 250
KIND = "epochs while dragged"


@dataclass(frozen=True)
class Preview:
    """A decision that is not made yet."""

    plan: Plan
    decision: Decision
    lanes: Lanes


def tried_plan(plan: Plan, tried: Try) -> Plan:
    """Give the plan as it would be if the hand let go here.

    Parameters
    ----------
    plan : Plan
        As edited.
    tried : Try
        Where rule and length are dragged.
    """
    rule = plan.epochs.rule[tried.rule]
    new = with_rule(plan, tried.rule, replace(rule, start_s=tried.start_s))
    return with_length(new, tried.length_s)


class LanePreview(QObject):
    """Counts anew while something is dragged.

    Parameters
    ----------
    bench : Workbench
        Workers, and what is learned.
    show : callable
        Gets every Preview.
    """

    def __init__(self, bench: Workbench, show: Callable[[Preview], None]) -> None:
        super().__init__(bench)
        self._bench = bench
        self._show = show
        self._wanted: Try | None = None
        self._is_counting = False
        self._pause = QTimer(self)
        self._pause.setSingleShot(True)
        self._pause.setInterval(PAUSE_MS)
        self._pause.timeout.connect(self._count)

    def want(self, tried: Try) -> None:
        """Count this soon, if nothing newer comes before."""
        self._wanted = tried
        if not self._pause.isActive() and not self._is_counting:
            self._pause.start()

    def stop(self) -> None:
        """Count nothing more; what is being counted is not shown."""
        self._wanted = None
        self._pause.stop()
        for job in self._bench.jobs.under_way:
            if job.kind == KIND:
                job.cancel()

    def _count(self) -> None:
        tried, learned, plan = self._wanted, self._bench.learned, self._bench.session.plan
        self._wanted = None
        if tried is None or learned is None or plan is None or tried.rule >= len(plan.epochs.rule):
            return
        new = tried_plan(plan, tried)
        job = self._bench.start(KIND, lambda _recording: _preview(learned, new), self._show, urgent=True)
        if job is not None:
            self._is_counting = True
            job.finished.connect(self._end)

    def _end(self) -> None:
        self._is_counting = False
        if self._wanted is not None:
            self._pause.start()


def _preview(learned: Learned, plan: Plan) -> Work[Preview]:
    decision = yield from recounted(learned.decision, learned.plan, plan)
    lanes = yield from epoch_lanes(decision, plan)
    return Preview(plan, decision, lanes)
