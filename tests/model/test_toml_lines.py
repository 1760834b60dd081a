"""Lines of keys, on texts whose lines can be counted by eye."""

import tomllib
from collections.abc import Iterator
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsemend.model.toml_lines import KeyPath, key_lines, key_text, line_of

TEXT = '''# a comment with = and [brackets]
top = 1
a.b."c.d" = 2   # dotted and quoted

[markers."arrow left"]  # [not a header]
role = "cue # no comment"
labels = { item = "left", 'side of' = "x" }

[[trial]]
slot = "one"
[[trial]]
slot = "two"
after_s = [
    4.0,  # first
    6.5,
]
[trial.notes]
text = """
[[trial]]
slot = "inside a string"
"""
after = 'literal \\'
[[epochs.rule]]
name = 'x'
[[epochs.rule]]
deep = [{ p = 1 },
        { p = 2, q = [ 1,
          2 ] }]
[markers]
"b\\u0041" = 1
[[trial]]
slot = """three"""""
"quote\\"d" = 1979-05-27 07:32:00
[fruit]
apple.colour = "red"
apple.taste.sweet = true
'''

EXPECTED = {
    "top": 2,
    "a.b": 3,
    'a.b."c.d"': 3,
    'markers."arrow left"': 5,
    'markers."arrow left".role': 6,
    'markers."arrow left".labels.item': 7,
    'markers."arrow left".labels."side of"': 7,
    "trial": 9,
    "trial[1]": 9,
    "trial[1].slot": 10,
    "trial[2]": 11,
    "trial[2].slot": 12,
    "trial[2].after_s": 13,
    "trial[2].after_s[1]": 14,
    "trial[2].after_s[2]": 15,
    "trial[2].notes": 17,
    "trial[2].notes.text": 18,
    "trial[2].notes.after": 22,
    "epochs": 23,
    "epochs.rule[1]": 23,
    "epochs.rule[2]": 25,
    "epochs.rule[2].deep[1].p": 26,
    "epochs.rule[2].deep[2].p": 27,
    "epochs.rule[2].deep[2].q": 27,
    "epochs.rule[2].deep[2].q[2]": 28,
    "markers": 29,
    "markers.bA": 30,
    "trial[3]": 31,
    "trial[3].slot": 32,
    'trial[3]."quote\\"d"': 33,
    "fruit.apple.taste.sweet": 36,
}


@pytest.mark.parametrize(("key", "line"), EXPECTED.items())
def test_counted_by_eye(key: str, line: int) -> None:
    assert key_lines(TEXT)[key] == line


def leaves(value: Any, path: KeyPath = ()) -> Iterator[KeyPath]:
    if path:
        yield path
    if isinstance(value, dict):
        for name, inner in value.items():
            yield from leaves(inner, (*path, name))
    elif isinstance(value, list):
        for place, inner in enumerate(value, start=1):
            yield from leaves(inner, (*path, place))


def test_knows_exactly_the_keys_the_parser_knows() -> None:
    assert set(key_lines(TEXT)) == {key_text(path) for path in leaves(tomllib.loads(TEXT))}


def test_crlf() -> None:
    assert key_lines(TEXT.replace("\n", "\r\n")) == key_lines(TEXT)


def test_nearest_table_around_a_missing_key() -> None:
    lines = key_lines(TEXT)
    assert line_of(lines, "trial[2].role") == 11
    assert line_of(lines, "trial[2].notes.x.y") == 17
    assert line_of(lines, "trial[12].slot") == 9
    assert line_of(lines, "nothing.here") is None
    assert line_of({}, "x") is None


names = st.text(st.characters(codec="utf-8", exclude_categories=("Cs", "Cc")), min_size=1, max_size=6)


@given(st.lists(st.tuples(names, st.integers(0, 3)), min_size=1, max_size=8, unique_by=lambda pair: pair[0]))
def test_any_key_name(pairs: list[tuple[str, int]]) -> None:
    rows: list[str] = []
    expected: dict[str, int] = {}
    for name, blanks in pairs:
        rows += ["# [x]"] * blanks
        quoted = '"' + name.replace("\\", "\\\\").replace('"', '\\"') + '"'
        rows.append(f"{quoted} = '''a\nb'''")
        expected[key_text((name,))] = sum(row.count("\n") + 1 for row in rows[:-1]) + 1
    assert key_lines("\n".join(rows)) == expected
