"""Markers to trials: the best explanation of the whole recording, with what it leaves open."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from pulsemend.model.epochs import Trial, Trials, nearest_sample
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.plan import Plan, Slot
from pulsemend.model.recording import Marker
from pulsemend.model.trial_kinds import Variant, expanded_slots, variants
from pulsemend.model.vocabulary import Role, StandIn
from pulsemend.trials.alignment import Event, Placed, align

ADDED = "added by hand"
FOUND_IN_SIGNAL = "found in the signal"
"""Codes of pulses that have no marker."""

_ROUNDING_S = 1e-9


def match_trials(
    markers: Sequence[Marker],
    plan: Plan,
    rate_hz: float,
    marks: Marks = NO_MARKS,
    found: Iterable[int] = (),
) -> Trials:
    """Find the trials of a recording.

    All markers are explained together: as slots of trials within their time limits, with the fewest lost and
    left-over markers. A lost marker costs its own trial, not those that follow. Where another explanation is
    as good, the trials concerned say so. Left-over markers that begin a trial and go on are an incomplete
    trial, too.

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
    found : iterable of int
        Recorded samples of pulses found in the signal without a marker: for slots with ``from_signal``.

    Returns
    -------
    Trials
        All trials in order of time, incomplete ones included, and what is left over.

    Raises
    ------
    PlanError
        The limits of the slots contradict each other.
    """
    ways = variants(plan)
    roles = {slot.role for way in ways for slot in way.slots}
    known = [one for one in _known(markers, plan, marks, found) if one.role in roles]
    events = [Event(one.marker.sample / rate_hz, one.role, one.is_found) for one in known]
    placed = align(events, ways)
    trials = [_trial(one, known, rate_hz) for one in placed]
    taken = {place for one in placed for place in one.places.values()}
    begun, taken = _begun(known, taken, ways, rate_hz)
    trials = sorted([*trials, *begun], key=lambda trial: trial.first_sample)
    numbered = [replace(trial, number=number, place=number) for number, trial in enumerate(trials, start=1)]
    counts = Counter(marker.code for marker in markers)
    return Trials(
        trials=tuple(_with_stand_ins(numbered, plan, rate_hz)),
        extra=tuple(one.marker for place, one in enumerate(known) if place not in taken and not one.is_found),
        unnamed={code: count for code, count in counts.items() if not plan.names(code)},
        absent=tuple(marker.code for marker in plan.markers if marker.code not in counts),
    )


@dataclass(frozen=True)
class _Known:
    marker: Marker
    role: Role
    is_found: bool = False


def _known(markers: Sequence[Marker], plan: Plan, marks: Marks, found: Iterable[int]) -> list[_Known]:
    """Markers with their roles in order of time, pulses as the marks have them."""
    removed = set(marks.pulses_removed)
    known = [_Known(marker, plan.role_of(marker.code)) for marker in markers]
    # Marks count whole samples, formats that give times do not.
    kept = [
        one for one in known if one.role is not Role.PULSE or nearest_sample(one.marker.sample) not in removed
    ]
    kept += [_Known(Marker(float(sample), ADDED), Role.PULSE) for sample in marks.pulses_added]
    kept += [_Known(Marker(float(sample), FOUND_IN_SIGNAL), Role.PULSE, True) for sample in found]
    # Markers at one sample stand in the file in any order: here in that of the slots.
    order: dict[Role, int] = {}
    for place, slot in enumerate(plan.trial):
        order.setdefault(slot.role, place)
    return sorted(kept, key=lambda one: (one.marker.sample, order.get(one.role, len(order))))


def _trial(placed: Placed, known: Sequence[_Known], rate_hz: float) -> Trial:
    return Trial(
        number=0,
        markers={name: known[place].marker for name, place in placed.places.items()},
        missing=placed.missing,
        kind=placed.kind,
        doubts=_doubts(placed, known, rate_hz) if placed.is_doubtful else (),
    )


def _doubts(placed: Placed, known: Sequence[_Known], rate_hz: float) -> tuple[str, ...]:
    """Say where another explanation is as good."""

    def at(place: int) -> str:
        return f"{known[place].marker.sample / rate_hz:.3f} s"

    phrases = [f"a trial of kind {kind} as well" for kind in placed.other_kinds]
    for name, places in placed.others.items():
        own = placed.places.get(name)
        others = " or ".join(at(place) for place in places if place is not None)
        phrases.append(
            f"{name} at {at(own)} or {others}" if own is not None else f"{name} perhaps at {others}"
        )
    return tuple(phrases) or ("its markers may belong to a neighbouring trial",)


def _begun(
    known: Sequence[_Known], taken: set[int], ways: Sequence[Variant], rate_hz: float
) -> tuple[list[Trial], set[int]]:
    """Find trials that began and were broken off, among markers that no trial took."""
    taken = set(taken)
    found: list[Trial] = []
    for start, one in enumerate(known):
        if start in taken or one.is_found:
            continue
        for way in ways:
            places = _run(known, taken, way, start, rate_hz) if way.slots[0].role is one.role else {}
            if len(places) < 2:
                continue
            taken |= set(places.values())
            names = {slot.slot for slot in way.slots if not slot.optional} - set(places)
            found.append(
                Trial(
                    number=0,
                    markers={name: known[place].marker for name, place in places.items()},
                    missing=tuple(slot.slot for slot in way.slots if slot.slot in names),
                    kind=way.kind,
                )
            )
            break
    return found, taken


def _run(
    known: Sequence[_Known], taken: set[int], way: Variant, start: int, rate_hz: float
) -> dict[str, int]:
    """Slots filled one after the other by markers that follow each other and are free."""
    places = {way.slots[0].slot: start}
    at = start + 1
    for slot in way.slots[1:]:
        if at >= len(known) or at in taken:
            break
        reference = places.get(slot.after)
        if known[at].role is not slot.role or reference is None or slot.after_s is None:
            if slot.optional:
                continue
            break
        after_s = (known[at].marker.sample - known[reference].marker.sample) / rate_hz
        if slot.after_s[0] - _ROUNDING_S <= after_s <= slot.after_s[1] + _ROUNDING_S:
            places[slot.slot] = at
            at += 1
        elif not slot.optional:
            break
    return places


def _with_stand_ins(trials: Sequence[Trial], plan: Plan, rate_hz: float) -> list[Trial]:
    """Give trials an anchor in place of slots that were not found, where the plan wants one."""
    slots = {slot.slot: slot for slot in expanded_slots(plan) if slot.stand_in is not StandIn.NONE}
    if not slots:
        return list(trials)
    references = {(way.kind, slot.slot): slot.after for way in variants(plan) for slot in way.slots}
    latencies = {name: _latencies(name, trials, references) for name in slots}
    return [
        replace(trial, stand_ins=_stand_ins(trial, slots, references, latencies, rate_hz)) for trial in trials
    ]


def _latencies(name: str, trials: Sequence[Trial], references: Mapping[tuple[str, str], str]) -> list[float]:
    """Collect samples from its reference to a slot, in all certain trials that have it."""
    return [
        trial.markers[name].sample - trial.markers[reference].sample
        for trial in trials
        if not trial.doubts
        and name in trial.markers
        and (reference := references.get((trial.kind, name), "")) in trial.markers
    ]


def _stand_ins(
    trial: Trial,
    slots: Mapping[str, Slot],
    references: Mapping[tuple[str, str], str],
    latencies: Mapping[str, Sequence[float]],
    rate_hz: float,
) -> dict[str, float]:
    found = {}
    for name, slot in slots.items():
        reference = trial.markers.get(references.get((trial.kind, name), ""))
        if name in trial.markers or reference is None:
            continue
        if slot.stand_in is StandIn.FIXED and slot.stand_in_s is not None:
            found[name] = reference.sample + slot.stand_in_s * rate_hz
        elif latencies[name]:
            # Drawn by the trial's own instant: what happens to other trials changes nothing here.
            rng = np.random.default_rng([slot.stand_in_seed, nearest_sample(reference.sample), _number(name)])
            found[name] = reference.sample + sorted(latencies[name])[int(rng.integers(len(latencies[name])))]
    return found


def _number(name: str) -> int:
    return int.from_bytes(name.encode()[:8], "big")
