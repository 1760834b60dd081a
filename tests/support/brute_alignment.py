"""Explanations of a few markers as trials, found by listing them all: slow, plain, apart from `align`.

A way to run is one variant with an event for some of its slots. Whether its times can meet the limits is
asked of the whole system at once, lost required slots included, by looking for a circle of limits that
cannot be met (Bellman and Ford).
"""

from __future__ import annotations

import itertools
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from math import inf

from pulsemend.model.plan import Slot
from pulsemend.model.trial_kinds import Variant
from pulsemend.trials.alignment import LEFT_OVER, MISSING, UNUSED, Event

FOREIGN_PER_SLOT = 2
"""Most foreign markers between two of a trial, per slot of the longest variant (as `align` documents)."""

TOLERANCE_S = 1e-8
MOST_RUNS = 15_000


@dataclass(frozen=True)
class Run:
    """A trial as it may have run.

    Parameters
    ----------
    kind : str
    places : tuple of (str, int)
        Slots that were found with the places of their events, in order.
    missing : tuple of str
        Required slots that were not.
    """

    kind: str
    places: tuple[tuple[str, int], ...]
    missing: tuple[str, ...]

    @property
    def first(self) -> int:
        return self.places[0][1]

    @property
    def last(self) -> int:
        return self.places[-1][1]


def can_be_met(slots: Sequence[Slot], times: Mapping[str, float]) -> bool:
    """Whether times exist for all required slots that meet all limits together with those of found slots."""
    limits = _limits(slots, times)
    limits += [("", name, time_s) for name, time_s in times.items()]
    limits += [(name, "", -time_s) for name, time_s in times.items()]
    start = dict.fromkeys(["", *(slot.slot for slot in slots)], 0.0)
    return _shortest(limits, start) is not None


def _limits(slots: Sequence[Slot], found: Collection[str]) -> list[tuple[str, str, float]]:
    """From a slot to another: that much later at most. Slots in order, each within its limits."""
    names = [slot.slot for slot in slots if slot.slot in found or not slot.optional]
    limits = [(later, earlier, 0.0) for earlier, later in itertools.pairwise(names)]
    for slot in slots:
        if slot.after_s is not None and slot.after in names and slot.slot in names:
            least_s, most_s = slot.after_s
            limits += [(slot.after, slot.slot, most_s + TOLERANCE_S)]
            limits += [(slot.slot, slot.after, -least_s + TOLERANCE_S)]
    return limits


def _shortest(limits: Sequence[tuple[str, str, float]], start: dict[str, float]) -> dict[str, float] | None:
    """Shortest ways; None if there is a circle that gets shorter with every turn."""
    reached = dict(start)
    for _ in range(len(reached) + 1):
        is_changed = False
        for origin, end, most in limits:
            if reached[origin] + most < reached[end] - TOLERANCE_S / 100:
                reached[end] = reached[origin] + most
                is_changed = True
        if not is_changed:
            return reached
    return None


@lru_cache(maxsize=1000)
def _longest_s(slots: tuple[Slot, ...], first: str, second: str) -> tuple[float, float]:
    """Least and most time between two found slots: only to be quicker, all is asked again in the end."""
    limits = _limits(slots, (first, second))
    ways = []
    for origin, end in ((second, first), (first, second)):
        start = {slot.slot: inf for slot in slots} | {origin: 0.0}
        ways.append((_shortest(limits, start) or start)[end])
    return -ways[0] - TOLERANCE_S, ways[1] + TOLERANCE_S


def runs(events: Sequence[Event], variants: Sequence[Variant]) -> list[Run]:
    """List every way to run that could be worth it: what is missing costs no more than what it takes.

    Raises
    ------
    OverflowError
        Too many to list.
    """
    foreign = FOREIGN_PER_SLOT * max(len(variant.slots) for variant in variants)
    found: dict[Run, None] = {}
    for variant in variants:
        for places in _assignments(events, variant, (), 0, foreign):
            missing = tuple(s.slot for s in variant.slots if not s.optional and s.slot not in dict(places))
            if can_be_met(variant.slots, {name: events[place].time_s for name, place in places}):
                found[Run(variant.kind, places, missing)] = None
            if len(found) > MOST_RUNS:
                raise OverflowError(MOST_RUNS)
    return list(found)


