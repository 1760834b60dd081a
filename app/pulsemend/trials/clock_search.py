"""Which clock makes a log and a recording the same events: every offset is tried, none is guessed.

1. Every pair of a row and a trial within a stretch of the log votes for an offset, once per drift.
2. The offsets with most votes are grown outward from that stretch: events near each other are paired, the
   clock is fitted to the pairs, the stretch is doubled.
3. The tolerance then follows from the spread of the residuals, until pairs, clock and tolerance agree.

Under one clock the order of events is kept by itself: two pairs can only cross within the tolerance, and
what lies so near is doubtful anyway.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import bdtrc

from pulsemend.model.log import ClockFit
from pulsemend.trials.clock import FloatArray, fit_clock, spread_s, tolerance_s

MOST_DRIFT = 1000e-6
"""Two clocks differ by less than this; crystals of computers and amplifiers by a tenth of it."""
WIDEST_S = (0.03, 0.15, 1.0)
"""Tolerances tried one after the other: exact clocks, clocks bound to frames, times in whole seconds."""
CHANCE = 1e-6
"""How probable a joining by chance may be."""
CHANCE_COMPLETE = 1e-3
"""The same where all rows and all trials are joined, so that no offset was chosen."""

MOST_SPREAD = 0.35
"""Of the widest tolerance; what chance pairs spreads over all of it, which makes 0.58."""

_LEAST_SHARE = dict(zip(WIDEST_S, (0.5, 0.5, 0.75), strict=True))  # of the events that both share
_LEAST_COARSE = 30  # pairs, with the widest tolerance
_LEAST_ROUGHNESS = 1.4  # of 30 independent residuals 1 in 50 are less
_STRETCH = 100  # rows that vote together
_STRETCHES = 5
_PEAKS = 4  # offsets grown per stretch
_MOST_ROUNDS = 20
_SHIFTS = 10  # neighbours that tell how regular the intervals are

IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class Explanation:
    """One clock and what it pairs.

    Parameters
    ----------
    clock : ClockFit
        The clock.
    rows, trials : array of int, shape (n_pairs,)
        Places in the sorted times.
    tolerance_s : float
        Distance up to which events were paired.
    widest_s : float
        The widest distance that this search would have allowed.
    unmatched : int
        Rows and trials of the stretch that log and recording share that are in no pair.
    shared : int
        The smaller number of rows or trials in that stretch.
    """

    clock: ClockFit
    rows: IntArray
    trials: IntArray
    tolerance_s: float
    widest_s: float
    unmatched: int
    shared: int

    @property
    def worth(self) -> float:
        """Number of pairs, each counting more the nearer they are to the clock."""
        return self.rows.size * float(np.log(2.0 * self.widest_s / max(self.clock.residual_sd_s, 1e-5)))


@dataclass(frozen=True)
class Found:
    """The outcome of a search.

    Parameters
    ----------
    best : Explanation or None
        The clock that passed every test; or the one that has a rival.
    rival : Explanation or None
        Another clock that explains about as much.
    """

    best: Explanation | None
    rival: Explanation | None = None


def find_clock(log_s: FloatArray, recorded_s: FloatArray) -> Found:
    """Find the clock under which a log and a recording hold the same events.

    A clock is accepted if all of these hold.

    - It pairs at least half of the events in the stretch that log and recording share (three quarters with
      the widest tolerance), and drifts by no more than 1000 ppm.
    - The residuals keep to its middle: their spread is at most 0.35 of the widest distance allowed. With the
      widest tolerance they are also independent of each other, and at least 30.
    - So many pairs would come about by chance less than once in a million searches: binomial, over all
      offsets and drifts tried. How often a row meets a trial by chance is measured at other offsets, so
      that regular intervals count as what they are.
    - No other clock explains about as much.

    Parameters
    ----------
    log_s, recorded_s : array, shape (n_rows,), (n_trials,)
        Times in ascending order.
    """
    doubtful = Found(None)
    for widest_s in WIDEST_S:
        for stretch in _stretches(log_s.size):
            peaks = _vote(log_s[stretch], recorded_s, widest_s)
            grown = [_grow(log_s, recorded_s, widest_s, stretch, *peak) for peak in peaks]
            able = sorted((one for one in grown if one is not None), key=lambda one: -one.worth)
            if not able or not _fits(able[0], log_s, recorded_s):
                continue
            regular, irregular = _chances(able[0], log_s, recorded_s)
            if irregular > CHANCE:
                continue
            found = Found(able[0], _rival(able, log_s, recorded_s))
            if regular <= CHANCE:
                return found
            # Equal intervals: the clock is no better than others, which a rival shows best.
            if found.rival is not None and doubtful.rival is None:
                doubtful = found
    return doubtful


def near_pairs(
    clock: ClockFit, log_s: FloatArray, recorded_s: FloatArray, within_s: float
) -> tuple[IntArray, IntArray]:
    """Pairs of events that are each other's nearest, no farther apart than a tolerance."""
    mapped = clock.recorded_s(log_s)
    trial_of = _nearest(recorded_s, mapped)
    row_of = _nearest(mapped, recorded_s)
    rows = np.arange(log_s.size)
    good = (row_of[trial_of] == rows) & (np.abs(recorded_s[trial_of] - mapped) <= within_s)
    return rows[good], trial_of[good]


