"""Deflections that come again at a fixed latency from every pulse, such as a stimulator's recharge."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

LINK_S = 0.002
"""Latencies no further apart belong together: so a latency that grows with the amplitude is one, too."""

WIDEST_S = 0.050
LEAST_SEEN = 5
LEAST_SHARE = 0.5
CHANCE_FACTOR = 4.0
"""A repeat is seen at half of the pulses and so many times as often as events elsewhere would make it."""

TAKEN_SHARE = 0.5
FOLLOWS_LEAST = 0.7


@dataclass(frozen=True)
class LockedEvent:
    """One deflection near a pulse.

    Parameters
    ----------
    pulse : int
        Place of the pulse.
    start_s, end_s : float
        Since its onset; negative before it.
    size : float
        Largest deviation in any channel.
    at : float
        Instant in the recording by which the same event is known near another pulse.
    """

    pulse: int
    start_s: float
    end_s: float
    size: float
    at: float


@dataclass(frozen=True)
class Repeat:
    """A deflection that comes again.

    Parameters
    ----------
    latency_s : float
        Median of its begin since the onset; negative: before the pulse.
    first_s, last_s : float
        Earliest begin and latest end.
    n_seen, n_pulses : int
        Pulses that have it, and pulses looked at.
    size : float
        Median over these.
    follows_amplitude : bool
        Whether the latency changes with the pulse's amplitude.
    """

    latency_s: float
    first_s: float
    last_s: float
    n_seen: int
    n_pulses: int
    size: float
    follows_amplitude: bool = False


def find_repeats(
    events: Sequence[LockedEvent], searched_s: Sequence[float], amplitudes: Sequence[float]
) -> tuple[Repeat, ...]:
    """Find latencies at which most pulses have an event.

    Parameters
    ----------
    events : sequence of LockedEvent
        Outside the pulses' own gaps.
    searched_s : sequence of float
        For every pulse how much time was searched.
    amplitudes : sequence of float
        Of the pulses.

    Returns
    -------
    tuple of Repeat
        In order of latency.
    """
    n_pulses = len(searched_s)
    ordered = sorted(events, key=lambda event: event.start_s)
    if not ordered or not n_pulses:
        return ()
    starts = np.array([event.start_s for event in ordered])
    edges = [0, *(np.flatnonzero(np.diff(starts) > LINK_S) + 1), len(ordered)]
    clusters = [ordered[a:b] for a, b in itertools.pairwise(edges)]
    total_s = float(sum(searched_s))
    likely = [one for one in clusters if _is_repeat(one, len(ordered), total_s, n_pulses)]
    # With constant intervals an event lies at a fixed latency after one pulse and before the next: it
    # belongs to the tighter of the two, else to the nearer pulse.
    likely.sort(key=lambda one: (round(_width_s(one) / LINK_S), abs(one[0].start_s)))
    taken: set[float] = set()
    found = []
    for cluster in likely:
        own = {event.at for event in cluster}
        if len(own & taken) > TAKEN_SHARE * len(own):
            continue
        taken |= own
        found.append(_repeat(cluster, n_pulses, np.asarray(amplitudes, dtype=np.float64)))
    return tuple(sorted(found, key=lambda one: one.latency_s))


def _width_s(cluster: Sequence[LockedEvent]) -> float:
    return cluster[-1].start_s - cluster[0].start_s


def _is_repeat(cluster: Sequence[LockedEvent], n_events: int, total_s: float, n_pulses: int) -> bool:
    n_seen = len({event.pulse for event in cluster})
    if n_seen < max(LEAST_SEEN, LEAST_SHARE * n_pulses) or _width_s(cluster) > WIDEST_S:
        return False
    width_s = _width_s(cluster) + 2.0 * LINK_S
    elsewhere = (n_events - len(cluster)) / max(total_s - width_s * n_pulses, width_s * n_pulses)
    return len(cluster) > CHANCE_FACTOR * elsewhere * width_s * n_pulses


def _repeat(cluster: Sequence[LockedEvent], n_pulses: int, amplitudes: NDArray[np.float64]) -> Repeat:
    starts = np.array([event.start_s for event in cluster])
    sizes = amplitudes[[event.pulse for event in cluster]]
    follows = False
    if np.ptp(starts) > LINK_S and np.ptp(sizes) > 0.0:
        follows = bool(abs(np.corrcoef(starts, sizes)[0, 1]) > FOLLOWS_LEAST)
    return Repeat(
        latency_s=float(np.median(starts)),
        first_s=float(starts[0]),
        last_s=max(event.end_s for event in cluster),
        n_seen=len({event.pulse for event in cluster}),
        n_pulses=n_pulses,
        size=float(np.median([event.size for event in cluster])),
        follows_amplitude=follows,
    )
