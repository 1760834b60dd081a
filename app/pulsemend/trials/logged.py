"""The behavioural log of one recording, joined with its trials as the plan says."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

from pulsemend.errors import LogError
from pulsemend.model.epochs import Trial
from pulsemend.model.label_columns import LOG, Meaning, source_of
from pulsemend.model.log import LogJoin, LogTable, LogTimes, TrialTime
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.model.trial_kinds import variants
from pulsemend.trials.log_columns import column_counts, column_times_s
from pulsemend.trials.log_join import join_log


@dataclass(frozen=True)
class Logged:
    """Trials with their rows of the log.

    Parameters
    ----------
    trials : tuple of Trial
    join : LogJoin or None
        None where the log could not be used at all.
    rows : tuple of int
        The log's rows, from 1, that the join's places stand for: rows excluded by hand are not among them.
    units : tuple of TrialTime
        What rows could belong to; the join's other places.
    problem : str
        Why nothing was joined; empty if rows were.
    """

    trials: tuple[Trial, ...]
    join: LogJoin | None
    rows: tuple[int, ...]
    units: tuple[TrialTime, ...]
    problem: str = ""


def needs_log(plan: Plan) -> bool:
    """Tell whether anything of the set rests on the log: a label, the balance, or what counts as practice."""
    return bool(plan.log.file) and bool(_columns_used(plan) or plan.blocks.practice_column)


def with_log(trials: Sequence[Trial], table: LogTable, plan: Plan, marks: Marks, rate_hz: float) -> Logged:
    """Join a log.

    Parameters
    ----------
    trials : sequence of Trial
        In order of time.
    table : LogTable
        The log.
    plan : Plan
        Its ``[log]``.
    marks : Marks
        Rows excluded by hand.
    rate_hz : float
        Recorded rate.

    Returns
    -------
    Logged
        Also where nothing could be joined, with the reason.
    """
    pairs = list(_units(trials, plan, rate_hz))
    units = tuple(unit for _, _, unit in pairs)
    rows = tuple(row for row in range(1, len(table.rows) + 1) if row not in marks.log_rows_excluded)
    try:
        _check_columns(table, plan)
        log = _log_times(table, plan, rows)
    except LogError as error:
        return Logged(tuple(trials), None, rows, units, str(error))
    join = join_log(log, units, per_trial=max(1, len(plan.log.slots)))
    join = replace(join, words="\n".join([join.words, *_excluded_words(table, marks)]))
    if not join.pairs:
        return Logged(tuple(trials), join, rows, units, _one_line(join.words))
    values: dict[int, dict[str, str]] = {}
    columns = _kept_columns(table, plan)
    for row, unit in join.pairs:
        place, slot, _ = pairs[unit]
        before = f"{slot}." if len(plan.log.slots) > 1 else ""
        cells = dict(zip(table.columns, table.rows[rows[row] - 1], strict=True))
        values.setdefault(place, {}).update(
            {f"{before}{column}": _plain(cells[column], column, table) for column in columns}
        )
    joined = tuple(replace(trial, log=values.get(place, {})) for place, trial in enumerate(trials))
    return Logged(joined, join, rows, units)


def _excluded_words(table: LogTable, marks: Marks) -> list[str]:
    """Say which rows were left out by hand, and which of these are not there."""
    there = [str(row) for row in marks.log_rows_excluded if row <= len(table.rows)]
    gone = [str(row) for row in marks.log_rows_excluded if row > len(table.rows)]
    words = [f"Excluded by hand: row {', '.join(there)}."] if there else []
    if gone:
        words.append(f"Excluded by hand, but not in the file: row {', '.join(gone)}.")
    return words


def _one_line(words: str) -> str:
    return " ".join(line.strip() for line in words.splitlines())


def _units(trials: Sequence[Trial], plan: Plan, rate_hz: float) -> Iterator[tuple[int, str, TrialTime]]:
    """Everything a row can belong to, with the place of its trial and its slot."""
    slots_of: dict[str, set[str]] = {}
    for way in variants(plan):
        slots_of.setdefault(way.kind, set()).update(slot.slot for slot in way.slots)
    several = len(plan.log.slots) > 1
    for place, trial in enumerate(trials):
        for slot in plan.log.slots:
            if slot not in slots_of.get(trial.kind, ()):
                continue
            marker = trial.markers.get(slot)
            name = f"trial {trial.number} {slot}" if several else f"trial {trial.number}"
            time_s = None if marker is None else marker.sample / rate_hz
            yield place, slot, TrialTime(name, time_s, _recorded_number(trial, plan))


def _recorded_number(trial: Trial, plan: Plan) -> int | None:
    slot, _, label = plan.log.recorded_trial.partition(".")
    marker = trial.markers.get(slot)
    text = "" if marker is None else plan.labels_of(marker.code).get(label, "")
    return int(text) if text.isdecimal() else None


def _log_times(table: LogTable, plan: Plan, rows: Sequence[int]) -> LogTimes:
    times = column_times_s(table, plan.log.time, plan.log.unit.value) if plan.log.time else ()
    numbers = column_counts(table, plan.log.trial) if plan.log.trial else ()
    return LogTimes(
        name=table.name,
        times_s=tuple(times[row - 1] if times else None for row in rows),
        numbers=tuple(numbers[row - 1] for row in rows) if numbers and plan.log.recorded_trial else (),
        rows=tuple(rows),
    )


def _kept_columns(table: LogTable, plan: Plan) -> tuple[str, ...]:
    if plan.log.columns:
        needed = dict.fromkeys([*plan.log.columns, *_facts_columns(plan)])
        if plan.blocks.practice_column:
            needed[plan.blocks.practice_column] = None
        return tuple(needed)
    return tuple(column for column in table.columns if column not in (plan.log.time, plan.log.trial))


def _plain(text: str, column: str, table: LogTable) -> str:
    """Make a cell a label: numbers with a decimal point, as everything else in a set has them."""
    return text.replace(",", ".") if column in table.decimal_comma else text


def _columns_used(plan: Plan) -> dict[str, None]:
    """Columns of the log that labels, balance and facts are made from, without what stands before them."""
    sources = [source for label in plan.labels for source in label.sources]
    sources += [
        source_of(text).what
        for rule in plan.epochs.rule
        for text in rule.labels.values()
        if source_of(text).meaning is not Meaning.TEXT
    ]
    sources += plan.balance.by
    used = [_column(source, plan) for source in sources if source.startswith(LOG)]
    return dict.fromkeys([*used, *_facts_columns(plan)])


def _facts_columns(plan: Plan) -> list[str]:
    return [_column(name, plan) for name in plan.stimulation.columns.values()]


def _column(source: str, plan: Plan) -> str:
    """Name the column of the file: where rows belong to several slots, a slot's name stands before it."""
    name = source.removeprefix(LOG)
    slot, _, column = name.partition(".")
    return column if column and len(plan.log.slots) > 1 and slot in plan.log.slots else name


def _check_columns(table: LogTable, plan: Plan) -> None:
    needed = dict.fromkeys([*plan.log.columns, *_columns_used(plan)])
    if plan.blocks.practice_column:
        needed[plan.blocks.practice_column] = None
    missing = [column for column in needed if column not in table.columns]
    if missing:
        raise LogError(
            f"it has no column {', '.join(missing)}, which the plan names",
            where=table.name,
            todo=f"Its columns are: {', '.join(table.columns)}",
        )
    if len(plan.log.slots) > 1:
        for fact, name in plan.stimulation.columns.items():
            if _column(name, plan) == name.removeprefix(LOG):
                example = f"{plan.log.slots[0]}.{name.removeprefix(LOG)}"
                raise LogError(
                    f"stimulation.columns.{fact} names column {name}, but a trial has several rows",
                    where=table.name,
                    todo=f"Say which row it is, for example {example}",
                )
    kept = _kept_columns(table, plan)
    unusable = [column for column in _columns_used(plan) if column not in kept]
    if unusable:
        raise LogError(
            f"column {', '.join(unusable)} is used as a label, but log.columns leaves it out",
            where=table.name,
            todo="Name it under log.columns",
        )
