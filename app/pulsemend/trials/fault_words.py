"""What is said about trigger faults that have a cure."""

from __future__ import annotations

from collections.abc import Collection, Mapping

from pulsemend.model.faults import FaultKind
from pulsemend.model.numbers import number_of
from pulsemend.trials.cures import LOW_BYTE, Change, Stream
from pulsemend.trials.plan_faults import at_seconds
from pulsemend.units import s_to_ms


def words_of(stream: Stream, change: Change, may_be_pulse: bool = False) -> str:
    """Say what was seen, how often, and where first: one sentence.

    Parameters
    ----------
    stream : Stream
        What the change was found in.
    change : Change
        What the cure would do.
    may_be_pulse : bool
        Whether doubled markers may be pairs of pulses.
    """
    marker = stream.markers[change.at[0]]
    first = f"first at {at_seconds(marker.sample, stream.rate_hz)}"
    many = _markers(change.count)
    match change.kind:
        case FaultKind.FLOATING_HIGH_BYTE:
            low = {number & LOW_BYTE for number in stream.numbers[change.scope].values()}
            codes = "One code lies" if len(change.codes) == 1 else f"{len(change.codes)} codes lie"
            return (
                f"{codes} above 255, but the low 8 bits of all codes{_of(change.scope)} take only "
                f"{_values(len(low))}, as if the lines of the high byte floated; {many}, {first} "
                f"({marker.code})."
            )
        case FaultKind.STUCK_BIT:
            return (
                f"Each of {len(change.codes)} codes{_of(change.scope)} has bit {change.bit} "
                f"({1 << change.bit}) set, as if its line was stuck; {many}, {first} ({marker.code})."
            )
        case FaultKind.ZERO_CODES:
            what = f"The number zero{_of(change.scope)} is usually the line at rest"
            return f"{what}; {many}, {first}."
        case FaultKind.HELD_LEVEL:
            codes = _listed(sorted({stream.markers[index].code for index in change.at}))
            return (
                f"Levels were read at every sample they were held: {many} too many at "
                f"{_places(len(change.at))} ({codes}), {first}."
            )
        case FaultKind.TWO_BITS_APART:
            new = change.become[change.at[0]]
            into = marker.code if new is None else new[0].code
            return (
                "A code is followed at once by another that holds all of its bits, as if these arrived one "
                f"after the other: {_times(change.count)}, {first} ({marker.code}, then {into})."
            )
        case _:
            pairs = "; if these are pairs of pulses, give it the role pulse" if may_be_pulse else ""
            return (
                f"Code {_as_recorded(stream, change)} comes again in less than "
                f"{s_to_ms(change.within_s):g} ms: {_times(change.count)}, {first}{pairs}."
            )


def cure_words(stream: Stream, change: Change) -> str:
    """Say what accepting the cure does: one sentence.

    Parameters
    ----------
    stream : Stream
        What the change was found in.
    change : Change
        What the cure would do.
    """
    match change.kind:
        case FaultKind.FLOATING_HIGH_BYTE:
            return f"Only the low 8 bits count: {_arrows(change.codes)}."
        case FaultKind.STUCK_BIT:
            return f"Bit {change.bit} is cleared in all of them: {_arrows(change.codes)}."
        case FaultKind.ZERO_CODES:
            return f"Codes of zero are left out: {_markers(change.count)}."
        case FaultKind.HELD_LEVEL:
            return f"Each becomes one marker at its first sample; left out: {_markers(change.count)}."
        case FaultKind.TWO_BITS_APART:
            return "The later, complete code stays, at the sample of the first one."
        case _:
            within = f"within {s_to_ms(change.within_s):g} ms"
            return f"The first stays; left out {within} after it: {_markers(change.count)}."


def _markers(count: int) -> str:
    return "one marker" if count == 1 else f"{count} markers"


def _times(count: int) -> str:
    return "once" if count == 1 else f"{count} times"


def _places(count: int) -> str:
    return "one place" if count == 1 else f"{count} places"


def _values(count: int) -> str:
    return "one value" if count == 1 else f"{count} values"


def _of(prefix: str) -> str:
    return f" after {prefix}" if prefix else ""


def _listed(codes: Collection[str], most: int = 4) -> str:
    shown = list(codes)[:most]
    more = len(codes) - len(shown)
    return ", ".join(shown) + (f" and {more} more" if more else "")


def _arrows(codes: Mapping[str, str]) -> str:
    zero = [new for new in codes.values() if (number_of(new) or ("", 1))[1] == 0]
    then = "; what becomes zero is the line at rest, and listed as zero codes" if zero else ""
    return _listed([f"{old} becomes {new}" for old, new in codes.items()], 3) + then


def _as_recorded(stream: Stream, change: Change) -> str:
    recorded = stream.recorded[stream.places[change.scope][0]]
    return change.scope if recorded == change.scope else f"{change.scope} (recorded as {recorded})"
