"""Trigger faults found in a recording's markers, each said in words, with the cure that a user may accept."""

from __future__ import annotations

import itertools
from collections.abc import Collection, Sequence

from pulsemend.model.epochs import nearest_sample
from pulsemend.model.faults import FaultKind, MarkerFault
from pulsemend.model.plan import Plan
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Role
from pulsemend.trials.cures import (
    CODE_STAGES,
    DOUBLED_PULSE_S,
    DOUBLED_S,
    LEAST_STUCK,
    LINE_STAGES,
    LOW_BYTE,
    Change,
    Stage,
    Stream,
    apply,
    doubled,
    is_accepted,
    stream_of,
)
from pulsemend.trials.fault_words import cure_words, words_of
from pulsemend.trials.plan_faults import (
    absent_codes,
    at_seconds,
    beyond_8_bits,
    expected_numbers,
    intervals_outside,
)
from pulsemend.units import s_to_ms

BURST_S = 0.1
BURST_MARKERS = 8
"""So many markers within `BURST_S` are a burst, without what a line adds."""

PAIRED_SHARE = 0.8
LEAST_PAIRS = 5
"""Without a role, a code is taken for pairs of pulses if this share of it, and so many, come in company."""

PAIR_S = 0.001
"""Pulses of a pair are at least so far apart; where a sample is longer, doubled pulses cannot be told."""

_TOP_BIT = 7
_COUNTED_FROM = (
    192  # codes that all begin here are taken for a plan that counts from 200, not for a stuck bit
)
_MOST_LOW_BYTES = 64  # more different low bytes are no set of codes but a count
_LEAST_HIGH_BYTES = 3  # so many different high bytes float
_LEAST_EXPLAINED = 2  # codes of the plan that a cure must bring before it is proposed for their sake


def find_faults(
    markers: Sequence[Marker],
    rate_hz: float,
    plan: Plan | None = None,
    accepted: Collection[str] = (),
) -> tuple[MarkerFault, ...]:
    """Find the faults of a recording's markers, in the order of their cures.

    Faults are looked for in what the accepted cures before them left; an accepted fault stays in the list,
    so that its cure can be taken back. What a line adds (zero codes, held levels, two bits apart) is taken as
    cured while later faults are looked for: a held level does not come up as doubled markers, too.

    Parameters
    ----------
    markers : sequence of Marker
        As recorded, in order of time.
    rate_hz : float
        Recorded sampling rate.
    plan : Plan or None
        Adds what only a plan can tell: codes that are absent or beyond 8 bits, stuck bits below the highest,
        intervals. It takes faults away only where it gives codes the role of pulses, which may come in
        pairs, or ignores doubled ones.
    accepted : collection of str
        Keys of faults whose cures are accepted.
    """
    keys = frozenset(accepted)
    faults: list[MarkerFault] = []
    brought: dict[str, frozenset[str]] = {}
    stream = stream_of(markers, rate_hz)
    for stage in CODE_STAGES:
        changes = stage(stream)
        taken = [change for change in changes if is_accepted(change, keys)]
        for change in changes:
            if change in taken or _is_likely(stream, change, plan):
                faults.append(_fault(stream, change, keys))
                if change not in taken:
                    brought[change.keys[0]] = frozenset(change.codes.values())
        stream = apply(stream, taken)
    if plan is not None:
        faults += beyond_8_bits(stream, plan)
    clean = stream
    for stage in LINE_STAGES:
        found, stream, clean = _line_faults(stage, stream, clean, keys)
        faults += found
    faults += _doubled(stream, clean, plan, keys)
    faults += _bursts(clean)
    if plan is not None:
        faults += absent_codes(stream, plan, brought)
        faults += intervals_outside(clean.markers, rate_hz, plan)
    return tuple(faults)


def _fault(stream: Stream, change: Change, keys: Collection[str], may_be_pulse: bool = False) -> MarkerFault:
    key = next((key for key in change.keys if key in keys), change.keys[0])
    at = tuple(nearest_sample(stream.markers[index].sample) for index in change.at)
    return MarkerFault(
        change.kind, key, words_of(stream, change, may_be_pulse), cure_words(stream, change), at, change.count
    )


def _is_likely(stream: Stream, change: Change, plan: Plan | None) -> bool:
    """Whether codes look as if a cure of codes was needed."""
    numbers = frozenset(stream.numbers[change.scope].values())
    expected = expected_numbers(plan, change.scope)
    if change.kind is FaultKind.FLOATING_HIGH_BYTE:
        return _floats(numbers) or _explains({n & LOW_BYTE for n in numbers}, numbers, expected)
    in_top_bit = change.bit == _TOP_BIT and 1 << _TOP_BIT <= min(numbers) < _COUNTED_FROM
    if in_top_bit and max(numbers) <= LOW_BYTE:
        return True
    return _explains({n & ~(1 << change.bit) for n in numbers}, numbers, expected)


def _floats(numbers: Collection[int]) -> bool:
    """Whether high bytes look like lines that nothing drives.

    Either all of these lines are up, or their state varies while the low bytes repeat, or they stay in one
    state while the low bytes count from 1.
    """
    driven = [number for number in numbers if number & LOW_BYTE]  # others may be lines at rest
    above = {number >> 8 for number in driven if number > LOW_BYTE}
    low = {number & LOW_BYTE for number in driven}
    if not above or len(low) > _MOST_LOW_BYTES:
        return False
    if above == {LOW_BYTE}:
        return True
    high = {number >> 8 for number in driven}
    if len(high) == 1:
        return 1 in low and len(low) >= LEAST_STUCK
    return len(high) >= _LEAST_HIGH_BYTES and 2 * len(low) <= len(driven)


