"""Edits of epoch rules: each gives a plan that reads back, and touches nothing but what it says."""

from __future__ import annotations

from dataclasses import replace

import pytest

from pulsemend.errors import PlanError
from pulsemend.mending.rule_edits import (
    check_epochs,
    labels_from_text,
    labels_text,
    with_balance,
    with_copy,
    with_length,
    with_moved_rule,
    with_new_rule,
    with_rule,
    without_rule,
)
from pulsemend.model.plan import Balance, Group, Plan
from pulsemend.model.plan_file import parse_plan, plan_text
from support.small_lantern import PLAN


@pytest.fixture(scope="module")
def plan() -> Plan:
    return parse_plan(PLAN).plan


def names(plan: Plan) -> list[str]:
    return [rule.name for rule in plan.epochs.rule]


def is_readable(plan: Plan) -> bool:
    return parse_plan(plan_text(plan)).plan == plan


def test_a_new_rule_stands_where_asked_and_is_a_valid_one(plan: Plan) -> None:
    new = with_new_rule(plan, 1)
    assert names(new) == ["after2", "epoch1", "delay1"]
    assert (new.epochs.rule[1].anchor, new.epochs.rule[1].start_s) == ("sample", 0.0)
    assert names(with_new_rule(new, 3))[3] == "epoch2"
    assert is_readable(new)


def test_a_copy_differs_by_name_only(plan: Plan) -> None:
    copied = with_copy(plan, 1)
    assert names(copied) == ["after2", "delay1", "delay2"]
    assert replace(copied.epochs.rule[2], name="delay1") == plan.epochs.rule[1]
    assert names(with_copy(copied, 0)) == ["after2", "after1", "delay1", "delay2"]
    assert is_readable(copied)


def test_moving_stops_at_both_ends(plan: Plan) -> None:
    assert names(with_moved_rule(plan, 0, 1)) == ["delay1", "after2"]
    assert with_moved_rule(plan, 0, -1) == plan
    assert with_moved_rule(plan, 1, 2) == plan


def test_removing_and_replacing(plan: Plan) -> None:
    left = without_rule(plan, 0)
    assert names(left) == ["delay1"]
    with pytest.raises(PlanError, match="has no rule; at least one"):
        without_rule(left, 0)


def test_first_rule_of_a_plan_and_none_without_slots(plan: Plan) -> None:
    bare = replace(plan, epochs=replace(plan.epochs, rule=()))
    assert names(with_new_rule(bare, 0)) == ["epoch1"]
    with pytest.raises(PlanError, match="has no slot"):
        with_new_rule(replace(bare, trial=()), 0)
    other = replace(plan.epochs.rule[0], start_s=0.25)
    changed = with_rule(plan, 0, other)
    assert changed.epochs.rule == (other, plan.epochs.rule[1])
    assert replace(changed, epochs=plan.epochs) == plan
    assert with_length(plan, 0.5).epochs.length_s == 0.5
    assert with_balance(plan, Balance(("asked",))).balance.by == ("asked",)


def test_a_new_rule_starts_at_the_first_slot_as_it_is_numbered_in_a_group(plan: Plan) -> None:
    first = replace(plan.trial[0], group="part")
    grouped = replace(plan, trial=(first, *plan.trial[1:]), groups=(Group("part", (1, 2), (1.0, 2.0)),))
    assert with_new_rule(grouped, 0).epochs.rule[0].anchor == "sample1"


@pytest.mark.parametrize(
    ("text", "labels"),
    [
        ("", {}),
        (" , ; ", {}),
        ("cued = cue1.item", {"cued": "cue1.item"}),
        ("uncued = other(cue1.item), order = first", {"uncued": "other(cue1.item)", "order": "first"}),
        ('note = "left, then; right", order = "first"', {"note": "left, then; right", "order": "first"}),
        (
            "a=cue1.item,b = cue2.item ;c=x.y\nd = z.w",
            {"a": "cue1.item", "b": "cue2.item", "c": "x.y", "d": "z.w"},
        ),
    ],
)
def test_labels_as_a_person_writes_them(text: str, labels: dict[str, str]) -> None:
    assert labels_from_text(text) == labels
    assert labels_from_text(labels_text(labels)) == labels


@pytest.mark.parametrize("text", ["cued", "cued =", "= cue1.item", "a = x.y, a = x.z", 'a = "x'])
def test_labels_that_say_nothing_are_refused(text: str) -> None:
    with pytest.raises(PlanError):
        labels_from_text(text)


def test_times_are_checked_at_the_recorded_rate_and_nothing_else_is(plan: Plan) -> None:
    as_recorded = replace(plan, filter=replace(plan.filter, rate_hz=0.0, lowpass_hz=0.0))
    odd = with_length(as_recorded, 0.1001)
    check_epochs(odd, 10_000.0)
    with pytest.raises(PlanError, match="whole number"):
        check_epochs(odd, 5000.0)
    # A rate above the recorded one is wrong too, but not here.
    check_epochs(replace(plan, filter=replace(plan.filter, rate_hz=1000.0)), 500.0)
