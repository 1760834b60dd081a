"""Cures of trigger faults: what each would change, and the markers after those that were accepted.

A cure sees the markers that the cures before it left. They stand in one order: first those that change
codes (floating high byte, stuck bits), then those that leave markers out (zero codes, held levels, two bits
apart, doubled markers). None applies by itself.
"""

from __future__ import annotations

import itertools
from collections import Counter
from collections.abc import Callable, Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property, partial

from pulsemend.model.faults import Cured, FaultKind
from pulsemend.model.numbers import number_of
from pulsemend.model.recording import Marker
from pulsemend.trials.numbers import is_lone_letter, writing_of
from pulsemend.units import s_to_ms

DOUBLED_S = 0.020
"""The same code again in less than this is doubled."""

DOUBLED_PULSE_S = 0.0005
"""The same for pulses: no two pulses are given within it, but pairs are given from 1 ms on."""

SETTLE_S = 0.0002
"""Two bits of one code arrive within one sample, or within this where that is longer."""

HELD_RUN_SAMPLES = 2
"""A level is held if a code is read at every sample over at least this span (three samples)."""

LEAST_STUCK = 3
"""Different codes that must share a bit before it can be stuck."""

LOW_BYTE = 0xFF
_NEXT_SAMPLE = (
    1.25  # markers at most so far apart are neighbours: times of some formats are not whole samples
)


@dataclass(frozen=True)
class Stream:
    """Markers on their way through the cures.

    Parameters
    ----------
    markers : tuple of Marker
        In order of time.
    recorded : tuple of str
        The code of each as recorded.
    rate_hz : float
    """

    markers: tuple[Marker, ...]
    recorded: tuple[str, ...]
    rate_hz: float

    @cached_property
    def places(self) -> Mapping[str, list[int]]:
        """Indices of the markers by code."""
        places: dict[str, list[int]] = {}
        for index, marker in enumerate(self.markers):
            places.setdefault(marker.code, []).append(index)
        return places

    @cached_property
    def numbers(self) -> Mapping[str, dict[str, int]]:
        """Numbers of the codes by prefix and code."""
        numbers: dict[str, dict[str, int]] = {}
        for code in self.places:
            found = number_of(code)
            if found is not None:
                numbers.setdefault(found[0], {})[code] = found[1]
        return numbers


@dataclass(frozen=True)
class Change:
    """What one cure would do to a stream.

    Parameters
    ----------
    kind : FaultKind
    scope : str
        The prefix or code it is about; empty: no prefix, or all codes.
    keys : tuple of str
        Keys it may be accepted under; the first is its own.
    become : mapping of int to (Marker, str) or None
        By index: the marker and its recorded code, or None where it is left out.
    at : tuple of int
        Indices of the places to show.
    bit : int
        Of a stuck bit.
    within_s : float
        Of doubled markers.
    codes : mapping of str to str
        New codes by old ones, where codes change.
    """

    kind: FaultKind
    scope: str
    keys: tuple[str, ...]
    become: Mapping[int, tuple[Marker, str] | None]
    at: tuple[int, ...]
    bit: int = 0
    within_s: float = 0.0
    codes: Mapping[str, str] = field(default_factory=dict)

    @property
    def count(self) -> int:
        """Markers changed or left out; two bits apart count once per pair."""
        left_out = sum(1 for new in self.become.values() if new is None)
        return left_out or len(self.become)


Stage = Callable[[Stream], list[Change]]


def stream_of(markers: Sequence[Marker], rate_hz: float) -> Stream:
    """Begin with the markers as recorded."""
    return Stream(tuple(markers), tuple(marker.code for marker in markers), rate_hz)


def floating_high_byte(stream: Stream) -> list[Change]:
    """Keep the low byte of codes above 255, per prefix."""
    return [
        _recoded(
            stream,
            FaultKind.FLOATING_HIGH_BYTE,
            prefix,
            {code: n & LOW_BYTE for code, n in numbers.items() if n > LOW_BYTE},
        )
        for prefix, numbers in stream.numbers.items()
        if max(numbers.values()) > LOW_BYTE
    ]


