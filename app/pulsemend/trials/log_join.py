"""Rows of a behavioural log joined with the trials of a recording.

Nothing is guessed: what has two explanations is listed as doubtful, and a log that has two as a whole is not
joined.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.log import ClockFit, Doubt, LogJoin, LogTimes, TrialTime
from pulsemend.trials.clock import FloatArray, fit_clock
from pulsemend.trials.clock_search import (
    MOST_DRIFT,
    MOST_SPREAD,
    WIDEST_S,
    Explanation,
    IntArray,
    find_clock,
    settled,
)
from pulsemend.trials.log_checks import LEAST_TIMED, numbers_twice, unusable
from pulsemend.trials.log_words import contradiction, distance, joined_words, not_found, rival_words


def join_log(log: LogTimes, trials: Sequence[TrialTime], per_trial: int = 1) -> LogJoin:
    """Join the rows of a log with the trials of a recording.

    Where both have trial numbers, numbers decide and times, if there are any, check them. Otherwise order
    and intervals decide together (see `find_clock`). Without times, a log is joined in order if it has
    exactly as many rows as there are trials. A row and a trial left between the same two neighbours, one of
    them without a time, are joined by that place.

    Parameters
    ----------
    log : LogTimes
        Time and trial number of each row.
    trials : sequence of TrialTime
        What rows can belong to, in order of time.
    per_trial : int
        How many rows share one trial number, if numbers are used.

    Returns
    -------
    LogJoin
        Also where nothing could be joined: then it has no pairs, and its words say why.
    """
    refusal = unusable(log, trials)
    if refusal:
        return _nothing(log, trials, refusal)
    draft = _Draft(log, trials)
    numbered = any(number is not None for number in log.numbers) and any(
        trial.number is not None for trial in trials
    )
    timed = len(draft.timed_rows) > 0 and len(draft.timed_trials) > 0
    if numbered:
        refusal = numbers_twice(log, trials, per_trial) or draft.by_number(per_trial)
    elif timed:
        refusal = draft.by_time()
    else:
        refusal = draft.by_place()
    return draft.finished(per_trial) if not refusal else _nothing(log, trials, refusal, draft.doubtful)


def _nothing(
    log: LogTimes, trials: Sequence[TrialTime], words: str, doubtful: Sequence[Doubt] = ()
) -> LogJoin:
    rows_left = set(range(len(log.times_s))) - {row for doubt in doubtful for row in doubt.rows}
    trials_left = set(range(len(trials))) - {trial for doubt in doubtful for trial in doubt.trials}
    return LogJoin(
        pairs=(),
        rows_alone=tuple(sorted(rows_left)),
        trials_alone=tuple(sorted(trials_left)),
        doubtful=tuple(doubtful),
        clock=None,
        by="",
        by_order=(),
        words=f"{log.name}: nothing joined. {words}",
    )


@dataclass
class _Draft:
    """A join in the making."""

    log: LogTimes
    trials: Sequence[TrialTime]
    pairs: dict[int, int] = field(default_factory=dict)
    doubtful: list[Doubt] = field(default_factory=list)
    by_order: list[tuple[int, int]] = field(default_factory=list)
    clock: ClockFit | None = None
    by: str = ""

    def __post_init__(self) -> None:
        times = self.log.times_s
        instants = [trial.time_s for trial in self.trials]
        # In order of time, for the search; places in the log and in the recording remain known.
        self.timed_rows, self.log_s = _sorted(times)
        self.timed_trials, self.recorded_s = _sorted(instants)

    def by_time(self) -> str:
        """Join by order and intervals; the reason if that fails."""
        found = find_clock(self.log_s, self.recorded_s) if self.enough else None
        if found is None or found.best is None:
            return not_found(len(self.timed_rows), len(self.timed_trials))
        if found.rival is not None:
            best, rival = (self.in_places(one) for one in (found.best, found.rival))
            return rival_words(self.log, self.trials, best, rival)
        self.by = "time"
        self.take(found.best, {})
        self.between_neighbours()
        return ""

    def by_number(self, per_trial: int) -> str:
        """Join by trial number, checked by time where there are times; the reason if that fails."""
        same = self.same_number(per_trial)
        if not same:
            return "No trial number of the log can be found in the recording."
        timed = self.with_times(same)
        if len({time_s for time_s, _ in timed}) < LEAST_TIMED:
            self.by = "number"
            self.pairs = same
            return ""
        log_s, recorded_s = np.array(timed).T
        found = find_clock(self.log_s, self.recorded_s)
        one = found.best if found.rival is None else None
        one = one or self.numbers_clock(log_s, recorded_s)
        if one is None or 2 * _agreeing(one.clock, log_s, recorded_s, one.tolerance_s).sum() < len(timed):
            return contradiction(len(timed), MOST_DRIFT)
        self.by = "number and time"
        self.take(one, same)
        self.between_neighbours()
        return ""

    def by_place(self) -> str:
        """Join one by one in order if the counts agree; the reason if they do not."""
        n_rows, n_trials = len(self.log.times_s), len(self.trials)
        if n_rows != n_trials:
            return (
                f"There are no times to join it by, and it has {n_rows} rows while the recording has "
                f"{n_trials} trials, so their order alone does not tell which belong together."
            )
        self.by = "order"
        self.pairs = {place: place for place in range(n_rows)}
        self.by_order = list(self.pairs.items())
        return ""

    @property
    def enough(self) -> bool:
        """Whether both sides have times enough to fit a clock."""
        return min(np.unique(self.log_s).size, np.unique(self.recorded_s).size) >= LEAST_TIMED

    def in_places(self, one: Explanation) -> list[tuple[int, int]]:
        """Pairs of an explanation as places of rows and trials."""
        return sorted(
            (self.timed_rows[row], self.timed_trials[trial])
            for row, trial in zip(one.rows, one.trials, strict=True)
        )

    def with_times(self, pairs: dict[int, int]) -> list[tuple[float, float]]:
        """Collect the times on both clocks of pairs that have both."""
        return [
            (time_s, instant_s)
            for row, trial in pairs.items()
            if (time_s := self.log.times_s[row]) is not None
            and (instant_s := self.trials[trial].time_s) is not None
        ]

    def same_number(self, per_trial: int) -> dict[int, int]:
        """Rows and trials with the same number, one by one where several share it and none is missing."""
        rows: dict[int, list[int]] = {}
        trials: dict[int, list[int]] = {}
        for row in range(len(self.log.times_s)):
            if (number := self.log.number(row)) is not None:
                rows.setdefault(number, []).append(row)
        for place, trial in enumerate(self.trials):
            if trial.number is not None:
                trials.setdefault(trial.number, []).append(place)
        return {
            row: trial
            for number in rows
            if number in trials and len(rows[number]) == len(trials[number]) == per_trial
            for row, trial in zip(rows[number], trials[number], strict=True)
        }

    def numbers_clock(self, log_s: FloatArray, recorded_s: FloatArray) -> Explanation | None:
        """Fit the clock to rows and trials with the same number; None if less than half of them agree."""
        clock = fit_clock(log_s, recorded_s)
        for widest_s in WIDEST_S:
            agree = _agreeing(clock, log_s, recorded_s, widest_s)
            if 2 * agree.sum() >= log_s.size and np.unique(log_s[agree]).size >= LEAST_TIMED:
                one = settled(clock, self.log_s, self.recorded_s, widest_s)
                near = one is not None and one.clock.residual_sd_s <= MOST_SPREAD * widest_s
                return one if near else None
        return None

    def take(self, one: Explanation, same: dict[int, int]) -> None:
        """Join what lies together under a clock, and list what might.

        Parameters
        ----------
        one : Explanation
            The clock and its tolerance.
        same : dict of int to int
            Rows and trials with the same number; empty if numbers do not count.
        """
        self.clock = one.clock
        for rows, trials in _heaps(one.clock, self.log_s, self.recorded_s, one.tolerance_s):
            self.take_heap(
                [self.timed_rows[row] for row in rows], [self.timed_trials[trial] for trial in trials], same
            )
        for row, trial in same.items():
            self.take_same(row, trial)
        # What is too far apart to be joined and too near to be strangers.
        free_rows, free_trials = self.left()
        near = _heaps(one.clock, self.log_s[free_rows], self.recorded_s[free_trials], one.widest_s)
        for rows, trials in near:
            self.doubt(
                [self.timed_rows[free_rows[at]] for at in rows],
                [self.timed_trials[free_trials[at]] for at in trials],
                f"near each other, but beyond the tolerance of {distance(one.tolerance_s)}",
            )
        self.clock = self.refitted() or one.clock

    def refitted(self) -> ClockFit | None:
        """Fit the clock to what was joined alone; None if that is too little."""
        both = self.with_times(self.pairs)
        if len({time_s for time_s, _ in both}) < LEAST_TIMED:
            return None
        return fit_clock(*np.array(both).T)

    def take_heap(self, rows: list[int], trials: list[int], same: dict[int, int]) -> None:
        """Join the one row and the one trial that lie together, or list them."""
        alike = {row: same[row] for row in rows if same.get(row) in trials}
        if alike:
            self.pairs.update(alike)
            rows = [row for row in rows if row not in alike]
            trials = [trial for trial in trials if trial not in alike.values()]
        if not rows or not trials:
            return
        numbers = [self.log.number(row) for row in rows] + [self.trials[at].number for at in trials]
        elsewhere = same.keys() & set(rows) or set(same.values()) & set(trials)
        if same and (elsewhere or None not in numbers):
            self.doubt(rows, trials, "at the same time, but with different trial numbers")
            return
        if len(rows) == len(trials) == 1:
            self.pairs[rows[0]] = trials[0]
        else:
            self.doubt(rows, trials, "too near to each other to tell which belong together")

    def take_same(self, row: int, trial: int) -> None:
        """Join a row with the trial of its number if no time speaks against it, or list them."""
        if row in self.pairs:
            return
        time_s, instant_s = self.log.times_s[row], self.trials[trial].time_s
        if time_s is None or instant_s is None:
            if trial not in self.pairs.values():
                self.pairs[row] = trial
        elif self.clock is not None:
            apart = distance(abs(instant_s - self.clock.recorded_s(time_s)))
            self.doubt([row], [trial], f"the same trial number, but {apart} apart")

    def doubt(self, rows: Sequence[int], trials: Sequence[int], why: str) -> None:
        """List rows and trials as doubtful, those that are not joined or listed yet."""
        free_rows = sorted(set(rows) - self.used(0))
        free_trials = sorted(set(trials) - self.used(1))
        if free_rows or free_trials:
            self.doubtful.append(Doubt(tuple(free_rows), tuple(free_trials), why))

    def used(self, side: int) -> set[int]:
        """Rows (0) or trials (1) that are joined or listed as doubtful."""
        joined = set(self.pairs.values() if side else self.pairs)
        return joined.union(*((doubt.rows, doubt.trials)[side] for doubt in self.doubtful))

    def left(self) -> tuple[IntArray, IntArray]:
        """Find the timed rows and trials that are neither joined nor doubtful."""
        rows, trials = self.used(0), self.used(1)
        return (
            np.array([at for at, row in enumerate(self.timed_rows) if row not in rows], dtype=np.int64),
            np.array([at for at, one in enumerate(self.timed_trials) if one not in trials], dtype=np.int64),
        )

    def between_neighbours(self) -> None:
        """Join the one row and the one trial between two joined neighbours, if one of them has no time."""
        joined = sorted(self.pairs.items())
        used_rows, used_trials = self.used(0), self.used(1)
        for (row, trial), (next_row, next_trial) in pairwise(joined):
            if next_row != row + 2 or next_trial != trial + 2:
                continue
            lonely = (row + 1, trial + 1)
            no_time = self.log.times_s[lonely[0]] is None or self.trials[lonely[1]].time_s is None
            if no_time and lonely[0] not in used_rows and lonely[1] not in used_trials:
                self.pairs[lonely[0]] = lonely[1]
                self.by_order.append(lonely)

    def finished(self, per_trial: int) -> LogJoin:
        """Add what is left over, and the words."""
        used_rows, used_trials = self.used(0), self.used(1)
        join = LogJoin(
            pairs=tuple(sorted(self.pairs.items())),
            rows_alone=tuple(row for row in range(len(self.log.times_s)) if row not in used_rows),
            trials_alone=tuple(place for place in range(len(self.trials)) if place not in used_trials),
            doubtful=tuple(sorted(self.doubtful, key=lambda doubt: (doubt.rows, doubt.trials))),
            clock=self.clock,
            by=self.by,
            by_order=tuple(self.by_order),
            words="",
        )
        return joined_words(join, self.log, self.trials, per_trial)


def _agreeing(
    clock: ClockFit, log_s: FloatArray, recorded_s: FloatArray, within_s: float
) -> NDArray[np.bool_]:
    return np.asarray(np.abs(recorded_s - clock.recorded_s(log_s)) <= within_s)


def _sorted(times_s: Sequence[float | None]) -> tuple[list[int], FloatArray]:
    places = [place for place, time_s in enumerate(times_s) if time_s is not None]
    values = np.array([times_s[place] for place in places], dtype=np.float64)
    order = np.argsort(values, kind="stable")
    return [places[at] for at in order], values[order]


def _heaps(
    clock: ClockFit, log_s: FloatArray, recorded_s: FloatArray, within_s: float
) -> list[tuple[list[int], list[int]]]:
    """Rows and trials that are linked, directly or through others, by lying within a tolerance."""
    mapped = clock.recorded_s(log_s)
    first = np.searchsorted(recorded_s, mapped - within_s, side="left")
    stop = np.searchsorted(recorded_s, mapped + within_s, side="right")
    heaps: list[tuple[list[int], list[int]]] = []
    for row in range(log_s.size):
        linked = range(int(first[row]), int(stop[row]))
        if not linked:
            continue
        if heaps and linked[0] <= heaps[-1][1][-1]:
            rows, trials = heaps[-1]
            rows.append(row)
            trials.extend(trial for trial in linked if trial > trials[-1])
        else:
            heaps.append(([row], list(linked)))
    return heaps
