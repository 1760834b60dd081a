"""The best explanation against a list of all explanations, and cases whose answer is plain to see."""

from __future__ import annotations

import random
from collections.abc import Callable, Sequence
from dataclasses import replace

import pytest

from pulsemend.errors import PlanError
from pulsemend.model.plan import Group, Plan, Slot
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.trial_kinds import Variant, variants
from pulsemend.model.vocabulary import Role
from pulsemend.trials.alignment import Event, Placed, align
from support.brute_alignment import Run, best_explanations, cost_of

BASE = parse_plan(
    """
pulsemend = 1
[markers.A]
role = "cue"
[[trial]]
slot = "first"
role = "cue"
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 1
[[epochs.rule]]
name = "all"
anchor = "first"
start_s = 0
"""
).plan

ROLES = (Role.CUE, Role.PULSE, Role.PROBE)
STEP_S = 0.5


def draw_plan(rng: random.Random) -> Plan:
    """Draw slots with everything a plan may say of them: kinds, groups, optional and counted from another."""
    kinds = ("", "x") if rng.random() < 0.4 else ("",)
    group = "g" if rng.random() < 0.4 else ""
    n = rng.randint(1, 4)
    in_group = sorted(rng.sample(range(n), rng.randint(1, min(2, n)))) if group else []
    in_group = list(range(in_group[0], in_group[-1] + 1)) if in_group else []
    roles = ROLES[: rng.randint(1, 3)]
    slots: list[Slot] = []
    for place in range(n):
        least = rng.randint(0, 3) * STEP_S
        starts_group = place in in_group and place == in_group[0]
        optional = place > 0 and not starts_group and rng.random() < 0.4
        earlier = [slot.slot for slot in slots if not slot.group or place in in_group]
        kind: tuple[str, ...] = ()
        if len(kinds) > 1 and not starts_group:
            kind = rng.choice([(), ("a",), ("b",), ("a", "b")]) if place else ("a", "b")
        role = rng.choice(roles)
        slots.append(
            Slot(
                slot="pqrs"[place],
                role=role,
                after_s=(least, least + rng.randint(0, 3) * STEP_S) if place else None,
                after=rng.choice(earlier) if earlier and rng.random() < 0.4 else "",
                optional=optional,
                kinds=kind,
                group="g" if place in in_group else "",
                from_signal=role is Role.PULSE and rng.random() < 0.5,
            )
        )
    groups = (Group("g", rng.choice([(1, 2), (1, 3), (2, 2)]), (0.0, 2.0)),) if group else ()
    return replace(BASE, trial=tuple(slots), groups=groups)


def draw_variants(rng: random.Random) -> tuple[Variant, ...]:
    """Variants of a plan that makes sense."""
    while True:
        found = variants(draw_plan(rng))
        named = all(
            slot.after in {other.slot for other in variant.slots[:place]}
            for variant in found
            for place, slot in enumerate(variant.slots)
            if place
        )
        whole = all(not variant.slots[0].optional for variant in found)
        if found and named and whole and max(len(variant.slots) for variant in found) <= 6:
            return found


def draw_events(rng: random.Random, ways: Sequence[Variant], most: int) -> tuple[Event, ...]:
    """Draw trials that lost, doubled and gained markers, or only markers."""
    events: list[Event] = []
    roles = sorted({slot.role for way in ways for slot in way.slots})
    start_s = 0.0
    while rng.random() < 0.8:
        way = rng.choice(ways)
        times: dict[str, float] = {}
        at_s = start_s
        for slot in way.slots:
            if slot.after_s is not None:
                at_s = max(
                    at_s, times.get(slot.after, at_s) + rng.choice([*slot.after_s, sum(slot.after_s) / 2])
                )
                at_s = round(at_s / STEP_S) * STEP_S
            times[slot.slot] = at_s
            for _ in range(rng.choice([0, 1, 1, 1, 1, 2])):
                is_found = slot.role is Role.PULSE and rng.random() < 0.4
                events.append(Event(at_s + STEP_S * rng.choice([0, 0, 0, 1]), slot.role, is_found))
        start_s = at_s + rng.randint(0, 2) * STEP_S
    for _ in range(rng.choice([0, 0, 1, 2, 4])):
        role = rng.choice(roles)
        is_found = role is Role.PULSE and rng.random() < 0.4
        events.append(Event(rng.randint(0, 12) * STEP_S, role, is_found))
    rng.shuffle(events)
    return tuple(sorted(events[:most], key=lambda event: event.time_s))


def as_run(placed: Placed) -> Run:
    return Run(placed.kind, tuple(placed.places.items()), placed.missing)


