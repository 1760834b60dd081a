"""Faults of trigger markers, as frozen values."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum

from pulsemend.model.recording import Marker


class FaultKind(StrEnum):
    """What is wrong with markers, in the order in which faults are looked for and cured."""

    FLOATING_HIGH_BYTE = "floating high byte"
    STUCK_BIT = "stuck bit"
    BEYOND_8_BITS = "beyond 8 bits"
    ZERO_CODES = "zero codes"
    HELD_LEVEL = "held level"
    TWO_BITS_APART = "two bits apart"
    DOUBLED_MARKER = "doubled marker"
    BURST = "burst"
    ABSENT_CODE = "absent code"
    INTERVAL_OUTSIDE = "interval outside the plan"


@dataclass(frozen=True)
class MarkerFault:
    """One fault, with the cure that a user may accept.

    Parameters
    ----------
    kind : FaultKind
    key : str
        Names the fault within its recording, e.g. "stuck bit 7" or "doubled marker cue left"; codes in it are
        written as recorded, so that it stays the same whatever other cures are accepted.
    words : str
        What was seen, how often, and where first: one sentence.
    cure : str
        What accepting it does: one sentence. Empty if there is no cure.
    at : tuple of int
        Nearest recorded samples of the places where it is, in order.
    count : int
        Markers that the cure changes or leaves out; without a cure, how often it was seen.
    """

    kind: FaultKind
    key: str
    words: str
    cure: str
    at: tuple[int, ...]
    count: int


@dataclass(frozen=True)
class Cured:
    """Markers after the accepted cures.

    Parameters
    ----------
    markers : tuple of Marker
        In order of time; every sample is one of the recording's own.
    counts : mapping of str to int
        Markers changed or left out, by key of the accepted fault; two bits apart count once per pair.
    unknown : tuple of str
        Accepted keys that changed nothing, sorted.
    """

    markers: tuple[Marker, ...]
    counts: Mapping[str, int] = field(default_factory=dict)
    unknown: tuple[str, ...] = ()
