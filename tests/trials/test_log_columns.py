"""Columns of a log as numbers and times, against values written by hand."""

from __future__ import annotations

import pytest

from pulsemend.errors import LogError
from pulsemend.model.log import LogTable
from pulsemend.trials.log_columns import (
    TimeUnit,
    column_counts,
    column_numbers,
    column_times_s,
    guess_unit,
)


def table_of(*cells: str) -> LogTable:
    rows = tuple((cell,) for cell in cells)
    return LogTable("log.tsv", ("t",), rows, tuple(range(2, 2 + len(rows))), "")


def times(unit: TimeUnit, *cells: str) -> list[float | None]:
    return list(column_times_s(table_of(*cells), "t", unit))


def test_numbers_and_cells_that_say_nothing() -> None:
    table = table_of("1", "-2.5", ".5", "3.", "1e3", "", "n/a", "NaN", "None", "-")
    assert column_numbers(table, "t") == (1.0, -2.5, 0.5, 3.0, 1000.0, None, None, None, None, None)


def test_whole_numbers() -> None:
    assert column_counts(table_of("1", "2.0", ""), "t") == (1, 2, None)
    with pytest.raises(LogError, match=r'column "t" holds "2\.5", not a whole number') as caught:
        column_counts(table_of("1", "2.5"), "t")
    assert caught.value.where == "log.tsv, line 3"


def test_a_cell_that_is_no_number_and_a_column_that_is_not_there() -> None:
    with pytest.raises(LogError, match='column "t" holds "left", not a number') as caught:
        column_numbers(table_of("1", "left"), "t")
    assert caught.value.where == "log.tsv, line 3"
    with pytest.raises(LogError, match='no column "time"') as caught:
        column_numbers(table_of("1"), "time")
    assert caught.value.todo == "Its columns are: t"


def test_infinity_is_no_number() -> None:
    with pytest.raises(LogError, match="not a number"):
        column_numbers(table_of("inf"), "t")


def test_seconds_and_milliseconds() -> None:
    assert times("s", "1.5", "", "2") == [1.5, None, 2.0]
    assert times("ms", "1500", "n/a", "2000.5") == [1.5, None, 2.0005]


def test_times_of_day() -> None:
    assert times("clock", "14:03:05.120", "n/a", "14:03:07,5", "14:04:00") == [
        pytest.approx(50585.12),
        None,
        pytest.approx(50587.5),
        50640.0,
    ]
    assert times("clock", "02/03/2026 2:03:05 PM", "02/03/2026 12:00:00 AM") == [50585.0, 86400.0]


def test_times_of_day_go_on_across_midnight() -> None:
    assert times("clock", "23:59:58.5", "00:00:01", "23:59:59", "00:00:03") == [
        86398.5,
        86401.0,
        86399.0,
        86403.0,
    ]


def test_dates_are_heeded_where_they_are_complete() -> None:
    assert times("clock", "2026-03-02T14:03:05.120", "2026-03-04 00:00:01") == [
        pytest.approx(50585.12),
        2 * 86400.0 + 1.0,
    ]
    assert times("clock", "2026-03-02T23:59:59+01:00", "2026-03-02T23:00:01Z") == [86399.0, 86401.0]


def test_a_time_of_day_that_does_not_exist() -> None:
    for text in ("25:00:00", "12:60:00", "13:00:00 PM"):
        with pytest.raises(LogError, match="no time of day"):
            times("clock", text)


def test_the_wrong_unit_is_refused_with_advice() -> None:
    with pytest.raises(LogError, match=r'a time of day\. The column looks like unit = "clock"'):
        times("s", "14:03:05", "14:03:09")
    with pytest.raises(LogError, match=r'no time of day\. The column looks like unit = "ms"'):
        times("clock", "5000", "10100", "15300")
    with pytest.raises(LogError, match="holds no time"):
        times("s", "", "n/a")


@pytest.mark.parametrize(
    ("values", "unit"),
    [
        (["4711.25", "4716.3", "", "4721.9"], "s"),
        (["4711,25", "4716,3"], "s"),
        (["4711250", "4716300", "4721900"], "ms"),
        (["14:03:05.1", "14:03:09"], "clock"),
        (["2026-03-02T14:03:05"], "clock"),
        (["left", "right"], None),
        (["", "n/a"], None),
        (["5"], "s"),
    ],
)
def test_the_unit_is_guessed(values: list[str], unit: str | None) -> None:
    assert guess_unit(values) == unit