def _nearest(sorted_s: FloatArray, wanted_s: FloatArray) -> IntArray:
    after = np.clip(np.searchsorted(sorted_s, wanted_s), 1, max(sorted_s.size - 1, 1))
    before = after - 1
    after = np.minimum(after, sorted_s.size - 1)
    nearer = np.abs(sorted_s[after] - wanted_s) < np.abs(sorted_s[before] - wanted_s)
    return np.where(nearer, after, before).astype(np.int64)


def _stretches(n_rows: int) -> Iterator[slice]:
    """Stretches of the log, the middle one first."""
    length = min(n_rows, _STRETCH)
    starts = np.linspace(0, n_rows - length, _STRETCHES).round().astype(int)
    middle_first = sorted(set(starts.tolist()), key=lambda start: abs(2 * start - (n_rows - length)))
    for start in middle_first:
        yield slice(start, start + length)


def _vote(log_s: FloatArray, recorded_s: FloatArray, bin_s: float) -> list[tuple[float, float]]:
    """Offsets (recording minus log, in the middle of the stretch) and drifts with most votes, best first."""
    middle_s = (log_s[0] + log_s[-1]) / 2
    x = log_s - middle_s
    span_s = float(x[-1] - x[0])
    # Between two drifts of the grid the ends of the stretch move by one bin.
    steps = int(np.ceil(MOST_DRIFT * span_s / (2.0 * bin_s)))
    lowest = recorded_s[0] - x[-1] - MOST_DRIFT * span_s - bin_s
    votes: list[tuple[int, float, float]] = []
    for drift in np.linspace(-MOST_DRIFT, MOST_DRIFT, 2 * steps + 1) if steps else np.zeros(1):
        place = (recorded_s[None, :] - ((1.0 + drift) * x + lowest)[:, None]) / bin_s
        counts = np.bincount(place.astype(np.int64).ravel())
        counts = counts + np.append(counts[1:], 0)  # two bins, so that no edge divides a heap
        high = np.flatnonzero(2 * counts >= counts.max())  # lower ones are no rivals either
        # Of equal heaps, as equal intervals make them, those that join most: in the middle.
        most = high[np.lexsort((np.abs(high - high.mean()), -counts[high]))[: 2 * _PEAKS]]
        votes += [
            (int(counts[at]), lowest + (at + 1) * bin_s - middle_s, float(drift)) for at in most.tolist()
        ]
    peaks: list[tuple[float, float]] = []
    # Of equal votes the smallest drift is tried first.
    for _, offset_s, drift in sorted(votes, key=lambda vote: (-vote[0], abs(vote[2]))):
        if all(abs(offset_s - other_s) > 4 * bin_s for other_s, _ in peaks):
            peaks.append((offset_s, drift))
        if len(peaks) == _PEAKS:
            break
    return peaks


