"""When a pulse's artifact is over in each channel, by signs that an evoked response lacks."""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum
from typing import Any

import numpy as np
from numpy.typing import NDArray

SEARCH_S = (0.003, 0.060)
"""Before it the pulse itself is there; an artifact that outlasts it is a decay, no matter of a gap."""

BEFORE_S = (0.100, 0.003)
"""What is usual is learned from here to here before the onset."""

AFTER_S = SEARCH_S[1] + 0.010
"""What has to be there after the onset."""

WINDOW_S = 0.010
"""Content above 100 Hz is what a parabola leaves of so long a window that begins at the instant judged: a
filter would carry the pulse itself into it."""

FAST_FACTOR = 1.25
"""... and is a sign where it is so many times the most before the pulse."""

HOP_S = 0.0005
SLOPE_S = 0.002
RARE = 99.9
"""Percentile of single samples before the pulse, over all pulses, beyond which their median is a sign."""

CONCENTRATION = 4.0
COIL_SHARE = 0.9
"""Concentrated at the coil: so many times the median over the channels, in the channels above this quantile
of the pulse's own size."""

CLIPPED_SHARE = 0.05
BREAK_S = 0.005
"""The artifact is over when no sign holds for so long: a recharge later on is none of its own."""

RINGING_BEFORE_S = 0.030
RINGING_FACTOR = 1.5
RINGING_LEAST_CHANNELS = 3
"""Ringing before a pulse: the median pulse leaves so many times the range it has up to 30 ms before, in three
channels."""


_CHANNELS_AT_ONCE = 8


class Sign(StrEnum):
    """What tells an artifact from an evoked response."""

    CLIPPED = "clipped"
    SLOPE = "steeper than the signal before the pulse"
    FAST = "content above 100 Hz"
    COIL = "concentrated at the coil"


@dataclass(frozen=True)
class GapEnd:
    """When the artifact is over in one channel.

    Parameters
    ----------
    end_s : float or None
        Since the onset; None where there is nothing beyond the pulse itself.
    sign : Sign or None
        The sign that holds longest.
    goes_on : bool
        Whether it still holds at the end of the search.
    """

    end_s: float | None = None
    sign: Sign | None = None
    goes_on: bool = False


@dataclass(frozen=True)
class Ringing:
    """What a steep filter of the amplifier puts before the pulse.

    Parameters
    ----------
    start_s : float
        How long before the onset it begins.
    size : float
        Largest deviation of the median pulse, up to the sample before the onset.
    n_channels : int
    """

    start_s: float
    size: float
    n_channels: int


def gap_ends(
    x: NDArray[Any], onset: int, rate_hz: float, clipped_until_s: NDArray[np.float64]
) -> tuple[GapEnd, ...]:
    """Find when the artifact is over in each channel.

    Looked for from 3 to 60 ms after the onset, because an evoked response has none of it: content above
    100 Hz; a slope, median over the pulses, beyond the range of 99.9 % of single slopes before the pulse;
    clipping; and a level beyond 99.9 % of what single pulses have before, in channels near the coil alone.

    Parameters
    ----------
    x : array, shape (n_pulses, n_samples, n_channels)
        From 100 ms before the onsets to `AFTER_S` after them, at least.
    onset : int
        Place of the onsets along the second axis.
    rate_hz : float
        Sampling rate.
    clipped_until_s : array, shape (n_pulses, n_channels)
        Since the onset; 0 without clipping.

    Returns
    -------
    tuple of GapEnd
        One per channel.

    Raises
    ------
    ValueError
        There are too few samples around the onsets.
    """
    before = math.ceil(BEFORE_S[0] * rate_hz)
    if onset < before or x.shape[1] < onset + math.ceil(AFTER_S * rate_hz):
        raise ValueError(f"{x.shape[1]} samples, the onset at {onset}: {before} are wanted before it")
    level_from, level_to = (onset - math.ceil(edge_s * rate_hz) for edge_s in BEFORE_S)
    x = x - np.median(x[:, level_from:level_to], axis=1, keepdims=True)
    hop = max(1, round(HOP_S * rate_hz))
    first, last = (onset + math.ceil(edge_s * rate_hz - 1e-6) for edge_s in SEARCH_S)
    places = np.arange(first, last + 1, hop)
    holds = {
        Sign.CLIPPED: _clipped(clipped_until_s, (places - onset) / rate_hz),
        Sign.SLOPE: _steep(x, places, (level_from, level_to), rate_hz),
        Sign.FAST: _fast(x, places, (level_from, level_to), hop, rate_hz),
        Sign.COIL: _at_coil(x, places, (level_from, level_to), onset),
    }
    return tuple(
        _over(holds, channel, (places - onset) / rate_hz, hop / rate_hz) for channel in range(x.shape[2])
    )


def _clipped(until_s: NDArray[np.float64], at_s: NDArray[np.float64]) -> NDArray[np.bool_]:
    return np.asarray(at_s[:, None] < np.quantile(until_s, 1.0 - CLIPPED_SHARE, axis=0, method="higher"))


def _steep(
    x: NDArray[Any], places: NDArray[np.intp], usual: tuple[int, int], rate_hz: float
) -> NDArray[np.bool_]:
    width = max(1, round(SLOPE_S * rate_hz))
    before = np.abs(x[:, usual[0] + width : usual[1]] - x[:, usual[0] : usual[1] - width])
    rare = np.percentile(before.reshape(-1, x.shape[2]), RARE, axis=0)
    return np.asarray(np.abs(np.median(x[:, places + width] - x[:, places], axis=0)) > rare)


