"""Which events "next event" and "previous event" look for. No Qt."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from pulsemend.model.plan import Plan
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Role


@dataclass(frozen=True)
class EventChoice:
    """Events of one role, of one code, or all of them."""

    role: Role | None = None
    code: str = ""

    @property
    def words(self) -> str:
        """What is looked for, in words."""
        if self.code:
            return f"code {self.code}"
        return f"role {self.role}" if self.role is not None else "all events"

    def takes(self, marker: Marker, plan: Plan | None) -> bool:
        """Whether a marker is one of them.

        Parameters
        ----------
        marker : Marker
            Of the recording.
        plan : Plan or None
            Gives codes their roles; without one every code is undecided.
        """
        if self.code:
            return marker.code == self.code
        return self.role is None or self.role is role_of(marker, plan)


ALL_EVENTS = EventChoice()


def role_of(marker: Marker, plan: Plan | None) -> Role:
    """Role of a marker; undecided without a plan.

    Parameters
    ----------
    marker : Marker
        Of the recording.
    plan : Plan or None
        Gives codes their roles.
    """
    return Role.UNDECIDED if plan is None else plan.role_of(marker.code)


def event_choices(markers: Sequence[Marker], plan: Plan | None) -> tuple[tuple[EventChoice, int], ...]:
    """List what can be chosen with the number of events of each: all, then roles, then codes.

    Parameters
    ----------
    markers : sequence of Marker
        Of the recording.
    plan : Plan or None
        Gives codes their roles.
    """
    roles = Counter(role_of(marker, plan) for marker in markers)
    codes = Counter(marker.code for marker in markers)
    return (
        (ALL_EVENTS, len(markers)),
        *((EventChoice(role=role), roles[role]) for role in Role if roles[role]),
        *((EventChoice(code=code), count) for code, count in sorted(codes.items())),
    )


def neighbour(
    markers: Sequence[Marker], plan: Plan | None, choice: EventChoice, sample: float, *, later: bool
) -> Marker | None:
    """Find the nearest event after or before a sample; None if there is none.

    Parameters
    ----------
    markers : sequence of Marker
        In order of time.
    plan : Plan or None
        Gives codes their roles.
    choice : EventChoice
        What is looked for.
    sample : float
        Recorded sample; an event on it does not count.
    later : bool
        After it, else before it.
    """
    ordered = markers if later else reversed(markers)
    for marker in ordered:
        beyond = marker.sample > sample if later else marker.sample < sample
        if beyond and choice.takes(marker, plan):
            return marker
    return None
