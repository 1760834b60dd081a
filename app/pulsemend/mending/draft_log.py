"""The ``[log]`` section of a draft: a table found beside the recording, and how it would be joined."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from pulsemend.errors import LogError, PlanError
from pulsemend.model.epochs import Trial
from pulsemend.model.keys import show
from pulsemend.model.log import LogTable
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import Log, Plan
from pulsemend.model.recording import RecordingFacts
from pulsemend.model.trial_kinds import expanded_slots
from pulsemend.model.vocabulary import TimeUnit
from pulsemend.readers.log_file import read_log
from pulsemend.trials.log_columns import column_texts, guess_unit
from pulsemend.trials.logged import with_log
from pulsemend.trials.matching import match_trials

_ENDINGS = (".tsv", ".csv", ".txt")
_OTHER_TABLES = ("events", "channels", "electrodes", "coordsystem", "scans")
"""Tables of the standard for folders of recordings, which are no logs."""

_MOST_ROWS_OF_TRIAL = 6
_LEAST_JOINED = 0.5
_BEGINNING = 60
_AS_TIGHT, _LEAST_SPREAD_S = 3.0, 0.001
"""Clocks whose spreads are within this factor fit equally well; below a millisecond they all do."""


@dataclass(frozen=True)
class LogGuess:
    """How a log could be joined, as the trial made of the markers tells.

    Parameters
    ----------
    log : Log
        Its file still empty.
    joined, rows : int
        Rows that are joined then, of how many.
    spread_s : float
        Of what remains about the fitted clock.
    times : tuple of str
        All columns that hold times.
    """

    log: Log
    joined: int
    rows: int
    spread_s: float
    times: tuple[str, ...] = ()


def logs_beside(folder: Path, stem: str) -> tuple[LogTable, ...]:
    """Read the tables that stand beside a recording and bear its name, in order of their names.

    Parameters
    ----------
    folder : Path
        The recording's.
    stem : str
        The recording's name.
    """
    found = []
    for path in sorted(folder.glob("*")):
        rest = path.stem.removeprefix(stem)
        is_own = path.name.startswith(stem) and (not rest or rest[0] in "_-. ")
        if not is_own or path.suffix.lower() not in _ENDINGS or rest.strip("_-. ") in _OTHER_TABLES:
            continue
        try:
            found.append(read_log(path))
        except LogError:
            # What is no table is no log.
            continue
    return tuple(found)


def log_lines(tables: Sequence[LogTable], facts: RecordingFacts, plan: Plan | None) -> list[str]:
    """Write a section for the log, all of it a comment that a person may uncomment.

    Parameters
    ----------
    tables : sequence of LogTable
        From `logs_beside`.
    facts : RecordingFacts
        Markers and rate.
    plan : Plan or None
        The draft so far; without slots nothing can be joined.
    """
    if not tables:
        return []
    guesses = [(table, None if plan is None else guess_log(table, facts, plan)) for table in tables]
    table, found = max(guesses, key=lambda pair: 0 if pair[1] is None else pair[1].joined)
    lines = [
        f"# Beside the recording stands {show(table.name)}: {len(table.rows)} rows, columns "
        f"{', '.join(map(show, table.columns))}.",
        *(f"# There is {show(other.name)}, too." for other in tables if other is not table),
        "# decide: is this the behavioural log? Then take away the signs in front of the next lines.",
    ]
    if found is None:
        lines.append("# No column of it could be joined with these trials: name slots and time yourself.")
    else:
        lines.append(
            f"# Joined so, {found.joined} of {found.rows} rows find their trial"
            f" (times in: {', '.join(map(show, found.times))})."
        )
    log = Log(slots=("cue1",), time="onset") if found is None else found.log
    file = table.name.replace(facts.stem, "{stem}", 1)
    settled = (*found.times, log.trial) if found else ()
    columns = [column for column in table.columns if column not in settled]
    return [
        *lines,
        "# [log]",
        f"# file = {show(file)}",
        f"# slots = {show(list(log.slots))}   # whose instants the times of the rows are",
        f"# time = {show(log.time)}",
        f'# unit = "{log.unit}"',
        f"# columns = {show(columns)}   # what becomes a label; decide: which",
    ]


def guess_log(table: LogTable, facts: RecordingFacts, plan: Plan) -> LogGuess | None:
    """Find the column of times and the slots by which most rows find their trial.

    Parameters
    ----------
    table : LogTable
        The log.
    facts : RecordingFacts
        Markers and rate.
    plan : Plan
        Slots and roles.

    Returns
    -------
    LogGuess or None
        None where not even half of the rows find one.
    """
    if not plan.trial:
        return None
    units = {column: guess_unit(column_texts(table, column)) for column in table.columns}
    try:
        trials = match_trials(facts.markers, plan, facts.rate_hz).trials
    except PlanError:
        # A draft's limits are as seen, so they agree; those of a plan need not.
        return None
    times = tuple(column for column, unit in units.items() if unit and _rises(table, column, unit))
    ways = [
        Log(file=table.name, slots=slots, time=column, unit=TimeUnit(units[column] or "s"))
        for slots, column in itertools.product(_slot_sets(plan), times)
    ]
    # The beginning tells which way is right; all of it is joined once, or tried where that tells nothing.
    n_trials = math.ceil(_BEGINNING * len(trials) / len(table.rows))
    beginning = replace(table, rows=table.rows[:_BEGINNING], lines=table.lines[:_BEGINNING])
    best = _best_way(ways, beginning, trials[:n_trials], plan, facts.rate_hz)
    if len(table.rows) > _BEGINNING:
        best = _best_way([best.log] if best else ways, table, trials, plan, facts.rate_hz)
    return None if best is None else replace(best, times=times)


def _best_way(
    ways: Sequence[Log], table: LogTable, trials: Sequence[Trial], plan: Plan, rate_hz: float
) -> LogGuess | None:
    """Join in every way and choose; None where not even half of the rows find their trial."""
    found: list[LogGuess] = []
    for log in ways:
        join = with_log(trials, table, replace(plan, log=log), NO_MARKS, rate_hz).join
        if join is not None and join.clock is not None:
            found.append(LogGuess(log, len(join.pairs), len(table.rows), join.clock.residual_sd_s))
    most = max((one.joined for one in found), default=0)
    if not most or most < _LEAST_JOINED * len(table.rows):
        return None
    best = [one for one in found if one.joined == most]
    tight_s = _AS_TIGHT * max(min(one.spread_s for one in best), _LEAST_SPREAD_S)
    optional = {slot.slot for slot in expanded_slots(plan) if slot.optional}

    def rank(one: LogGuess) -> tuple[bool, int, bool]:
        return one.spread_s > tight_s, len(one.log.slots), not optional.isdisjoint(one.log.slots)

    # Several columns may do, each with its own slot: the first that every trial has.
    return min(best, key=rank)


def _rises(table: LogTable, column: str, unit: str) -> bool:
    """Whether a column is a running clock: its values differ, hardly ever go back, and do not just count."""
    if unit == "clock":
        return True
    values = [
        float(text.replace(",", ".")) for text in column_texts(table, column) if text and text[0].isdigit()
    ]
    steps = [after - before for before, after in itertools.pairwise(values)]
    if set(steps) <= {0.0, 1.0}:
        return False
    return len(set(values)) > len(values) / 2 and sum(step > 0 for step in steps) >= 0.9 * len(steps) > 0


def _slot_sets(plan: Plan) -> Iterator[tuple[str, ...]]:
    """Slots that rows may stand for: one, or all of one role."""
    slots = expanded_slots(plan)
    yield from ((slot.slot,) for slot in slots)
    for role in dict.fromkeys(slot.role for slot in slots):
        own = tuple(slot.slot for slot in slots if slot.role is role)
        if 1 < len(own) <= _MOST_ROWS_OF_TRIAL:
            yield own