def _explains(cured: Collection[int], recorded: Collection[int], expected: Collection[int]) -> bool:
    """Whether cured numbers agree with the plan where the recorded ones do not."""
    brought = set(cured) & set(expected) - set(recorded)
    return len(brought) >= _LEAST_EXPLAINED and len(brought) > len(set(recorded) & set(expected))


def _line_faults(
    stage: Stage, stream: Stream, clean: Stream, keys: Collection[str]
) -> tuple[list[MarkerFault], Stream, Stream]:
    """Faults of one stage; the stream after its accepted cures, and after all of them."""
    offered = stage(clean)
    taken = [change for change in stage(stream) if is_accepted(change, keys)]
    faults = [_fault(clean, change, keys) for change in offered]
    known = {fault.key for fault in faults}
    # Only there because an earlier cure was not accepted, but accepted itself.
    hidden = [_fault(stream, change, keys) for change in taken]
    faults += [fault for fault in hidden if fault.key not in known]
    return faults, apply(stream, taken), apply(clean, offered)


def _doubled(stream: Stream, clean: Stream, plan: Plan | None, keys: Collection[str]) -> list[MarkerFault]:
    """Doubled markers; those of pulses only where no pair of pulses can be so close."""
    changes = [change for change in doubled(DOUBLED_S, clean) if not _is_ignored(change.scope, plan)]
    paired = _paired_codes(clean, changes, plan)
    can_tell = PAIR_S * clean.rate_hz >= 1
    close = [change for change in doubled(DOUBLED_PULSE_S, clean) if can_tell and change.scope in paired]
    offered = [change for change in changes if change.scope not in paired] + close
    faults = {}
    for change in offered:
        may_be_pulse = change.within_s == DOUBLED_S and _is_pulse(change.scope, plan) is not False
        fault = _fault(clean, change, keys, may_be_pulse)
        faults[fault.key] = fault
    # Accepted, though not offered any more, e.g. since the code got the role of pulses.
    for within_s in (DOUBLED_S, DOUBLED_PULSE_S):
        for change in doubled(within_s, stream):
            if is_accepted(change, keys):
                fault = _fault(stream, change, keys)
                faults.setdefault(fault.key, fault)
    return list(faults.values())


def _paired_codes(stream: Stream, changes: Sequence[Change], plan: Plan | None) -> set[str]:
    """Doubled codes that are pairs of pulses: by their role, or because most of them come in company.

    Where that holds for more than half of all frequent codes that are no pulses by their role, the recording
    is doubled throughout, and none is a pair.
    """
    frequent = {
        code
        for code, places in stream.places.items()
        if len(places) >= 2 * LEAST_PAIRS and not _is_pulse(code, plan)
    }
    in_company = {change.scope for change in changes if _comes_in_pairs(stream, change.scope)}
    if 2 * len(in_company & frequent) > len(frequent):
        return set()
    return {
        change.scope
        for change in changes
        if _is_pulse(change.scope, plan)
        or (_is_pulse(change.scope, plan) is None and change.scope in in_company)
    }


def _is_pulse(code: str, plan: Plan | None) -> bool | None:
    """Whether a plan gives a code the role of pulses; None where it does not say."""
    if plan is None or not plan.names(code) or plan.role_of(code) is Role.UNDECIDED:
        return None
    return plan.role_of(code) is Role.PULSE


def _is_ignored(code: str, plan: Plan | None) -> bool:
    return plan is not None and plan.role_of(code) is Role.IGNORE


def _comes_in_pairs(stream: Stream, code: str) -> bool:
    """Whether most markers of a code come in company."""
    within = DOUBLED_S * stream.rate_hz + 2.0  # both times are rounded: pairs at the limit are pairs, too
    samples = [stream.markers[index].sample for index in stream.places[code]]
    is_close = [b - a < within for a, b in itertools.pairwise(samples)]
    alone = sum(
        not (before or after) for before, after in zip([False, *is_close], [*is_close, False], strict=True)
    )
    return len(samples) >= 2 * LEAST_PAIRS and alone <= (1 - PAIRED_SHARE) * len(samples)


def _bursts(stream: Stream) -> list[MarkerFault]:
    """Stretches with more markers than any task sends."""
    samples = [marker.sample for marker in stream.markers]
    within = BURST_S * stream.rate_hz
    bursts: list[list[int]] = []  # first and last index of each
    for last in range(BURST_MARKERS - 1, len(samples)):
        first = last - BURST_MARKERS + 1
        if samples[last] - samples[first] > within:
            continue
        if bursts and first <= bursts[-1][1]:
            bursts[-1][1] = last
        else:
            bursts.append([first, last])
    if not bursts:
        return []
    most = max(last - first + 1 for first, last in bursts)
    at = tuple(nearest_sample(samples[first]) for first, _ in bursts)
    many = "One burst" if len(bursts) == 1 else f"{len(bursts)} bursts"
    words = (
        f"{many} of at least {BURST_MARKERS} markers within {s_to_ms(BURST_S):g} ms, {most} in the longest, "
        f"first at {at_seconds(samples[bursts[0][0]], stream.rate_hz)}."
    )
    return [MarkerFault(FaultKind.BURST, str(FaultKind.BURST), words, "", at, len(bursts))]
