"""Random recordings with their logs, and the pairs that the generator knows."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.log import LogTimes, TrialTime

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Case:
    """One recording and its log.

    `pairs` are the rows and trials of the same event, copies left out. `clear` are those of them that no
    other event comes near, and `twins` what could be taken for a pair although it is none: an event that
    fell, by chance, where a lost one had been. Both are decided by comparing every row with every trial on
    the true clock, with the true jitter.
    """

    log: LogTimes
    trials: tuple[TrialTime, ...]
    drift: float
    jitter_s: float
    pairs: frozenset[tuple[int, int]]
    clear: frozenset[tuple[int, int]]
    twins: frozenset[tuple[int, int]]


@dataclass(frozen=True)
class Spec:
    """What one recording is drawn with."""

    n: int
    jitter_s: float = 0.001
    offset_s: float = 4711.0
    drift: float = 50e-6
    lost: float = 0.0
    doubled: float = 0.0
    spurious: float = 0.0
    interval_s: tuple[float, float] = (4.0, 6.0)


def random_spec(rng: np.random.Generator) -> Spec:
    """Draw everything within the bounds of the issue."""
    shortest_s = rng.uniform(1.5, 8.0)
    return Spec(
        n=int(rng.integers(20, 201)),
        jitter_s=float(rng.uniform(0.0002, 0.003)),
        offset_s=float(rng.uniform(-1e5, 1e5)),
        drift=float(rng.uniform(-200e-6, 200e-6)),
        lost=float(rng.uniform(0.0, 0.1)),
        doubled=float(rng.uniform(0.0, 0.1)),
        spurious=float(rng.uniform(0.0, 0.1)),
        interval_s=(shortest_s, shortest_s + float(rng.uniform(0.5, 3.0))),
    )


def draw(rng: np.random.Generator, spec: Spec) -> Case:
    """Draw one recording and its log; the log's second is as long as 1 + drift seconds of the recording."""
    true_s = np.cumsum(rng.uniform(*spec.interval_s, spec.n))
    log_true_s, log_event = _one_side(rng, spec, true_s)
    recorded_true_s, recorded_event = _one_side(rng, spec, true_s)
    log_order, recorded_order = np.argsort(log_true_s), np.argsort(recorded_true_s)
    log_true_s, log_event = log_true_s[log_order], log_event[log_order]
    recorded_s, recorded_event = recorded_true_s[recorded_order], recorded_event[recorded_order]
    log_s = log_true_s / (1.0 + spec.drift) + spec.offset_s
    apart_s = np.abs(log_true_s[:, None] - recorded_s[None, :])
    near = apart_s <= max(12.0 * spec.jitter_s, 0.004)
    same = (log_event[:, None] == recorded_event[None, :]) & (log_event[:, None] >= 0)
    alone = (near.sum(axis=1)[:, None] == 1) & (near.sum(axis=0)[None, :] == 1)
    return Case(
        log=LogTimes("log.tsv", tuple(log_s.tolist())),
        trials=tuple(TrialTime(f"trial {at + 1}", time_s) for at, time_s in enumerate(recorded_s.tolist())),
        drift=spec.drift,
        jitter_s=spec.jitter_s,
        pairs=_places(same),
        clear=_places(same & near & alone),
        twins=_places(near & ~same),
    )


def _one_side(
    rng: np.random.Generator, spec: Spec, true_s: FloatArray
) -> tuple[FloatArray, NDArray[np.int64]]:
    """Times as one clock saw them, and which event each is: -1 for copies and for what never happened."""
    kept = np.flatnonzero(rng.random(spec.n) >= spec.lost)
    times_s = true_s[kept] + rng.normal(0.0, spec.jitter_s, kept.size)
    copied = times_s[rng.random(kept.size) < spec.doubled]
    copies_s = copied + rng.uniform(0.001, 0.4, copied.size)
    strange_s = rng.uniform(0.0, true_s[-1], int((rng.random(spec.n) < spec.spurious).sum()))
    nothing = np.full(copies_s.size + strange_s.size, -1)
    return np.concatenate([times_s, copies_s, strange_s]), np.concatenate([kept, nothing])


def _places(found: NDArray[np.bool_]) -> frozenset[tuple[int, int]]:
    return frozenset((int(row), int(trial)) for row, trial in np.argwhere(found))
