"""What mark a pulse left: its amplitude, how long it is clipped, whether the amplifier held its output."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

LEVEL_S = (0.005, 0.001)
"""The level before a pulse is the median from so long to so long before its onset."""

AMPLITUDE_S = 0.010
"""The amplitude of a pulse is its largest deviation from that level up to then."""

SLOW_S = 0.005
"""Clipping that lasts longer is a slow recovery: the pulse itself is over within 1 ms (Freche 2018)."""

HELD_SHARE = 0.9
HELD_LEAST_S = 0.0005
HELD_LEAST_SAMPLES = 3
"""Held: so many channels keep their values at the same samples, for so long."""

HELD_SLACK = 2
"""The onset rule may find the step up to so many samples after the hold."""

CLIPPED_LEAST_SAMPLES = 3
CLIPPED_ENTRY = 10.0
"""Without a known range, a channel is clipped where it keeps its extreme value for so many samples after a
step of so many times the usual: a smooth peak is entered slowly."""

RANGE_TOLERANCE = 1e-4
"""Share of the range by which converters may stop short of what the file could hold."""

BEFORE_S, AFTER_S = 0.025, 0.060
"""What `describe_pulse` wants to see before and after an onset."""


@dataclass(frozen=True)
class PulseShape:
    """What a pulse looks like in the signal.

    Parameters
    ----------
    amplitude : float
        Largest deviation from the level before within 10 ms, median over the channels.
    clipped_s : float
        From the onset to the end of clipping in the last channel; 0 without clipping.
    held_s : float
        How long before the onset all channels were held; 0 if they were not.
    """

    amplitude: float
    clipped_s: float = 0.0
    held_s: float = 0.0

    @property
    def is_slow(self) -> bool:
        """Whether clipping lasts longer than any pulse."""
        return self.clipped_s > SLOW_S


@dataclass(frozen=True)
class Limits:
    """What is usual and what is possible in each channel.

    Parameters
    ----------
    steps : array, shape (n_channels,)
        Usual size of a step from one sample to the next.
    low, high : array, shape (n_channels,)
        Range of what the file can hold; infinite where it is not known.
    """

    steps: NDArray[np.float64]
    low: NDArray[np.float64]
    high: NDArray[np.float64]


def describe_pulse(
    x: NDArray[Any], onset: int, rate_hz: float, limits: Limits, scale: NDArray[np.float64] | float = 1.0
) -> PulseShape:
    """Tell what mark a pulse left.

    Parameters
    ----------
    x : array, shape (n_samples, n_channels)
        As stored, from `BEFORE_S` before the onset to `AFTER_S` after it, less where the recording ends.
    onset : int
        Place of the onset in ``x``.
    rate_hz : float
        Sampling rate.
    limits : Limits
        In units of ``x``.
    scale : array, shape (n_channels,), or float
        From units of ``x`` to those of the amplitude.

    Returns
    -------
    PulseShape

    Raises
    ------
    ValueError
        The onset is no sample of ``x``.

    References
    ----------
    Freche D, Naim-Feil J, Peled A, Levit-Binnun N, Moses E (2018) PLoS Comput Biol 14(7):e1006177.
    https://doi.org/10.1371/journal.pcbi.1006177
    """
    if not 0 <= onset < len(x):
        raise ValueError(f"onset {onset} of {len(x)} samples")
    amplitude = float(np.median(amplitudes(x, onset, rate_hz) * scale))
    places = np.flatnonzero(clipped_samples(x, onset, limits).any(axis=1))
    clipped_s = (int(places[-1]) + 1) / rate_hz if places.size else 0.0
    return PulseShape(amplitude, clipped_s, held_before(x, onset, rate_hz) / rate_hz)


def amplitudes(x: NDArray[Any], onset: int, rate_hz: float) -> NDArray[np.float64]:
    """Measure a pulse in each channel.

    Parameters
    ----------
    x : array, shape (n_samples, n_channels)
        Signal around the pulse.
    onset : int
        Place of the onset in ``x``.
    rate_hz : float
        Sampling rate.

    Returns
    -------
    array, shape (n_channels,)
        Largest deviation within 10 ms from the level before the onset.
    """
    first, last = (max(0, onset - math.ceil(edge_s * rate_hz)) for edge_s in LEVEL_S)
    before = x[first : max(last, first + 1)]
    after = x[onset : onset + max(1, math.ceil(AMPLITUDE_S * rate_hz))]
    return np.asarray(np.abs(after - np.median(before, axis=0)).max(axis=0), dtype=np.float64)


def clipped_samples(x: NDArray[Any], onset: int, limits: Limits) -> NDArray[np.bool_]:
    """Find clipped samples from the onset on: runs of at least two at an end of the range.

    Where the amplifier's range is smaller than what the file can hold, runs of at least three at the
    channel's extreme count, too, if they are entered steeply and lie far from the level before.

    Parameters
    ----------
    x : array, shape (n_samples, n_channels)
        As stored.
    onset : int
        Place of the onset in ``x``.
    limits : Limits
        In units of ``x``.

    Returns
    -------
    bool array, shape (n_samples - onset, n_channels)
    """
    after = x[onset:]
    width = limits.high - limits.low
    margin = np.where(np.isfinite(width), RANGE_TOLERANCE * width, 0.0)
    at_rail = (after >= limits.high - margin) | (after <= limits.low + margin)
    clipped = _runs(at_rail, 2)
    entry = np.abs(np.diff(x[max(0, onset - 1) :], axis=0))
    if onset == 0:
        entry = np.concatenate([np.zeros((1, x.shape[1]), entry.dtype), entry])
    least = CLIPPED_ENTRY * limits.steps
    is_steep = entry > least
    level = np.median(x[: max(onset, 1)], axis=0)
    for extreme in (after.max(axis=0), after.min(axis=0)):
        flat = _runs(after == extreme, CLIPPED_LEAST_SAMPLES)
        starts = flat & ~np.concatenate([np.zeros((1, x.shape[1]), np.bool_), flat[:-1]])
        clipped |= flat & (starts & is_steep).any(axis=0) & (np.abs(extreme - level) > least)
    return clipped


def held_before(x: NDArray[Any], onset: int, rate_hz: float) -> int:
    """Count the samples for which all channels were held before an onset.

    Sample-and-hold amplifiers keep their output while the pulse is given; what follows is a step. Checks for
    flat signal have to leave these samples out.

    Parameters
    ----------
    x : array, shape (n_samples, n_channels)
        As stored: held samples are equal to the last digit.
    onset : int
        Place of the onset in ``x``.
    rate_hz : float
        Sampling rate.

    Returns
    -------
    int
        From the first held sample to the onset; 0 if the channels were not held.
    """
    if onset < HELD_LEAST_SAMPLES:
        return 0
    least = max(HELD_LEAST_SAMPLES, math.ceil(HELD_LEAST_S * rate_hz))
    same = (np.diff(x[:onset], axis=0) == 0).mean(axis=1) >= HELD_SHARE
    for slack in range(min(HELD_SLACK + 1, same.size)):
        back = same[: same.size - slack][::-1]
        run = int(np.argmin(back)) if not back.all() else back.size
        # Where the resolution is coarse, all channels stay the same for some samples by chance.
        if run + 1 >= max(least, 2 * (_longest_run(back[run:]) + 1)):
            return run + 1 + slack
    return 0


def _longest_run(chosen: NDArray[np.bool_]) -> int:
    edges = np.flatnonzero(np.diff(np.concatenate([[False], chosen, [False]])))
    return int((edges[1::2] - edges[::2]).max(initial=0))


def _runs(chosen: NDArray[np.bool_], least: int) -> NDArray[np.bool_]:
    """Keep the runs along the first axis that are at least so long."""
    if len(chosen) < least:
        return np.zeros_like(chosen)
    n_windows = len(chosen) - least + 1
    whole = np.logical_and.reduce([chosen[shift : shift + n_windows] for shift in range(least)])
    kept = np.zeros_like(chosen)
    for shift in range(least):
        kept[shift : shift + n_windows] |= whole
    return kept
