"""The best explanation of a whole recording's markers as trials, and whether another one is as good.

Every marker either fills a slot of a trial or is left over; every required slot is either filled or missing.
The explanation with the fewest lost and left-over markers is found exactly, by dynamic programming over the
markers in order of time (the principle of Bellman), together with the number of explanations that are equally
good. Where that number is above one, nothing is guessed: the trials concerned are doubtful.
"""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache

from pulsemend.model.trial_kinds import Variant
from pulsemend.model.vocabulary import Role
from pulsemend.trials.limits import Bounds, pair_bounds

MISSING = 10
"""Cost of a required slot without a marker."""

LEFT_OVER = 11
"""Cost of a marker without a slot; a little more, so that half a trial is seen as an incomplete trial."""

UNUSED = 3
"""Cost of a pulse found in the signal that takes no slot: it need not belong to a trial."""

_SUM_ROUNDING_S = 1e-12

_FOREIGN = 2
"""Most foreign markers between two of a trial, in slots of a trial: beyond, they are not one trial."""


@dataclass(frozen=True)
class Event:
    """A marker that may fill a slot.

    Parameters
    ----------
    time_s : float
    role : Role
    is_found : bool
        A pulse found in the signal: fills only slots that allow it.
    """

    time_s: float
    role: Role
    is_found: bool = False


@dataclass(frozen=True)
class Placed:
    """One trial of the best explanation.

    Parameters
    ----------
    kind : str
    places : mapping of str to int
        Place of the marker of every slot that was found.
    missing : tuple of str
        Required slots that were not.
    others : mapping of str to tuple of (int or None)
        Slots that equally good explanations fill otherwise: with which markers, None for with none.
    other_kinds : tuple of str
        Kinds of trial that are as good.
    is_doubtful : bool
    """

    kind: str
    places: Mapping[str, int]
    missing: tuple[str, ...] = ()
    others: Mapping[str, tuple[int | None, ...]] = field(default_factory=dict)
    other_kinds: tuple[str, ...] = ()
    is_doubtful: bool = False


def align(events: Sequence[Event], variants: Sequence[Variant]) -> tuple[Placed, ...]:
    """Find the best explanation.

    Parameters
    ----------
    events : sequence of Event
        In order of time, with roles that slots have.
    variants : sequence of Variant
        Ways a trial may run.

    Returns
    -------
    tuple of Placed
        Trials in order of time; they do not overlap.

    Raises
    ------
    PlanError
        The limits of a variant contradict each other.
    """
    return _aligned(tuple(events), tuple(variants))


@lru_cache(maxsize=4)
def _aligned(events: tuple[Event, ...], variants: tuple[Variant, ...]) -> tuple[Placed, ...]:
    # Most edits of a plan change neither markers nor slots.
    if not events:
        return ()
    return _Aligner(events, tuple(_Way.of(variant) for variant in variants)).trials()


class _Way:
    """A variant, ready for use."""

    def __init__(self, variant: Variant) -> None:
        slots = variant.slots
        self.kind = variant.kind
        self.names = tuple(slot.slot for slot in slots)
        self.roles = tuple(slot.role for slot in slots)
        self.takes_found = tuple(slot.from_signal for slot in slots)
        self.bounds: Bounds = pair_bounds(slots)
        self.size = len(slots)
        required = [0 if slot.optional else 1 for slot in slots]
        self.is_required = tuple(map(bool, required))
        # Cost of missing slots before and after each place.
        self.before = tuple(MISSING * sum(required[:place]) for place in range(self.size + 1))
        self.after = tuple(MISSING * sum(required[place + 1 :]) for place in range(self.size))
        places = {name: place for place, name in enumerate(self.names)}
        # An optional slot that another counts from must be there for the other.
        self.needs = tuple(
            places[slot.after] if slot.after and slots[places[slot.after]].optional else None
            for slot in slots
        )
        self._open: dict[tuple[int, ...], tuple[int, ...]] = {}

    @staticmethod
    @lru_cache(maxsize=200)
    def of(variant: Variant) -> _Way:
        return _Way(variant)

    def still_open(self, filled: tuple[int, ...]) -> tuple[int, ...]:
        """Tell which filled slots still bound a later one beyond what the other filled ones do."""
        known = self._open.get(filled)
        if known is None:
            known = tuple(place for place in filled if self._matters(place, filled))
            self._open[filled] = known
        return known

    def _matters(self, place: int, filled: tuple[int, ...]) -> bool:
        bounds, last = self.bounds, filled[-1]
        if place == last:
            return True
        for later in range(last + 1, self.size):
            if self.needs[later] == place:
                return True
            between = [other for other in filled if other > place]
            for a, b in ((place, later), (later, place)):
                within = bounds[a][b] + _SUM_ROUNDING_S
                if not any(bounds[a][other] + bounds[other][b] <= within for other in between):
                    return True
        return False


