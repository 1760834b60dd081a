"""How far from its level the signal still is where the gaps end: what a decay or a step leaves there."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.reading import read_stored
from pulsemend.engine.setup import GapGroup, Setup
from pulsemend.model.recording import Recording
from pulsemend.signal.gaps import merge_spans, window_to_samples

MOST_PULSES = 40
LEAST_PULSES = 5

BEFORE_S = 0.100
"""The level before is the mean of so long before the gap: a whole period of alpha."""

AFTER_S = 0.001
"""The level at the gap's end is the mean of so long after it."""

TOLD_APART = 4.0
"""It counts if it is so many times its own standard error over the pulses."""

Floats = NDArray[np.float64]


def level_left(recording: Recording, setup: Setup, onsets: Sequence[int]) -> Floats:
    """Measure, per channel, the level just after its gaps against that before, median over the pulses.

    Parameters
    ----------
    recording : Recording
        Read around up to 40 gaps per group of channels, spread evenly over the recording.
    setup : Setup
        Gaps and bad stretches.
    onsets : sequence of int
        Recorded samples of pulses that the signal shows.

    Returns
    -------
    array, shape (n_used,)
        Volts; 0 where it is not told apart from what the signal does before the pulses anyway, NaN where
        fewer than five gaps have a clean stretch on both sides.
    """
    left_v = np.full(setup.used.size, np.nan)
    width = max(1, round(AFTER_S * setup.facts.rate_hz))
    before = width * round(BEFORE_S / AFTER_S)
    for group in setup.groups:
        gaps = _clean_gaps(setup, group, onsets, before, width)
        if len(gaps) < LEAST_PULSES:
            continue
        places = np.unique(np.linspace(0, len(gaps) - 1, min(len(gaps), MOST_PULSES)).round().astype(int))
        levels, usual = [], []
        for start, stop in (gaps[place] for place in places):
            x = read_stored(recording, setup, start - before, stop + width)[:, group.columns]
            blocks = x[:before].reshape(-1, width, group.columns.size).mean(axis=1)
            level = blocks.mean(axis=0)
            usual.append(blocks - level)
            levels.append(x[-width:].mean(axis=0) - level)
        found = _told(np.array(levels), np.concatenate(usual))
        left_v[group.columns] = found * setup.scale_v[group.columns]
    return left_v


def _told(levels: Floats, usual: Floats) -> Floats:
    """Medians over the pulses; 0 where the spread, of single pulses or before them, explains them."""
    middle = np.median(levels, axis=0)
    # 1.4826 times the MAD is a standard deviation; the error of a median is 1.2533 times that of a mean.
    spread = np.maximum(np.median(np.abs(levels - middle), axis=0), np.median(np.abs(usual), axis=0))
    error = 1.2533 * 1.4826 * spread / np.sqrt(len(levels))
    return np.where(np.abs(middle) > TOLD_APART * error, middle, 0.0)


def _clean_gaps(
    setup: Setup, group: GapGroup, onsets: Sequence[int], before: int, after: int
) -> list[tuple[int, int]]:
    """Gaps that hold a pulse's own window, with so many samples around them that nothing else touches."""
    rate_hz = setup.facts.rate_hz
    spans = merge_spans(
        [window_to_samples(at, window_s, rate_hz) for at in onsets for window_s in group.windows_s]
    )
    ends = np.sort([window_to_samples(at, group.windows_s[0], rate_hz)[1] for at in onsets])
    segments = setup.facts.segments
    closed = merge_spans(setup.barriers)
    clean = []
    for place, (start, stop) in enumerate(spans):
        first, last = start - before, stop + after
        held = np.searchsorted(ends, [start, stop], side="right")
        if (
            held[0] < held[1]
            and (place == 0 or spans[place - 1][1] <= first)
            and (place + 1 == len(spans) or last <= spans[place + 1][0])
            and not any(lo < last and hi > first for lo, hi in closed)
            and any(lo <= first and last <= hi for lo, hi in segments)
        ):
            clean.append((start, stop))
    return clean
