"""Markers of recordings with known truth: trials drawn from a plan; some lost, doubled, moved, or foreign."""

from __future__ import annotations

import itertools
import random
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from enum import StrEnum
from pathlib import Path

from pulsemend.errors import PlanError
from pulsemend.model.plan import Group, MarkerPlan, Plan, Slot
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.model.trial_checks import check_trials
from pulsemend.model.trial_kinds import Variant, variants
from pulsemend.model.vocabulary import Role
from pulsemend.trials.alignment import Event
from pulsemend.trials.limits import pair_bounds
from support.brute_alignment import Run, can_be_met

RATE_HZ = 1000.0
OPTIONAL_SHARE = 0.8

LANTERN = parse_plan(
    (Path(__file__).parents[2] / "sample_data" / "lantern.toml").read_text(encoding="utf-8")
).plan

BASE = parse_plan(
    """
pulsemend = 1
[markers.a]
role = "fixation"
[[trial]]
slot = "a"
role = "fixation"
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 1
[[epochs.rule]]
name = "all"
anchor = "a"
start_s = 0
"""
).plan

ROLES = (Role.FIXATION, Role.SAMPLE, Role.CUE, Role.PULSE, Role.PROBE, Role.RESPONSE)


class Kind(StrEnum):
    """What may go wrong with a marker."""

    LOST = "lost"
    DOUBLED = "doubled"
    MOVED = "moved"
    FOREIGN = "foreign"


@dataclass(frozen=True)
class Mix:
    """Shares of the markers that are lost, doubled or moved, and of foreign ones beside them."""

    lost: float = 0.0
    doubled: float = 0.0
    moved: float = 0.0
    foreign: float = 0.0


@dataclass(frozen=True)
class Fault:
    """One thing that went wrong; trial (from 0) and slot of foreign markers are None and empty."""

    kind: Kind
    trial: int | None = None
    slot: str = ""
    sample: float = 0.0


@dataclass(frozen=True)
class TrueTrial:
    """A trial as it was: the variant, and the markers that were sent, each where the file has it."""

    variant: Variant
    markers: Mapping[str, Marker]
    moved: tuple[str, ...] = ()


@dataclass(frozen=True)
class Stream:
    """A recording's markers in order of time, no two at one sample, and the truth behind them."""

    plan: Plan
    markers: tuple[Marker, ...]
    trials: tuple[TrueTrial, ...]
    faults: tuple[Fault, ...]

    def events(self) -> tuple[Event, ...]:
        """The markers as the alignment wants them; all have a role of a slot."""
        return tuple(Event(one.sample / RATE_HZ, self.plan.role_of(one.code)) for one in self.markers)

    def true_runs(self) -> tuple[Run, ...]:
        """The trials as they can be told by the markers that are left.

        Markers moved beyond the limits of their trial belong to none: as few as possible are taken away.
        """
        places = {marker.sample: place for place, marker in enumerate(self.markers)}
        found = []
        for trial in self.trials:
            markers = within_limits(trial)
            if not markers:
                continue
            slots = trial.variant.slots
            names = [slot.slot for slot in slots if slot.slot in markers]
            found.append(
                Run(
                    trial.variant.kind,
                    tuple((name, places[markers[name].sample]) for name in names),
                    tuple(slot.slot for slot in slots if not slot.optional and slot.slot not in markers),
                )
            )
        return tuple(found)


def within_limits(trial: TrueTrial) -> dict[str, Marker]:
    """Markers of a trial without those moved beyond its limits, as few as possible."""
    slots = trial.variant.slots
    ways = (
        _with_references(slots, {name: one for name, one in trial.markers.items() if name not in away})
        for n_away in range(len(trial.moved) + 1)
        for away in itertools.combinations(trial.moved, n_away)
    )
    return next(
        kept
        for kept in ways
        if can_be_met(slots, {name: marker.sample / RATE_HZ for name, marker in kept.items()})
    )


def _with_references(slots: Sequence[Slot], markers: Mapping[str, Marker]) -> dict[str, Marker]:
    """Leave out what counts from an optional slot that is not there: nothing tells where it belongs."""
    optional = {slot.slot for slot in slots if slot.optional}
    kept: dict[str, Marker] = {}
    for slot in slots:
        if slot.slot in markers and (slot.after not in optional or slot.after in kept):
            kept[slot.slot] = markers[slot.slot]
    return kept


def draw_mix(rng: random.Random, most: float = 0.1) -> Mix:
    """Draw a mix: each share up to `most`, about a third of them none."""
    return Mix(*(max(0.0, rng.uniform(-most / 2, most)) for _ in range(4)))


