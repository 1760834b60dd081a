"""What the keys of a plan must be to each other, to a recording's rate and to its channels."""

from __future__ import annotations

import difflib
import math
from collections.abc import Collection, Iterable

from pulsemend.errors import MarksError, PlanError, SettingError
from pulsemend.model.keys import show
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.model.toml_lines import key_text
from pulsemend.model.trial_checks import check_trials, used_roles
from pulsemend.model.trial_kinds import slot_names
from pulsemend.model.vocabulary import Fill, Format, PulseTimes, Role

WHOLE_WITHIN = 1e-6
SHORTEST_GAP_MS = 1.0
"""A gap below is a slip, such as seconds for milliseconds (pulse spikes: facts of 0.4 ms and more)."""

LARGEST_BAND = 0.4
"""Highest low-pass at a reduced rate, as a share of that rate."""


def check_plan(plan: Plan) -> tuple[str, ...]:
    """Check what needs no recording.

    Parameters
    ----------
    plan : Plan
        What to check.

    Returns
    -------
    tuple of str
        Warnings: allowed, but perhaps not meant.

    Raises
    ------
    PlanError
        Keys contradict each other.
    """
    check_trials(plan)
    _check_pulses(plan)
    _check_filter(plan)
    _check_reference(plan)
    _check_rules(plan)
    if plan.filter.rate_hz:
        _check_whole_samples(plan, plan.filter.rate_hz)
    return _warnings(plan)


def check_decided(plan: Plan) -> None:
    """Refuse what a person still has to decide: roles, slots, epoch rules, and the gap around every pulse.

    A plan with such open ends can be read, shown and edited, but not carried out.

    Parameters
    ----------
    plan : Plan
        What to check.

    Raises
    ------
    PlanError
        A role is undecided (lists all; the first one's line is given), there is no slot or no rule, or the
        gap is undecided.
    """
    undecided = [marker.code for marker in plan.markers if marker.role is Role.UNDECIDED]
    if undecided:
        raise PlanError(
            key_text(("markers", undecided[0], "role")),
            "still undecided: " + ", ".join(show(code) for code in undecided),
            allowed=" | ".join(show(role) for role in Role if role is not Role.UNDECIDED),
        )
    need_slots(plan)
    need_rules(plan)
    if plan.pulses.times is not PulseTimes.NONE and plan.pulses.window_ms is None:
        raise PlanError(
            "pulses.window_ms",
            "is missing: the gap around every pulse has no default and must be decided",
            allowed='[from, to] in ms, or times = "none" for a recording without pulses',
        )


def need_slots(plan: Plan) -> None:
    """Refuse a plan without a slot.

    Parameters
    ----------
    plan : Plan
        What to check.

    Raises
    ------
    PlanError
        There is none.
    """
    if not plan.trial:
        raise PlanError("trial", "has no slot; at least one [[trial]] is needed")


def need_rules(plan: Plan) -> None:
    """Refuse a plan without an epoch rule.

    Parameters
    ----------
    plan : Plan
        What to check.

    Raises
    ------
    PlanError
        There is none.
    """
    if not plan.epochs.rule:
        raise PlanError("epochs.rule", "has no rule; at least one [[epochs.rule]] is needed")


def check_against_rate(plan: Plan, recorded_rate_hz: float) -> float:
    """Check a plan against a recording's rate.

    Parameters
    ----------
    plan : Plan
        What to check.
    recorded_rate_hz : float
        The recording's rate.

    Returns
    -------
    float
        The output rate in Hz.

    Raises
    ------
    PlanError
        The output rate is above the recorded one, the low-pass does not fit it, or a start or a length is no
        whole number of its samples.
    """
    rate_hz = plan.filter.rate_hz or recorded_rate_hz
    if rate_hz > recorded_rate_hz:
        raise PlanError(
            "filter.rate_hz",
            "is above the recorded rate",
            allowed=f"0 (as recorded) or up to {recorded_rate_hz:.12g} Hz",
            received=f"{rate_hz:.12g}",
        )
    lowpass_hz = plan.filter.lowpass_hz
    if rate_hz < recorded_rate_hz:
        highest, zero = LARGEST_BAND * rate_hz, f"0 ({LARGEST_BAND:g} x rate_hz)"
    else:
        # The transition is a quarter of the cutoff wide, at least 2 Hz, and has to end below half the rate.
        highest, zero = min(rate_hz / 2 - 1.0, rate_hz / 2 / 1.125), "0 (off)"
    if lowpass_hz > highest:
        raise PlanError(
            "filter.lowpass_hz",
            f"is too high for an output rate of {rate_hz:.12g} Hz",
            allowed=f"{zero} or up to {highest:.6g} Hz",
            received=f"{lowpass_hz:.12g}",
        )
    _check_whole_samples(plan, rate_hz)
    return rate_hz


def check_channels(plan: Plan, marks: Marks, names: Collection[str]) -> tuple[str, ...]:
    """Check the channels that plan and marks name against a recording's.

    Parameters
    ----------
    plan : Plan
        What to check.
    marks : Marks
        The recording's marks; `NO_MARKS` if there are none.
    names : collection of str
        The recording's channels.

    Returns
    -------
    tuple of str
        Warnings: bad channels that the recording does not have.

    Raises
    ------
    PlanError, MarksError
        A channel that is needed is not in the recording, or is bad and the reference.
    """
    channels = plan.channels
    put_back = channels.recorded_reference
    if put_back in names:
        raise PlanError(
            "channels.recorded_reference",
            "is a channel of the recording already, so it cannot be put back",
            allowed='"" or a channel that was not recorded',
            received=show(put_back),
        )
    for name in plan.pulses.channels:
        _need(PlanError, key_text(("pulses", "channels", name)), name, names)
    if not isinstance(channels.reference, str):
        known = [*names, put_back] if put_back else names
        for place, name in enumerate(channels.reference, start=1):
            key = key_text(("channels", "reference", place))
            _need(PlanError, key, name, known)
            if name in marks.bad:
                raise PlanError(key, "is bad in this recording's marks", received=show(name))
    for table, used in (("types", marks.types), ("gaps_ms", marks.gaps_ms)):
        for name in used:
            _need(MarksError, key_text((table, name)), name, names)
    return tuple(
        f"{where}: {what} channel {show(name)} is not in the recording"
        for where, what, named in (
            ("plan", "bad", channels.bad),
            ("marks", "bad", marks.bad),
            ("marks", "good", marks.good),
        )
        for name in named
        if name not in names
    )


