"""Measures of what a repair does to a signal whose truth is known: in time, in rhythms, with intervals."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

CYCLES = 3.0
"""A rhythm is measured under a Gaussian whose standard deviation is so many radians: short beside a gap's
effects, yet theta, alpha, beta and gamma are told apart."""

LEAST_AMPLITUDE = 0.5
"""Phases count where the true amplitude is at least this part of the channel's median amplitude."""

INTERVAL = (0.025, 0.975)
"""Shares of the draws between which an interval lies."""


@dataclass(frozen=True)
class Band:
    """A rhythm, measured at one frequency.

    Parameters
    ----------
    name : str
    frequency_hz : float
    """

    name: str
    frequency_hz: float


BANDS = (Band("theta", 6.0), Band("alpha", 10.0), Band("beta", 20.0), Band("gamma", 40.0))


@dataclass(frozen=True)
class Interval:
    """A value and where it lies in most of the draws of a bootstrap."""

    value: float
    low: float
    high: float

    def overlaps(self, other: Interval) -> bool:
        """Whether two intervals have a value in common."""
        return self.low <= other.high and other.low <= self.high


def rhythm_weights(times_s: Floats, frequency_hz: float, latency_s: float) -> NDArray[np.complex128]:
    """Weights whose product with a signal is the complex amplitude of a rhythm around an instant.

    Parameters
    ----------
    times_s : array, shape (n_times,)
        Evenly spaced.
    frequency_hz, latency_s : float
        Which rhythm, and when.

    Returns
    -------
    array, shape (n_times,)
        A cosine of amplitude 1 and phase p gives ``exp(i p)``, p counted at the latency; a constant gives 0.

    References
    ----------
    Tallon-Baudry C, Bertrand O, Delpuech C, Pernier J (1996) Stimulus specificity of phase-locked and
    non-phase-locked 40 Hz visual responses in human. J Neurosci 16:4240-4249.
    doi:10.1523/JNEUROSCI.16-13-04240.1996
    """
    since_s = times_s - latency_s
    width_s = CYCLES / (2.0 * np.pi * frequency_hz)
    window = np.exp(-0.5 * (since_s / width_s) ** 2)
    window /= window.sum()
    weights = 2.0 * window * np.exp(-2j * np.pi * frequency_hz * since_s)
    return np.asarray(weights - window * weights.sum())


def amplitude_error(true: NDArray[np.complex64], repaired: NDArray[np.complex64]) -> Floats:
    """Size of the amplitude's error, as a part of the channel's median amplitude.

    Parameters
    ----------
    true, repaired : complex arrays, shape (n_gaps, n_channels)
        Of one rhythm at one latency.

    Returns
    -------
    array, shape (n_gaps, n_channels)
    """
    usual = np.median(np.abs(true), axis=0)
    error = np.abs(np.abs(repaired) - np.abs(true))
    return np.asarray(np.divide(error, usual, out=np.full(true.shape, np.nan), where=usual > 0.0))


def phase_error(true: NDArray[np.complex64], repaired: NDArray[np.complex64]) -> Floats:
    """Size of the phase's error in radians, from 0 to pi; NaN where the rhythm is too small to have a phase.

    Parameters
    ----------
    true, repaired : complex arrays, shape (n_gaps, n_channels)
        Of one rhythm at one latency.

    Returns
    -------
    array, shape (n_gaps, n_channels)
    """
    error = np.abs(np.angle(repaired * np.conj(true))).astype(np.float64)
    size = np.abs(true)
    error[(size < LEAST_AMPLITUDE * np.median(size, axis=0)) | (size == 0.0)] = np.nan
    return error


def draw_counts(n_gaps: int, n_draws: int, seed: int) -> NDArray[np.int64]:
    """How often each gap is taken in each draw of a bootstrap over gaps.

    Channels of one gap are drawn together because they are alike.

    Parameters
    ----------
    n_gaps, n_draws, seed : int
        How many, and of the draws.

    Returns
    -------
    array, shape (n_draws, n_gaps)

    References
    ----------
    Efron B (1979) Bootstrap methods: another look at the jackknife. Ann Stat 7:1-26.
    doi:10.1214/aos/1176344552
    """
    chances = np.full(n_gaps, 1.0 / n_gaps)
    return np.asarray(np.random.default_rng(seed).multinomial(n_gaps, chances, n_draws))


def quantiles(values: Floats, shares: Sequence[float], counts: NDArray[np.int64]) -> tuple[Interval, ...]:
    """Quantiles over gaps and channels, with bootstrap intervals.

    Parameters
    ----------
    values : array, shape (n_gaps, n_channels)
        NaN is left out.
    shares : sequence of float
        Below which share of the values each quantile lies.
    counts : array, shape (n_draws, n_gaps)
        From `draw_counts`.

    Returns
    -------
    tuple of Interval
        One for each share; NaN where there is no value.
    """
    flat = values.ravel()
    order = np.argsort(flat)[: np.isfinite(flat).sum()]
    if not order.size:
        return tuple(Interval(np.nan, np.nan, np.nan) for _ in shares)
    ordered, owner = flat[order], order // values.shape[1]
    of_draws = np.empty((len(counts), len(shares)))
    for draw, count in enumerate(counts):
        total = np.cumsum(count[owner])
        places = np.searchsorted(total, np.array(shares) * total[-1])
        of_draws[draw] = ordered[np.minimum(places, ordered.size - 1)]
    low, high = np.quantile(of_draws, INTERVAL, axis=0)
    return tuple(
        Interval(float(np.quantile(ordered, share)), float(low[i]), float(high[i]))
        for i, share in enumerate(shares)
    )


def ratio_of_sums(above: Floats, below: Floats, counts: NDArray[np.int64]) -> Interval:
    """Sum of one quantity over the sum of another, with a bootstrap interval.

    Parameters
    ----------
    above, below : arrays, shape (n_gaps,)
        Parts of the two sums.
    counts : array, shape (n_draws, n_gaps)
        From `draw_counts`.
    """
    totals = counts @ below
    known = totals > 0.0
    if not below.sum() > 0.0 or not known.any():
        return Interval(np.nan, np.nan, np.nan)
    low, high = np.quantile((counts @ above)[known] / totals[known], INTERVAL)
    return Interval(float(above.sum() / below.sum()), float(low), float(high))


def earliest_below(curve: Floats, limit: float) -> int | None:
    """First place from which on a curve stays below a limit; None if its last value does not.

    Parameters
    ----------
    curve : array, shape (n_times,)
        In order of time.
    limit : float
        In the same unit.
    """
    beyond = np.flatnonzero(~(curve < limit))
    first = int(beyond[-1]) + 1 if beyond.size else 0
    return first if first < len(curve) else None
