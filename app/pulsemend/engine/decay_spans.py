"""Where the decays of pulses lie.

A decay is counted in samples from where its pulse's own gap ends; where that gap is joined with another, it
is seen later. It ends where the next pulse's gap begins, at the latest.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Sequence
from dataclasses import dataclass

from pulsemend.engine.setup import GapGroup, Setup
from pulsemend.signal.gaps import window_to_samples


@dataclass(frozen=True)
class DecaySpan:
    """Where the decay of one pulse lies in one group of channels.

    Parameters
    ----------
    pulse : int
        Place among the pulses.
    origin : int
        First sample after the pulse's own gap: time zero of the shape.
    start, stop : int
        Samples in which the decay is subtracted as long as it lasts.
    clean_stop : int
        Samples from `start` to here are in no gap and no bad stretch.
    """

    pulse: int
    origin: int
    start: int
    stop: int
    clean_stop: int


def decay_spans(
    setup: Setup, group: GapGroup, onsets: Sequence[int], segment: tuple[int, int]
) -> list[DecaySpan]:
    """Lay the decays of a group of channels into one contiguous segment, in order of time."""
    lo, hi = segment
    rate_hz = setup.facts.rate_hz
    gaps = setup.lay(group, onsets, segment)
    firsts = [gap.start for gap in gaps]
    owns = [window_to_samples(onset, group.windows_s[0], rate_hz) for onset in onsets]
    spans: list[DecaySpan] = []
    for pulse, (onset, (_, origin)) in enumerate(zip(onsets, owns, strict=True)):
        stop = min(hi, owns[pulse + 1][0]) if pulse + 1 < len(owns) else hi
        # The gap that holds the pulse's last own sample; at the ends of a segment there may be none.
        place = bisect_right(firsts, origin - 1) - 1
        if not lo <= onset < hi or place < 0 or gaps[place].stop < origin:
            continue
        start = gaps[place].stop
        if stop <= start:
            continue
        clean = [gaps[place + 1].start] if place + 1 < len(gaps) else []
        for barrier_start, barrier_stop in setup.barriers:
            if barrier_stop > start:
                clean.append(max(start, barrier_start))
        spans.append(DecaySpan(pulse, origin, start, stop, min([hi, *clean])))
    return spans
