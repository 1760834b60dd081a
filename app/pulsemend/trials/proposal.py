"""A first guess at roles and slots from the markers alone; what cannot be told stays undecided."""

from __future__ import annotations

import itertools
import math
import re
from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from statistics import median

import numpy as np

from pulsemend.model.plan import Slot
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Role

# Words of a code that tell its role. "stimulus" is something shown, "stim" usually the stimulator.
_WORDS: Mapping[Role, frozenset[str]] = {
    Role.PULSE: frozenset({"pulse", "pulses", "tms", "stim", "stimulator"}),
    Role.CUE: frozenset({"cue", "cues", "retrocue", "retro", "arrow"}),
    Role.PROBE: frozenset({"probe", "probes", "test"}),
    Role.RESPONSE: frozenset({"response", "resp", "button", "press", "keypress", "answer", "reply"}),
    Role.SAMPLE: frozenset({"sample", "array", "item", "items", "memory", "memorise", "encode", "encoding"}),
    Role.FIXATION: frozenset({"fixation", "fix", "cross"}),
}
_STARTS = (Role.FIXATION, Role.SAMPLE, Role.CUE, Role.PROBE)
_TRIAL_ROLES = (*_STARTS, Role.PULSE, Role.RESPONSE)
_RARE, _ABOUT = 0.2, 1.1  # shares of the most and of the least frequent start
_COMMON = 0.1  # a sequence of roles seen in fewer trials than this is a fault, not a design
_ALWAYS = 0.8  # what holds in so many cases is proposed
_RESPONSE_S = (0.15, 4.0)
_RESPONSE_VARIES = 0.12  # spread of reaction times over their median; machine-timed events stay below
# Limits are wider than what was seen by a quarter of its range, at least by this, and in tenths of a second.
_WIDER, _LEAST_WIDER_S = 0.25, 0.1


@dataclass(frozen=True)
class CodeGuess:
    """What the markers say about one code.

    Parameters
    ----------
    code : str
    count : int
    role : Role
        `Role.UNDECIDED` where names and intervals do not tell.
    reason : str
        Why this role; empty if undecided.
    before, after : (str, float) or None
        The usual neighbour before and after it, and the median time to it in seconds.
    """

    code: str
    count: int
    role: Role
    reason: str
    before: tuple[str, float] | None
    after: tuple[str, float] | None


@dataclass(frozen=True)
class SlotGuess:
    """A proposed slot, and what was seen.

    Parameters
    ----------
    slot : Slot
    seen_s : (float, float) or None
        1st and 99th percentile of the time since its reference; None for the first slot.
    found : int
        Trials that have it.
    """

    slot: Slot
    seen_s: tuple[float, float] | None
    found: int


@dataclass(frozen=True)
class Guess:
    """Codes in order of first appearance, slots in order, and how many trials they were seen in.

    ``ways`` holds the sequences of roles that trials often have, and in how many, the commonest first; those
    that lack no more than answers are not told apart from the one that has them.
    """

    codes: tuple[CodeGuess, ...]
    slots: tuple[SlotGuess, ...]
    n_trials: int
    ways: tuple[tuple[tuple[Role, ...], int], ...] = ()


def guess(markers: Sequence[Marker], rate_hz: float, pulse_codes: Iterable[str] = ()) -> Guess:
    """Propose roles and slots.

    Parameters
    ----------
    markers : sequence of Marker
        In order of time.
    rate_hz : float
        Recorded rate.
    pulse_codes : iterable of str
        Codes at whose markers the signal holds pulses.

    Returns
    -------
    Guess
        No slots where no role was found.
    """
    codes = _codes(markers, rate_hz, frozenset(pulse_codes))
    roles = {code.code: code.role for code in codes}
    return Guess(codes, *_slots([(roles[m.code], m.sample / rate_hz) for m in markers]))


def _codes(markers: Sequence[Marker], rate_hz: float, pulse_codes: frozenset[str]) -> tuple[CodeGuess, ...]:
    before, after = neighbours(markers, rate_hz)
    guesses = []
    for code, count in Counter(marker.code for marker in markers).items():
        role, reason = Role.UNDECIDED, ""
        if code in pulse_codes:
            role, reason = Role.PULSE, "the signal holds pulses there"
        else:
            role, reason = _role_of_name(code)
        guesses.append(CodeGuess(code, count, role, reason, before.get(code), after.get(code)))
    roles = {one.code: one.role for one in guesses}
    return tuple(
        replace(one, role=Role.RESPONSE, reason="follows a probe after varying times")
        if one.role is Role.UNDECIDED and _is_response(one.code, markers, roles, rate_hz)
        else one
        for one in guesses
    )


def _role_of_name(code: str) -> tuple[Role, str]:
    words = re.findall(r"[a-z]+", code.casefold())
    found = {role: word for word in words for role, known in _WORDS.items() if word in known}
    if len(found) != 1:
        return Role.UNDECIDED, ""
    role, word = next(iter(found.items()))
    return role, f'its name says "{word}"'


def neighbours(
    markers: Sequence[Marker], rate_hz: float
) -> tuple[dict[str, tuple[str, float]], dict[str, tuple[str, float]]]:
    """Find the usual neighbour of every code, and the usual time to it.

    Parameters
    ----------
    markers : sequence of Marker
        In order of time.
    rate_hz : float
        Recorded rate.

    Returns
    -------
    before, after : dict of str to (str, float)
        By code: the code that stands before it, or after it, most often, and the median time in seconds.
    """
    before: dict[str, dict[str, list[float]]] = {}
    after: dict[str, dict[str, list[float]]] = {}
    for first, second in itertools.pairwise(markers):
        seconds = (second.sample - first.sample) / rate_hz
        after.setdefault(first.code, {}).setdefault(second.code, []).append(seconds)
        before.setdefault(second.code, {}).setdefault(first.code, []).append(seconds)
    return _usual(before), _usual(after)


