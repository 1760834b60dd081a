"""Markers to trials: the best explanation of the whole recording, with what it leaves open."""

from __future__ import annotations

import zlib
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

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
    as good, the trials concerned say so. Two or more markers left over outside all trials that begin one and
    follow each other are a trial that was broken off.

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
    begun = _begun(known, placed, ways, rate_hz)
    taken = {place for one in (*placed, *begun) for place in one.places.values()}
    trials = [
        _trial(one, known, rate_hz, before) for before, one in zip((None, *placed), placed, strict=False)
    ]
    trials += [_trial(one, known, rate_hz) for one in begun]
    trials.sort(key=lambda trial: trial.first_sample)
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
    # A code that the plan does not name fills no slot, not even one of role other.
    known = [_Known(marker, plan.role_of(marker.code)) for marker in markers if plan.names(marker.code)]
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


def _trial(placed: Placed, known: Sequence[_Known], rate_hz: float, before: Placed | None = None) -> Trial:
    return Trial(
        number=0,
        markers={name: known[place].marker for name, place in placed.places.items()},
        missing=placed.missing,
        kind=placed.kind,
        doubts=_doubts(placed, known, rate_hz, before) if placed.is_doubtful else (),
    )


def _doubts(
    placed: Placed, known: Sequence[_Known], rate_hz: float, before: Placed | None
) -> tuple[str, ...]:
    """Say where another explanation is as good."""
    phrases = [f"a trial of kind {kind} as well" for kind in placed.other_kinds]
    start = min(placed.places.values())
    for name, found in placed.others.items():
        own = placed.places.get(name)
        # What may end the trial before, and stands before this one begins, is a doubt of that trial alone.
        of_before = () if before is None else before.others.get(name, ())
        places = [place for place in found if place >= start or place not in of_before]
        if not places:
            continue
        every = places if own is None else [own, *places]
        times = " or ".join(_told_apart([known[place].marker.sample / rate_hz for place in every]))
        phrases.append(f"{name} {'perhaps ' if own is None else ''}at {times}")
    return tuple(phrases) or ("its markers may belong to a neighbouring trial, or to none",)


def _told_apart(times_s: Sequence[float]) -> list[str]:
    """Write times to the millisecond; where that makes two of them one, more finely."""
    texts: list[str] = []
    for digits in (3, 4, 5):
        texts = [f"{time_s:.{digits}f} s" for time_s in times_s]
        if len(set(texts)) == len(texts):
            break
    return texts


def _begun(
    known: Sequence[_Known], placed: Sequence[Placed], ways: Sequence[Variant], rate_hz: float
) -> list[Placed]:
    """Find trials that began and were broken off, among markers outside all others."""
    spans = [(min(one.places.values()), max(one.places.values()) + 1) for one in placed]
    free = [not one.is_found for one in known]
    for first, end in spans:
        free[first:end] = [False] * (end - first)
    found: list[Placed] = []
    for start in range(len(known)):
        runs = [(way, _run(known, free, way, start, rate_hz)) for way in ways] if free[start] else []
        most = max((len(places) for _, places in runs), default=0)
        if most < 2:
            continue
        longest = [(way, places) for way, places in runs if len(places) == most]
        way, places = longest[0]
        for place in places.values():
            free[place] = False
        missing = tuple(slot.slot for slot in way.slots if not slot.optional and slot.slot not in places)
        kinds = dict.fromkeys(other.kind for other, _ in longest if other.kind != way.kind)
        found.append(Placed(way.kind, places, missing, {}, tuple(kinds), bool(kinds)))
    return found


def _run(
    known: Sequence[_Known], free: Sequence[bool], way: Variant, start: int, rate_hz: float
) -> dict[str, int]:
    """Slots filled from the first on by free markers that follow each other."""
    if way.slots[0].role is not known[start].role:
        return {}
    places = {way.slots[0].slot: start}
    at = start + 1
    for slot in way.slots[1:]:
        if at >= len(known) or not free[at]:
            break
        reference = places.get(slot.after)
        fits = False
        if known[at].role is slot.role and reference is not None and slot.after_s is not None:
            after_s = (known[at].marker.sample - known[reference].marker.sample) / rate_hz
            fits = slot.after_s[0] - _ROUNDING_S <= after_s <= slot.after_s[1] + _ROUNDING_S
        if fits:
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


def _latencies(
    name: str, trials: Sequence[Trial], references: Mapping[tuple[str, str], str]
) -> dict[int, float]:
    """Collect samples from its reference to a slot, by the reference's, of all certain trials with both."""
    return {
        nearest_sample(trial.markers[reference].sample): (
            trial.markers[name].sample - trial.markers[reference].sample
        )
        for trial in trials
        if not trial.doubts
        and name in trial.markers
        and (reference := references.get((trial.kind, name), "")) in trial.markers
    }


def _stand_ins(
    trial: Trial,
    slots: Mapping[str, Slot],
    references: Mapping[tuple[str, str], str],
    latencies: Mapping[str, Mapping[int, float]],
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
            found[name] = reference.sample + _drawn(latencies[name], slot, nearest_sample(reference.sample))
    return found


def _drawn(latencies: Mapping[int, float], slot: Slot, own: int) -> float:
    """Draw a latency by what the seed says of this trial and every other one: the smallest number wins.

    So a trial that is gained or lost changes no draw but those it wins or has won.
    """
    key = np.array([slot.stand_in_seed << 32 | zlib.crc32(slot.slot.encode())], dtype=np.uint64)
    numbers = np.array(list(latencies), dtype=np.uint64)
    numbers = _mixed(numbers + _mixed(np.array([own], dtype=np.uint64) + _mixed(key)))
    return list(latencies.values())[int(np.argmin(numbers))]


def _mixed(numbers: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Scatter numbers over all 64 bits.

    References
    ----------
    Steele GL, Lea D, Flood CH (2014) Fast splittable pseudorandom number generators. ACM SIGPLAN Not
    49(10):453-472. DOI 10.1145/2714064.2660195
    """
    numbers = numbers + np.uint64(0x9E3779B97F4A7C15)
    numbers = (numbers ^ (numbers >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    numbers = (numbers ^ (numbers >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return numbers ^ (numbers >> np.uint64(31))
