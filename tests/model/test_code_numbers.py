"""Codes that are numbers, and fields of bits in them: tables written by hand."""

from __future__ import annotations

import pytest

from pulsemend.model.numbers import bit_field, number_of
from pulsemend.model.plan import BitField, Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.vocabulary import Role


@pytest.mark.parametrize(
    ("code", "found"),
    [
        ("21", ("", 21)),
        ("0", ("", 0)),
        ("007", ("", 7)),
        ("S 21", ("S", 21)),
        ("S255", ("S", 255)),
        ("Stimulus:S 1", ("Stimulus:S", 1)),
        ("arrow left 3", ("arrow left", 3)),
        ("-3", ("-", 3)),
        ("999999999", ("", 999_999_999)),
        ("1000000000", None),
        ("", None),
        ("S", None),
        ("21 left", None),
        ("block 2 trial 3", None),
        ("2.5", None),
        ("S²1", None),
    ],
)
def test_number_of_a_code(code: str, found: tuple[str, int] | None) -> None:
    assert number_of(code) == found


# 0b1011_0110 is 182.
@pytest.mark.parametrize(
    ("low", "high", "value"),
    [(0, 0, 0), (1, 1, 1), (0, 3, 0b0110), (4, 7, 0b1011), (0, 7, 182), (7, 7, 1), (8, 15, 0), (2, 4, 0b101)],
)
def test_bit_field(low: int, high: int, value: int) -> None:
    assert bit_field(182, low, high) == value


# Bits 0 to 3: the item; bit 4: whether the probe matches; bits 6 and 7: the role.
TEXT = """\
pulsemend = 1
[markers.left]
role = "cue"
labels = { item = "left" }
[markers."S 129"]
role = "response"
labels = { item = "thumb" }
[bits.item]
at = [0, 3]
names = { "1" = "left", "2" = "right" }
[bits.match]
at = [4, 4]
[bits.kind]
at = [6, 7]
roles = { "1" = "cue", "2" = "probe", "3" = "ignore" }
[pulses]
times = "none"
[epochs]
length_s = 1.0
"""
PLAN: Plan = parse_plan(TEXT).plan


@pytest.mark.parametrize(
    ("code", "role", "labels"),
    [
        ("S 65", Role.CUE, {"item": "left", "match": "0", "kind": "1"}),  # 64 + 1
        ("S 82", Role.CUE, {"item": "right", "match": "1", "kind": "1"}),  # 64 + 16 + 2
        ("147", Role.PROBE, {"item": "3", "match": "1", "kind": "2"}),  # 128 + 16 + 3
        ("S 192", Role.IGNORE, {"item": "0", "match": "0", "kind": "3"}),
        ("S 1", None, {"item": "left", "match": "0", "kind": "0"}),
        # A code that is named itself keeps its own role, and its own labels win.
        ("S 129", Role.RESPONSE, {"item": "thumb", "match": "0", "kind": "2"}),
        ("left", Role.CUE, {"item": "left"}),
        ("right", None, {}),
    ],
)
def test_roles_and_labels_of_codes(code: str, role: Role | None, labels: dict[str, str]) -> None:
    assert PLAN.role_of(code) is (role or Role.OTHER)
    assert PLAN.names(code) is (role is not None)
    assert PLAN.labels_of(code) == labels


def test_the_first_field_with_a_role_decides() -> None:
    fields = (BitField("a", (0, 0), roles={"1": Role.CUE}), BitField("b", (1, 1), roles={"1": Role.PROBE}))
    text = """\
pulsemend = 1
[bits.a]
at = [0, 0]
roles = { "1" = "cue" }
[bits.b]
at = [1, 1]
roles = { "1" = "probe" }
[epochs]
length_s = 1.0
"""
    plan = parse_plan(text).plan
    assert plan.bits == fields
    assert [plan.role_of(code) for code in ("1", "2", "3")] == [Role.CUE, Role.PROBE, Role.CUE]
