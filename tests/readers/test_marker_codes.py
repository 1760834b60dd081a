"""The one rule for codes (design, 4.2)."""

from __future__ import annotations

import pytest

from pulsemend.model.recording import Marker
from pulsemend.readers.codes import coded, split_at_slash


def test_text_alone_blanks_collapsed_ends_trimmed() -> None:
    assert coded([(3, "Stimulus", "  S   21 ")]) == (Marker(3, "S 21", "Stimulus"),)


def test_order_of_time_and_of_the_file_where_equal() -> None:
    found = coded([(5, "a", "x"), (2, "a", "y"), (5, "a", "w")])
    assert [(m.sample, m.code) for m in found] == [(2, "y"), (5, "x"), (5, "w")]


def test_type_only_where_two_types_share_a_text() -> None:
    """The whole recording counts, not neighbours."""
    found = coded([(1, "Stimulus", "1"), (2, "Stimulus", "2"), (3, "Response", "1"), (9, "Stimulus", "1")])
    assert [m.code for m in found] == ["Stimulus:1", "2", "Response:1", "Stimulus:1"]


def test_blanks_do_not_make_texts_or_types_differ() -> None:
    found = coded([(1, "Stimulus ", "S 1"), (2, "Stimulus", "S  1")])
    assert [m.code for m in found] == ["S 1", "S 1"]


def test_no_type_stays_bare() -> None:
    found = coded([(1, "", "1"), (2, "Status", "1")])
    assert [m.code for m in found] == ["1", "Status:1"]


def test_empty_text_takes_the_type() -> None:
    assert [m.code for m in coded([(1, "Optic", " "), (2, "", "")])] == ["Optic"]


@pytest.mark.parametrize(
    ("description", "expected"),
    [
        ("Stimulus/S 21", ("Stimulus", "S 21")),
        ("cue", ("", "cue")),
        ("Stimulus/left/far", ("Stimulus", "left/far")),
        ("/x", ("", "x")),
    ],
)
def test_split_at_the_first_slash(description: str, expected: tuple[str, str]) -> None:
    assert split_at_slash(description) == expected
