"""Where pulses are in the signal."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

# A pulse is this many times steeper than the usual sample-to-sample step. Strong muscle activity reaches
# about 30 times, blinks and alpha less than 5; the smallest pulse artifacts, of 0.1 mV, about 200.
PULSE_LIKE_FACTOR = 50.0
# ... in at least this many channels: a pop is one electrode's.
PULSE_LIKE_LEAST_CHANNELS = 3
# ... and in half of them, or else so many times steeper than the steeper tenth of the steps just before.
# The largest of a million steps of muscle activity is about 3 times as large as these.
LOCAL_FACTOR = 8.0

COMPANIONS_LEAST = 5
COMPANION_SHARE = 0.25
COMPANION_WITHIN_S = 0.005
COMPANION_LONGEST_S = 1.0


def steepness(x: NDArray[Any]) -> NDArray[np.float64]:
    """Sample-to-sample steps that are common to the channels.

    Parameters
    ----------
    x : array, shape (n_samples, n_channels)
        float32 or float64.

    Returns
    -------
    array, shape (n_samples - 1,)
        Entry ``i`` is the median over the channels of ``|x[i + 1] - x[i]|``, in units of ``x``.
    """
    return np.asarray(np.median(np.abs(np.diff(x, axis=0)), axis=1), dtype=np.float64)


def usual_steepness(windows: Iterable[NDArray[Any]]) -> float:
    """Median of the steepness over pulse-free signal.

    Where resolution is so coarse that most steps are zero, the zeros are left out: a single step of
    the converter would otherwise count as many times the usual.

    Parameters
    ----------
    windows : iterable of array, shape (n_samples, n_channels)
        Each contiguous in itself.

    Returns
    -------
    float
        In units of the windows.

    Raises
    ------
    ValueError
        If no window has two samples.
    """
    values = [steepness(x) for x in windows if len(x) > 1]
    if not values:
        raise ValueError("the usual steepness needs a window of at least two samples")
    steps = np.concatenate(values)
    usual = float(np.median(steps))
    return usual if usual > 0.0 or not steps.any() else float(np.median(steps[steps > 0.0]))


def align_onset(x_eeg: NDArray[Any], usual: float, at_least: float = 5.0) -> int | None:
    """Find the onset of a pulse in its search window.

    The onset is the first sample ``n`` of the search window at which the steepness, the median over
    channels of ``|x[n] - x[n - 1]|``, reaches a quarter of its maximum over the window: the sample
    after the first large step, not the one before it.

    Parameters
    ----------
    x_eeg : array, shape (1 + n_window, n_channels)
        One sample before the search window, then the window. EEG channels only.
    usual : float
        Usual steepness of this signal, from `usual_steepness`.
    at_least : float
        How many times its usual value the maximum must exceed.

    Returns
    -------
    int or None
        Onset counted from the first sample of the search window, so 0 is ``x_eeg[1]``; None if
        the maximum is not above ``at_least`` times the usual value: marked, not in the signal.

    Raises
    ------
    ValueError
        If the window is empty.
    """
    if len(x_eeg) < 2:
        raise ValueError(f"the search window needs a sample and the one before it; received {len(x_eeg)}")
    steps = steepness(x_eeg)
    highest = steps.max()
    if not highest > at_least * usual:
        return None
    return int(np.argmax(steps >= highest / 4.0))


def usual_steps(windows: Sequence[NDArray[Any]]) -> NDArray[np.float64]:
    """Find what steps are usual in each channel.

    Parameters
    ----------
    windows : sequence of array, shape (n_samples, n_channels)
        Each contiguous in itself; pulses in a few of them do not matter.

    Returns
    -------
    array, shape (n_channels,)
        Median of ``|x[n] - x[n - 1]|`` of the channel, or the steepness that is usual over all channels if
        that is more: a dead channel must not make every step of it unusual, nor a loud one hide the others.

    Raises
    ------
    ValueError
        If no window has two samples.
    """
    common = usual_steepness(windows)
    steps = np.concatenate([np.abs(np.diff(x, axis=0)) for x in windows if len(x) > 1])
    return np.asarray(np.maximum(np.median(steps, axis=0), common), dtype=np.float64)


def steep_samples(
    x_eeg: NDArray[Any], least_step: NDArray[np.float64] | float
) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.float64]]:
    """Find the samples at which at least three channels make a large step.

    Parameters
    ----------
    x_eeg : array, shape (n_samples, n_channels)
        A block of signal, EEG channels only. Blocks of a stream overlap by one sample.
    least_step : array, shape (n_channels,), or float
        A step of a channel counts from this size on.

    Returns
    -------
    samples : array of int
        Places in ``x_eeg`` of the samples after these steps.
    counts : array of int
        How many channels make one.
    strengths : array
        How many times `least_step` the steps are: 90th percentile over the channels.
    """
    steps = np.diff(x_eeg, axis=0)
    np.abs(steps, out=steps)
    counts = np.count_nonzero(steps > np.asarray(least_step, dtype=steps.dtype), axis=1)
    rows = np.flatnonzero(counts >= PULSE_LIKE_LEAST_CHANNELS)
    if not rows.size:
        return rows, counts[rows], np.zeros(0)
    relative = steps[rows] / np.maximum(least_step, np.finfo(np.float64).tiny)
    return rows + 1, counts[rows], np.percentile(relative, 90.0, axis=1)


def common_to_many(counts: NDArray[np.intp], n_channels: int) -> NDArray[np.bool_]:
    """Tell whether steps are common to so many channels that they need no further proof: half of them."""
    return counts >= max(PULSE_LIKE_LEAST_CHANNELS, -(-n_channels // 2))


def local_steps(x_beside: NDArray[Any]) -> NDArray[np.float64]:
    """Find what steps a pulse must exceed in each channel, by the signal just before or after it.

    Muscle activity makes steep steps in several channels, but for longer: a step that stands out from the
    tenth of a second on either side is none of them. The 90th percentile of ``|x[n] - x[n - 1]|`` is hardly
    moved by other pulses of a train.

    Parameters
    ----------
    x_beside : array, shape (n_samples, n_channels)
        A tenth of a second, of at least two samples.

    Returns
    -------
    array, shape (n_channels,)
    """
    largest = np.percentile(np.abs(np.diff(x_beside, axis=0)), 90.0, axis=0)
    return np.asarray(LOCAL_FACTOR * largest, dtype=np.float64)


def events_of(
    samples: NDArray[np.intp], strengths: NDArray[np.float64], spacing: int
) -> tuple[NDArray[np.intp], NDArray[np.float64]]:
    """Join steps less than `spacing` samples after the one before into events.

    Parameters
    ----------
    samples : array of int, shape (n,)
        In order.
    strengths : array, shape (n,)
        Of the steps.
    spacing : int
        In samples.

    Returns
    -------
    starts : array of int
        First sample of every event.
    strengths : array
        The largest of every event.
    """
    if not samples.size:
        return samples, strengths
    starts = np.flatnonzero(np.diff(samples, prepend=samples[0] - spacing) >= spacing)
    return samples[starts], np.maximum.reduceat(strengths, starts)


def companions(events: NDArray[np.intp], strengths: NDArray[np.float64], rate_hz: float) -> NDArray[np.bool_]:
    """Tell weak events that keep a fixed distance to strong ones from pulses.

    A stimulator that recharges leaves a deflection of its own, at the same latency after the pulse or
    shortly before the next. It is a companion, no pulse: weaker than a quarter of what is usual for strong
    events, and within 5 ms of one latency (up to a second) for at least half of the strong events.

    Parameters
    ----------
    events : array of int, shape (n,)
        Recorded samples, in order.
    strengths : array, shape (n,)
        Of the events.
    rate_hz : float
        Sampling rate.

    Returns
    -------
    array of bool, shape (n,)
    """
    found = np.zeros(events.size, dtype=np.bool_)
    if events.size < 2 * COMPANIONS_LEAST:
        return found
    is_weak = strengths < COMPANION_SHARE * np.percentile(strengths, 75.0)
    weak, strong = np.flatnonzero(is_weak), events[~is_weak]
    if weak.size < COMPANIONS_LEAST:
        return found
    after = np.searchsorted(strong, events[weak])
    for places, inside in ((after - 1, after > 0), (after, after < strong.size)):
        latency_s = (events[weak] - strong[np.clip(places, 0, strong.size - 1)]) / rate_hz
        inside = inside & (np.abs(latency_s) <= COMPANION_LONGEST_S)
        if np.count_nonzero(inside) < COMPANIONS_LEAST:
            continue
        locked = inside & (np.abs(latency_s - np.median(latency_s[inside])) <= COMPANION_WITHIN_S)
        if np.count_nonzero(locked) >= max(COMPANIONS_LEAST, strong.size / 2):
            found[weak[locked]] = True
    return found
