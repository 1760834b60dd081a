"""Which samples around a pulse are replaced, and how much good signal lies on either side of them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

# Products such as 0.015 s x 5000 Hz miss whole numbers by rounding; no setting means a millionth of a sample.
_TOLERANCE_SAMPLES = 1e-6


@dataclass(frozen=True)
class Gap:
    """The samples that one repair replaces: ``start <= n < stop``.

    Attributes
    ----------
    start, stop : int
        First sample of the gap and first sample after it.
    left, right : int
        Number of good flank samples directly before and directly after the gap.
    """

    start: int
    stop: int
    left: int
    right: int

    @property
    def size(self) -> int:
        """Number of samples replaced."""
        return self.stop - self.start


def window_to_samples(onset: int, window_s: tuple[float, float], rate_hz: float) -> tuple[int, int]:
    """Convert to samples a closed time window around an onset.

    The window is covered whole: an edge between two samples takes the outer one.

    Parameters
    ----------
    onset : int
        Sample at which the window's time is zero.
    window_s : tuple of float
        First and last instant of the window in seconds from the onset, both included.
    rate_hz : float
        Sampling rate in hertz.

    Returns
    -------
    tuple of int
        First sample, and first sample after the window.

    Raises
    ------
    ValueError
        If the window ends before it starts.
    """
    first_s, last_s = window_s
    if last_s < first_s:
        raise ValueError(f"window_s must not end before it starts; received {window_s}")
    first = math.floor(first_s * rate_hz + _TOLERANCE_SAMPLES)
    last = math.ceil(last_s * rate_hz - _TOLERANCE_SAMPLES)
    return onset + first, onset + last + 1


def merge_spans(spans: Sequence[tuple[int, int]]) -> list[tuple[int, int]]:
    """Sort half-open sample spans and join those that overlap or touch; empty ones vanish."""
    merged: list[tuple[int, int]] = []
    for start, stop in sorted(spans):
        if stop <= start:
            continue
        if merged and start <= merged[-1][1]:
            merged[-1] = (merged[-1][0], max(stop, merged[-1][1]))
        else:
            merged.append((start, stop))
    return merged


def lay_gaps(
    spans: Sequence[tuple[int, int]],
    flank: int,
    lo: int,
    hi: int,
    barriers: Sequence[tuple[int, int]] = (),
) -> list[Gap]:
    """Turn the spans to be replaced in one contiguous segment into gaps with their usable flanks.

    A flank ends early at a neighbouring gap, at either end of the segment and at a barrier, so that a
    fill never learns from samples that are replaced or bad. A barrier that reaches over an edge of
    a gap leaves no flank on that side; one that lies inside a gap changes nothing.

    Parameters
    ----------
    spans : sequence of tuple of int
        Half-open spans to replace, in any order, overlapping or not.
    flank : int
        Number of flank samples wanted on either side.
    lo, hi : int
        First sample of the segment and first sample after it. Spans are clipped to it.
    barriers : sequence of tuple of int
        Half-open spans that no flank may touch, such as bad stretches.

    Returns
    -------
    list of Gap
        In order of time.
    """
    clipped = [(max(start, lo), min(stop, hi)) for start, stop in merge_spans(spans)]
    inside = [(start, stop) for start, stop in clipped if start < stop]
    closed = merge_spans(barriers)
    gaps: list[Gap] = []
    for place, (start, stop) in enumerate(inside):
        good_from = inside[place - 1][1] if place else lo
        good_to = inside[place + 1][0] if place + 1 < len(inside) else hi
        for barrier_start, barrier_stop in closed:
            if barrier_start < start:
                good_from = max(good_from, min(barrier_stop, start))
            if barrier_stop > stop:
                good_to = min(good_to, max(barrier_start, stop))
        gaps.append(Gap(start, stop, left=min(flank, start - good_from), right=min(flank, good_to - stop)))
    return gaps


def shortened(gap: Gap, flank: int) -> bool:
    """Whether a gap has fewer good samples than wanted on at least one side."""
    return gap.left < flank or gap.right < flank
