"""Label columns of a plan, and what the source of a label means: tables written by hand."""

from __future__ import annotations

import pytest

from pulsemend.model.label_columns import (
    Meaning,
    known_columns,
    rule_columns,
    slot_columns,
    source_of,
    stimulation_columns,
    trial_columns,
    values_of,
)
from pulsemend.model.plan_file import parse_plan


@pytest.mark.parametrize(
    ("text", "meaning", "what"),
    [
        ("cue1.item", Meaning.COLUMN, "cue1.item"),
        ("log.answer", Meaning.COLUMN, "log.answer"),
        ("log.cue1.answer", Meaning.COLUMN, "log.cue1.answer"),
        ("stimulation.coil", Meaning.COLUMN, "stimulation.coil"),
        ("other(cue1.item)", Meaning.OTHER, "cue1.item"),
        (" other( cue1.item ) ", Meaning.OTHER, "cue1.item"),
        ("other(log.cue2.side)", Meaning.OTHER, "log.cue2.side"),
        ("other(second)", Meaning.OTHER, "second"),
        ("first", Meaning.TEXT, "first"),
        ("second", Meaning.TEXT, "second"),
        ("other", Meaning.TEXT, "other"),
        ("another(x)", Meaning.TEXT, "another(x)"),
        ("other(a)(b)", Meaning.TEXT, "other(a)(b)"),
        ("1.5", Meaning.TEXT, "1.5"),
        ("-0.25", Meaning.TEXT, "-0.25"),
        (".5", Meaning.TEXT, ".5"),
        ("2", Meaning.TEXT, "2"),
        ("1.5 s", Meaning.COLUMN, "1.5 s"),
    ],
)
def test_source_of(text: str, meaning: Meaning, what: str) -> None:
    source = source_of(text)
    assert (source.meaning, source.what) == (meaning, what)


TEXT = """\
pulsemend = 1
[markers.lamp]
role = "sample"
[markers.left]
role = "cue"
labels = { side = "l", item = "left" }
[markers.right]
role = "cue"
labels = { item = "right" }
[markers.up]
role = "response"
labels = { said = "up" }
[markers.buzz]
role = "pulse"
[bits.match]
at = [4, 4]
names = { "1" = "match" }
[bits.size]
at = [0, 3]
names = { "1" = "small", "2" = "large" }
[[trial]]
slot = "sample"
role = "sample"
[[trial]]
slot = "cue1"
role = "cue"
after_s = [1, 2]
[[trial]]
slot = "pulse1"
role = "pulse"
after_s = [1, 2]
optional = true
stand_in = "drawn"
[[trial]]
slot = "ask"
role = "cue"
after_s = [1, 2]
group = "questions"
[group.questions]
times = [0, 2]
between_s = [1, 2]
[pulses]
times = "none"
[epochs]
length_s = 1.0
[[epochs.rule]]
name = "a"
anchor = "cue1"
start_s = 0
labels = { z = "cue1.item", b = "other(cue1.match)" }
[[epochs.rule]]
name = "b"
anchor = "cue1"
start_s = 1
labels = { b = "text" }
[labels]
late = { position = "recording" }
early = { compare = ["cue1.item", "ask1.item"] }
"""
PLAN = parse_plan(TEXT).plan
OF_SLOTS = (
    *("sample.match", "sample.size"),
    *("cue1.item", "cue1.match", "cue1.side", "cue1.size"),
    *("pulse1.match", "pulse1.size", "pulse1.source"),
    *("ask1.item", "ask1.match", "ask1.side", "ask1.size"),
    *("ask2.item", "ask2.match", "ask2.side", "ask2.size"),
)


def test_columns_of_slots_with_repeats_fields_of_bits_and_what_filled_them() -> None:
    assert slot_columns(PLAN) == OF_SLOTS


def test_columns_of_rules() -> None:
    assert rule_columns(PLAN) == ("b", "z")


def test_known_columns() -> None:
    assert known_columns(PLAN) == (*OF_SLOTS, "late", "early")


@pytest.mark.parametrize(
    ("more", "columns"),
    [
        ("", ()),
        ("[blocks]\npause_s = 20", ("block",)),
        ('[blocks]\ncodes = ["start"]', ("block",)),
        ('[blocks]\npractice_codes = ["start"]', ("block",)),
        ("[blocks]\npractice_first = 2", ()),
    ],
)
def test_columns_of_trials(more: str, columns: tuple[str, ...]) -> None:
    assert trial_columns(parse_plan(TEXT + more).plan) == columns
    kinds = TEXT.replace("stand_in =", 'kinds = ["a"]\nstand_in =')
    assert trial_columns(parse_plan(kinds + more).plan) == ("kind", *columns)


def test_columns_of_stimulation() -> None:
    more = """
[log]
file = "{stem}.tsv"
slots = ["cue1"]
[stimulation]
intensity = 0
coil = "small"
columns = { condition = "given", coil = "c" }
"""
    # In the order of the facts, what only the log tells behind; 0 is a value.
    assert stimulation_columns(parse_plan(TEXT + more).plan) == (
        "stimulation.intensity",
        "stimulation.coil",
        "stimulation.condition",
    )


@pytest.mark.parametrize(
    ("column", "values"),
    [
        ("cue1.item", ("left", "right")),
        ("ask2.item", ("left", "right")),
        ("cue1.side", ("l",)),
        ("cue1.said", ()),
        ("cue3.item", ()),
        # One bit has two values, with or without names; of more bits only names tell.
        ("cue1.match", ("0", "match")),
        ("cue1.size", ("large", "small")),
        ("late", ()),
        ("log.answer", ()),
    ],
)
def test_values_of(column: str, values: tuple[str, ...]) -> None:
    assert values_of(PLAN, column) == values