def draw_stream(rng: random.Random, plan: Plan, n_trials: int, mix: Mix) -> Stream:
    """Draw a recording.

    Moved markers stay between the pauses around their trial, foreign ones lie anywhere in the recording;
    doubles come 1 to 40 ms later.
    """
    ways = variants(plan)
    codes = {
        role: [marker.code for marker in plan.markers if marker.role is role]
        for role in {slot.role for way in ways for slot in way.slots}
    }
    taken: set[int] = set()
    faults: list[Fault] = []
    trials: list[TrueTrial] = []
    extra: list[Marker] = []

    def placed(sample: float, role: Role) -> Marker:
        at = round(sample)
        while at in taken:
            at += 1
        taken.add(at)
        return Marker(float(at), rng.choice(codes[role]))

    start_s = 2.0
    for number in range(n_trials):
        way = rng.choice(ways)
        times = _draw_times(rng, way, start_s)
        end_s = max(times.values())
        markers: dict[str, Marker] = {}
        moved: list[str] = []
        for slot in way.slots:
            if slot.slot not in times:
                continue
            time_s = times[slot.slot]
            if rng.random() < mix.lost:
                faults.append(Fault(Kind.LOST, number, slot.slot, time_s * RATE_HZ))
                continue
            if rng.random() < mix.moved:
                by_s = rng.choice([rng.gauss(0, 0.03), rng.uniform(-2, 2)])
                time_s = min(max(time_s + by_s, start_s - 0.4), end_s + 0.4)
                moved.append(slot.slot)
                faults.append(Fault(Kind.MOVED, number, slot.slot, time_s * RATE_HZ))
            markers[slot.slot] = placed(time_s * RATE_HZ, slot.role)
            if rng.random() < mix.doubled:
                double = placed(markers[slot.slot].sample + rng.randint(1, 40), slot.role)
                extra.append(replace(double, code=markers[slot.slot].code))
                faults.append(Fault(Kind.DOUBLED, number, slot.slot, double.sample))
        trials.append(TrueTrial(way, markers, tuple(moved)))
        start_s = end_s + rng.uniform(1.0, 3.0)
    n_sent = sum(len(trial.markers) for trial in trials)
    for _ in range(sum(rng.random() < mix.foreign for _ in range(n_sent))):
        one = placed(rng.uniform(1.0, start_s) * RATE_HZ, rng.choice(sorted(codes)))
        extra.append(one)
        faults.append(Fault(Kind.FOREIGN, sample=one.sample))
    sent = [marker for trial in trials for marker in trial.markers.values()]
    return Stream(plan, tuple(sorted([*sent, *extra], key=lambda m: m.sample)), tuple(trials), tuple(faults))


def _draw_times(rng: random.Random, way: Variant, start_s: float, tries: int = 10_000) -> dict[str, float]:
    """Draw times of a whole trial within all limits, to the millisecond."""
    for _ in range(tries):
        times: dict[str, float] = {}
        for slot in way.slots:
            if slot.optional and rng.random() > OPTIONAL_SHARE:
                continue
            if slot.after_s is None:
                times[slot.slot] = round(start_s, 3)
            elif slot.after in times:
                times[slot.slot] = round(times[slot.after] + rng.uniform(*slot.after_s), 3)
            else:
                break
        complete = all(slot.optional or slot.slot in times for slot in way.slots)
        spaced = all(b - a >= 0.002 for a, b in itertools.pairwise(times.values()))
        if complete and spaced and can_be_met(way.slots, times):
            return times
    message = "these limits are met too rarely by chance"
    raise ValueError(message)


def draw_plan(rng: random.Random) -> Plan:
    """Draw a plan: up to six slots, some of them optional, one or two kinds, perhaps a repeated group."""
    while True:
        kinds = rng.random() < 0.3
        n = rng.randint(3, 6)
        group = set(range(*sorted(rng.sample(range(1, n + 1), 2)))) if rng.random() < 0.3 else set()
        slots: list[Slot] = []
        for place in range(n):
            least = round(rng.uniform(0.2, 2.0), 1)
            own = place in group and place == min(group)
            slots.append(
                Slot(
                    slot="abcdef"[place],
                    role=ROLES[0] if place == 0 else rng.choice(ROLES[1:]),
                    after_s=(least, round(least + rng.uniform(0.1, 1.5), 1)) if place else None,
                    after=rng.choice(slots).slot if place > 1 and rng.random() < 0.2 else "",
                    optional=place > 0 and not own and rng.random() < 0.3,
                    kinds=rng.choice([(), ("one",), ("two",)]) if kinds and place and not own else (),
                    group="g" if place in group else "",
                )
            )
        markers = tuple(MarkerPlan(role.value, role) for role in ROLES)
        groups = (Group("g", (1, rng.randint(2, 3)), (0.5, 2.0)),) if group else ()
        plan = replace(BASE, markers=markers, trial=tuple(slots), groups=groups)
        try:
            check_trials(plan)
            for way in variants(plan):
                pair_bounds(way.slots)
                for _ in range(5):
                    _draw_times(rng, way, 0.0, tries=200)
        except (PlanError, ValueError):
            continue
        if all(sum(not slot.optional for slot in way.slots) >= 3 for way in variants(plan)):
            return plan
