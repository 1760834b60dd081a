"""Stretches between pulses, each of which is filtered alone."""

from __future__ import annotations

import math
from bisect import bisect_left, bisect_right
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.setup import Setup
from pulsemend.signal.gaps import merge_spans, window_to_samples

LEAST_S = 0.1
"""A stretch shorter than this between two gaps tells a filter nothing: the gaps count as one."""


@dataclass(frozen=True)
class Stretch:
    """Output samples between two gaps, and how far the gaps beside them reach.

    Parameters
    ----------
    start, stop : int
        Its own output samples, half open.
    gap_before, gap_after : int
        Start of the gap before it and end of the gap after it; the stretch's own edges at a segment's ends.
    """

    start: int
    stop: int
    gap_before: int
    gap_after: int

    def weights(self, first: int, stop: int) -> NDArray[np.float64]:
        """Weight of this stretch in output samples [first, stop): 1 inside, falling across the gaps."""
        at = np.arange(first, stop, dtype=np.float64)
        before, after = self.start - self.gap_before + 1, self.gap_after - self.stop + 1
        rising = (at - self.gap_before + 1) / before
        falling = (self.gap_after - at) / after
        return np.clip(np.minimum(rising, falling), 0.0, 1.0)


def gap_spans(setup: Setup, onsets: Sequence[int]) -> list[tuple[int, int]]:
    """List the recorded samples that every pulse's gap covers in any channel; further gaps do not count."""
    windows = [group.windows_s[0] for group in setup.groups]
    if not windows:
        return []
    widest = (min(start for start, _ in windows), max(stop for _, stop in windows))
    return [window_to_samples(onset, widest, setup.facts.rate_hz) for onset in onsets]


def stretches(
    spans: Sequence[tuple[int, int]], segment: tuple[int, int], ratio: Fraction, rate_hz: float
) -> list[Stretch]:
    """Cut the output samples of one segment into stretches.

    Parameters
    ----------
    spans : sequence of (int, int)
        Gaps, recorded samples, half open.
    segment : (int, int)
        Output samples of the segment, half open.
    ratio : Fraction
        Output over recorded rate.
    rate_hz : float
        Output rate.

    Returns
    -------
    list of Stretch
        In order; together with the gaps between them they cover the segment.
    """
    lo, hi = segment
    least = max(1, round(LEAST_S * rate_hz))
    gaps = merge_spans(
        [
            # Gaps nearer to each other or to an end than `least` become one.
            (max(lo, math.ceil(start * ratio)), min(hi, math.floor((stop - 1) * ratio) + 1) + least)
            for start, stop in spans
        ]
    )
    edges = [(start, stop - least) for start, stop in gaps if stop - least >= lo and start <= hi]
    edges = [(start, stop) for start, stop in edges if start - lo >= least and hi - stop >= least]
    starts = [lo, *(stop for _, stop in edges)]
    stops = [*(start for start, _ in edges), hi]
    gaps_before = [lo, *(start for start, _ in edges)]
    gaps_after = [*(stop for _, stop in edges), hi]
    return [Stretch(*one) for one in zip(starts, stops, gaps_before, gaps_after, strict=True)]


def overlapping(found: Sequence[Stretch], first: int, stop: int) -> list[tuple[int, Stretch]]:
    """Stretches with a weight in [first, stop), with their places."""
    low = bisect_right(found, first, key=lambda one: one.gap_after)
    high = bisect_left(found, stop, key=lambda one: one.gap_before)
    return list(enumerate(found))[low:high]
