"""What a joined log is told in."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace

from pulsemend.model.log import ClockFit, LogJoin, LogTimes, TrialTime
from pulsemend.units import s_to_ms

_MOST_NAMED = 20
_FEW = 8  # intervals of two lengths agree by chance so far


def distance(seconds: float) -> str:
    """Write a short time in milliseconds."""
    return f"{s_to_ms(seconds):.3g} ms"


def joined_words(join: LogJoin, log: LogTimes, trials: Sequence[TrialTime], per_trial: int = 1) -> LogJoin:
    """Give a join its words; with several rows per trial, these belong to slots."""
    n_rows, n_trials = len(log.times_s), len(trials)
    units = "trials" if per_trial == 1 else "slots of the trials"
    lines = [
        f"{log.name}: {len(join.pairs)} of {n_rows} rows joined with {len(join.pairs)} of {n_trials} "
        f"{units}, by {join.by}."
    ]
    if join.clock is not None:
        lines.append(_clock_words(join.clock))
    if join.by == "time" and len(join.pairs) < _FEW:
        lines.append("So few events prove little: compare some rows with their trials.")
    if join.by_order and join.by != "order":
        names = [f"{log.row_name(row)} with {trials[trial].name}" for row, trial in join.by_order]
        lines.append(f"By their place between two neighbours, for want of a time: {_listed(names)}.")
    if join.rows_alone:
        lines.append(f"Rows without a trial: {_listed(str(log.row_number(row)) for row in join.rows_alone)}.")
    if join.trials_alone:
        lines.append(f"Without a row: {_listed(trials[trial].name for trial in join.trials_alone)}.")
    if join.doubtful:
        lines.append("Doubtful, not joined:")
    for doubt in join.doubtful:
        names = [*map(log.row_name, doubt.rows), *(trials[trial].name for trial in doubt.trials)]
        lines.append(f"  {_listed(names)}: {doubt.why}.")
    return replace(join, words="\n".join(lines))


def _clock_words(clock: ClockFit) -> str:
    # Microseconds per second are parts per million.
    drift, drift_se = (s_to_ms(s_to_ms(value)) for value in (clock.drift, clock.drift_se))
    return (
        f"Clock: recording = log {clock.offset_s:+.4f} s (standard error {distance(clock.offset_se_s)}) "
        f"at log time {clock.centre_s:.3f} s; drift {drift:+.2f} ppm (standard error {drift_se:.2g} ppm); "
        f"residual spread {distance(clock.residual_sd_s)}, {clock.n} pairs."
    )


def not_found(n_rows: int, n_trials: int) -> str:
    """Say that no clock fits."""
    return (
        f"The intervals between its {n_rows} rows with a time and those between {n_trials} trials do not fit "
        "each other under any clock by more than chance. Is it the log of this recording, and is this the "
        "column with the times of these markers?"
    )


def contradiction(n_same: int, most_drift: float) -> str:
    """Say that trial numbers and times cannot both be right."""
    return (
        f"Trial numbers and times contradict each other: {n_same} rows have the number of a trial, and no "
        f"clock within {most_drift:.1%} brings half of them together. "
        "Correct the numbers, or leave them out of the plan to join by time alone."
    )


def rival_words(
    log: LogTimes, trials: Sequence[TrialTime], best: list[tuple[int, int]], rival: list[tuple[int, int]]
) -> str:
    """Name two explanations of a log by what they make of the same row."""
    other = dict(rival)
    both = next(((row, trial) for row, trial in best if other.get(row, trial) != trial), None)
    if both is None:
        row, trial = best[0]
        second = f"{log.row_name(rival[0][0])} with {trials[rival[0][1]].name}"
    else:
        row, trial = both
        second = f"{log.row_name(row)} with {trials[other[row]].name}"
    return (
        f"Two explanations fit about equally well: {log.row_name(row)} with {trials[trial].name} "
        f"({len(best)} rows joined), or {second} ({len(rival)} rows joined). "
        "Trial numbers in both, or an event at irregular times, would decide."
    )


def _listed(names: Iterable[str]) -> str:
    every = list(names)
    rest = len(every) - _MOST_NAMED
    return ", ".join(every) if rest <= 0 else f"{', '.join(every[:_MOST_NAMED])} and {rest} more"
