"""How much of an evoked response a fitted decay takes with it: the fit repeated with responses of known size.

Decay and evoked response both repeat with the pulse, so no pulse held back can tell them apart. A response
that is the same after every pulse shifts the median pulse by itself, so the median plus the response is the
median pulse of the recording with that response in it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsemend.signal.decay import DecayFit, Late, fit_again
from pulsemend.signal.decay_amplitudes import block_means
from pulsemend.units import uv_to_v

LATENCIES_S = (0.020, 0.030, 0.040, 0.050, 0.065, 0.080, 0.100, 0.130, 0.160, 0.200)
"""Since the pulse. Earlier responses are as short as a gap's end is near; later ones outlast the stretch."""

SIZES_UV = (3.0, 9.0)
N_DRAWS = 8
"""Responses for each latency, half of them of either polarity."""

WIDTHS = (0.15, 0.30)
"""Standard deviation of a response as a part of its latency: early ones are short."""

INTERVAL = (10.0, 90.0)
"""Percentiles between which most of the draws lie."""

LEAST_RECOVERED = 0.8
"""A response changed by more than the rest counts as altered; common practice: none known."""

_POINTS = 100

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Absorption:
    """Share of a test response that is left after the decay was fitted and subtracted.

    Parameters
    ----------
    latencies_s : array, shape (n_latencies,)
        Of the responses' peaks, since the pulse.
    median, low, high : array, shape (n_latencies,)
        Share over the draws: 1 is all of it, above 1 it came back larger. NaN at latencies within the gap.
    """

    latencies_s: Floats
    median: Floats
    low: Floats
    high: Floats


def absorption(
    times_s: Floats, median_v: Floats, late: Late, fit: DecayFit, since_pulse_s: float, seed: int
) -> Absorption:
    """Add test responses to the median pulse, fit again, and see what comes back.

    Parameters
    ----------
    times_s : array, shape (n_times,)
        Of the stretch that was fitted, from the gap's end.
    median_v : array, shape (n_times,)
        The median pulse, in volts.
    late : Late
        The further points that were fitted, in volts.
    fit : DecayFit
        As fitted to them, with a shape.
    since_pulse_s : float
        The gap's end, from the pulse.
    seed : int
        Of the draws.

    Returns
    -------
    Absorption

    Raises
    ------
    ValueError
        The fit has no shape.
    """
    if fit.shape is None:
        raise ValueError("a fit without a shape absorbs nothing")
    rng = np.random.default_rng(seed)
    n_draws = len(LATENCIES_S) * N_DRAWS
    latency_s = np.repeat(LATENCIES_S, N_DRAWS)[:, None]
    sign = np.tile([1.0, -1.0], n_draws // 2)[:, None]
    size_v = sign * uv_to_v(rng.uniform(*SIZES_UV, (n_draws, 1)))
    width_s = rng.uniform(*WIDTHS, (n_draws, 1)) * latency_s

    def responses(at_s: Floats) -> Floats:
        return np.asarray(size_v * np.exp(-0.5 * ((at_s + since_pulse_s - latency_s) / width_s) ** 2))

    # A hundred points do: what counts is the difference that the response makes. The first has none.
    size = max(1, len(times_s) // _POINTS)
    few_s, few_v = block_means(times_s, size), block_means(median_v, size)
    ys = np.vstack([few_v, few_v + responses(few_s)])
    late_ys = np.vstack([late.y, late.y + responses(late.times_s)])
    without, *again = fit_again(few_s, ys, fit, late, late_ys)
    # Far enough for the last response, at the stretch's own steps.
    reach_s = LATENCIES_S[-1] * (1.0 + 3.0 * WIDTHS[1]) - since_pulse_s
    long_s = np.arange(times_s[0], max(times_s[-1], reach_s), few_s[1] - few_s[0])
    before_v, added_v = (without.shape or fit.shape).at(long_s), responses(long_s)
    shares = np.zeros(n_draws)
    for place, (one, response_v) in enumerate(zip(again, added_v, strict=True)):
        # Where the response hides the decay altogether, nothing of it counts as recovered.
        if one.shape is not None:
            left_v = response_v - (one.shape.at(long_s) - before_v)
            shares[place] = left_v @ response_v / (response_v @ response_v)
    of_latency = shares.reshape(len(LATENCIES_S), N_DRAWS)
    low, median, high = np.percentile(of_latency, [INTERVAL[0], 50.0, INTERVAL[1]], axis=1)
    for values in (low, median, high):
        values[np.array(LATENCIES_S) < since_pulse_s] = np.nan
    return Absorption(np.array(LATENCIES_S), median, low, high)


def altered(found: Absorption, since_pulse_s: Floats) -> NDArray[np.bool_]:
    """Tell at which times a response would not come back as it was.

    Parameters
    ----------
    found : Absorption
        Its median counts, joined by straight lines; before the first and after the last latency it stays.
    since_pulse_s : array, shape (n_times,)
        Times since the pulse.

    Returns
    -------
    bool array, shape (n_times,)
        True where less than `LEAST_RECOVERED` comes back, or as much too much.
    """
    known = np.isfinite(found.median)
    if not known.any():
        return np.ones(len(since_pulse_s), dtype=np.bool_)
    share = np.interp(since_pulse_s, found.latencies_s[known], found.median[known])
    return np.asarray(np.abs(1.0 - share) > 1.0 - LEAST_RECOVERED + 1e-12)
