"""What the traces are given and what they tell: plain values and the model they listen to. No Qt."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.vocabulary import Role
from pulsemend.session.view import View

_NONE = np.empty(0, dtype=np.float64)


class ViewModel(Protocol):
    """What holds the view: traces and ribbon show it, and change it by `set_view` alone."""

    @property
    def view(self) -> View:
        """The part in view."""
        ...

    def set_view(self, view: View) -> None:
        """Replace the view; every listener is called if it differs."""
        ...

    def subscribe(self, listener: Callable[[], None]) -> Callable[[], None]:
        """Have a function called after every change of the view; the result ends that."""
        ...


@dataclass(frozen=True)
class Events:
    """Markers and pulses, in order of time.

    Parameters
    ----------
    time_s : array, shape (n,)
        From the recording's first sample.
    roles : tuple of Role
    labels : tuple of str
        Short text beside the shape; may be empty.
    keys : tuple of int
        What the caller knows each event by: signals carry it.
    """

    time_s: NDArray[np.float64] = field(default_factory=_NONE.copy)
    roles: tuple[Role, ...] = ()
    labels: tuple[str, ...] = ()
    keys: tuple[int, ...] = ()

    def __post_init__(self) -> None:
        if not len(self.time_s) == len(self.roles) == len(self.labels) == len(self.keys):
            raise ValueError("events need a time, a role, a label and a key each")
        if np.any(np.diff(self.time_s) < 0):
            raise ValueError("events must be in order of time")

    def within(self, start_s: float, stop_s: float) -> range:
        """Places of the events in [start_s, stop_s]."""
        first, last = np.searchsorted(self.time_s, [start_s, np.nextafter(stop_s, np.inf)])
        return range(int(first), int(last))


@dataclass(frozen=True)
class Bands:
    """Stretches of time, in order of their starts.

    Parameters
    ----------
    start_s, stop_s : arrays, shape (n,)
    labels : tuple of str
        One each, or none at all.
    """

    start_s: NDArray[np.float64] = field(default_factory=_NONE.copy)
    stop_s: NDArray[np.float64] = field(default_factory=_NONE.copy)
    labels: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if len(self.start_s) != len(self.stop_s) or np.any(np.diff(self.start_s) < 0):
            raise ValueError("bands need a start and a stop each, in order of their starts")

    def within(self, start_s: float, stop_s: float) -> NDArray[np.intp]:
        """Places of the bands that touch [start_s, stop_s]."""
        last = int(np.searchsorted(self.start_s, stop_s, side="right"))
        return np.flatnonzero(self.stop_s[:last] >= start_s)


@dataclass(frozen=True)
class Overlays:
    """Everything that lies over or behind the traces.

    Parameters
    ----------
    events : Events
    gaps : Bands
        What is replaced around pulses, in every channel without gaps of its own.
    bad_stretches : Bands
    epochs : Bands
    bad : frozenset of str
        Names of the bad channels.
    own_gaps : mapping of str to Bands
        By name of the channel, for channels with other gaps; channels with the same gaps share one object.
    """

    events: Events = field(default_factory=Events)
    gaps: Bands = field(default_factory=Bands)
    bad_stretches: Bands = field(default_factory=Bands)
    epochs: Bands = field(default_factory=Bands)
    bad: frozenset[str] = frozenset()
    own_gaps: Mapping[str, Bands] = field(default_factory=dict)


@dataclass(frozen=True)
class Reading:
    """What lies under the cursor."""

    time_s: float
    channel: str
    value_uv: float


@dataclass(frozen=True)
class Measure:
    """What lies between two points: times and, on the first point's channel, the values there."""

    channel: str
    start_s: float
    stop_s: float
    start_uv: float
    stop_uv: float

    @property
    def duration_s(self) -> float:
        """Second point's time minus the first's."""
        return self.stop_s - self.start_s

    @property
    def difference_uv(self) -> float:
        """Second point's value minus the first's."""
        return self.stop_uv - self.start_uv
