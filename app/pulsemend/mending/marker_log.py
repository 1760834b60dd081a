"""How a behavioural log lies against its recording: every pair, and what was left alone on either side."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import LogError
from pulsemend.mending.study_log import StudyLog
from pulsemend.model.log import ClockFit, LogJoin, LogTable
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.trials.log_columns import column_times_s
from pulsemend.trials.logged import Logged

FloatArray = NDArray[np.float64]
_NONE: FloatArray = np.zeros(0)


@dataclass(frozen=True)
class LogItem:
    """A row or a trial that the join left alone, or was told to leave alone.

    Parameters
    ----------
    words : str
    time_s : float or None
        Where it is in the recording; for a row where the fitted clock would have it. None: nobody knows.
    row : int or None
        The log's row, from 1; None for a trial.
    """

    words: str
    time_s: float | None
    row: int | None = None


@dataclass(frozen=True)
class LogView:
    """A log against its recording.

    Parameters
    ----------
    name : str
        The file's; empty where plan and marks name none.
    n_rows : int
    columns : tuple of str
        Names of the columns of the file.
    problem : str
        Why nothing was joined; empty if something was, or if there is no log.
    join : LogJoin or None
    time_s, residual_s : float array, shape (n_pairs,)
        Of every pair that has times: the recording's time, and how much later it is than the clock says.
    rows : int array, shape (n_pairs,)
        The log's row of each of these pairs, from 1.
    by_order : bool array, shape (n_pairs,)
        Pairs that rest on their place between two neighbours alone.
    rows_alone, trials_alone, doubtful, excluded : tuple of LogItem
    """

    name: str = ""
    n_rows: int = 0
    columns: tuple[str, ...] = ()
    problem: str = ""
    join: LogJoin | None = None
    time_s: FloatArray = field(default_factory=lambda: _NONE, compare=False)
    residual_s: FloatArray = field(default_factory=lambda: _NONE, compare=False)
    rows: NDArray[np.intp] = field(default_factory=lambda: _NONE.astype(np.intp), compare=False)
    by_order: NDArray[np.bool_] = field(default_factory=lambda: _NONE.astype(np.bool_), compare=False)
    rows_alone: tuple[LogItem, ...] = ()
    trials_alone: tuple[LogItem, ...] = ()
    doubtful: tuple[LogItem, ...] = ()
    excluded: tuple[LogItem, ...] = ()

    @property
    def clock(self) -> ClockFit | None:
        """The fitted clock."""
        return None if self.join is None else self.join.clock


NO_LOG_VIEW = LogView()


def log_view(log: StudyLog, logged: Logged | None, plan: Plan, marks: Marks) -> LogView:
    """Lay a log against its recording.

    Parameters
    ----------
    log : StudyLog
        Where it is, and its table.
    logged : Logged or None
        How it was joined; None if it could not be read.
    plan : Plan
        Its column of times.
    marks : Marks
        Rows excluded by hand.
    """
    table = log.table
    if table is None:
        return LogView(name="" if log.path is None else log.path.name, problem=log.problem)
    excluded = tuple(
        LogItem(f"row {row}", None, row) for row in sorted(marks.log_rows_excluded) if row <= len(table.rows)
    )
    if logged is None or logged.join is None or any(row > len(table.rows) for row in logged.rows):
        problem = "" if logged is None else logged.problem
        return LogView(table.name, len(table.rows), table.columns, problem, excluded=excluded)
    join = logged.join
    times = _row_times(table, plan, logged.rows)
    clock = join.clock

    def there_s(place: int) -> float | None:
        time_s = times[place]
        return None if clock is None or time_s is None else float(clock.recorded_s(time_s))

    pairs = [
        (place, unit_s, expected_s)
        for place, unit in join.pairs
        if (unit_s := logged.units[unit].time_s) is not None and (expected_s := there_s(place)) is not None
    ]
    by_order = {place for place, _ in join.by_order}
    return LogView(
        name=table.name,
        n_rows=len(table.rows),
        columns=table.columns,
        problem=logged.problem,
        join=join,
        time_s=np.array([unit_s for _, unit_s, _ in pairs]),
        residual_s=np.array([unit_s - expected_s for _, unit_s, expected_s in pairs]),
        rows=np.array([logged.rows[place] for place, _, _ in pairs], dtype=np.intp),
        by_order=np.array([place in by_order for place, _, _ in pairs], dtype=np.bool_),
        rows_alone=tuple(
            LogItem(f"row {logged.rows[place]}", there_s(place), logged.rows[place])
            for place in join.rows_alone
        ),
        trials_alone=tuple(
            LogItem(logged.units[unit].name, logged.units[unit].time_s) for unit in join.trials_alone
        ),
        doubtful=_doubtful(join, logged, there_s),
        excluded=excluded,
    )


def _row_times(table: LogTable, plan: Plan, rows: Sequence[int]) -> Sequence[float | None]:
    if not plan.log.time:
        return [None] * len(rows)
    try:
        times = column_times_s(table, plan.log.time, plan.log.unit.value)
    except LogError:
        # The file has changed since it was joined; it will be joined anew.
        return [None] * len(rows)
    return [times[row - 1] for row in rows]


def _doubtful(join: LogJoin, logged: Logged, there_s: Callable[[int], float | None]) -> tuple[LogItem, ...]:
    items = []
    for doubt in join.doubtful:
        items += [
            LogItem(f"row {logged.rows[place]}: {doubt.why}", there_s(place), logged.rows[place])
            for place in doubt.rows
        ]
        items += [
            LogItem(f"{logged.units[unit].name}: {doubt.why}", logged.units[unit].time_s)
            for unit in doubt.trials
        ]
    return tuple(items)
