"""Columns of a log as numbers and times."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from datetime import datetime, timedelta
from itertools import pairwise
from statistics import median
from typing import Literal, TypeVar

from pulsemend.errors import LogError
from pulsemend.model.log import LogTable
from pulsemend.units import ms_to_s

TimeUnit = Literal["s", "ms", "clock"]
Value = TypeVar("Value")

_NOTHING = {"", "n/a", "na", "nan", "none", "null", "-", "--", "."}
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_COMMA_NUMBER = re.compile(r"[+-]?(\d+,\d*|,\d+)([eE][+-]?\d+)?")
_CLOCK = re.compile(r"(?:^|[\sT])(\d{1,2}):(\d{2}):(\d{2})(?:[.,](\d+))?\s*([AaPp])?\.?[Mm]?\.?(?:$|[\sZ+-])")
_DAY_S = 86400.0
_LONGEST_STEP_S = 200.0  # usual step between rows above which a time is not in seconds


def is_nothing(text: str) -> bool:
    """Tell whether a cell stands for no value."""
    return text.strip().lower() in _NOTHING


def is_number(text: str) -> bool:
    """Tell whether a cell is a number with a decimal point or none."""
    return _NUMBER.fullmatch(text) is not None


def is_clock(text: str) -> bool:
    """Tell whether a cell is a time of day, with or without a date."""
    return _CLOCK.search(text) is not None


def has_decimal_comma(values: Sequence[str]) -> bool:
    """Tell whether all values of a column are numbers, and at least one has a decimal comma."""
    present = [value for value in values if not is_nothing(value)]
    with_comma = [value for value in present if _COMMA_NUMBER.fullmatch(value)]
    return bool(with_comma) and all(
        "." not in value and (_COMMA_NUMBER.fullmatch(value) or is_number(value)) for value in present
    )


def column_texts(table: LogTable, column: str) -> tuple[str, ...]:
    """Read the cells of a column.

    Raises
    ------
    LogError
        The log has no such column.
    """
    if column not in table.columns:
        raise LogError(
            f'it has no column "{column}"',
            where=table.name,
            todo=f"Its columns are: {', '.join(table.columns)}",
        )
    place = table.columns.index(column)
    return tuple(row[place] for row in table.rows)


def column_numbers(table: LogTable, column: str) -> tuple[float | None, ...]:
    """Read a column of numbers; None where a cell is empty or says that there is no value.

    Raises
    ------
    LogError
        No such column, or a cell that is no number.
    """
    comma = column in table.decimal_comma

    def number(text: str) -> float | None:
        plain = text.replace(",", ".") if comma else text
        return float(plain) if is_number(plain) else None

    return _read(table, column, number, "not a number")


def column_counts(table: LogTable, column: str) -> tuple[int | None, ...]:
    """Read a column of whole numbers, e.g. trial numbers; None where there is no value.

    Raises
    ------
    LogError
        No such column, or a cell that is no whole number.
    """
    for place, value in enumerate(values := column_numbers(table, column)):
        if value is not None and not value.is_integer():
            text = table.rows[place][table.columns.index(column)]
            raise _unreadable(table, column, place, text, "not a whole number")
    return tuple(None if value is None else int(value) for value in values)


def column_times_s(table: LogTable, column: str, unit: TimeUnit) -> tuple[float | None, ...]:
    """Read a column of times in seconds; None where there is no value.

    Parameters
    ----------
    table : LogTable
        The log.
    column : str
        Name of the column.
    unit : {"s", "ms", "clock"}
        "clock": times of day such as ``14:03:05.120`` or ``2 March, 2:03:05 PM``, with or without a date.
        They count from midnight before the first of them and go on across midnight; only an ISO date
        (``2026-03-02T14:03:05.120+01:00``) tells more than one day apart.

    Raises
    ------
    LogError
        No such column, a cell that is no time of this unit, or no time at all.
    """
    texts = column_texts(table, column)
    if unit == "clock":
        times = _unwrapped(_read(table, column, _moment, "no time of day", _advice(texts)))
    else:
        problem = "a time of day" if any(map(is_clock, texts)) else "not a number"
        try:
            times = column_numbers(table, column)
        except LogError as error:
            raise LogError(
                error.what.replace("not a number", problem), where=error.where, todo=_advice(texts)
            ) from error
        if unit == "ms":
            times = tuple(None if time is None else ms_to_s(time) for time in times)
    if all(time is None for time in times):
        raise LogError(
            f'column "{column}" holds no time', where=table.name, todo="Name another column as time"
        )
    return times


def guess_unit(values: Sequence[str]) -> TimeUnit | None:
    """Guess the unit of a time column from its texts; None if they are no times.

    Numbers whose usual step from row to row is above 200 count as milliseconds.
    """
    present = [value for value in values if not is_nothing(value)]
    if not present:
        return None
    if all(map(is_clock, present)):
        return "clock"
    plain = [value.replace(",", ".") for value in present]
    if not all(map(is_number, plain)):
        return None
    numbers = [float(value) for value in plain]
    steps = [abs(after - before) for before, after in pairwise(numbers)]
    usual = median(step for step in steps if step) if any(steps) else 0.0
    return "ms" if usual > _LONGEST_STEP_S else "s"


def _read(
    table: LogTable, column: str, convert: Callable[[str], Value | None], problem: str, todo: str = ""
) -> tuple[Value | None, ...]:
    values: list[Value | None] = []
    for place, text in enumerate(column_texts(table, column)):
        value = None if is_nothing(text) else convert(text)
        if value is None and not is_nothing(text):
            raise _unreadable(table, column, place, text, problem, todo)
        values.append(value)
    return tuple(values)


def _unreadable(
    table: LogTable, column: str, place: int, text: str, problem: str, todo: str = ""
) -> LogError:
    shown = text if len(text) <= 30 else f"{text[:30]}..."
    return LogError(
        f'column "{column}" holds "{shown}", {problem}',
        where=f"{table.name}, line {table.lines[place]}",
        todo=todo or "Write n/a where there is no value",
    )


def _advice(texts: Sequence[str]) -> str:
    unit = guess_unit(texts)
    return f'The column looks like unit = "{unit}"' if unit else "Name another column as time"


def _moment(text: str) -> tuple[datetime | None, float] | None:
    """Date and time with a full ISO date, and seconds since midnight; None if the text is no time of day."""
    found = _CLOCK.search(text)
    if found is None:
        return None
    hour, minute, second = (int(found[group]) for group in (1, 2, 3))
    if found[5]:
        if not 1 <= hour <= 12:
            return None
        hour = hour % 12 + (12 if found[5].lower() == "p" else 0)
    if hour > 23 or minute > 59 or second > 60:
        return None
    of_day_s = hour * 3600.0 + minute * 60.0 + second + float(f"0.{found[4] or 0}")
    try:
        dated = datetime.fromisoformat(text.replace(",", ".")) if len(text) > 15 and not found[5] else None
    except ValueError:
        dated = None
    return dated, of_day_s


def _unwrapped(moments: tuple[tuple[datetime | None, float] | None, ...]) -> tuple[float | None, ...]:
    """Seconds since midnight before the first moment."""
    present = [moment for moment in moments if moment is not None]
    dates = [moment[0] for moment in present if moment[0] is not None]
    # Times with and without a zone cannot be subtracted; then the time of day has to do.
    if dates and len(dates) == len(present) and len({date.tzinfo is None for date in dates}) == 1:
        first = dates[0].replace(hour=0, minute=0, second=0, microsecond=0)
        # What a date and time cannot hold below a microsecond is below every clock's precision.
        return tuple(
            None if moment is None or moment[0] is None else (moment[0] - first) / timedelta(seconds=1)
            for moment in moments
        )
    times: list[float | None] = []
    day, before_s = 0, present[0][1] if present else 0.0
    for moment in moments:
        if moment is None:
            times.append(None)
            continue
        # A step of more than half a day is midnight passed (or, a little later, an earlier row after it).
        day += (before_s - moment[1] > _DAY_S / 2) - (moment[1] - before_s > _DAY_S / 2)
        before_s = moment[1]
        times.append(day * _DAY_S + moment[1])
    return tuple(times)
