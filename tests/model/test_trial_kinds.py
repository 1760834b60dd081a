"""Slots as the plan means them: kinds, groups and references, against tables written by hand."""

from __future__ import annotations

import pytest

from pulsemend.model.plan import Plan, Window
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.trial_kinds import count_variants, expanded_slots, kinds, slot_names, variants

HEAD = """\
pulsemend = 1
[markers.a]
role = "cue"
[pulses]
times = "none"
[epochs]
length_s = 1.0
"""


def plan_of(*slots: str, more: str = "") -> Plan:
    """A plan of slots, each given as its name and the rest of its keys."""
    text = HEAD
    for slot in slots:
        name, _, rest = slot.partition(" ")
        rows = [f'slot = "{name}"', 'role = "cue"', *filter(None, rest.split("; "))]
        text += "[[trial]]\n" + "\n".join(rows) + "\n"
    return parse_plan(text + more).plan


Row = tuple[str, str, Window | None]


def rows(plan: Plan) -> dict[tuple[str, tuple[int, ...]], list[Row]]:
    """Every variant by kind and repeats: its slots with what they count from."""
    return {
        (one.kind, tuple(one.repeats.values())): [(slot.slot, slot.after, slot.after_s) for slot in one.slots]
        for one in variants(plan)
    }


def test_one_kind_and_its_references() -> None:
    plan = plan_of(
        "a",
        "b after_s = [1, 2]",
        "c after_s = [1, 3]; optional = true",
        "d after_s = [2, 4]",
        "e after_s = [0, 9]; after = 'a'",
        "f after_s = [0, 1]; after = 'c'",
    )
    assert kinds(plan) == ("",)
    assert count_variants(plan) == 1
    # The nearest earlier slot that is not optional, unless another one is named.
    assert rows(plan) == {
        ("", ()): [
            ("a", "", None),
            ("b", "a", (1.0, 2.0)),
            ("c", "b", (1.0, 3.0)),
            ("d", "b", (2.0, 4.0)),
            ("e", "a", (0.0, 9.0)),
            ("f", "c", (0.0, 1.0)),
        ]
    }


def test_several_kinds() -> None:
    plan = plan_of(
        "a kinds = ['two', 'one']",
        "b after_s = [1, 2]; kinds = ['two']",
        "c after_s = [3, 4]",
        "d after_s = [5, 6]; kinds = ['one', 'rest']",
    )
    assert kinds(plan) == ("two", "one", "rest")
    assert rows(plan) == {
        ("two", ()): [("a", "", None), ("b", "a", (1.0, 2.0)), ("c", "b", (3.0, 4.0))],
        ("one", ()): [("a", "", None), ("c", "a", (3.0, 4.0)), ("d", "c", (5.0, 6.0))],
        # The first slot of a kind counts from nothing.
        ("rest", ()): [("c", "", None), ("d", "c", (5.0, 6.0))],
    }
    assert slot_names(plan) == ("a", "b", "c", "d")


def test_a_repeated_group() -> None:
    plan = plan_of(
        "a",
        "b after_s = [1, 2]; group = 'q'",
        "c after_s = [0, 3]; group = 'q'; after = 'b'",
        "d after_s = [0, 4]; group = 'q'; optional = true; after = 'a'",
        "e after_s = [5, 6]",
        more="[group.q]\ntimes = [0, 2]\nbetween_s = [7, 8]\n",
    )
    first = [("b1", "a", (1.0, 2.0)), ("c1", "b1", (0.0, 3.0)), ("d1", "a", (0.0, 4.0))]
    # The next repeat begins after the last required slot; the slot behind the group counts from there, too.
    second = [("b2", "c1", (7.0, 8.0)), ("c2", "b2", (0.0, 3.0)), ("d2", "a", (0.0, 4.0))]
    assert rows(plan) == {
        ("", (0,)): [("a", "", None), ("e", "a", (5.0, 6.0))],
        ("", (1,)): [("a", "", None), *first, ("e", "c1", (5.0, 6.0))],
        ("", (2,)): [("a", "", None), *first, *second, ("e", "c2", (5.0, 6.0))],
    }
    assert count_variants(plan) == 3
    assert slot_names(plan) == ("a", "b1", "c1", "d1", "b2", "c2", "d2", "e")
    assert [slot.group for slot in expanded_slots(plan)] == ["", *["q"] * 6, ""]


def test_a_group_that_starts_the_trial() -> None:
    plan = plan_of(
        "a group = 'q'", "b after_s = [1, 2]", more="[group.q]\ntimes = [1, 2]\nbetween_s = [3, 4]\n"
    )
    assert rows(plan) == {
        ("", (1,)): [("a1", "", None), ("b", "a1", (1.0, 2.0))],
        ("", (2,)): [("a1", "", None), ("a2", "a1", (3.0, 4.0)), ("b", "a2", (1.0, 2.0))],
    }


def test_two_groups_and_two_kinds() -> None:
    plan = plan_of(
        "a",
        "b after_s = [1, 2]; group = 'x'; kinds = ['long']",
        "c after_s = [1, 2]; group = 'y'",
        "d after_s = [1, 2]; kinds = ['short', 'long']",
        more="[group.x]\ntimes = [1, 2]\nbetween_s = [1, 2]\n[group.y]\ntimes = [1, 2]\nbetween_s = [1, 2]\n",
    )
    assert count_variants(plan) == 8
    # Repeats of a group that the kind does not have make no further ones.
    found = {
        (one.kind, one.repeats["x"], one.repeats["y"]): [slot.slot for slot in one.slots]
        for one in variants(plan)
    }
    assert found == {
        ("long", 1, 1): ["a", "b1", "c1", "d"],
        ("long", 1, 2): ["a", "b1", "c1", "c2", "d"],
        ("long", 2, 1): ["a", "b1", "b2", "c1", "d"],
        ("long", 2, 2): ["a", "b1", "b2", "c1", "c2", "d"],
        ("short", 1, 1): ["a", "c1", "d"],
        ("short", 1, 2): ["a", "c1", "c2", "d"],
    }


@pytest.mark.parametrize("name", ["slot", "role", "kinds", "group", "optional", "stand_in", "stand_in_s"])
def test_repeats_keep_everything_else(name: str) -> None:
    plan = plan_of(
        "a",
        "b after_s = [1, 2]; group = 'q'",
        "c after_s = [1, 2]; group = 'q'; optional = true; stand_in = 'fixed'; stand_in_s = 1.5",
        more="[group.q]\ntimes = [2, 2]\nbetween_s = [1, 2]\n",
    )
    numbered = {"c1", "c2"}
    own = [slot for slot in expanded_slots(plan) if slot.slot in numbered]
    written = plan.trial[2]
    assert len(own) == 2
    for slot in own:
        wanted = slot.slot[:-1] if name == "slot" else getattr(slot, name)
        assert wanted == getattr(written, name)
