"""Card of the Pulses stage on the leak: what filters carry of pulses into the epochs, either way."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from PySide6.QtCore import Qt
from PySide6.QtWidgets import QGridLayout, QLabel, QWidget

from pulsemend.export.readiness import LEAK_LIMIT_UV
from pulsemend.mending.leak_view import LeakView, RuleLeak, leak_per_rule
from pulsemend.mending.learned import Learned
from pulsemend.model.plan import Plan
from pulsemend.model.vocabulary import AcrossPulses
from pulsemend.units import v_to_uv
from pulsemend.window.job import Job
from pulsemend.window.parts import Card, Choices, button, words
from pulsemend.window.stages.pulse_cards import Edits

_WAYS: Mapping[AcrossPulses, tuple[str, str, str]] = {
    AcrossPulses.FILLED: (
        "across the filled gaps",
        "across",
        "Filters run through the gaps and see what was filled in.",
    ),
    AcrossPulses.SPLIT: (
        "each stretch alone",
        "alone",
        "Each stretch between pulses is filtered alone, its ends continued as they usually go on: nothing of "
        "a pulse reaches another stretch, but near the ends a filter knows less.",
    ),
}
MEANING = (
    "The median pulse, as repaired, from the gap to 100 ms after it, goes alone through the same filters; "
    "shown is the largest value in an epoch outside that time."
)


class LeakCard(Card):
    """How filters treat gaps, and the leak of both ways.

    Parameters
    ----------
    edits : Edits
        Changes the plan; its workbench measures.
    """

    def __init__(self, edits: Edits) -> None:
        super().__init__("Filters and leak")
        self._edits = edits
        self._learned: Learned | None = None
        self._problem = ""
        self._found_with: object = None
        self._found: dict[AcrossPulses, LeakView] = {}
        self._jobs: dict[AcrossPulses, tuple[Job, int]] = {}
        self.across = Choices("Filters run", [(way.value, name) for way, (name, *_) in _WAYS.items()])
        self.across.setToolTip(f"On the right: kept epochs with a leak above {LEAK_LIMIT_UV:g} \u00b5V")
        for label in self.across.findChildren(QLabel):
            label.setMinimumWidth(1)
        self.add(self.across)
        self.meaning = self.add_note()
        self.other = button("Measure the other way, too", self._measure_other)
        self.add(self.other)
        self.table = _LeakTable()
        self.add(self.table)
        self.add_note(MEANING)
        self.across.chosen.connect(self._choose)

    def show_values(self, plan: Plan) -> None:
        """Show what the plan says now."""
        way = plan.filter.across_pulses
        self.across.show_choice(way.value)
        self.meaning.setText(_WAYS[way][2])
        self._show()

    def show_learned(self, learned: Learned) -> None:
        """Measure with the present settings, unless that is known."""
        self._learned, self._problem = learned, ""
        self._measure(learned.setup.across_pulses)
        self._show()

    def show_waiting(self, problem: str = "") -> None:
        """Say that nothing is known of the present settings yet, or why nothing can be.

        Without a problem, what was shown stays until it is known anew: nothing moves under the hand.
        """
        self._learned, self._problem = None, problem
        self._show()

    def stop(self) -> None:
        """Measure nothing any more."""
        for job, _ in self._jobs.values():
            job.cancel()
        self._jobs = {}

    # Measuring

    def _found_now(self) -> dict[AcrossPulses, LeakView]:
        """Keep what was measured as long as all else in plan and marks is as it is now."""
        session = self._edits.bench.session
        if session.plan is not None:
            same = replace(session.plan.filter, across_pulses=AcrossPulses.FILLED)
            rest = replace(session.plan, filter=same), session.marks
            if rest != self._found_with:
                self.stop()
                self._found_with, self._found = rest, {}
        return self._found

    def _measure(self, way: AcrossPulses) -> None:
        learned = self._learned
        if learned is None or way in self._found_now():
            return
        session = self._edits.bench.session
        if way in self._jobs and self._jobs[way][1] == session.revision:
            return
        job = self._edits.bench.start(
            f"leak, {way}", lambda recording: leak_per_rule(recording, learned, way), self._take
        )
        if job is not None:
            self._jobs[way] = job, session.revision

    def _measure_other(self) -> None:
        if self._learned is not None:
            self._measure(_other(self._learned.setup.across_pulses))
            self._show()

    def _take(self, found: LeakView) -> None:
        self._found_now()[found.across_pulses] = found
        self._jobs.pop(found.across_pulses, None)
        self._show()

    # Showing

    def _show(self) -> None:
        plan = self._edits.bench.session.plan
        found = self._found_now()
        for one in _WAYS:
            waiting = "being measured" if one in self._jobs else ""
            self.across.show_evidence(one.value, _evidence(found[one]) if one in found else waiting)
        way = AcrossPulses.FILLED if plan is None else plan.filter.across_pulses
        self.other.setVisible(_other(way) not in found)
        self.other.setEnabled(self._learned is not None and _other(way) not in self._jobs)
        if way in found:
            self.note.setText("")
            self.table.show_leaks(way, found)
        elif plan is None or self._problem:
            self.note.setText(self._problem)
            self.table.show_leaks(way, {})
        else:
            self.note.setText("being measured")

    def _choose(self, key: str) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            changed = replace(plan.filter, across_pulses=AcrossPulses(key))
            self._edits.plan(f"Filters across pulses: {key}", replace(plan, filter=changed))


class _LeakTable(QWidget):
    """Largest leak into each rule's epochs and how many are above the limit, for the ways measured."""

    def __init__(self) -> None:
        super().__init__()
        self.setAccessibleName(f"Leak by epoch rule, and epochs above {LEAK_LIMIT_UV:g} \u00b5V")
        self.grid = QGridLayout(self)
        self.grid.setContentsMargins(0, 0, 0, 0)
        self.grid.setVerticalSpacing(2)
        self.grid.setHorizontalSpacing(12)
        self.grid.setColumnStretch(0, 1)
        self.cells: dict[tuple[str, AcrossPulses], tuple[QLabel, QLabel]] = {}
        self._shown: tuple[AcrossPulses, Mapping[AcrossPulses, LeakView]] | None = None

    def show_leaks(self, way: AcrossPulses, found: Mapping[AcrossPulses, LeakView]) -> None:
        """Show the way of now, and beside it the other if it was measured."""
        if self._shown == (way, found):
            return
        self._shown = way, dict(found)
        self._clear()
        shown = [one for one in _WAYS if one in found and found[one].n_pulses]
        if way not in shown:
            return
        if len(shown) > 1:
            for column, one in enumerate(shown, 1):
                self._put(0, column, _WAYS[one][1], "quiet", right=True)
        for place, name in enumerate(found[way].rules):
            row = 1 + 2 * place
            self._put(row, 0, name, "")
            self._put(row + 1, 0, f"above {LEAK_LIMIT_UV:g} \u00b5V", "quiet")
            for column, one in enumerate(shown, 1):
                largest, above = _cell_words(found[one].rules[name])
                kind = "attention" if found[one].rules[name].n_above else "value"
                cells = (
                    self._put(row, column, largest, kind if one is way else "quiet", right=True),
                    self._put(row + 1, column, above, "quiet", right=True),
                )
                for cell, text in zip(cells, (largest, above), strict=True):
                    cell.setAccessibleName(f"{name}, {_WAYS[one][0]}: {text}")
                self.cells[name, one] = cells

    def _put(self, row: int, column: int, text: str, kind: str, *, right: bool = False) -> QLabel:
        label = words(text, kind)
        label.setWordWrap(column == 0)
        if right:
            label.setAlignment(Qt.AlignmentFlag.AlignRight)
        self.grid.addWidget(label, row, column)
        return label

    def _clear(self) -> None:
        self.cells = {}
        while self.grid.count():
            item = self.grid.takeAt(0)
            old = None if item is None else item.widget()
            if old is not None:
                old.hide()
                old.deleteLater()


def _cell_words(rule: RuleLeak) -> tuple[str, str]:
    if not rule.n_epochs:
        return "no epoch kept", ""
    return uv_words(rule.largest_v), f"{rule.n_above} of {rule.n_epochs}"


def uv_words(value_v: float) -> str:
    """Write a leak in microvolts, small ones with the digits that count."""
    value_uv = v_to_uv(value_v)
    return f"{value_uv:.2f} \u00b5V" if value_uv < 10.0 else f"{value_uv:.1f} \u00b5V"


def _other(way: AcrossPulses) -> AcrossPulses:
    return AcrossPulses.SPLIT if way is AcrossPulses.FILLED else AcrossPulses.FILLED


def _evidence(found: LeakView | None) -> str:
    if found is None:
        return ""
    if not found.n_pulses:
        return "no pulse has 100 ms of its own"
    return f"{found.n_above} of {found.n_epochs} above"
