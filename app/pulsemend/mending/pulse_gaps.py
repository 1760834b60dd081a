"""Which gap a channel has, by plan and marks, and how it is given another one."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from enum import StrEnum

from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan, Window


class Source(StrEnum):
    """Where a channel's gap is decided."""

    ALL = "for all channels"
    PLAN = "in every recording"
    MARKS = "only in this recording"


@dataclass(frozen=True)
class GapException:
    """The gap of one channel that has one of its own.

    Parameters
    ----------
    channel : str
    window_ms : tuple of 2 float
    source : Source
        Plan or marks; marks win.
    """

    channel: str
    window_ms: Window
    source: Source


def exceptions(plan: Plan, marks: Marks) -> tuple[GapException, ...]:
    """List all exceptions, the plan's first.

    Parameters
    ----------
    plan, marks : Plan, Marks
        As they are edited.
    """
    of_plan = (GapException(name, window, Source.PLAN) for name, window in plan.pulses.channels.items())
    of_marks = (GapException(name, window, Source.MARKS) for name, window in marks.gaps_ms.items())
    return (*of_plan, *of_marks)


def gap_of(plan: Plan, marks: Marks, channel: str = "") -> tuple[Window | None, Source]:
    """Find the gap that holds for a channel, and where it is decided.

    Parameters
    ----------
    plan, marks : Plan, Marks
        As they are edited.
    channel : str
        Empty for the gap of all channels without an exception.
    """
    if channel in marks.gaps_ms:
        return marks.gaps_ms[channel], Source.MARKS
    if channel in plan.pulses.channels:
        return plan.pulses.channels[channel], Source.PLAN
    return plan.pulses.window_ms, Source.ALL


def plan_with_exceptions(plan: Plan, channels: Iterable[str], window_ms: Window | None) -> Plan:
    """Give channels a gap of their own in every recording; None takes it back."""
    own = {name: window for name, window in plan.pulses.channels.items() if name not in set(channels)}
    if window_ms is not None:
        own.update(dict.fromkeys(channels, window_ms))
    return replace(plan, pulses=replace(plan.pulses, channels=own))


def marks_with_exceptions(marks: Marks, channels: Iterable[str], window_ms: Window | None) -> Marks:
    """Give channels a gap of their own in one recording; None takes it back."""
    own = {name: window for name, window in marks.gaps_ms.items() if name not in set(channels)}
    if window_ms is not None:
        own.update(dict.fromkeys(channels, window_ms))
    return replace(marks, gaps_ms=own)
