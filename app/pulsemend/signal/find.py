"""Where pulses are in the signal."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
from numpy.typing import NDArray

# A pulse is this many times steeper than the usual sample-to-sample step. Strong muscle activity reaches
# about 30 times, blinks and alpha less than 5; the smallest pulse artifacts, of 0.1 mV, about 200.
PULSE_LIKE_FACTOR = 50.0
# ... in at least this many channels, and in at least half of those given.
PULSE_LIKE_LEAST_CHANNELS = 3


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


def count_pulse_like(
    x_eeg: NDArray[Any],
    usual: float,
    *,
    factor: float = PULSE_LIKE_FACTOR,
    spacing: int = 1,
) -> NDArray[np.intp]:
    """Find steps that are as steep, and common to as many channels, as only a pulse makes them.

    A step counts where ``|x[n] - x[n - 1]|`` is above ``factor * usual`` in at least half of the channels
    and in at least three of them. Blinks and alpha are too slow for that, muscle activity is too
    weak over most channels, and a pop of one electrode is not common to the channels. Meant only
    to notice that a recording holds pulses when none is known.

    Parameters
    ----------
    x_eeg : array, shape (n_samples, n_channels)
        A block of signal, EEG channels only. Blocks of a stream overlap by one sample.
    usual : float
        Usual steepness of this signal, from `usual_steepness`.
    factor : float
        How many times steeper than usual.
    spacing : int
        Steps less than this many samples after the one before belong to the same event.

    Returns
    -------
    array of int, shape (n_events,)
        For each event the first sample of ``x_eeg`` after its first step.
    """
    needed = max(PULSE_LIKE_LEAST_CHANNELS, -(-x_eeg.shape[1] // 2))
    large = np.abs(np.diff(x_eeg, axis=0)) > factor * usual
    steep = np.flatnonzero(np.count_nonzero(large, axis=1) >= needed) + 1
    starts_event = np.diff(steep, prepend=-spacing) >= spacing
    return steep[starts_event]