def _need(error: type[SettingError], key: str, name: str, names: Collection[str]) -> None:
    if name not in names:
        raise error(key, "is not a channel of the recording", allowed=_near(name, names), received=show(name))


def _near(name: str, names: Iterable[str]) -> str:
    """Names like the one that was not found; all of them where there are few, some where none is alike."""
    known = list(names)
    near = difflib.get_close_matches(name, known, n=4, cutoff=0.5)
    by_case = [other for other in known if other.casefold() == name.casefold() and other not in near]
    return " | ".join(show(other) for other in [*by_case, *near] or known[:8]) + (
        " | ..." if len(known) > 8 or (near and len(near) < len(known)) else ""
    )


def _check_pulses(plan: Plan) -> None:
    pulses = plan.pulses
    if pulses.times is PulseTimes.NONE:
        return
    if pulses.fill is Fill.LEAVE and Format.FIF in plan.export.formats:
        raise PlanError(
            "pulses.fill",
            "FIF cannot hold gaps that are left open",
            allowed='another fill, or formats = ["hdf5"]',
            received=show(pulses.fill),
        )


def _check_filter(plan: Plan) -> None:
    high, low = plan.filter.highpass_hz, plan.filter.lowpass_hz
    if high and low and low <= high:
        raise PlanError(
            "filter.lowpass_hz",
            "must be above highpass_hz",
            allowed=f"0 or above {high:.12g} Hz",
            received=f"{low:.12g}",
        )


def _check_reference(plan: Plan) -> None:
    if isinstance(plan.channels.reference, str):
        return
    for place, name in enumerate(plan.channels.reference, start=1):
        if name in plan.channels.bad:
            raise PlanError(
                f"channels.reference[{place}]",
                "is bad in every recording (channels.bad)",
                received=show(name),
            )


def _check_rules(plan: Plan) -> None:
    slots = slot_names(plan)
    allowed = " | ".join(show(name) for name in slots)
    names: set[str] = set()
    for place, rule in enumerate(plan.epochs.rule, start=1):
        path = ("epochs", "rule", place)
        if rule.name in names:
            raise PlanError(key_text((*path, "name")), "names an earlier rule too", received=show(rule.name))
        names.add(rule.name)
        for key, slot in (("anchor", rule.anchor), ("stop_before", rule.stop_before)):
            if slot not in slots and (slot or key == "anchor"):
                raise PlanError(
                    key_text((*path, key)),
                    "must name a slot of the trial",
                    allowed=allowed,
                    received=show(slot),
                )


def _check_whole_samples(plan: Plan, rate_hz: float) -> None:
    _check_whole("epochs.length_s", plan.epochs.length_s, rate_hz, least=1)
    for place, rule in enumerate(plan.epochs.rule, start=1):
        _check_whole(key_text(("epochs", "rule", place, "start_s")), rule.start_s, rate_hz)


def _check_whole(key: str, seconds: float, rate_hz: float, least: float = -math.inf) -> None:
    samples = seconds * rate_hz
    if abs(samples - round(samples)) <= WHOLE_WITHIN and round(samples) >= least:
        return
    nearest = [whole for whole in (math.floor(samples), math.ceil(samples)) if whole >= least] or [1]
    raise PlanError(
        key,
        f"is no whole number of output samples at {rate_hz:.12g} Hz",
        allowed=" | ".join(f"{whole / rate_hz:.15g} s" for whole in nearest),
        received=f"{seconds:.15g} s",
    )


def _warnings(plan: Plan) -> tuple[str, ...]:
    found: list[str] = []
    window_ms, roles = plan.pulses.window_ms, used_roles(plan)
    has_pulses = plan.pulses.times is not PulseTimes.NONE
    if has_pulses and window_ms is not None and not window_ms[0] <= 0.0 <= window_ms[1]:
        found.append("pulses.window_ms does not contain the onset of the pulse (0 ms): the spike stays")
    if has_pulses and window_ms is not None and window_ms[1] - window_ms[0] < SHORTEST_GAP_MS:
        found.append(
            f"pulses.window_ms is shorter than {SHORTEST_GAP_MS:g} ms: it is given in milliseconds, "
            "and a pulse's spike lasts longer"
        )
    if has_pulses and Role.PULSE not in roles and not plan.finds_pulses:
        found.append('no code has role "pulse", so no pulse is known; say times = "none" if there are none')
    found += [
        f"slot {show(slot.slot)} is optional and no code has its role {show(slot.role)}"
        for slot in plan.trial
        if slot.optional and slot.role not in roles and not (plan.finds_pulses and slot.role is Role.PULSE)
    ]
    rate_hz, lowpass_hz = plan.filter.rate_hz, plan.filter.lowpass_hz
    if rate_hz and lowpass_hz > LARGEST_BAND * rate_hz:
        found.append(
            f"filter.lowpass_hz is above {LARGEST_BAND:g} x rate_hz: recordings of a higher rate are refused"
        )
    return tuple(found)
