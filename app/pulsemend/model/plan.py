"""The plan: everything decided for all recordings of a study, as frozen values.

Files are read and written by `plan_file`; limits and defaults of every key stand in `plan_keys`.
Times keep the units of their keys (`_s`, `_ms`, `_uv`, `_hz`).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from pulsemend.model.vocabulary import (
    AcrossPulses,
    Decay,
    Fill,
    Format,
    Precision,
    PulseRule,
    PulseTimes,
    Role,
    Side,
)

Window = tuple[float, float]


@dataclass(frozen=True)
class About:
    """The study: its name, and the mains frequency to remove (0: no line removal)."""

    name: str = ""
    line_hz: float = 0.0


@dataclass(frozen=True)
class MarkerPlan:
    """What one code stands for, and the labels it carries."""

    code: str
    role: Role
    labels: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Slot:
    """One expected marker of a trial.

    Parameters
    ----------
    slot : str
        Its name.
    role : Role
    after_s : tuple of 2 float or None
        Allowed time since the slot `after`; None for the first slot.
    after : str
        Empty: the nearest earlier slot that is not optional.
    optional : bool
    """

    slot: str
    role: Role
    after_s: Window | None = None
    after: str = ""
    optional: bool = False


@dataclass(frozen=True)
class OtherGap:
    """A further gap at a fixed latency from every pulse, e.g. the stimulator's recharge."""

    window_ms: Window


@dataclass(frozen=True)
class Pulses:
    """Where pulses are and how they are blanked and filled."""

    times: PulseTimes = PulseTimes.MARKERS
    search_ms: Window = (-10.0, 10.0)
    window_ms: Window | None = None
    fill: Fill = Fill.COVARIANCE
    side: Side = Side.BOTH
    flank_ms: float | None = None
    decay: Decay = Decay.NONE
    also: tuple[OtherGap, ...] = ()
    channels: Mapping[str, Window] = field(default_factory=dict)


@dataclass(frozen=True)
class Filter:
    """Filters and rate. 0: off, or as recorded."""

    highpass_hz: float = 1.0
    lowpass_hz: float = 100.0
    rate_hz: float = 1000.0
    across_pulses: AcrossPulses = AcrossPulses.FILLED


@dataclass(frozen=True)
class Channels:
    """Bad channels, reference and positions.

    ``reference`` is "average", "as recorded" or the names of channels whose mean is subtracted.
    """

    bad: tuple[str, ...] = ()
    find_bad: bool = False
    rebuild_bad: bool = False
    recorded_reference: str = ""
    reference: str | tuple[str, ...] = "average"
    positions: str = "10-05"


@dataclass(frozen=True)
class EpochRule:
    """How one kind of epoch is cut."""

    name: str
    anchor: str
    start_s: float
    count: int = 1
    pulse: PulseRule = PulseRule.REFUSE
    clear_ms: Window = (0.0, 0.0)
    stop_before: str = ""
    labels: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Epochs:
    """One length for the whole set, and its rules."""

    length_s: float
    rule: tuple[EpochRule, ...]


@dataclass(frozen=True)
class Export:
    """Containers and precision."""

    formats: tuple[Format, ...] = (Format.HDF5, Format.FIF)
    precision: Precision = Precision.SINGLE


@dataclass(frozen=True)
class Plan:
    """Everything decided for all recordings of a study."""

    about: About
    markers: tuple[MarkerPlan, ...]
    trial: tuple[Slot, ...]
    pulses: Pulses
    filter: Filter
    channels: Channels
    epochs: Epochs
    export: Export

    def role_of(self, code: str) -> Role:
        """Role of a code; `Role.OTHER` where the plan does not name it."""
        for marker in self.markers:
            if marker.code == code:
                return marker.role
        return Role.OTHER

    def labels_of(self, code: str) -> Mapping[str, str]:
        """Labels of a code; empty where the plan does not name it."""
        for marker in self.markers:
            if marker.code == code:
                return marker.labels
        return {}
