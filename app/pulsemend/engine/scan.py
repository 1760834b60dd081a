"""Looking through a whole recording for pulses that nobody marked."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.recording import Recording
from pulsemend.progress import Progress, Work
from pulsemend.signal.find import count_pulse_like, usual_steepness

LEAST_SPACING_S = 0.05
"""Pulse-like steps closer together are one event."""

SAMPLED_S = 0.25
MOST_SAMPLED = 40
"""The usual steepness is the median over so many windows of this length; pulses in some do not move it."""

BLOCK_VALUES = 2_000_000


def find_pulse_like(recording: Recording, channels: NDArray[np.intp]) -> Work[tuple[int, ...]]:
    """Find steps that are as steep, and common to as many channels, as only a pulse makes them.

    Parameters
    ----------
    recording : Recording
        Read whole, in blocks.
    channels : array of int
        Good EEG channels of the file.

    Yields
    ------
    Progress

    Returns
    -------
    tuple of int
        Recorded samples, in order.
    """
    facts = recording.facts
    scale_v = np.array([channel.scale_v for channel in facts.channels])[channels]

    def volts(start: int, stop: int) -> NDArray[np.float64]:
        x = np.empty((stop - start, len(facts.channels)))
        recording.read(start, stop, x)
        return np.asarray(x[:, channels] * scale_v)

    length = max(2, round(SAMPLED_S * facts.rate_hz))
    starts = np.linspace(0, max(0, facts.n_samples - length), MOST_SAMPLED).astype(int)
    windows = [volts(start, min(start + length, facts.n_samples)) for start in np.unique(starts)]
    if not any(len(window) > 1 for window in windows):
        return ()
    usual = usual_steepness(windows)
    block = max(1, BLOCK_VALUES // len(facts.channels))
    spacing = max(1, round(LEAST_SPACING_S * facts.rate_hz))
    found: list[int] = []
    for lo, hi in facts.segments:
        for start in range(lo, hi, block):
            yield Progress("looking for pulses", start, facts.n_samples)
            first = max(lo, start - 1)
            events = count_pulse_like(volts(first, min(hi, start + block)), usual, spacing=spacing)
            for event in events.tolist():
                if not found or first + event - found[-1] >= spacing:
                    found.append(first + event)
    return tuple(found)
