"""What keeps a log from being joined at all, in words."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from itertools import pairwise

import numpy as np

from pulsemend.model.log import LogTimes, TrialTime

LEAST_TIMED = 3
"""Pairs that a clock needs."""

_UNIT_RATIO = 100.0  # intervals of log and recording so far apart are in different units
_LONGEST_BACK_S = 1.0  # rows written in another order than they happened


def unusable(log: LogTimes, trials: Sequence[TrialTime]) -> str:
    """Say why nothing can be joined whatever the method; "" if it can be tried."""
    if not log.times_s:
        return "The log has no rows."
    if not trials:
        return "The recording has no trials to join it with."
    present = [(row, time) for row, time in enumerate(log.times_s) if time is not None]
    for (_, before_s), (row, time_s) in pairwise(present):
        if time_s < before_s - _LONGEST_BACK_S:
            return (
                f"Its time goes back from {before_s:.3f} to {time_s:.3f} s at {log.row_name(row)}. "
                "If the task program was started again, give each part its own log."
            )
    return _other_unit(
        [time for _, time in present], [one.time_s for one in trials if one.time_s is not None]
    )


def _other_unit(log_s: list[float], recorded_s: list[float]) -> str:
    """Advise on the unit where the intervals of the two are of different size."""
    if len(log_s) < LEAST_TIMED or len(recorded_s) < LEAST_TIMED:
        return ""
    log_step_s, step_s = _usual_step(log_s), _usual_step(recorded_s)
    if log_step_s == 0.0:
        return "Most of its rows have the same time. Name another column as time."
    ratio = log_step_s / step_s if step_s else 1.0
    if 1.0 / _UNIT_RATIO < ratio < _UNIT_RATIO:
        return ""
    steps = f"From row to row it usually advances by {log_step_s:.6g} s, the recording by {step_s:.6g} s."
    if _UNIT_RATIO < ratio < _UNIT_RATIO**2:
        return f'{steps} Its times look like milliseconds: write unit = "ms".'
    if _UNIT_RATIO < 1.0 / ratio < _UNIT_RATIO**2:
        return f'{steps} Its times look like seconds: write unit = "s".'
    return f"{steps} Its times are in another unit, or this is another column."


def _usual_step(times_s: list[float]) -> float:
    return float(np.median(np.diff(np.sort(times_s))))


def numbers_twice(log: LogTimes, trials: Sequence[TrialTime], per_trial: int) -> str:
    """Name the first trial number that occurs too often on either side."""
    sides = (
        ("The log", [log.number(row) for row in range(len(log.times_s))], log.row_name),
        ("The recording", [trial.number for trial in trials], lambda place: trials[place].name),
    )
    for side, numbers, name in sides:
        counts = Counter(number for number in numbers if number is not None)
        often = [number for number, count in counts.items() if count > per_trial]
        if often:
            places = [name(place) for place, number in enumerate(numbers) if number == often[0]]
            more = f" ({len(often)} numbers occur too often)" if len(often) > 1 else ""
            return (
                f"{side} has trial number {often[0]} more than "
                f"{'once' if per_trial == 1 else f'{per_trial} times'}: {', '.join(places[:4])}{more}. "
                "Correct the numbers, or leave them out of the plan to join by time alone."
            )
    return ""
