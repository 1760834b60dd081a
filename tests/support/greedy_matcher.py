"""The greedy matcher that the alignment replaced: slots matched in order within their limits.

Kept only for tests/benchmarks/matching.py, which shows the difference.
"""

from __future__ import annotations

from bisect import bisect_left
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from pulsemend.model.epochs import Trial, Trials, nearest_sample
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.plan import Plan, Slot
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Role

ADDED = "added by hand"
_ROUNDING_S = 1e-9


def match_trials(markers: Sequence[Marker], plan: Plan, rate_hz: float, marks: Marks = NO_MARKS) -> Trials:
    """Find the trials of a recording.

    Every marker of the first slot's role starts a trial. A later slot takes the earliest marker of its role
    that is not taken, not before the marker matched last, within `after_s` of its reference slot, and before
    the next trial starts. A slot whose reference was not found is not found either. Where later slots share
    the first slot's role, as many of its markers are left to the trial before the next one may start.

    Parameters
    ----------
    markers : sequence of Marker
        The recording's markers.
    plan : Plan
        Roles of codes and slots of a trial.
    rate_hz : float
        Recorded rate, in which markers count.
    marks : Marks
        Pulses removed by hand fill no slot; pulses added by hand may.

    Returns
    -------
    Trials
        All trials in order of time, incomplete ones included, and what is left over.
    """
    known = sorted(_known(markers, plan, marks), key=lambda found: found.marker.sample)
    roles = {slot.role for slot in plan.trial}
    matcher = _Matcher(plan.trial, [found for found in known if found.role in roles], rate_hz)
    trials = matcher.trials()
    named = {marker.code for marker in plan.markers}
    counts = Counter(marker.code for marker in markers)
    return Trials(
        trials=trials,
        extra=tuple(found.marker for found in matcher.left_over()),
        unnamed={code: count for code, count in counts.items() if code not in named},
        absent=tuple(marker.code for marker in plan.markers if marker.code not in counts),
    )


@dataclass(frozen=True)
class _Found:
    marker: Marker
    role: Role


def _known(markers: Sequence[Marker], plan: Plan, marks: Marks) -> list[_Found]:
    """Markers with their roles, pulses as the marks have them."""
    removed = set(marks.pulses_removed)
    found = [_Found(marker, plan.role_of(marker.code)) for marker in markers]
    # Marks count whole samples, formats that give times do not.
    kept = [
        one for one in found if one.role is not Role.PULSE or nearest_sample(one.marker.sample) not in removed
    ]
    added = [_Found(Marker(float(sample), ADDED), Role.PULSE) for sample in marks.pulses_added]
    return kept + added


class _Matcher:
    def __init__(self, slots: Sequence[Slot], markers: Sequence[_Found], rate_hz: float) -> None:
        self.slots = slots
        self.markers = markers
        self.samples = [found.marker.sample for found in markers]
        self.rate_hz = rate_hz
        self.taken: set[int] = set()
        self.starts = [place for place, found in enumerate(markers) if found.role is slots[0].role]

    def trials(self) -> tuple[Trial, ...]:
        found: list[Trial] = []
        for start in self.starts:
            if start not in self.taken:
                found.append(self.trial(len(found) + 1, start))
        return tuple(found)

    def left_over(self) -> list[_Found]:
        return [found for place, found in enumerate(self.markers) if place not in self.taken]

    def trial(self, number: int, start: int) -> Trial:
        first = self.slots[0]
        self.taken.add(start)
        matched = {first.slot: self.markers[start].marker}
        missing: list[str] = []
        end = self.end_of_trial(start)
        last = start
        reference = first.slot  # the nearest earlier slot that is not optional
        for slot in self.slots[1:]:
            place = self.find(slot, matched.get(slot.after or reference), last, end)
            if place is not None:
                self.taken.add(place)
                matched[slot.slot] = self.markers[place].marker
                last = place
            elif not slot.optional:
                missing.append(slot.slot)
            if not slot.optional:
                reference = slot.slot
        return Trial(number, matched, tuple(missing))

    def end_of_trial(self, start: int) -> int:
        """Place of the marker that starts the next trial."""
        own = sum(slot.role is self.slots[0].role for slot in self.slots[1:])
        later = [place for place in self.starts if place > start and place not in self.taken]
        return later[own] if own < len(later) else len(self.markers)

    def find(self, slot: Slot, reference: Marker | None, last: int, end: int) -> int | None:
        """Place of the marker that fills a slot, or None."""
        if reference is None or slot.after_s is None:
            return None
        least_s, most_s = slot.after_s
        earliest = self.markers[last].marker.sample
        # Markers at the very sample of the last one may stand before it in the file.
        for place in range(bisect_left(self.samples, earliest), end):
            found = self.markers[place]
            if found.role is not slot.role or place in self.taken:
                continue
            after_s = (found.marker.sample - reference.sample) / self.rate_hz
            if after_s > most_s + _ROUNDING_S:
                return None
            if after_s >= least_s - _ROUNDING_S:
                return place
        return None