def _grow(
    log_s: FloatArray,
    recorded_s: FloatArray,
    widest_s: float,
    stretch: slice,
    offset_s: float,
    drift: float,
) -> Explanation | None:
    """Follow a clock outward from the stretch that voted for it; None if it leads nowhere."""
    middle_s = (log_s[stretch][0] + log_s[stretch][-1]) / 2
    reach_s = (log_s[stretch][-1] - log_s[stretch][0]) / 2
    clock = ClockFit(float(middle_s), offset_s, drift, 0.0, 0.0, 0.0, 0)
    within_s = 1.5 * widest_s  # an offset is known to one bin, a drift to one step
    while True:
        inside = np.flatnonzero(np.abs(log_s - middle_s) <= reach_s)
        rows, trials = near_pairs(clock, log_s[inside], recorded_s, within_s)
        fitted = _fitted(log_s[inside][rows], recorded_s[trials])
        if fitted is None:
            return None
        clock, within_s = fitted, widest_s
        if inside.size == log_s.size:
            break
        reach_s = max(2 * reach_s, 1.0)
    return settled(clock, log_s, recorded_s, widest_s)


def settled(
    clock: ClockFit, log_s: FloatArray, recorded_s: FloatArray, widest_s: float
) -> Explanation | None:
    """Repeat pairing, fit and tolerance until they agree."""
    within_s = widest_s
    rows, trials = near_pairs(clock, log_s, recorded_s, within_s)
    for _ in range(_MOST_ROUNDS):
        fitted = _fitted(log_s[rows], recorded_s[trials])
        if fitted is None:
            return None
        clock = fitted
        residual_s = recorded_s[trials] - clock.recorded_s(log_s[rows])
        within_s = min(tolerance_s(max(clock.residual_sd_s, spread_s(residual_s))), widest_s)
        before = (rows, trials)
        rows, trials = near_pairs(clock, log_s, recorded_s, within_s)
        if np.array_equal(rows, before[0]) and np.array_equal(trials, before[1]):
            break
    mapped = clock.recorded_s(log_s)
    n_rows = int(np.sum((mapped >= recorded_s[0] - within_s) & (mapped <= recorded_s[-1] + within_s)))
    n_trials = int(np.sum((recorded_s >= mapped[0] - within_s) & (recorded_s <= mapped[-1] + within_s)))
    unmatched = n_rows + n_trials - 2 * rows.size
    return Explanation(clock, rows, trials, within_s, widest_s, unmatched, min(n_rows, n_trials))


def _fitted(log_s: FloatArray, recorded_s: FloatArray) -> ClockFit | None:
    if np.unique(log_s).size < 3:
        return None
    clock = fit_clock(log_s, recorded_s)
    return clock if abs(clock.drift) <= MOST_DRIFT + 3.0 * clock.drift_se else None


def _fits(one: Explanation, log_s: FloatArray, recorded_s: FloatArray) -> bool:
    """Tell whether enough of what both share is paired, near to the clock, and not by wandering along it."""
    if one.widest_s == WIDEST_S[-1] and (
        one.rows.size < _LEAST_COARSE or _roughness(one, log_s, recorded_s) < _LEAST_ROUGHNESS
    ):
        return False
    return (
        one.rows.size >= _LEAST_SHARE[one.widest_s] * one.shared
        and one.clock.residual_sd_s <= MOST_SPREAD * one.widest_s
        and abs(one.clock.drift) <= MOST_DRIFT
    )


def _roughness(one: Explanation, log_s: FloatArray, recorded_s: FloatArray) -> float:
    """Mean squared step from residual to residual, over their variance.

    2 where residuals are independent, as rounding to seconds makes them; far less where two series of nearly
    equal intervals run beside each other for a while.

    References
    ----------
    von Neumann (1941), Annals of Mathematical Statistics 12, 367-395, doi:10.1214/aoms/1177731677
    """
    residual_s = recorded_s[one.trials] - one.clock.recorded_s(log_s[one.rows])
    return float(np.mean(np.diff(residual_s) ** 2)) / max(float(np.var(residual_s)), 1e-12)


