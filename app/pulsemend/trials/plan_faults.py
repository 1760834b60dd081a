"""Trigger faults that only a plan can tell: codes beyond 8 bits, absent codes, intervals outside it."""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Mapping, Sequence
from statistics import median

import numpy as np

from pulsemend.model.epochs import nearest_sample
from pulsemend.model.faults import FaultKind, MarkerFault
from pulsemend.model.numbers import number_of
from pulsemend.model.plan import Plan, Slot, Window
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Role
from pulsemend.trials.cures import LOW_BYTE, Stream

OUTSIDE_SHARE = 0.5
"""Intervals are a fault where more than this share of those expected lies outside the plan."""

_LEAST_INTERVALS = 3  # fewer are no usual interval
_ROUNDING_S = 1e-6  # limits are inclusive, and times quotients


def expected_codes(plan: Plan | None) -> tuple[str, ...]:
    """Codes that a plan names and does not ignore."""
    if plan is None:
        return ()
    return tuple(marker.code for marker in plan.markers if marker.role is not Role.IGNORE)


def expected_numbers(plan: Plan | None, prefix: str) -> frozenset[int]:
    """Numbers of the expected codes with a prefix."""
    found = (number_of(code) for code in expected_codes(plan))
    return frozenset(one[1] for one in found if one is not None and one[0] == prefix)


def at_seconds(sample: float, rate_hz: float) -> str:
    """Say an instant."""
    return f"{sample / rate_hz:.3f} s"


def beyond_8_bits(stream: Stream, plan: Plan) -> list[MarkerFault]:
    """Find codes of the plan that need more than 8 bits, where the recording holds only their low bytes.

    Parameters
    ----------
    stream : Stream
        Markers whose codes are cured as far as accepted.
    plan : Plan
        Names the codes.
    """
    faults = []
    for code in expected_codes(plan):
        found = number_of(code)
        if found is None or found[1] <= LOW_BYTE:
            continue
        numbers = stream.numbers.get(found[0], {})
        if not numbers or max(numbers.values()) > LOW_BYTE:
            continue
        low = found[1] & LOW_BYTE
        read = [one for one, number in numbers.items() if number == low]
        if not read:
            continue
        at = sorted(stream.markers[index].sample for one in read for index in stream.places[one])
        also = " (a code that the plan names, too)" if any(plan.names(one) for one in read) else ""
        words = (
            f"Code {code} of the plan needs more than 8 bits and never occurs, but {read[0]}, its low 8 bits,"
            f" does{also}: {_times(len(at))}, first at {at_seconds(at[0], stream.rate_hz)}; on a cable of 8 "
            f"lines {found[1]} reads {low}, so the plan should name {read[0]} instead."
        )
        key = f"{FaultKind.BEYOND_8_BITS} {code}"
        places = tuple(nearest_sample(sample) for sample in at)
        faults.append(MarkerFault(FaultKind.BEYOND_8_BITS, key, words, "", places, len(at)))
    return faults


def absent_codes(stream: Stream, plan: Plan, brought: Mapping[str, frozenset[str]]) -> list[MarkerFault]:
    """Find codes that the plan names and the recording never holds, unless they lie beyond 8 bits.

    Parameters
    ----------
    stream : Stream
        Markers after all accepted cures.
    plan : Plan
        Names the codes.
    brought : mapping of str to frozenset of str
        By key of cures offered and not accepted: codes they would bring.
    """
    faults = []
    beyond = {fault.key for fault in beyond_8_bits(stream, plan)}
    for code in expected_codes(plan):
        if code in stream.places or f"{FaultKind.BEYOND_8_BITS} {code}" in beyond:
            continue
        words = f"Code {code} of the plan never occurs in this recording"
        cures = [key for key, codes in brought.items() if code in codes]
        words += f"; it would with the cure of {' or '.join(cures)}." if cures else "."
        faults.append(MarkerFault(FaultKind.ABSENT_CODE, f"{FaultKind.ABSENT_CODE} {code}", words, "", (), 0))
    return faults


