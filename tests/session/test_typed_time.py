"""Times as people type them."""

from __future__ import annotations

import pytest

from pulsemend.errors import InputError
from pulsemend.session.typed_time import clock_text, read_time


@pytest.mark.parametrize(
    ("typed", "seconds"),
    [
        ("0", 0.0),
        ("754.5", 754.5),
        ("754,5", 754.5),
        (" 12 s ", 12.0),
        (".5", 0.5),
        ("12:34.5", 754.5),
        ("1:02:03", 3723.0),
        ("0:00:00", 0.0),
        ("90:00", 5400.0),
    ],
)
def test_times_are_understood(typed: str, seconds: float) -> None:
    assert read_time(typed, 7200.0) == seconds


@pytest.mark.parametrize(
    ("typed", "word"),
    [
        ("", "no time"),
        ("noon", "not a time"),
        ("-3", "not a time"),
        ("1:2:3:4", "not a time"),
        ("1e3", "not a time"),
        ("1:75", "59"),
        ("1:75:00", "59"),
        ("7200.1", "ends at 2:00:00"),
    ],
)
def test_others_are_refused_in_words(typed: str, word: str) -> None:
    with pytest.raises(InputError, match=word) as caught:
        read_time(typed, 7200.0)
    assert caught.value.todo


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(0.0, "0:00"), (59.96, "0:59.9"), (133.5, "2:13.5"), (3723.0, "1:02:03"), (7200.3, "2:00:00.3")],
)
def test_clock(seconds: float, text: str) -> None:
    assert clock_text(seconds) == text
    assert abs(read_time(text, 9999.0) - seconds) < 0.1