def _assignments(
    events: Sequence[Event], variant: Variant, so_far: tuple[tuple[str, int], ...], slot: int, foreign: int
) -> Iterator[tuple[tuple[str, int], ...]]:
    slots = variant.slots
    names = dict(so_far)
    lacking = sum(not one.optional and one.slot not in names for one in slots[:slot])
    saved = sum(left_over(events[place]) for place in names.values())
    if MISSING * lacking > saved + LEFT_OVER * (len(slots) - slot):
        return
    if slot == len(slots):
        if so_far:
            yield so_far
        return
    yield from _assignments(events, variant, so_far, slot + 1, foreign)
    one = slots[slot]
    if slot and one.after not in names and any(other.slot == one.after and other.optional for other in slots):
        return
    last = so_far[-1][1] if so_far else None
    first, end = (0, len(events)) if last is None else (last + 1, min(len(events), last + foreign + 2))
    for place in range(first, end):
        event = events[place]
        if event.role is not one.role or (event.is_found and not one.from_signal):
            continue
        if all(
            least_s <= event.time_s - events[other].time_s <= most_s
            for name, other in so_far
            for least_s, most_s in [_longest_s(slots, name, one.slot)]
        ):
            yield from _assignments(events, variant, (*so_far, (one.slot, place)), slot + 1, foreign)


def left_over(event: Event) -> int:
    return UNUSED if event.is_found else LEFT_OVER


def cost_of(events: Sequence[Event], explanation: Sequence[Run]) -> int:
    taken = {place for run in explanation for _, place in run.places}
    left = sum(left_over(event) for place, event in enumerate(events) if place not in taken)
    return left + MISSING * sum(len(run.missing) for run in explanation)


def best_explanations(
    events: Sequence[Event], variants: Sequence[Variant]
) -> tuple[int, list[tuple[Run, ...]]]:
    """Least cost, and all explanations that have it.

    Every list of runs that do not overlap is an explanation; of those that begin at the same marker, only the
    cheapest are listed on.
    """
    starting: dict[int, list[Run]] = {}
    for run in runs(events, variants):
        starting.setdefault(run.first, []).append(run)
    best: list[tuple[int, list[tuple[Run, ...]]]] = [(0, [()])]  # from each marker on, from the last one
    for place in range(len(events) - 1, -1, -1):
        least, rest = best[0]
        ways = [(least + left_over(events[place]), rest)]
        for run in starting.get(place, []):
            least, rest = best[run.last - place]
            inside = cost_of(events[place : run.last + 1], [_moved(run, place)])
            ways.append((least + inside, [(run, *others) for others in rest]))
        least = min(cost for cost, _ in ways)
        best.insert(0, (least, [one for cost, many in ways if cost == least for one in many]))
    return best[0]


def _moved(run: Run, by: int) -> Run:
    return Run(run.kind, tuple((name, place - by) for name, place in run.places), run.missing)


def certain_runs(events: Sequence[Event], variants: Sequence[Variant]) -> tuple[int, set[Run]]:
    """Least cost, and the runs that every explanation of least cost has; for longer lists of events.

    The same list of runs, chained by their boundaries instead of listing all chains.
    """
    found = runs(events, variants)
    n = len(events)
    up_to = [0]
    for event in events:
        up_to.append(up_to[-1] + left_over(event))

    def cost(run: Run) -> int:
        own = sum(left_over(events[place]) for _, place in run.places)
        return up_to[run.last + 1] - up_to[run.first] - own + MISSING * len(run.missing)

    ending: dict[int, list[Run]] = {}
    starting: dict[int, list[Run]] = {}
    for run in found:
        ending.setdefault(run.last + 1, []).append(run)
        starting.setdefault(run.first, []).append(run)

    def add(ways: list[tuple[int, int]]) -> tuple[int, int]:
        least = min(one for one, _ in ways)
        return least, sum(count for one, count in ways if one == least)

    before: list[tuple[int, int]] = [(0, 1)]
    for place in range(1, n + 1):
        ways = [(before[-1][0] + left_over(events[place - 1]), before[-1][1])]
        ways += [(before[run.first][0] + cost(run), before[run.first][1]) for run in ending.get(place, [])]
        before.append(add(ways))
    behind: list[tuple[int, int]] = [(0, 1)] * (n + 1)
    for place in range(n - 1, -1, -1):
        ways = [(behind[place + 1][0] + left_over(events[place]), behind[place + 1][1])]
        ways += [
            (behind[run.last + 1][0] + cost(run), behind[run.last + 1][1]) for run in starting.get(place, [])
        ]
        behind[place] = add(ways)
    least, total = before[n]
    certain = {
        run
        for run in found
        if before[run.first][0] + cost(run) + behind[run.last + 1][0] == least
        and before[run.first][1] * behind[run.last + 1][1] == total
    }
    return least, certain
