"""Times between markers: from one code to the next of another, or from a slot's reference to the slot."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pulsemend.mending.marker_view import Survey
from pulsemend.model.plan import Plan, Slot, Window
from pulsemend.model.trial_kinds import expanded_slots
from pulsemend.model.vocabulary import Role

FloatArray = NDArray[np.float64]
_NONE: FloatArray = np.zeros(0)
ROUNDING_S = 1e-6
"""Limits are inclusive, and times quotients."""


@dataclass(frozen=True)
class Intervals:
    """Times from one thing to another.

    Parameters
    ----------
    start_s, length_s : float array, shape (n,)
        When each begins, and how long it is, in order of time.
    limits_s : (float, float) or None
        What the plan allows.
    words : str
        From what to what.
    """

    start_s: FloatArray = field(repr=False, compare=False)
    length_s: FloatArray = field(repr=False, compare=False)
    limits_s: Window | None
    words: str

    @property
    def shorter(self) -> NDArray[np.bool_]:
        """Those shorter than the plan allows, shape (n,)."""
        least_s = -np.inf if self.limits_s is None else self.limits_s[0]
        return np.asarray(self.length_s < least_s - ROUNDING_S)

    @property
    def longer(self) -> NDArray[np.bool_]:
        """Those longer than the plan allows, shape (n,)."""
        most_s = np.inf if self.limits_s is None else self.limits_s[1]
        return np.asarray(self.length_s > most_s + ROUNDING_S)


NO_INTERVALS = Intervals(_NONE, _NONE, None, "")


def limited_slots(plan: Plan | None) -> tuple[Slot, ...]:
    """Slots with limits, repeats written out and references named."""
    if plan is None:
        return ()
    return tuple(slot for slot in expanded_slots(plan) if slot.after_s is not None and slot.after)


def between_codes(survey: Survey, first: str, second: str) -> Intervals:
    """Measure from every marker of a code to the next of another, or of the same.

    Parameters
    ----------
    survey : Survey
        Holds the markers.
    first, second : str
        Codes. The limits are those of the first slot in the plan that has their roles.
    """
    times = {one.code: one.times_s for one in survey.evidence}
    start_s, length_s = _to_next(times.get(first, _NONE), times.get(second, _NONE))
    return Intervals(start_s, length_s, _limits_of(survey.plan, first, second), f"{first} to next {second}")


def since_reference(survey: Survey, name: str) -> Intervals:
    """Measure from a slot's reference to the slot.

    In trials that lack the slot, a marker with its role that belongs to no trial counts: the limits may have
    kept it out. Where no trial holds the reference, every marker with the reference's role counts.

    Parameters
    ----------
    survey : Survey
        Holds the trials.
    name : str
        One of `limited_slots`.
    """
    slots = {slot.slot: slot for slot in (() if survey.plan is None else expanded_slots(survey.plan))}
    slot = slots.get(name)
    if slot is None or slot.after not in slots or survey.plan is None:
        return NO_INTERVALS
    words = f"{slot.after} to {slot.slot}"
    found = _in_trials(survey, slot)
    if not found:
        by_role = _times_by_role(survey)
        reference = by_role.get(slots[slot.after].role, _NONE)
        start_s, length_s = _to_next(reference, by_role.get(slot.role, _NONE))
        return Intervals(start_s, length_s, slot.after_s, words)
    start_s, length_s = np.array(found).T
    return Intervals(start_s, length_s, slot.after_s, words)


def _in_trials(survey: Survey, slot: Slot) -> list[tuple[float, float]]:
    plan, rate_hz, trials = survey.plan, survey.rate_hz, survey.trials.trials
    if plan is None:
        return []
    free = np.array([one.sample for one in survey.trials.extra if plan.role_of(one.code) is slot.role])
    ends = [*(trial.first_sample for trial in trials[1:]), np.inf][: len(trials)]
    found = []
    for trial, end in zip(trials, ends, strict=True):
        reference, own = trial.markers.get(slot.after), trial.markers.get(slot.slot)
        if reference is None:
            continue
        samples = [own.sample] if own is not None else free[(free > reference.sample) & (free < end)][:1]
        found += [(reference.sample / rate_hz, (float(one) - reference.sample) / rate_hz) for one in samples]
    return found


def _times_by_role(survey: Survey) -> Mapping[Role, FloatArray]:
    plan = survey.plan
    times: dict[Role, list[FloatArray]] = {}
    for one in survey.evidence:
        if plan is not None:
            times.setdefault(plan.role_of(one.code), []).append(one.times_s)
    return {role: np.sort(np.concatenate(parts)) for role, parts in times.items()}


def _to_next(starts: FloatArray, followers: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Intervals to the next follower; of several starts before it, the last one's only."""
    place = np.searchsorted(followers, starts, side="right")
    last = np.append(place[1:] != place[:-1], True) if place.size else np.zeros(0, dtype=np.bool_)
    there = (place < followers.size) & last
    return starts[there], followers[place[there]] - starts[there]


def _limits_of(plan: Plan | None, first: str, second: str) -> Window | None:
    if plan is None:
        return None
    slots: Sequence[Slot] = expanded_slots(plan)
    roles = {slot.slot: slot.role for slot in slots}
    wanted = (plan.role_of(first), plan.role_of(second))
    return next(
        (slot.after_s for slot in slots if slot.after_s and (roles.get(slot.after), slot.role) == wanted),
        None,
    )