def intervals_outside(markers: Sequence[Marker], rate_hz: float, plan: Plan) -> list[MarkerFault]:
    """Find slots whose usual interval the plan does not allow.

    Asked of every marker with the role of the slot's reference: does a marker with the slot's role follow
    within the limits? Where several slots of a trial share that role, each may claim its part of the markers
    only. Slots that not every trial has (optional ones, kinds of trials, another group than their reference)
    are passed over.

    Parameters
    ----------
    markers : sequence of Marker
        In order of time, after all cures.
    rate_hz : float
        Recorded sampling rate.
    plan : Plan
        Its slots, with ``after_s``.
    """
    times: dict[Role, list[float]] = {}
    roles = {code: plan.role_of(code) for code in {marker.code for marker in markers}}
    for marker in markers:
        times.setdefault(roles[marker.code], []).append(marker.sample / rate_hz)
    faults = []
    for slot, reference in _pairs(plan):
        allowed = slot.after_s
        starts, followers = times.get(reference.role, []), times.get(slot.role, [])
        expected = len(starts) / _repeats(plan, reference.role)
        if allowed is None or expected < _LEAST_INTERVALS or not followers:
            continue
        outside = [time for time in starts if not _is_followed(time, followers, allowed)]
        missed = round(expected) - (len(starts) - len(outside))
        if missed <= OUTSIDE_SHARE * expected:
            continue
        # The rest belongs to other slots that share the role: those nearest to the limits are this slot's.
        seen = [(_nearest(time, followers, allowed), time) for time in outside if time < followers[-1]]
        if not seen:
            continue
        near = sorted(seen, key=lambda one: (_distance(one[0], allowed), one[1]))[:missed]
        intervals = [interval for interval, _ in near]
        low, high = np.quantile(intervals, [0.05, 0.95])
        words = (
            f"From {reference.slot} to {slot.slot} the plan allows {allowed[0]:g} to {allowed[1]:g} s, but "
            f"{missed} of {round(expected)} intervals lie outside: usually {median(intervals):.3f} s "
            f"({low:.3f} to {high:.3f} s in 90 % of them), first at {min(time for _, time in near):.3f} s."
        )
        key = f"{FaultKind.INTERVAL_OUTSIDE} {reference.slot} to {slot.slot}"
        at = tuple(sorted(nearest_sample(time * rate_hz) for _, time in near))
        faults.append(MarkerFault(FaultKind.INTERVAL_OUTSIDE, key, words, "", at, missed))
    return faults


def _times(count: int) -> str:
    return "once" if count == 1 else f"{count} times"


def _pairs(plan: Plan) -> list[tuple[Slot, Slot]]:
    """Slots that every trial has, each with its reference."""
    pairs = []
    for index, slot in enumerate(plan.trial):
        earlier = plan.trial[:index]
        named = [one for one in earlier if one.slot == slot.after]
        required = [one for one in earlier if not one.optional]
        reference = (named or required)[-1:] if slot.after_s is not None else []
        pairs += [
            (slot, one)
            for one in reference
            if not (slot.optional or one.optional or slot.kinds or one.kinds) and slot.group == one.group
        ]
    return pairs


def _repeats(plan: Plan, role: Role) -> int:
    """Count markers with a role that a whole trial may have."""
    most = {group.name: group.times[1] for group in plan.groups}
    return sum(most.get(slot.group, 1) for slot in plan.trial if slot.role is role) or 1


def _is_followed(time: float, followers: Sequence[float], allowed: Window) -> bool:
    first = bisect_left(followers, time + allowed[0] - _ROUNDING_S)
    return first < len(followers) and followers[first] <= time + allowed[1] + _ROUNDING_S


def _nearest(time: float, followers: Sequence[float], allowed: Window) -> float:
    """Interval to the follower nearest to the limits, of those later than an instant before the last."""
    first = bisect_left(followers, time + allowed[0])
    near = [followers[index] - time for index in (first - 1, first) if 0 <= index < len(followers)]
    return min(
        (interval for interval in near if interval > 0),
        key=lambda interval: _distance(interval, allowed),
    )


def _distance(interval: float, allowed: Window) -> float:
    return max(allowed[0] - interval, interval - allowed[1], 0.0)