def stuck_bit(bit: int, stream: Stream) -> list[Change]:
    """Clear a bit that every code of a prefix holds, where at least `LEAST_STUCK` codes differ."""
    return [
        _recoded(
            stream,
            FaultKind.STUCK_BIT,
            prefix,
            {code: number & ~(1 << bit) for code, number in numbers.items()},
            bit,
        )
        for prefix, numbers in stream.numbers.items()
        if len(set(numbers.values())) >= LEAST_STUCK and all(number >> bit & 1 for number in numbers.values())
    ]


def zero_codes(stream: Stream) -> list[Change]:
    """Leave out codes whose number is zero, per prefix; behind a word ("block 0") zero is no level."""
    changes = []
    for prefix, numbers in stream.numbers.items():
        if prefix and not is_lone_letter(prefix):
            continue
        at = sorted(index for code, number in numbers.items() if number == 0 for index in stream.places[code])
        if at:
            key = _key(FaultKind.ZERO_CODES, prefix)
            changes.append(Change(FaultKind.ZERO_CODES, prefix, (key,), dict.fromkeys(at), tuple(at)))
    return changes


def held_level(stream: Stream) -> list[Change]:
    """Keep the first marker of levels that were read at every sample they were held.

    Only codes held for three samples or more at least once are taken for levels; two markers a sample apart
    alone are doubled.
    """
    become: dict[int, tuple[Marker, str] | None] = {}
    firsts: list[int] = []
    for places in stream.places.values():
        runs = [run for run in _runs(stream, places) if len(run) > 1]
        if any(_span(stream, run) > HELD_RUN_SAMPLES - 0.5 for run in runs):
            firsts += [run[0] for run in runs]
            become.update((index, None) for run in runs for index in run[1:])
    if not become:
        return []
    key = _key(FaultKind.HELD_LEVEL)
    return [Change(FaultKind.HELD_LEVEL, "", (key,), become, tuple(sorted(firsts)))]


def two_bits_apart(stream: Stream) -> list[Change]:
    """Take a code whose bits arrived one after the other for one, at its first sample.

    The later marker must hold every bit of the earlier one and more (1 then 3, not 1 then 2): a line that
    has risen stays up until the code is complete. What else lies a sample apart is left alone, as it cannot
    be told which of both is right. Prefix and type must be the same.
    """
    settle = max(_NEXT_SAMPLE, SETTLE_S * stream.rate_hz)
    number = {code: n for numbers in stream.numbers.values() for code, n in numbers.items()}
    lines: dict[tuple[str, str], list[int]] = {}
    for prefix, numbers in stream.numbers.items():
        for code in numbers:
            for index in stream.places[code]:
                lines.setdefault((prefix, stream.markers[index].type), []).append(index)
    become: dict[int, tuple[Marker, str] | None] = {}
    firsts: list[int] = []
    for indices in lines.values():
        first = None
        for a, b in itertools.pairwise(sorted(indices)):
            early, late = stream.markers[a], stream.markers[b]
            bits, more = number[early.code], number[late.code]
            if not (0 < late.sample - early.sample <= settle and 0 < bits < more and bits & more == bits):
                first = None
                continue
            first = a if first is None else first
            become[b] = None
            become[first] = (replace(late, sample=stream.markers[first].sample), stream.recorded[b])
            if not firsts or firsts[-1] != first:
                firsts.append(first)
    if not become:
        return []
    return [
        Change(FaultKind.TWO_BITS_APART, "", (_key(FaultKind.TWO_BITS_APART),), become, tuple(sorted(firsts)))
    ]


def doubled(within_s: float, stream: Stream) -> list[Change]:
    """Keep the first of markers with one code that follow each other within a time, per code."""
    # One sample less, as times are rounded to samples: markers every 20 ms are not doubled. No two pulses are
    # as near as the limit of pulses, so nothing is taken off there.
    rounding = 1.0 if within_s == DOUBLED_S else 0.0
    within = max(within_s * stream.rate_hz - rounding, 0.5)
    changes = []
    for code, places in stream.places.items():
        left_out: list[int] = []
        firsts: list[int] = []
        kept = places[0]
        for index in places[1:]:
            if stream.markers[index].sample - stream.markers[kept].sample < within:
                if not firsts or firsts[-1] != kept:
                    firsts.append(kept)
                left_out.append(index)
            else:
                kept = index
        if left_out:
            names = dict.fromkeys([*(stream.recorded[index] for index in places), code])
            keys = tuple(doubled_key(name, within_s) for name in names)
            changes.append(
                Change(
                    FaultKind.DOUBLED_MARKER,
                    code,
                    keys,
                    dict.fromkeys(left_out),
                    tuple(firsts),
                    within_s=within_s,
                )
            )
    return changes