def _fast(
    x: NDArray[Any], places: NDArray[np.intp], usual: tuple[int, int], hop: int, rate_hz: float
) -> NDArray[np.bool_]:
    width = max(5, round(WINDOW_S * rate_hz))
    before = np.arange(usual[0], usual[1] - width + 1, hop)
    found = np.empty((places.size, x.shape[2]), dtype=np.bool_)
    # A few channels at a time: the sums take four times the memory of the signal, in double precision.
    for first in range(0, x.shape[2], _CHANNELS_AT_ONCE):
        columns = slice(first, first + _CHANNELS_AT_ONCE)
        left = _left_of_parabola(x[:, :, columns], np.concatenate([before, places]), width)
        found[:, columns] = left[before.size :] > FAST_FACTOR * left[: before.size].max(axis=0)
    return found


def _left_of_parabola(x: NDArray[Any], places: NDArray[np.intp], width: int) -> NDArray[np.float64]:
    """For every place what a parabola leaves of the window from there, RMS, median over the pulses.

    By running sums of the signal times powers of time, from which the parts along three orthonormal
    polynomials follow.
    """
    monomials = np.vander(np.arange(width, dtype=np.float64), 3, increasing=True)
    _, mixing = np.linalg.qr(monomials)
    unmixing = np.linalg.inv(mixing)
    at = np.arange(x.shape[1], dtype=np.float64)[:, None]
    x = x.astype(np.float64)
    sums = [_running(x), _running(x * at), _running(x * at**2)]
    energy = _running(x**2)
    left = np.empty((places.size, x.shape[2]))
    for row, place in enumerate(places.tolist()):
        zero, one, two = (total[:, place + width] - total[:, place] for total in sums)
        moments = np.stack([zero, one - place * zero, two - 2.0 * place * one + place**2 * zero])
        parts = np.tensordot(unmixing.T, moments, axes=1)
        rest = energy[:, place + width] - energy[:, place] - (parts**2).sum(axis=0)
        left[row] = np.median(np.sqrt(np.maximum(rest, 0.0) / width), axis=0)
    return left


def _running(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Add up all samples before each, along the second axis; one more than there are samples."""
    total = np.zeros((x.shape[0], x.shape[1] + 1, x.shape[2]))
    np.cumsum(x, axis=1, out=total[:, 1:])
    return total


def _at_coil(
    x: NDArray[Any], places: NDArray[np.intp], usual: tuple[int, int], onset: int
) -> NDArray[np.bool_]:
    rare = np.percentile(np.abs(x[:, usual[0] : usual[1]]).reshape(-1, x.shape[2]), RARE, axis=0)
    size = np.abs(np.median(x[:, onset : places[0]], axis=0)).max(axis=0)
    is_near = size >= np.quantile(size, COIL_SHARE)
    level = np.abs(np.median(x[:, places], axis=0))
    return np.asarray(
        is_near & (level > rare) & (level > CONCENTRATION * np.median(level, axis=1, keepdims=True))
    )


def _over(
    holds: dict[Sign, NDArray[np.bool_]], channel: int, at_s: NDArray[np.float64], hop_s: float
) -> GapEnd:
    end_s, deciding = None, None
    any_holds = np.any([rows[:, channel] for rows in holds.values()], axis=0)
    for place in np.flatnonzero(any_holds).tolist():
        if at_s[place] - (SEARCH_S[0] if end_s is None else end_s) > BREAK_S:
            break
        end_s = float(at_s[place]) + hop_s
        deciding = next(sign for sign, rows in holds.items() if rows[place, channel])
    return GapEnd(end_s, deciding, end_s is not None and end_s > float(at_s[-1]))


def ringing_before(x: NDArray[Any], onset: int, rate_hz: float) -> Ringing | None:
    """Find what the median pulse shows before its onset.

    Parameters
    ----------
    x : array, shape (n_pulses, n_samples, n_channels)
        From 100 ms before the onsets, at least.
    onset : int
        Place of the onsets along the second axis.
    rate_hz : float
        Sampling rate.

    Returns
    -------
    Ringing or None
        None where fewer than three channels show anything.
    """
    middle = np.median(x[:, :onset], axis=0)
    quiet = max(1, onset - math.ceil(RINGING_BEFORE_S * rate_hz))
    middle = middle - np.median(middle[:quiet], axis=0)
    # Slow waves of the average would make a wide range; steps from sample to sample do not know them.
    steps = np.abs(np.diff(middle, axis=0))
    most = RINGING_FACTOR * steps[: quiet - 1].max(axis=0)
    loud = steps[quiet - 1 :] > most
    rings = np.flatnonzero(loud.any(axis=0))
    if rings.size < RINGING_LEAST_CHANNELS:
        return None
    begins = np.sort(onset - (quiet + np.argmax(loud[:, rings], axis=0)))
    start = int(begins[-RINGING_LEAST_CHANNELS])
    level = middle[max(0, onset - start - 1)]
    size = float(np.abs(middle[onset - start :] - level)[:, rings].max())
    return Ringing(start / rate_hz, size, int(rings.size))