def _usual(seen: Mapping[str, Mapping[str, list[float]]]) -> dict[str, tuple[str, float]]:
    usual = {}
    for code, neighbours in seen.items():
        name, times = max(neighbours.items(), key=lambda pair: len(pair[1]))
        usual[code] = (name, median(times))
    return usual


def _is_response(code: str, markers: Sequence[Marker], roles: Mapping[str, Role], rate_hz: float) -> bool:
    """Whether a code nearly always follows a probe, after times that vary as reaction times do."""
    pairs = [(a, b) for a, b in itertools.pairwise(markers) if b.code == code]
    times = [(b.sample - a.sample) / rate_hz for a, b in pairs if roles[a.code] is Role.PROBE]
    count = sum(marker.code == code for marker in markers)
    if len(times) < 5 or len(times) < _ALWAYS * count:
        return False
    low, high = np.percentile(times, [10, 90])
    least_s, most_s = _RESPONSE_S
    return bool(least_s <= low and high <= most_s and float(np.std(times)) > _RESPONSE_VARIES * median(times))


Ways = tuple[tuple[tuple[Role, ...], int], ...]


def _slots(events: Sequence[tuple[Role, float]]) -> tuple[tuple[SlotGuess, ...], int, Ways]:
    known = [(role, at_s) for role, at_s in events if role in _TRIAL_ROLES]
    start = _start([role for role, _ in known])
    if start is None:
        return (), 0, ()
    trials: list[list[tuple[Role, float]]] = []
    for place, event in enumerate(known):
        if event[0] is start and (place == 0 or known[place - 1][0] is not start):
            trials.append([])
        if trials:
            trials[-1].append(event)
    sequences = Counter(tuple(role for role, _ in trial) for trial in trials)
    common = {one: count for one, count in sequences.items() if count >= _COMMON * len(trials)}
    if not common:
        return (), len(trials), ()
    pattern = max(common, key=lambda one: (len(one), common[one]))
    lacking = {place for one in common for place in _lacking(one, pattern)}
    # A missing answer does not spoil a trial, and slow ones lie beyond any limit.
    optional = [place in lacking or role is Role.RESPONSE for place, role in enumerate(pattern)]
    return _limits(pattern, optional, trials), len(trials), _ways(common)


def _ways(common: Mapping[tuple[Role, ...], int]) -> Ways:
    """Count sequences of roles without their answers, of which some are always missing."""
    counts: Counter[tuple[Role, ...]] = Counter()
    for sequence, count in common.items():
        counts[tuple(role for role in sequence if role is not Role.RESPONSE)] += count
    return tuple(counts.most_common())


def _start(roles: Sequence[Role]) -> Role | None:
    """Role that starts a trial: the one that comes once in each, the earliest of its kind."""
    runs = Counter(role for role, _ in itertools.groupby(roles) if role in _STARTS)
    usual = {role: count for role, count in runs.items() if count >= _RARE * max(runs.values())}
    if not usual:
        return None
    # A few markers are always missing: about as often is as often.
    least = min(usual.values()) * _ABOUT + 1
    return next(role for role in _STARTS if role in usual and usual[role] <= least)


def _places(roles: Sequence[Role], pattern: Sequence[Role]) -> list[int] | None:
    """Places in a pattern that a trial's markers fill in order; None where it does not follow the pattern."""
    places: list[int] = []
    for role in roles:
        start = places[-1] + 1 if places else 0
        place = next((at for at in range(start, len(pattern)) if pattern[at] is role), None)
        if place is None:
            return None
        places.append(place)
    return places


def _lacking(roles: Sequence[Role], pattern: Sequence[Role]) -> set[int]:
    places = _places(roles, pattern)
    return set() if places is None else set(range(len(pattern))) - set(places)


def _limits(
    pattern: Sequence[Role], optional: Sequence[bool], trials: Sequence[Sequence[tuple[Role, float]]]
) -> tuple[SlotGuess, ...]:
    """Slots of a pattern of roles, with limits from the trials that follow it."""
    times: list[list[float]] = [[] for _ in pattern]
    for trial in trials:
        reference = trial[0][1]
        for place, (_, at_s) in zip(_places([role for role, _ in trial], pattern) or (), trial, strict=False):
            times[place].append(at_s - reference)
            if not optional[place]:
                reference = at_s
    guesses = []
    for place, (name, role) in enumerate(zip(_names(pattern), pattern, strict=True)):
        if place == 0:
            guesses.append(SlotGuess(Slot(name, role), None, len(times[0])))
            continue
        low, high = (float(edge) for edge in np.percentile(times[place], [1, 99]))
        wider = max(_LEAST_WIDER_S, _WIDER * (high - low))
        limits = (_tenths(math.floor, max(0.0, low - wider)), _tenths(math.ceil, high + wider))
        guesses.append(
            SlotGuess(Slot(name, role, limits, "", optional[place]), (low, high), len(times[place]))
        )
    return tuple(guesses)


def _names(pattern: Sequence[Role]) -> list[str]:
    """One name per place: the role, numbered unless it can only stand once."""
    seen: Counter[Role] = Counter()
    names = []
    for role in pattern:
        seen[role] += 1
        once = role in (Role.SAMPLE, Role.FIXATION) and pattern.count(role) == 1
        names.append(role.value if once else f"{role.value}{seen[role]}")
    return names


def _tenths(way: Callable[[float], int], seconds: float) -> float:
    return way(round(seconds * 10, 6)) / 10
