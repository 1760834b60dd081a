"""Looking around every pulse for deflections that come again: the stimulator's recharge."""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.estimates import Estimates
from pulsemend.engine.reading import read_stored
from pulsemend.engine.setup import Setup
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import PulseState
from pulsemend.progress import Progress, Work
from pulsemend.signal.find import events_of, steep_samples, usual_steps
from pulsemend.signal.repeats import LockedEvent, Repeat, find_repeats

BEFORE_S, AFTER_S = 0.3, 1.0
"""Searched before and after every pulse, as far as the neighbouring pulses leave room."""

OWN_S = 0.020
"""So long after the onset everything is the pulse's own, muscle included (Mutanen 2013: peaks at 4 to 10 and
8 to 20 ms), and longer if its gap is."""

EDGE_S = 0.005
MOST_PULSES = 100
FACTOR = 8.0
"""A step counts that is so many times the usual of its channel, in three channels at once: more than five
standard deviations of noise. A recharge is much weaker than a pulse."""

JOIN_S = 0.005


def repeats_of(recording: Recording, setup: Setup, estimates: Estimates) -> Work[tuple[Repeat, ...]]:
    """Find what comes again at a latency from the pulses and is not yet part of any gap.

    Parameters
    ----------
    recording : Recording
        Read around up to 100 pulses, spread over it.
    setup : Setup
        Gaps and good channels.
    estimates : Estimates
        Pulses.

    Yields
    ------
    Progress

    Returns
    -------
    tuple of Repeat
        In order of latency; sizes in volts.
    """
    good = setup.eeg & ~setup.bad
    columns = np.flatnonzero(good if good.any() else ~setup.bad)
    onsets = [pulse.sample for pulse in estimates.pulses]
    real = [place for place, one in enumerate(estimates.pulses) if one.state is not PulseState.MARKED_ONLY]
    if not real or columns.size == 0:
        return ()
    chosen = np.unique(np.linspace(0, len(real) - 1, min(len(real), MOST_PULSES)).round().astype(int))
    spans = [_span(setup, onsets, real[place]) for place in chosen]
    rate_hz = setup.facts.rate_hz
    least_step = FACTOR * usual_steps(
        [_volts(recording, setup, columns, span) for span in spans[:: max(1, len(spans) // 10)]]
    )
    events: list[LockedEvent] = []
    searched_s: list[float] = []
    for row, (place, span) in enumerate(zip(chosen.tolist(), spans, strict=True)):
        yield Progress("looking for recharges", row, len(spans))
        onset = onsets[real[place]]
        x = _volts(recording, setup, columns, span)
        at, _, strengths = steep_samples(x, least_step)
        inside = _outside_gaps(setup, (at + span[0] - onset) / rate_hz)
        at, strengths = at[inside], strengths[inside]
        starts, _ = events_of(at, strengths, max(1, round(JOIN_S * rate_hz)))
        for start, following in itertools.pairwise([*starts.tolist(), len(x)]):
            last = int(at[at < following][-1])
            swing = np.abs(x[start - 1 : last + 1] - x[max(0, start - 2)]).max()
            begin_s, end_s = ((one + span[0] - onset) / rate_hz for one in (start, last))
            events.append(LockedEvent(row, begin_s, end_s, float(swing), float(start + span[0])))
        searched_s.append((span[1] - span[0]) / rate_hz)
    amplitudes = [estimates.pulses[real[place]].amplitude_v or 0.0 for place in chosen]
    return find_repeats(events, searched_s, amplitudes)


def _span(setup: Setup, onsets: list[int], place: int) -> tuple[int, int]:
    """Find the samples searched around a pulse: within its segment and short of its neighbours."""
    rate_hz, onset = setup.facts.rate_hz, onsets[place]
    lo, hi = next((s for s in setup.facts.segments if s[0] <= onset < s[1]), (0, setup.facts.n_samples))
    if place:
        lo = max(lo, min(onset, onsets[place - 1] + round(_own_end_s(setup) * rate_hz)))
    if place + 1 < len(onsets):
        hi = min(hi, max(onset + 1, onsets[place + 1] + round(_own_start_s(setup) * rate_hz)))
    return max(lo, onset - round(BEFORE_S * rate_hz)), min(hi, onset + round(AFTER_S * rate_hz))


def _own_start_s(setup: Setup) -> float:
    return min([0.0, *(group.windows_s[0][0] for group in setup.groups)]) - EDGE_S


def _own_end_s(setup: Setup) -> float:
    return max([OWN_S, *(group.windows_s[0][1] + EDGE_S for group in setup.groups)])


def _outside_gaps(setup: Setup, since_s: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Tell which instants since an onset lie neither in the pulse's own time nor in another gap."""
    outside = (since_s < _own_start_s(setup)) | (since_s > _own_end_s(setup))
    for group in setup.groups:
        for start_s, stop_s in group.windows_s[1:]:
            outside &= (since_s < start_s) | (since_s > stop_s)
    return np.asarray(outside)


def _volts(
    recording: Recording, setup: Setup, columns: NDArray[np.intp], span: tuple[int, int]
) -> NDArray[np.float64]:
    x = read_stored(recording, setup, *span)[:, columns]
    return np.asarray(x * setup.scale_v[columns])