def check_case(events: Sequence[Event], ways: Sequence[Variant]) -> bool:
    """Compare with the list of all explanations; whether there was a doubt."""
    placed = align(events, ways)
    least, best = best_explanations(events, ways)
    own = tuple(as_run(one) for one in placed)
    assert cost_of(events, own) == least
    assert own in best
    for number, (one, run) in enumerate(zip(placed, own, strict=True)):
        in_all = all(run in explanation for explanation in best)
        assert one.is_doubtful is not in_all
        if in_all:
            assert (one.others, one.other_kinds) == ({}, ())
            continue
        low = own[number - 1].last if number else -1
        high = own[number + 1].first if number + 1 < len(own) else len(events)
        others: dict[str, set[int]] = {}
        other_kinds = set()
        for explanation in best:
            for other in explanation:
                for name, place in other.places:
                    if low < place < high:
                        other_kinds.add(other.kind)
                        if place != one.places.get(name):
                            others.setdefault(name, set()).add(place)
        assert {name: set(places) for name, places in one.others.items()} == others
        assert all(list(places) == sorted(set(places)) for places in one.others.values())
        assert set(one.other_kinds) == other_kinds - {one.kind}
    return len(best) > 1


def check_many(seeds: range, most: int) -> None:
    doubtful = refused = 0
    for seed in seeds:
        rng = random.Random(seed)
        ways = draw_variants(rng)
        events = draw_events(rng, ways, most)
        try:
            doubtful += check_case(events, ways)
        except PlanError:
            refused += 1
        except AssertionError as error:
            message = (
                f"seed {seed}: {ways}\n{events}\n{align(events, ways)}\n{best_explanations(events, ways)}"
            )
            raise AssertionError(message) from error
    # Both kinds of case were there, unless there are very few.
    if len(seeds) >= 100:
        assert 0.1 * len(seeds) < doubtful < 0.9 * len(seeds)
    assert refused < 0.5 * len(seeds)


def slots(*rows: tuple[str, Role, tuple[float, float] | None, str, bool], kind: str = "") -> Variant:
    """A variant from name, role, limits, reference and whether it is optional."""
    return Variant(kind, {}, tuple(Slot(row[0], row[1], row[2], row[3], row[4]) for row in rows))


def test_trial_with_more_faults_goes_on_where_only_it_has_the_reference_of_a_later_slot() -> None:
    whole = slots(
        ("cue", Role.CUE, None, "", False),
        ("extra", Role.PROBE, (0, 5), "cue", True),
        ("pulse", Role.PULSE, (0, 5), "cue", False),
        ("answer", Role.RESPONSE, (2, 2), "extra", False),
        kind="whole",
    )
    short = slots(("only", Role.PROBE, None, "", False), kind="short")
    events = [
        Event(1.0, Role.PROBE),
        Event(1.5, Role.PROBE),
        Event(2.0, Role.PULSE),
        Event(3.0, Role.RESPONSE),
    ]
    # One lost and one left over cost 21; two short trials and a pulse on its own, 31.
    assert align(events, [whole, short]) == (
        Placed("whole", {"extra": 0, "pulse": 2, "answer": 3}, ("cue",)),
    )
    check_case(events, [whole, short])


def test_limits_of_lost_markers_hold() -> None:
    # The lost middle marker must be 1 s behind the first and 1 s before the last, so 2 s lie between them.
    way = slots(
        ("cue", Role.CUE, None, "", False),
        ("pulse", Role.PULSE, (1, 1), "cue", False),
        ("probe", Role.PROBE, (1, 1), "pulse", False),
    )
    near = [Event(0.0, Role.CUE), Event(1.5, Role.PROBE)]
    assert align(near, [way]) == ()
    right = [Event(0.0, Role.CUE), Event(2.0, Role.PROBE)]
    assert align(right, [way]) == (Placed("", {"cue": 0, "probe": 1}, ("pulse",)),)


def test_alternatives_are_named() -> None:
    way = slots(
        ("cue", Role.CUE, None, "", False),
        ("probe", Role.PROBE, (1, 2), "cue", False),
        ("answer", Role.RESPONSE, (0.1, 3), "probe", False),
    )
    events = [Event(0.0, Role.CUE), Event(1.2, Role.PROBE), Event(1.8, Role.PROBE), Event(3.0, Role.RESPONSE)]
    (found,) = align(events, [way])
    assert found.is_doubtful
    assert found.missing == ()
    assert {found.places["probe"], *found.others["probe"]} == {1, 2}
    assert set(found.others) == {"probe"}


def test_kinds_that_differ_in_nothing_found_are_both_named() -> None:
    cue, probe = ("cue", Role.CUE, None, "", False), ("probe", Role.PROBE, (1.0, 2.0), "cue", False)
    ways = [slots(cue, probe, kind="near"), slots(cue, (*probe[:2], (1.5, 9.0), *probe[3:]), kind="far")]
    near, both, far = (
        align([Event(0.0, Role.CUE), Event(at, Role.PROBE)], ways)[0] for at in (1.2, 1.7, 3.0)
    )
    assert (near.kind, near.is_doubtful) == ("near", False)
    assert (far.kind, far.is_doubtful) == ("far", False)
    assert both.is_doubtful
    assert {both.kind, *both.other_kinds} == {"near", "far"}


def test_no_markers_and_no_variants() -> None:
    assert align([], [slots(("cue", Role.CUE, None, "", False))]) == ()


def test_best_explanation_of_few_markers() -> None:
    check_many(range(400), 7)


@pytest.mark.slow
@pytest.mark.parametrize("first", range(10_000, 20_000, 2500))
def test_best_explanation_of_more_markers(first: int, slow_count: Callable[[int], int]) -> None:
    check_many(range(first, first + slow_count(2500)), 8)
