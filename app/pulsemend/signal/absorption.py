"""How much of an evoked response a fitted decay takes with it: the fit repeated with responses of known size.

Decay and evoked response both repeat with the pulse, so no pulse held back can tell them apart. A response
that is the same after every pulse shifts the median pulse by itself, so the median plus the response is the
median pulse of the recording with that response in it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsemend.signal.decay import DecayShape, fit_shape
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
    times_s: Floats, median_v: Floats, shape: DecayShape, since_pulse_s: float, seed: int
) -> Absorption:
    """Add test responses to the median pulse, fit again, and see what comes back.

    Parameters
    ----------
    times_s : array, shape (n_times,)
        Of the stretch that was fitted, from the gap's end.
    median_v : array, shape (n_times,)
        The median pulse, in volts.
    shape : DecayShape
        As fitted to it.
    since_pulse_s : float
        The gap's end, from the pulse.
    seed : int
        Of the draws.

    Returns
    -------
    Absorption
    """
    rng = np.random.default_rng(seed)
    step_s = float(times_s[1] - times_s[0])
    reach_s = LATENCIES_S[-1] * (1.0 + 3.0 * WIDTHS[1]) - since_pulse_s
    long_s = np.arange(max(len(times_s), round(reach_s / step_s))) * step_s + times_s[0]
    before_v = shape.at(long_s)
    shares = np.full((len(LATENCIES_S), N_DRAWS), np.nan)
    for row, latency_s in zip(shares, LATENCIES_S, strict=True):
        for draw in range(N_DRAWS):
            size_v = uv_to_v(rng.uniform(*SIZES_UV)) * (-1.0) ** draw
            width_s = rng.uniform(*WIDTHS) * latency_s
            if latency_s < since_pulse_s:
                continue
            response_v = size_v * np.exp(-0.5 * ((long_s + since_pulse_s - latency_s) / width_s) ** 2)
            fitted = fit_shape(times_s, median_v + response_v[: len(times_s)], shape.kind, start=shape)
            # Where the response hides the decay altogether, nothing can be told of it.
            if fitted.shape is not None:
                left_v = response_v - (fitted.shape.at(long_s) - before_v)
                row[draw] = float(left_v @ response_v / (response_v @ response_v))
            else:
                row[draw] = 0.0
    usable = np.isfinite(shares).all(axis=1)
    low, median, high = np.full((3, len(LATENCIES_S)), np.nan)
    if usable.any():
        low[usable], median[usable], high[usable] = np.percentile(
            shares[usable], [INTERVAL[0], 50.0, INTERVAL[1]], axis=1
        )
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
