"""Logs joined with recordings, against the pairs that the generator knows."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.model.log import LogJoin, LogTimes, TrialTime
from pulsemend.readers.log_file import read_log
from pulsemend.resources import sample_folder
from pulsemend.simulate.truth import LOG_DRIFT, LOG_ZERO_S
from pulsemend.trials.log_columns import column_counts, column_times_s
from pulsemend.trials.log_join import join_log
from support.log_cases import Spec, draw, random_spec

FloatArray = NDArray[np.float64]


def trials_at(times_s: Sequence[float | None], numbers: Sequence[int | None] = ()) -> list[TrialTime]:
    return [
        TrialTime(f"trial {place + 1}", time_s, numbers[place] if numbers else None)
        for place, time_s in enumerate(times_s)
    ]


def log_of(times_s: Sequence[float | None], numbers: Sequence[int | None] = ()) -> LogTimes:
    return LogTimes("log.tsv", tuple(times_s), tuple(numbers))


def irregular(n: int, seed: int = 0) -> list[float]:
    return [float(t) for t in np.cumsum(np.random.default_rng(seed).uniform(4.0, 6.0, n))]


def nothing_joined(join: LogJoin, n_rows: int, n_trials: int) -> str:
    assert len(join.pairs) == len(join.doubtful) == len(join.by_order) == 0
    assert join.rows_alone == tuple(range(n_rows))
    assert join.trials_alone == tuple(range(n_trials))
    assert join.clock is None
    assert join.by == ""
    assert "\n" not in join.words
    assert "nothing joined" in join.words
    return join.words


def each_place_once(join: LogJoin, n_rows: int, n_trials: int) -> None:
    rows = [row for row, _ in join.pairs] + list(join.rows_alone)
    rows += [row for doubt in join.doubtful for row in doubt.rows]
    trials = [trial for _, trial in join.pairs] + list(join.trials_alone)
    trials += [trial for doubt in join.doubtful for trial in doubt.trials]
    assert sorted(rows) == list(range(n_rows))
    assert sorted(trials) == list(range(n_trials))


def test_hundred_rows_with_three_lost_and_two_extra_trials() -> None:
    """facts T-6.8: 97 matched, 5 listed, none guessed."""
    rng = np.random.default_rng(68)
    true_s = np.array(irregular(100, 68))
    log_s = true_s * (1.0 - 50e-6) + 900.0 + rng.normal(0.0, 0.001, 100)
    lost = {17, 18, 80}
    extra_s = [float(true_s[40]) + 2.0, float(true_s[99]) + 3.0]
    events = sorted(
        [(float(t), row) for row, t in enumerate(true_s) if row not in lost] + [(t, -1) for t in extra_s]
    )
    join = join_log(log_of(log_s.tolist()), trials_at([time_s for time_s, _ in events]))
    assert set(join.pairs) == {(row, place) for place, (_, row) in enumerate(events) if row >= 0}
    assert len(join.pairs) == 97
    assert join.rows_alone == (17, 18, 80)
    assert join.trials_alone == tuple(place for place, (_, row) in enumerate(events) if row < 0)
    assert join.doubtful == ()
    assert join.clock is not None
    assert join.clock.drift == pytest.approx(50e-6, abs=3 * join.clock.drift_se)
    assert join.words.startswith("log.tsv: 97 of 100 rows joined with 97 of 99 trials, by time.")
    assert "Rows without a trial: 18, 19, 81." in join.words
    assert "standard error" in join.words
    assert "residual spread" in join.words


@pytest.mark.parametrize(
    "n_cases",
    [60, pytest.param(500, marks=pytest.mark.slow)],
)
def test_random_recordings_have_no_wrong_pair(n_cases: int) -> None:
    """Recall at least 0.98 of the pairs that no other event comes near; no pair of strangers.

    A spurious event that chance put where a lost one had been cannot be told from it (`twins`): it is counted
    apart, and must remain rare.
    """
    joined = clear = wrong = twins = pairs = beyond_three = 0
    for seed in range(n_cases):
        rng = np.random.default_rng([7, seed])
        case = draw(rng, random_spec(rng))
        join = join_log(case.log, case.trials)
        each_place_once(join, len(case.log.times_s), len(case.trials))
        strange = set(join.pairs) - case.pairs
        wrong += len(strange - case.twins)
        twins += len(strange & case.twins)
        pairs += len(join.pairs)
        joined += len(case.clear & set(join.pairs))
        clear += len(case.clear)
        assert join.clock is not None, join.words
        beyond_three += abs(join.clock.drift - case.drift) > 3 * join.clock.drift_se
    assert wrong == 0
    assert joined >= 0.98 * clear
    assert twins <= pairs / 1000
    assert beyond_three <= 0.02 * n_cases


INTERVALS: dict[str, Callable[[np.random.Generator, int], FloatArray]] = {
    "anything": lambda rng, n: rng.uniform(4.0, 6.0, n),
    "three lengths": lambda rng, n: rng.choice([4.0, 4.5, 5.0], n),
    "nearly equal": lambda rng, n: rng.normal(5.0, 0.2, n),
    "equal within 50 ms": lambda rng, n: rng.normal(5.0, 0.05, n),
    "on a schedule": lambda rng, n: np.diff(5.0 * np.arange(n + 1) + rng.uniform(-0.1, 0.1, n + 1)),
    "two per trial": lambda rng, n: np.where(np.arange(n) % 2, 5.2, rng.uniform(7.5, 8.5, n)),
}


@pytest.mark.parametrize(
    ("intervals", "n_pairs", "most"),
    [
        ("anything", 200, 60),
        *[(name, 12, 60) for name in INTERVALS if name != "anything"],
        *[pytest.param(name, 100, 200, marks=pytest.mark.slow) for name in INTERVALS],
    ],
)
def test_logs_of_other_recordings_are_never_joined(intervals: str, n_pairs: int, most: int) -> None:
    """Two sessions of the same experiment, from 4 rows up, every second time with equal counts."""
    for seed in range(n_pairs):
        rng = np.random.default_rng([11, seed])
        n_rows, n_trials = (int(n) for n in rng.integers(4, most, 2))
        n_trials = n_rows if seed % 2 else n_trials
        log_s = 500.0 + np.cumsum(INTERVALS[intervals](rng, n_rows))
        recorded_s = np.cumsum(INTERVALS[intervals](rng, n_trials))
        join = join_log(log_of(log_s.tolist()), trials_at(recorded_s.tolist()))
        nothing_joined(join, n_rows, n_trials)


def test_equal_intervals_are_not_guessed() -> None:
    log_s = [100.0 + 5.0 * row for row in range(60)]
    recorded_s = [3.0 + 5.0 * place for place in range(59)]
    words = nothing_joined(join_log(log_of(log_s), trials_at(recorded_s)), 60, 59)
    assert "Two explanations" in words
    assert "row 1 with trial" in words or "row 2 with trial" in words
    # Trial numbers decide.
    join = join_log(log_of(log_s, range(1, 61)), trials_at(recorded_s, range(2, 61)))
    assert join.pairs == tuple((place + 1, place) for place in range(59))
    assert join.rows_alone == (0,)
    assert join.by == "number and time"


def test_equal_intervals_with_losses_are_not_guessed() -> None:
    for seed in range(20):
        rng = np.random.default_rng(seed)
        case = draw(rng, Spec(n=60, lost=0.08, interval_s=(5.0, 5.0)))
        assert join_log(case.log, case.trials).pairs == ()


def test_pauses_between_blocks_of_equal_intervals_decide() -> None:
    steps = np.full(120, 4.0)
    steps[::12] += np.random.default_rng(3).uniform(10.0, 40.0, 10)
    true_s = np.cumsum(steps)
    join = join_log(log_of((true_s + 55.0).tolist()), trials_at(true_s.tolist()))
    assert join.pairs == tuple((place, place) for place in range(120))


def test_a_log_of_a_part_of_the_recording() -> None:
    true_s = irregular(150)
    join = join_log(log_of([t - 7.0 for t in true_s[90:]]), trials_at(true_s))
    assert join.pairs == tuple((row, 90 + row) for row in range(60))
    join = join_log(log_of(true_s), trials_at([t + 9e4 for t in true_s[100:]]))
    assert join.pairs == tuple((100 + place, place) for place in range(50))


def test_a_long_log_with_much_drift() -> None:
    rng = np.random.default_rng(5)
    case = draw(rng, Spec(n=700, drift=-900e-6, lost=0.05, spurious=0.05, jitter_s=0.002))
    join = join_log(case.log, case.trials)
    assert case.clear <= set(join.pairs)
    assert set(join.pairs) <= case.pairs | case.twins


def test_times_in_whole_seconds() -> None:
    rng = np.random.default_rng(9)
    true_s = np.cumsum(rng.uniform(6.0, 9.0, 120))
    join = join_log(log_of(np.floor(true_s + 50585.3).tolist()), trials_at(true_s[20:].tolist()))
    assert join.pairs == tuple((20 + place, place) for place in range(100))
    assert join.clock is not None
    assert join.clock.residual_sd_s == pytest.approx(1 / np.sqrt(12), rel=0.15)  # rounding, evenly spread


def test_copies_beyond_the_tolerance_are_told_from_the_first() -> None:
    true_s = irregular(40)
    times_s: list[float | None] = [*true_s[:20], true_s[19] + 0.05, *true_s[20:]]
    join = join_log(log_of(true_s), trials_at(times_s))
    assert join.trials_alone == (20,)
    assert len(join.pairs) == 40
    times_s[20] = true_s[19] + 0.001
    join = join_log(log_of(true_s), trials_at(times_s))
    assert len(join.pairs) == 39
    assert [(doubt.rows, doubt.trials) for doubt in join.doubtful] == [((19,), (19, 20))]
    assert "row 20, trial 20, trial 21: too near to each other" in join.words


def test_a_row_somewhat_off_is_doubtful() -> None:
    true_s = irregular(40)
    log_s = [t + 0.017 * (row == 12) for row, t in enumerate(true_s)]
    join = join_log(log_of(log_s), trials_at(true_s))
    assert len(join.pairs) == 39
    assert [(doubt.rows, doubt.trials) for doubt in join.doubtful] == [((12,), (12,))]
    assert "beyond the tolerance of 2 ms" in join.words


def test_rows_written_in_another_order_are_joined_by_time() -> None:
    true_s = irregular(40)
    log_s = [*true_s[:10], true_s[11], true_s[10], *true_s[12:]]
    words = nothing_joined(join_log(log_of(log_s), trials_at(true_s)), 40, 40)
    assert "goes back" in words
    assert "row 12" in words
    near_s = [*true_s, true_s[-1] + 0.5]
    log_s = [*near_s[:-2], near_s[-1], near_s[-2]]
    join = join_log(log_of(log_s), trials_at(near_s))
    assert (39, 40) in join.pairs
    assert (40, 39) in join.pairs


def test_rows_and_trials_without_a_time_are_joined_between_their_neighbours() -> None:
    true_s: list[float | None] = list(irregular(40))
    log_s = [None if row == 7 else t for row, t in enumerate(true_s)]
    recorded_s = [None if place in {20, 30, 31} else t for place, t in enumerate(true_s)]
    join = join_log(log_of(log_s), trials_at(recorded_s))
    assert join.by_order == ((7, 7), (20, 20))
    assert set(join.by_order) < set(join.pairs)
    assert join.rows_alone == join.trials_alone == (30, 31)  # two in a row: one of them may be lost
    assert "for want of a time: row 8 with trial 8, row 21 with trial 21." in join.words


def test_numbers_alone() -> None:
    log = log_of([None] * 4, [1, 2, 4, 5])
    join = join_log(log, trials_at([None] * 4, [2, 3, 4, 5]))
    assert join.by == "number"
    assert join.pairs == ((1, 0), (2, 2), (3, 3))
    assert join.rows_alone == (0,)
    assert join.trials_alone == (1,)


def test_two_rows_per_trial_share_a_number() -> None:
    log = log_of([None] * 5, [1, 1, 2, 2, 3])
    join = join_log(log, trials_at([None] * 6, [1, 1, 2, 2, 3, 3]), per_trial=2)
    assert join.pairs == ((0, 0), (1, 1), (2, 2), (3, 3))
    assert join.rows_alone == (4,)  # which of the two it is, nothing tells
    assert join.trials_alone == (4, 5)


def test_times_contradict_some_numbers() -> None:
    true_s = irregular(40)
    numbers = list(range(1, 41))
    wrong = [*numbers[:10], 12, 11, *numbers[12:]]
    join = join_log(log_of(true_s, wrong), trials_at(true_s, numbers))
    assert join.by == "number and time"
    assert join.pairs == tuple((place, place) for place in range(40) if place not in {10, 11})
    assert {row for doubt in join.doubtful for row in doubt.rows} == {10, 11}
    assert "different trial numbers" in join.words


def test_times_contradict_most_numbers() -> None:
    """Numbers that count from 0 on one side, also where intervals are equal but for some milliseconds."""
    nearly_equal = np.cumsum(np.random.default_rng(4).normal(5.0, 0.05, 40)).tolist()
    for true_s in (irregular(40), nearly_equal):
        join = join_log(log_of(true_s, range(40)), trials_at(true_s, range(1, 41)))
        assert "contradict" in nothing_joined(join, 40, 40)


def test_numbers_that_occur_twice() -> None:
    true_s = irregular(6)
    log = log_of(true_s, [1, 2, 3, 3, 5, 6])
    words = nothing_joined(join_log(log, trials_at(true_s, range(1, 7))), 6, 6)
    assert "trial number 3 more than once: row 3, row 4" in words
    words = nothing_joined(join_log(log_of(true_s, range(1, 7)), trials_at(true_s, [1, 2, 3, 4, 5, 5])), 6, 6)
    assert "The recording has trial number 5 more than once: trial 5, trial 6" in words


def test_without_times_equal_counts_join_in_order() -> None:
    join = join_log(log_of([None] * 3), trials_at([1.0, 2.0, 3.0]))
    assert join.by == "order"
    assert join.pairs == join.by_order == ((0, 0), (1, 1), (2, 2))
    words = nothing_joined(join_log(log_of([None] * 4), trials_at([1.0, 2.0, 3.0])), 4, 3)
    assert "4 rows while the recording has 3 trials" in words


@pytest.mark.parametrize(
    ("factor", "advice"), [(1000.0, 'unit = "ms"'), (0.001, 'unit = "s"'), (1e6, "another unit")]
)
def test_times_in_another_unit(factor: float, advice: str) -> None:
    true_s = irregular(40)
    words = nothing_joined(join_log(log_of([factor * t for t in true_s]), trials_at(true_s)), 40, 40)
    assert advice in words


def test_nothing_to_join() -> None:
    assert "no rows" in nothing_joined(join_log(log_of([]), trials_at([1.0])), 0, 1)
    assert "no trials" in nothing_joined(join_log(log_of([1.0]), []), 1, 0)
    words = nothing_joined(join_log(log_of([7.0] * 20), trials_at(irregular(20))), 20, 20)
    assert "same time" in words
    nothing_joined(join_log(log_of([1.0, 2.0]), trials_at([1.0, 2.0])), 2, 2)


def test_a_clock_that_was_set_during_the_session() -> None:
    true_s = irregular(40)
    log_s = [t if row < 20 else t - 90.0 for row, t in enumerate(true_s)]
    words = nothing_joined(join_log(log_of(log_s), trials_at(true_s)), 40, 40)
    assert "goes back" in words
    assert "row 21" in words


def test_the_sample_log() -> None:
    """Two rows per trial; clock zero and drift of `simulate.truth`; the marker file rounds to samples."""
    folder = Path(str(sample_folder()))
    table = read_log(folder / "sub-lt01_task-lantern_log.tsv")
    times_s = column_times_s(table, "arrow_s", "s")
    numbers = column_counts(table, "trial")
    arrows_s = [
        (int(line.split(",")[2]) - 1) / 5000.0  # that format counts from 1
        for line in (folder / "sub-lt01_task-lantern_eeg.vmrk").read_text(encoding="utf-8").splitlines()
        if "arrow" in line and line.startswith("Mk")
    ]
    trials = [
        TrialTime(f"trial {place // 2 + 1} cue{place % 2 + 1}", time_s, place // 2 + 1)
        for place, time_s in enumerate(arrows_s)
    ]
    log = LogTimes(table.name, times_s, numbers)
    join = join_log(log, [replace(trial, number=None) for trial in trials])
    assert join.by == "time"
    assert "prove little" in join.words
    assert join_log(log, trials, per_trial=2).by == "number and time"
    assert join.pairs == join_log(log, trials, per_trial=2).pairs == tuple((n, n) for n in range(len(trials)))
    assert join.clock is not None
    assert join.clock.recorded_s(LOG_ZERO_S) == pytest.approx(0.0, abs=0.002)
    assert join.clock.drift == pytest.approx(1.0 / (1.0 + LOG_DRIFT) - 1.0, abs=4.3 * join.clock.drift_se)