_Key = tuple[int, int, tuple[tuple[int, int], ...]]  # way, slot, what still bounds: (slot, event)


@dataclass(slots=True)
class _Node:
    """A trial under way, its last filled slot filled by one event; or the boundary before an event."""

    cost: int
    ways: int = 0
    before: list[_Node] = field(default_factory=list)
    key: _Key | None = None
    event: int = 0
    through: int = 0  # optimal paths from here to the end

    def offer(self, cost: int, origin: _Node) -> None:
        if cost < self.cost:
            self.cost, self.ways, self.before = cost, 0, []
        if cost == self.cost:
            self.ways += origin.ways
            self.before.append(origin)


_FAR = 1 << 60


class _Aligner:
    def __init__(self, events: Sequence[Event], ways: Sequence[_Way]) -> None:
        self.events = events
        self.ways = ways
        self.times = [event.time_s for event in events]
        self.of_role: dict[Role, list[int]] = {}
        for place, event in enumerate(events):
            self.of_role.setdefault(event.role, []).append(place)
        self.times_of_role = {
            role: [self.times[place] for place in places] for role, places in self.of_role.items()
        }
        self.left_over = [UNUSED if event.is_found else LEFT_OVER for event in events]
        self.cost_before = [0]
        for cost in self.left_over:
            self.cost_before.append(self.cost_before[-1] + cost)
        self.foreign = _FOREIGN * max(way.size for way in ways)
        self.closed = [_Node(_FAR, event=place) for place in range(len(events) + 1)]
        self.open: list[dict[_Key, _Node]] = [{} for _ in events]

    def trials(self) -> tuple[Placed, ...]:
        self.closed[0].cost, self.closed[0].ways = 0, 1
        for place in range(len(self.events)):
            self.advance(place)
        self.count_through()
        return tuple(self.placed(path, region) for path, region in self.best())

    def advance(self, place: int) -> None:
        """Take in one event: left over, first of a trial, or next of a trial under way."""
        here, following = self.closed[place], self.closed[place + 1]
        following.offer(here.cost + self.left_over[place], here)
        nodes = self.open[place]
        for number, way in enumerate(self.ways):
            for slot in range(way.size):
                if way.needs[slot] is not None or not self.may_fill(way, slot, place):
                    continue
                start = here.cost + way.before[slot]
                # Another start of the same slot can do all that a trial under way with more faults can.
                for key in [key for key in nodes if key[0] == number and key[1] == slot]:
                    if nodes[key].cost > start:
                        del nodes[key]
                # A trial lacking more than it can have is never better than none.
                if way.before[slot] <= LEFT_OVER * (way.size - slot):
                    key = (number, slot, ((slot, place),))
                    nodes.setdefault(key, _Node(_FAR, key=key, event=place)).offer(start, here)
        for node in list(nodes.values()):
            self.go_on(node, following)

    def go_on(self, node: _Node, following: _Node) -> None:
        """End the trial here, or fill one of its later slots."""
        if node.key is None:
            return
        number, slot, bounding = node.key
        way = self.ways[number]
        following.offer(node.cost + way.after[slot], node)
        known = [(at, self.times[event]) for at, event in bounding]
        filled = tuple(at for at, _ in bounding)
        for later in range(slot + 1, way.size):
            if way.needs[later] is not None and way.needs[later] not in filled:
                continue
            least = max(time - way.bounds[later][at] for at, time in known)
            most = min(time + way.bounds[at][later] for at, time in known)
            skipped = way.before[later] - way.before[slot + 1]
            for event in self.between(way.roles[later], least, most, node.event):
                if self.events[event].is_found and not way.takes_found[later]:
                    continue
                cost = node.cost + skipped + self.cost_before[event] - self.cost_before[node.event + 1]
                kept = set(way.still_open((*filled, later)))
                still = tuple(pair for pair in (*bounding, (later, event)) if pair[0] in kept)
                key = (number, later, still)
                nodes = self.open[event]
                nodes.setdefault(key, _Node(_FAR, key=key, event=event)).offer(cost, node)

    def between(self, role: Role, least: float, most: float, after: int) -> Iterable[int]:
        """Events of a role within times, behind an event and not too many events away."""
        places = self.of_role.get(role, [])
        times = self.times_of_role.get(role, [])
        low = max(bisect_left(times, least), bisect_right(places, after))
        high = bisect_right(times, most)
        last = after + 1 + self.foreign
        return (place for place in places[low:high] if place <= last)

    def may_fill(self, way: _Way, slot: int, place: int) -> bool:
        event = self.events[place]
        return way.roles[slot] is event.role and (way.takes_found[slot] or not event.is_found)

    def count_through(self) -> None:
        """Count for every node on a best path the best paths from it to the end."""
        self.closed[-1].through = 1
        for place in range(len(self.events), -1, -1):
            for node in [self.closed[place], *(self.open[place - 1].values() if place else ())]:
                # Nodes of the event before a boundary lead to it, so the boundary comes first.
                if node.through:
                    for origin in node.before:
                        origin.through += node.through

    def best(self) -> list[tuple[list[_Node], tuple[int, int]]]:
        """Trials of one best path, each with the region between certain boundaries that it lies in."""
        paths: list[list[_Node]] = []
        node, current = self.closed[-1], []
        cuts = [self.closed[-1].event]
        total = self.closed[-1].ways
        while node.before:
            origin = node.before[0]
            if origin.key is not None:
                current.append(origin)
            elif current:
                paths.append(current[::-1])
                current = []
            if origin.key is None and origin.ways * origin.through == total:
                cuts.append(origin.event)
            node = origin
        if current:
            paths.append(current[::-1])
        cuts.reverse()
        found = []
        for path in reversed(paths):
            first, last = path[0].event, path[-1].event
            low = cuts[bisect_right(cuts, first) - 1]
            high = cuts[bisect_left(cuts, last + 1)]
            found.append((path, (low, high)))
        return found

    def placed(self, path: Sequence[_Node], region: tuple[int, int]) -> Placed:
        """Describe a trial, with what equally good explanations say of its slots."""
        keys = [(node.key, node.event) for node in path if node.key is not None]
        way = self.ways[keys[0][0][0]]
        places = {way.names[key[1]]: event for key, event in keys}
        missing = tuple(
            name
            for name, is_required in zip(way.names, way.is_required, strict=True)
            if is_required and name not in places
        )
        low, high = region
        if self.closed[high].ways == self.closed[low].ways:
            return Placed(way.kind, places, missing)
        kinds: dict[str, None] = {}
        options: dict[str, dict[int, None]] = {}
        for event in range(low, high):
            for node in self.open[event].values():
                if node.through and node.key is not None:
                    other = self.ways[node.key[0]]
                    kinds[other.kind] = None
                    options.setdefault(other.names[node.key[1]], {})[event] = None
        others: dict[str, tuple[int | None, ...]] = {}
        for name, events in options.items():
            found = tuple(event for event in events if event != places.get(name))
            if found:
                others[name] = found
        return Placed(
            way.kind, places, missing, others, tuple(kind for kind in kinds if kind != way.kind), True
        )
