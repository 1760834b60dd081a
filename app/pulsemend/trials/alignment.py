"""The best explanation of a whole recording's markers as trials, and whether another one is as good.

Every marker either fills a slot of a trial or is left over; every required slot is either filled or missing.
The explanation with the fewest lost and left-over markers is found exactly, by dynamic programming over the
markers in order of time (the principle of Bellman), together with the number of explanations that are equally
good. Where that number is above one, nothing is guessed: the trials concerned are doubtful.
"""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Hashable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property, lru_cache
from itertools import accumulate
from math import inf

from pulsemend.model.trial_kinds import Variant
from pulsemend.model.vocabulary import Role
from pulsemend.trials.limits import Bounds, pair_bounds

MISSING = 10
"""Cost of a required slot without a marker."""

LEFT_OVER = 11
"""Cost of a marker without a slot; a little more, so that half a trial is seen as an incomplete trial."""

UNUSED = 3
"""Cost of a pulse found in the signal that takes no slot: it need not belong to a trial."""

_FOREIGN = 2
"""Most foreign markers between two of a trial, in slots of the longest trial: beyond, they are not one."""

_SUM_ROUNDING_S = 1e-12
_FAR = 1 << 60


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
    others : mapping of str to tuple of int
        Slots that equally good explanations fill with other markers between the neighbouring trials.
    other_kinds : tuple of str
        Kinds of trial that equally good explanations see between the neighbouring trials.
    is_doubtful : bool
        Not every explanation that is as good has this trial as it is.
    """

    kind: str
    places: Mapping[str, int]
    missing: tuple[str, ...] = ()
    others: Mapping[str, tuple[int, ...]] = field(default_factory=dict)
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
    return _Aligner(events, _ways(variants)).trials()


class _Way:
    """A variant, ready for use."""

    def __init__(self, variant: Variant) -> None:
        slots = variant.slots
        self.kind = variant.kind
        self.slots = slots
        self.names = tuple(slot.slot for slot in slots)
        self.roles = tuple(slot.role for slot in slots)
        self.takes_found = tuple(slot.from_signal for slot in slots)
        self.bounds: Bounds = pair_bounds(slots)
        self.size = len(slots)
        self.required = tuple(slot.slot for slot in slots if not slot.optional)
        costs = [0 if slot.optional else MISSING for slot in slots]
        # Cost of missing slots before and behind each place.
        self.before = tuple(sum(costs[:place]) for place in range(self.size + 1))
        self.after = tuple(sum(costs[place + 1 :]) for place in range(self.size))
        places = {name: place for place, name in enumerate(self.names)}
        # An optional slot that another counts from must be there for the other.
        self.needs = tuple(
            places[slot.after] if slot.after and slots[places[slot.after]].optional else None
            for slot in slots
        )

    def may_start(self, place: int) -> bool:
        """Tell whether a trial may be seen from this slot on: one lacking more than it has is never best."""
        return self.needs[place] is None and self.before[place] <= LEFT_OVER * (self.size - place)

    def beginning(self, place: int) -> Hashable:
        """Everything about the slots up to a place that matters; ways that share it are told apart later."""
        upto = range(place + 1)
        bounds = tuple(round(self.bounds[a][b], 9) for a in upto for b in upto)
        return self.kind, self.slots[: place + 1], bounds

    def matters(self, place: int, filled: tuple[int, ...]) -> bool:
        """Tell whether a filled slot still bounds a later one beyond what the other filled ones do."""
        bounds, last = self.bounds, filled[-1]
        if place == last:
            return True
        between = [other for other in filled if other > place]
        for later in range(last + 1, self.size):
            if self.needs[later] == place:
                return True
            for a, b in ((place, later), (later, place)):
                within = bounds[a][b] + _SUM_ROUNDING_S
                if not any(bounds[a][other] + bounds[other][b] <= within for other in between):
                    return True
        return False


class _Ways:
    """All variants; those that begin alike, as with more or fewer repeats of a group, share their states."""

    def __init__(self, variants: tuple[Variant, ...]) -> None:
        ways = [_Way(variant) for variant in variants]
        self.most_slots = max((way.size for way in ways), default=0)
        self.sharing: dict[Hashable, list[_Way]] = {}
        self.beginnings: dict[_Way, tuple[Hashable, ...]] = {}
        numbers: dict[Hashable, int] = {}
        for way in ways:
            alike = [way.beginning(place) for place in range(way.size)]
            self.beginnings[way] = tuple(numbers.setdefault(one, len(numbers)) for one in alike)
            for number in self.beginnings[way]:
                self.sharing.setdefault(number, []).append(way)
        self._states: dict[tuple[Hashable, tuple[int, ...]], _State] = {}
        self._alike: dict[tuple[_State, _State], bool] = {}
        starts = [
            self.state(self.beginnings[way][place], (place,))
            for way in ways
            for place in range(way.size)
            if way.may_start(place)
        ]
        self.starts = tuple(dict.fromkeys(starts))

    def state(self, beginning: Hashable, filled: tuple[int, ...]) -> _State:
        """Look up the state of these slots: there is one, since nodes are told apart by it."""
        found = self._states.get((beginning, filled))
        if found is None:
            found = self._states[beginning, filled] = _State(self, self.sharing[beginning], filled)
        return found

    def goes_on_alike(self, one: _State, other: _State) -> bool:
        """Tell whether another state can go on in all ways that one can, at no more cost.

        The last filled slots of both, as many as the other has, are filled by the same events.
        """
        known = self._alike.get((one, other))
        if known is None:
            known = other.after <= one.after and all(
                any(
                    role is other_role and self._is_wider(step, as_well)
                    for other_role, as_well in other.steps
                )
                for role, step in one.steps
            )
            self._alike[one, other] = known
        return known

    def _is_wider(self, step: _Step, other: _Step) -> bool:
        n = len(other.limits)
        return (
            other.takes_found >= step.takes_found
            and other.skipped <= step.skipped
            and n <= len(step.limits)
            and all(
                wide[0] <= limit[0] and limit[1] <= wide[1]
                for limit, wide in zip(step.limits[-n:], other.limits, strict=True)
            )
            # Of the filled slots, too, those that still matter are the same ones, counted from the last.
            and [n - place for place in other.kept]
            == [len(step.limits) - place for place in step.kept][-len(other.kept) :]
            and self.goes_on_alike(step.state, other.state)
        )


@lru_cache(maxsize=4)
def _ways(variants: tuple[Variant, ...]) -> _Ways:
    return _Ways(variants)


@dataclass(frozen=True)
class _Step:
    """From a state to one of a later slot.

    ``limits`` holds for every filled slot the least and the most time to the later one; ``kept`` the places,
    among the filled slots and the new one, of those that still matter then.
    """

    skipped: int
    takes_found: bool
    limits: tuple[tuple[float, float], ...]
    kept: tuple[int, ...]
    state: _State


class _State:
    """Which slots of a trial under way are filled, as far as it matters for the rest; the last one is."""

    def __init__(self, all_ways: _Ways, ways: Sequence[_Way], filled: tuple[int, ...]) -> None:
        self.all_ways = all_ways
        self.ways = ways
        self.filled = filled
        self.slot = filled[-1]
        self.kind = ways[0].kind
        self.name = ways[0].names[self.slot]
        self.role = ways[0].roles[self.slot]
        self.takes_found = ways[0].takes_found[self.slot]
        self.before = ways[0].before[self.slot]
        self.after = min(way.after[self.slot] for way in ways)
        # Ways that the trial may have run if it ends here.
        self.ends = tuple({way.required: way for way in ways if way.after[self.slot] == self.after}.values())
        self.most_left_over = LEFT_OVER * (max(way.size for way in ways) - self.slot)

    @cached_property
    def at_most(self) -> int:
        """What another explanation of the same markers costs at most beyond that of all before.

        Either all are left over, or they are a trial that was seen from here on only and can go on alike.
        """
        starts = [
            start.before
            for start in self.all_ways.starts
            if start.before < self.most_left_over
            and start.role is self.role
            and start.takes_found >= self.takes_found
            and self.all_ways.goes_on_alike(self, start)
        ]
        return min([self.most_left_over, *starts])

    @cached_property
    def steps(self) -> tuple[tuple[Role, _Step], ...]:
        """All ways on."""
        found: dict[Hashable, tuple[Role, _Step]] = {}
        for way in self.ways:
            for later in range(self.slot + 1, way.size):
                beginning = self.all_ways.beginnings[way][later]
                if beginning not in found and way.needs[later] in (None, *self.filled):
                    found[beginning] = way.roles[later], self._step(way, later, beginning)
        return tuple(found.values())

    def _step(self, way: _Way, later: int, beginning: Hashable) -> _Step:
        filled = (*self.filled, later)
        sharing = self.all_ways.sharing[beginning]
        kept = tuple(
            place
            for place, slot in enumerate(filled)
            if any(other.matters(slot, filled) for other in sharing)
        )
        return _Step(
            way.before[later] - way.before[self.slot + 1],
            way.takes_found[later],
            tuple((-way.bounds[later][at], way.bounds[at][later]) for at in self.filled),
            kept,
            self.all_ways.state(beginning, tuple(filled[place] for place in kept)),
        )


_Key = tuple[_State, tuple[int, ...]]  # with the events of its filled slots


class _Node:
    """A trial under way, its last filled slot filled by one event; or the boundary before an event."""

    __slots__ = ("before", "cost", "event", "events", "state", "through", "ways")

    def __init__(self, event: int, state: _State | None = None, events: tuple[int, ...] = ()) -> None:
        self.event = event
        self.state = state
        self.events = events
        self.cost = _FAR
        self.ways = 0  # explanations of least cost up to here
        self.before: list[_Node] = []
        self.through = 0  # explanations of least cost from here to the end, on the best ones

    def offer(self, cost: int, origin: _Node) -> None:
        if cost < self.cost:
            self.cost, self.ways, self.before = cost, origin.ways, [origin]
        elif cost == self.cost:
            self.ways += origin.ways
            self.before.append(origin)


class _Aligner:
    def __init__(self, events: Sequence[Event], ways: _Ways) -> None:
        self.events = events
        self.times = [event.time_s for event in events]
        self.of_role: dict[Role, tuple[list[float], list[int]]] = {role: ([], []) for role in Role}
        for place, event in enumerate(events):
            times, places = self.of_role[event.role]
            times.append(event.time_s)
            places.append(place)
        self.is_found = [event.is_found for event in events]
        self.left_over = [UNUSED if found else LEFT_OVER for found in self.is_found]
        self.cost_before = list(accumulate(self.left_over, initial=0))
        self.foreign = _FOREIGN * ways.most_slots
        self.starts = {
            (role, found): [
                state for state in ways.starts if state.role is role and (state.takes_found or not found)
            ]
            for role in self.of_role
            for found in (False, True)
        }
        self.closed = [_Node(place) for place in range(len(events) + 1)]
        self.open: list[dict[_Key, _Node]] = [{} for _ in events]

    def trials(self) -> tuple[Placed, ...]:
        self.closed[0].cost, self.closed[0].ways = 0, 1
        for place in range(len(self.events)):
            self.advance(place)
        self.count_through()
        return self.placed(self.best())

    def advance(self, place: int) -> None:
        """Take in one event: left over, first of a trial, or next of a trial under way."""
        here, following = self.closed[place], self.closed[place + 1]
        following.offer(here.cost + self.left_over[place], here)
        nodes = self.open[place]
        for state in self.starts[self.events[place].role, self.is_found[place]]:
            key: _Key = (state, (place,))
            node = nodes.get(key)
            if node is None:
                node = nodes[key] = _Node(place, state, (place,))
            node.offer(here.cost + state.before, here)
        for key, node in list(nodes.items()):
            if node.cost > here.cost + key[0].at_most:
                del nodes[key]
            else:
                for _ in key[0].ends:
                    following.offer(node.cost + key[0].after, node)
        for key, node in nodes.items():
            self.go_on(node, key[0], following.cost)

    def go_on(self, node: _Node, state: _State, otherwise: int) -> None:
        """Fill each of the trial's later slots; `otherwise` is the least cost up to behind the last one."""
        last = node.event + 1 + self.foreign
        cost_here = node.cost - self.cost_before[node.event + 1]
        known = [self.times[event] for event in node.events]
        for role, step in state.steps:
            # Markers jumped over are left over in both explanations.
            if node.cost + step.skipped > otherwise + step.state.at_most:
                continue
            times, places = self.of_role[role]
            least, most = -inf, inf
            for time, (soonest, latest) in zip(known, step.limits, strict=True):
                least, most = max(least, time + soonest), min(most, time + latest)
            for at in range(bisect_left(times, least), len(times)):
                event = places[at]
                if times[at] > most or event > last:
                    break
                if event <= node.event or (self.is_found[event] and not step.takes_found):
                    continue
                both = (*node.events, event)
                events = tuple([both[place] for place in step.kept])
                nodes = self.open[event]
                key = (step.state, events)
                following = nodes.get(key)
                if following is None:
                    following = nodes[key] = _Node(event, step.state, events)
                following.offer(cost_here + step.skipped + self.cost_before[event], node)

    def count_through(self) -> None:
        """Count for every node on a best explanation the best ones from it to the end."""
        self.closed[-1].through = 1
        for place in range(len(self.events), -1, -1):
            for node in [self.closed[place], *(self.open[place - 1].values() if place else ())]:
                # Nodes of the event before a boundary lead to it, so the boundary comes first.
                if node.through:
                    for origin in node.before:
                        origin.through += node.through

    def best(self) -> list[list[_Node]]:
        """Trials of one best explanation."""
        found: list[list[_Node]] = []
        current: list[_Node] = []
        node = self.closed[-1]
        while node.before:
            node = node.before[0]
            if node.state is not None:
                current.append(node)
            elif current:
                found.append(current[::-1])
                current = []
        return found[::-1]

    def placed(self, trials: Sequence[Sequence[_Node]]) -> tuple[Placed, ...]:
        """Describe trials, with what equally good explanations say of the markers of each."""
        lasts = [-1, *(trial[-1].event for trial in trials)]
        firsts = [*(trial[0].event for trial in trials), len(self.events)]
        found = []
        for number, trial in enumerate(trials):
            whole = self.whole(trial)
            if self.is_certain(trial):
                found.append(whole)
            else:
                found.append(self.doubtful(whole, range(lasts[number] + 1, firsts[number + 1])))
        return tuple(found)

    def whole(self, trial: Sequence[_Node]) -> Placed:
        """Describe a trial by itself."""
        states = [(node.state, node.event) for node in trial if node.state is not None]
        way = states[-1][0].ends[0]
        places = {state.name: event for state, event in states}
        return Placed(way.kind, places, tuple(name for name in way.required if name not in places))

    def is_certain(self, trial: Sequence[_Node]) -> bool:
        """Tell whether all best explanations have this trial as it is."""
        start, end = self.closed[trial[0].event], self.closed[trial[-1].event + 1]
        return start.ways * end.through == self.closed[-1].ways

    def doubtful(self, whole: Placed, span: range) -> Placed:
        """Say what equally good explanations make of the markers between a trial's neighbours."""
        kinds: dict[str, None] = {}
        others: dict[str, list[int]] = {}
        for event in span:
            for state in dict.fromkeys(key[0] for key, node in self.open[event].items() if node.through):
                name = state.name
                kinds[state.kind] = None
                if event != whole.places.get(name) and event not in others.get(name, ()):
                    others.setdefault(name, []).append(event)
        return replace(
            whole,
            others={name: tuple(events) for name, events in others.items()},
            other_kinds=tuple(kind for kind in kinds if kind != whole.kind),
            is_doubtful=True,
        )