def _chances(one: Explanation, log_s: FloatArray, recorded_s: FloatArray) -> tuple[float, float]:
    """How probable so many pairs are by chance, with intervals as regular as these, and with irregular."""
    span_log_s, span_recorded_s = float(np.ptp(log_s)), float(np.ptp(recorded_s))
    offsets = 1.0 + (span_log_s + span_recorded_s) / (2.0 * one.tolerance_s)
    drifts = 1.0 + MOST_DRIFT * min(span_log_s, span_recorded_s) / one.tolerance_s
    tried = offsets * drifts * len(WIDEST_S)
    anywhere = 2.0 * one.tolerance_s * recorded_s.size / max(span_recorded_s, one.tolerance_s)
    elsewhere = max(anywhere, _met_elsewhere(one, log_s, recorded_s))
    if one.rows.size == log_s.size == recorded_s.size:
        # All rows and all trials are joined in order, so no offset was chosen.
        regular = _chance(one, elsewhere, 1.0) * CHANCE / CHANCE_COMPLETE
    else:
        regular = _chance(one, elsewhere, tried)
    return regular, _chance(one, anywhere, tried)


def _chance(one: Explanation, per_row: float, tried: float) -> float:
    """How probable so many pairs are, if a row meets a trial by chance so often, in so many attempts."""
    n_rows = max(one.shared, one.rows.size)
    return float(tried * bdtrc(one.rows.size - 1, n_rows, per_row)) if per_row < 1.0 else 1.0


def _met_elsewhere(one: Explanation, log_s: FloatArray, recorded_s: FloatArray) -> float:
    """How often a row meets a trial where another row does, at offsets that are not the clock's.

    Regular intervals heap the differences of their times upon few offsets; random ones spread them.
    """
    _, counts = _heaps(one, log_s, recorded_s)
    total = float(counts.sum())
    return float((counts * (counts - 1.0)).sum() / total / one.shared) if total and one.shared else 0.0


def _heaps(one: Explanation, log_s: FloatArray, recorded_s: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Events that meet within the clock's tolerance at other offsets, up to ten trials away.

    Returns
    -------
    shifts_s, counts : array, shape (n_shifts,)
        By how much the clock would be shifted, and how many events would meet.
    """
    mapped = one.clock.recorded_s(log_s)
    shifted = _nearest(recorded_s, mapped)[:, None] + np.arange(-_SHIFTS, _SHIFTS + 1)[None, :]
    real = (shifted >= 0) & (shifted < recorded_s.size)
    apart_s = recorded_s[np.clip(shifted, 0, recorded_s.size - 1)] - mapped[:, None]
    others_s = apart_s[real & (np.abs(apart_s) > 2.0 * one.tolerance_s)]
    bins, counts = np.unique(np.floor(others_s / one.tolerance_s), return_counts=True)
    joined = counts.astype(np.float64)
    neighbours = np.flatnonzero(np.diff(bins) == 1.0)
    joined[neighbours] += counts[neighbours + 1]  # two bins, so that no edge divides a heap
    return (bins + 1.0) * one.tolerance_s, joined


def _rival(able: list[Explanation], log_s: FloatArray, recorded_s: FloatArray) -> Explanation | None:
    """Find another clock that explains about as much as the best one, with its tolerance.

    About as much: at least two thirds of its pairs, and fewer by no more than three and four times the root
    of what it leaves unmatched, which is how far chance moves such counts.
    """
    best = able[0]
    enough = max(2 * best.rows.size / 3, best.rows.size - 3 - 4 * float(np.sqrt(best.unmatched)))
    others = [one.clock for one in able[1:]]
    shifts_s, counts = _heaps(best, log_s, recorded_s)
    if counts.size:
        offset_s = best.clock.offset_s + float(shifts_s[np.argmax(counts)])
        others.append(replace(best.clock, offset_s=offset_s))
    rivals = [settled(clock, log_s, recorded_s, best.tolerance_s) for clock in others]
    here_s = best.clock.centre_s
    good = [
        one
        for one in rivals
        if one is not None
        and one.rows.size >= enough
        and abs(one.clock.recorded_s(here_s) - best.clock.recorded_s(here_s)) > 2.0 * best.tolerance_s
    ]
    return max(good, key=lambda one: one.rows.size, default=None)