def doubled_key(code: str, within_s: float) -> str:
    """Key of a code's doubled markers: the time is part of it only for pulses."""
    if within_s == DOUBLED_S:
        return f"{FaultKind.DOUBLED_MARKER} {code}"
    return f"{FaultKind.DOUBLED_MARKER} within {s_to_ms(within_s):g} ms {code}"


CODE_STAGES: tuple[Stage, ...] = (
    floating_high_byte,
    *(partial(stuck_bit, bit) for bit in range(7, -1, -1)),
)
"""Cures that change codes, in order."""

LINE_STAGES: tuple[Stage, ...] = (zero_codes, held_level, two_bits_apart)
"""Cures of what a line or its reading adds: they leave markers out, after the codes have changed."""

DOUBLED_STAGES: tuple[Stage, ...] = (partial(doubled, DOUBLED_S), partial(doubled, DOUBLED_PULSE_S))
"""Cures of doubled markers, last."""


def apply(stream: Stream, changes: Iterable[Change]) -> Stream:
    """Carry out the changes of one stage."""
    become: dict[int, tuple[Marker, str] | None] = {}
    for change in changes:
        become.update(change.become)
    if not become:
        return stream
    kept = [
        new
        for index, old in enumerate(zip(stream.markers, stream.recorded, strict=True))
        if (new := become.get(index, old)) is not None
    ]
    return replace(
        stream, markers=tuple(marker for marker, _ in kept), recorded=tuple(code for _, code in kept)
    )


def is_accepted(change: Change, accepted: Collection[str]) -> bool:
    """Whether a change was accepted, under any of its keys."""
    return any(key in accepted for key in change.keys)


def cured(markers: Sequence[Marker], rate_hz: float, accepted: Collection[str]) -> Cured:
    """Markers after the accepted cures; without any, as they are.

    The cures are gone through until they change nothing more, so that curing again changes nothing. The
    order of `accepted` makes no difference.

    Parameters
    ----------
    markers : sequence of Marker
        In order of time.
    rate_hz : float
        Recorded sampling rate.
    accepted : collection of str
        Keys of `MarkerFault`.
    """
    keys = frozenset(accepted)
    counts: Counter[str] = Counter()
    used: set[str] = set()
    stream = stream_of(markers, rate_hz)
    before = None
    while keys and stream is not before:
        before = stream
        for stage in (*CODE_STAGES, *LINE_STAGES, *DOUBLED_STAGES):
            changes = [change for change in stage(stream) if is_accepted(change, keys)]
            for change in changes:
                known = [key for key in change.keys if key in keys]
                counts[known[0]] += change.count
                used.update(known)
            stream = apply(stream, changes)
    return Cured(stream.markers, dict(sorted(counts.items())), tuple(sorted(keys - used)))


def _key(kind: FaultKind, scope: str = "", bit: int | None = None) -> str:
    text = str(kind) if bit is None else f"{kind} {bit}"
    return f"{text} of {scope}" if scope else text


def _recoded(
    stream: Stream, kind: FaultKind, prefix: str, numbers: Mapping[str, int], bit: int | None = None
) -> Change:
    """Give codes of one prefix new numbers."""
    written = writing_of(prefix, stream.numbers[prefix])
    codes = {code: written(number) for code, number in numbers.items()}
    at = sorted(index for code in codes for index in stream.places[code])
    become = {}
    for index in at:
        marker = stream.markers[index]
        become[index] = (replace(marker, code=codes[marker.code]), stream.recorded[index])
    return Change(kind, prefix, (_key(kind, prefix, bit),), become, tuple(at), bit=bit or 0, codes=codes)


def _runs(stream: Stream, places: Sequence[int]) -> list[list[int]]:
    """Cut the places of one code where more than a sample lies between."""
    runs = [[places[0]]]
    for a, b in itertools.pairwise(places):
        if stream.markers[b].sample - stream.markers[a].sample <= _NEXT_SAMPLE:
            runs[-1].append(b)
        else:
            runs.append([b])
    return runs


def _span(stream: Stream, run: Sequence[int]) -> float:
    return stream.markers[run[-1]].sample - stream.markers[run[0]].sample
