"""What the keys and menus do to the marks: bad channels, bad stretches, pulses by hand. All can be undone."""

from __future__ import annotations

from dataclasses import replace

from pulsemend.mending.pulse_list import PulseRow, pulse_rows, refusal_to_add, with_added
from pulsemend.model.epochs import Pulse, nearest_sample
from pulsemend.model.marks import BadStretch, Marks, MovedPulse
from pulsemend.model.recording import RecordingFacts
from pulsemend.session.found import NOTHING_SELECTED, Selected
from pulsemend.session.messages import Level, Message
from pulsemend.session.session import Session
from pulsemend.window.workbench import Workbench


class MarkActs:
    """Edits of the marks that several places offer.

    Parameters
    ----------
    bench : Workbench
        Session, and the pulses that are known.
    """

    def __init__(self, bench: Workbench) -> None:
        self._bench = bench

    @property
    def _session(self) -> Session:
        return self._bench.session

    def set_bad(self, names: frozenset[str], *, bad: bool) -> None:
        """Mark channels bad in this recording, or take that back; what was found bad becomes good by hand."""
        session = self._session
        good = frozenset(session.marks.good)
        plan_wide = (frozenset(session.plan.channels.bad if session.plan else ()) & names) - good
        if plan_wide and not bad:
            text = f"{', '.join(sorted(plan_wide))}: bad in every recording by the plan; change it there"
            session.say(Message(Level.NOTE, text))
        before = session.marks.bad
        kept = tuple(name for name in before if name not in names)
        after = (*kept, *sorted(names - set(kept) - plan_wide)) if bad else kept
        against = {} if self._bench.learned is None else self._bench.learned.against
        found = {name for name in names - plan_wide if name in against and against[name].is_found}
        good = good - names if bad else good | found
        listed = ", ".join(sorted(names)[:3]) + (" ..." if len(names) > 3 else "")
        session.edit_marks(
            f"{listed} {'bad' if bad else 'not bad'}",
            replace(session.marks, bad=after, good=tuple(sorted(good))),
        )

    def toggle_bad(self) -> None:
        """Mark the picked channels bad, or not bad if all are."""
        picked = self._session.view.picked
        self.set_bad(picked, bad=not picked <= set(self._session.marks.bad))

    def mark_stretch(self, kind: str) -> None:
        """Leave the selected stretch out of everything."""
        session = self._session
        stretch = session.selected.stretch
        if stretch is None:
            return
        added = BadStretch(*stretch, kind)
        stretches = tuple(
            sorted({*session.marks.bad_stretches, added}, key=lambda one: (one.start, one.stop))
        )
        session.edit_marks("Bad stretch", replace(session.marks, bad_stretches=stretches))
        session.select(NOTHING_SELECTED)

    def add_pulse(self, sample: int) -> None:
        """Add a pulse whose onset is at a recorded sample, unless one is there already."""
        session = self._session
        opened = session.recording
        if opened is None:
            return
        refusal = refusal_to_add(sample, self._rows(opened.facts), opened.facts.rate_hz)
        if refusal:
            session.say(Message(Level.ATTENTION, refusal))
        else:
            session.edit_marks("Pulse added", with_added(session.marks, sample))

    def move_pulse(self, sample: int, to: int, merge_key: str | None = None) -> None:
        """Give the pulse whose onset is at a sample another onset."""
        pulse = self.pulse_at(sample)
        if pulse is None or to == sample:
            return
        session = self._session
        marks = _without(session.marks, pulse)
        if pulse.marked is None:
            moved = replace(marks, pulses_added=tuple(sorted({*marks.pulses_added, to})))
        else:
            entry = MovedPulse(nearest_sample(pulse.marked), to)
            pulses = sorted((*marks.pulses_moved, entry), key=lambda one: one.sample)
            moved = replace(marks, pulses_moved=tuple(pulses))
        session.edit_marks("Pulse moved", moved, merge_key)
        session.select(Selected(pulse=to))

    def remove_pulse(self, sample: int) -> None:
        """Say that the pulse whose onset is at a sample is none."""
        pulse = self.pulse_at(sample)
        if pulse is None:
            return
        session = self._session
        marks = _without(session.marks, pulse)
        if pulse.marked is not None:
            removed = tuple(sorted({*marks.pulses_removed, nearest_sample(pulse.marked)}))
            marks = replace(marks, pulses_removed=removed)
        session.edit_marks("Pulse removed", marks)
        session.select(NOTHING_SELECTED)

    def remove_selected(self) -> None:
        """Remove the selected pulse, or the bad stretches that the selected stretch touches."""
        session = self._session
        selected = session.selected
        if selected.pulse is not None:
            self.remove_pulse(selected.pulse)
        elif selected.stretch is not None:
            start, stop = selected.stretch
            kept = tuple(s for s in session.marks.bad_stretches if s.stop <= start or s.start >= stop)
            session.edit_marks("Bad stretch removed", replace(session.marks, bad_stretches=kept))
            session.select(NOTHING_SELECTED)

    def _rows(self, facts: RecordingFacts) -> tuple[PulseRow, ...]:
        """List the pulses as the Pulses stage does."""
        session, learned = self._session, self._bench.learned
        if session.plan is None:
            return ()
        known = () if learned is None else learned.estimates.pulses
        return pulse_rows(facts, session.plan, session.marks, known)

    def pulse_at(self, sample: int) -> Pulse | None:
        """Find the known pulse whose onset is at a sample."""
        learned = self._bench.learned
        pulses = () if learned is None else learned.estimates.pulses
        return next((pulse for pulse in pulses if pulse.sample == sample), None)


def _without(marks: Marks, pulse: Pulse) -> Marks:
    """Take out of marks what they say about one pulse."""
    added = tuple(n for n in marks.pulses_added if pulse.marked is not None or n != pulse.sample)
    moved = marks.pulses_moved
    if pulse.marked is not None:
        moved = tuple(one for one in moved if one.sample != nearest_sample(pulse.marked))
    return replace(marks, pulses_added=added, pulses_moved=moved)
