"""Codes with numbers: taken apart, written again, and their fields of bits."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsemend.trials.numbers import bit_field, is_lone_letter, number_of, with_number


@pytest.mark.parametrize(
    ("code", "found"),
    [
        ("21", ("", 21)),
        ("S 21", ("S", 21)),
        ("S255", ("S", 255)),
        ("cue left 3", ("cue left", 3)),
        ("0", ("", 0)),
        ("007", ("", 7)),
        ("65285", ("", 65285)),
        ("21a", None),
        ("S 21 on", None),
        ("cue", None),
        ("", None),
    ],
)
def test_number_of_a_code(code: str, found: tuple[str, int] | None) -> None:
    assert number_of(code) == found


@pytest.mark.parametrize(
    ("code", "number", "others", "written"),
    [
        ("129", 1, (), "1"),
        ("007", 12, (), "012"),
        ("S129", 1, (), "S 1"),
        ("S129", 21, (), "S 21"),
        ("S 21", 149, (), "S149"),
        ("S129", 1, ("S2", "S130"), "S1"),
        ("S129", 1, ("R 2", "S130", "cue1"), "S 1"),
        ("S007", 21, (), "S021"),
        ("item 200", 7, (), "item 7"),
        ("item 7", 200, (), "item 200"),
        ("cue129", 1, (), "cue1"),
        ("DIN129", 1, ("DIN 12", "DIN200"), "DIN 1"),
        ("port:S129", 1, (), "port:S 1"),
    ],
)
def test_a_code_is_written_like_the_others(
    code: str, number: int, others: tuple[str, ...], written: str
) -> None:
    assert with_number(code, number, others) == written


def test_a_code_without_a_number_is_refused() -> None:
    with pytest.raises(ValueError, match="cue"):
        with_number("cue", 1)


@pytest.mark.parametrize(
    ("prefix", "is_one"), [("S", True), ("", False), ("cue", False), ("port:S", True), ("7", False)]
)
def test_a_lone_letter(prefix: str, is_one: bool) -> None:
    assert is_lone_letter(prefix) is is_one


@given(
    prefix=st.sampled_from(["", "S", "R", "cue", "item left", "port:S"]),
    gap=st.sampled_from(["", " "]),
    old=st.integers(0, 70000),
    new=st.integers(0, 70000),
)
def test_what_was_written_is_read_again(prefix: str, gap: str, old: int, new: int) -> None:
    code = f"{prefix}{gap if prefix else ''}{old}"
    written = with_number(code, new)
    assert number_of(written) == (prefix, new)
    assert written == " ".join(written.split())
    assert with_number(written, new, [code]) == written


@pytest.mark.parametrize(
    ("number", "low", "high", "value"),
    # Counted by hand: 147 is 0b1001_0011.
    [(147, 0, 3, 3), (147, 4, 4, 1), (147, 5, 6, 0), (147, 4, 7, 9), (147, 7, 7, 1), (147, 0, 15, 147)],
)
def test_a_field_of_bits(number: int, low: int, high: int, value: int) -> None:
    assert bit_field(number, low, high) == value
