"""Pulses learned from the signal: found, matched with their markers, aligned and described."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.reading import read_stored
from pulsemend.engine.scan import find_pulse_like
from pulsemend.engine.setup import ExpectedPulse, Setup
from pulsemend.model.epochs import Pulse, nearest_sample
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import PulseKind, PulseState
from pulsemend.progress import Work
from pulsemend.signal.find import align_onset
from pulsemend.signal.pulse_kinds import AFTER_S, BEFORE_S, Limits, PulseShape, describe_pulse

_FOUND_SEARCH_S = (-0.005, 0.005)
"""The onset of a pulse found in the signal lies this near to where it was found."""

_EDGE_S = 0.005
"""What lies this near to a gap belongs to its pulse."""


def seek_pulses(
    recording: Recording, setup: Setup, judged: NDArray[np.intp]
) -> Work[tuple[ExpectedPulse, ...]]:
    """Look for pulses in the signal, besides those that are known, and match them with markers.

    Parameters
    ----------
    recording : Recording
        Read whole.
    setup : Setup
        Rules, known pulses, their gaps, and the markers that have to be matched.
    judged : array of int
        The used channels by which pulses are judged.

    Yields
    ------
    Progress

    Returns
    -------
    tuple of ExpectedPulse
        In order of time, where they were found.
    """
    events = yield from find_pulse_like(recording, setup.used[judged], setup.find_rules)
    known = [pulse.sample for pulse in setup.pulses]
    own = _own_pulses(np.array(events, dtype=np.float64), known, setup)
    marked = _matched(own, setup.to_match, setup)
    return tuple(
        ExpectedPulse(float(event), marked.get(place), PulseState.FOUND) for place, event in enumerate(own)
    )


def _own_pulses(events: NDArray[np.float64], known: Sequence[float], setup: Setup) -> list[float]:
    """Events that belong to no known pulse, nor to one another's gaps."""
    rate_hz = setup.facts.rate_hz
    main_s, others_s = _windows_s(setup)
    everything = np.sort(np.concatenate([events, known]))
    inside = np.zeros(events.size, dtype=np.bool_)
    for window_s in others_s:
        inside |= _any_between(events, everything, window_s, rate_hz)
    after_s = max(setup.find_rules.spacing_s, main_s[1])
    reach_s = (min(main_s[0], setup.search_s[0]), max(after_s, setup.search_s[1]))
    inside |= _any_between(events, np.sort(np.array(known, dtype=np.float64)), reach_s, rate_hz)
    denied = np.array(setup.no_pulses, dtype=np.float64)
    inside |= _any_between(events, np.sort(denied), (-_EDGE_S, _EDGE_S), rate_hz)
    own: list[float] = []
    for event in events[~inside].tolist():
        if not own or event - own[-1] > after_s * rate_hz:
            own.append(event)
    return own


def _windows_s(setup: Setup) -> tuple[tuple[float, float], list[tuple[float, float]]]:
    """Give the widest gap around a pulse, and the other gaps, both with their edges."""

    def widened(window_s: tuple[float, float]) -> tuple[float, float]:
        return window_s[0] - _EDGE_S, window_s[1] + _EDGE_S

    if not setup.groups:
        return (0.0, 0.0), []
    gaps = [widened(group.windows_s[0]) for group in setup.groups]
    others = {widened(window_s) for group in setup.groups for window_s in group.windows_s[1:]}
    return (min(gap[0] for gap in gaps), max(gap[1] for gap in gaps)), sorted(others)


def _any_between(
    events: NDArray[np.float64], pulses: NDArray[np.float64], reach_s: tuple[float, float], rate_hz: float
) -> NDArray[np.bool_]:
    """Tell which events have a pulse such that event minus pulse is within reach."""
    first = np.searchsorted(pulses, events - reach_s[1] * rate_hz, side="left")
    last = np.searchsorted(pulses, events - reach_s[0] * rate_hz, side="right")
    return np.asarray(last > first)


def _matched(events: Sequence[float], markers: Sequence[float], setup: Setup) -> dict[int, float]:
    """Give every event at most one marker within the search, nearest pairs first."""
    low, high = (edge_s * setup.facts.rate_hz for edge_s in setup.search_s)
    at = np.array(events)
    pairs = []
    for marker in markers:
        # Both ends count, whatever the last digit of seconds times rate.
        first, last = np.searchsorted(at, [marker + low - 1e-6, marker + high + 1e-6])
        pairs += [(abs(at[place] - marker), place, marker) for place in range(int(first), int(last))]
    found: dict[int, float] = {}
    for _, place, marker in sorted(pairs):
        if place not in found and marker not in found.values():
            found[place] = marker
    return found


def align_pulse(
    recording: Recording, setup: Setup, expected: ExpectedPulse, usual: float, judged: NDArray[np.intp]
) -> Pulse:
    """Find a pulse's onset near its marker; it stays at the marker where the signal shows none.

    Parameters
    ----------
    recording : Recording
        Read around the pulse.
    setup : Setup
        The search.
    expected : ExpectedPulse
        Pulses placed by hand stay where they are.
    usual : float
        Usual steepness in volts per sample.
    judged : array of int
        The used channels by which pulses are judged.
    """
    search_s = setup.search_s
    is_found = expected.placed is PulseState.FOUND
    if is_found:
        search_s = _FOUND_SEARCH_S
    elif expected.placed is not None:
        return Pulse(nearest_sample(expected.sample), expected.marked, expected.placed)
    near = nearest_sample(expected.sample)
    rate_hz = setup.facts.rate_hz
    lo, hi = next((s for s in setup.facts.segments if s[0] <= near < s[1]), (0, setup.facts.n_samples))
    first = max(lo, near + math.floor(search_s[0] * rate_hz) - 1)
    stop = min(hi, near + math.ceil(search_s[1] * rate_hz) + 1)
    onset = None
    if stop - first >= 2 and judged.size:
        x = read_stored(recording, setup, first, stop)[:, judged] * setup.scale_v[judged]
        onset = align_onset(x, usual)
    if is_found:
        state = PulseState.FOUND if expected.marked is None else PulseState.ALIGNED
        return Pulse(near if onset is None else first + 1 + onset, expected.marked, state)
    if onset is None:
        at = min(max(near, 0), setup.facts.n_samples - 1)
        return Pulse(at, expected.marked, PulseState.MARKED_ONLY)
    return Pulse(first + 1 + onset, expected.marked, PulseState.ALIGNED)


def limits_of(setup: Setup, steps_v: NDArray[np.float64], judged: NDArray[np.intp]) -> Limits:
    """Give what is usual and possible in the judged channels, in stored units.

    Parameters
    ----------
    setup : Setup
        Scales and ranges.
    steps_v : array, shape (n_judged,)
        Usual steps in volts.
    judged : array of int
        The used channels by which pulses are judged.
    """
    scale_v = setup.scale_v[judged]
    ranges = [setup.channels[column].range_v or (-np.inf, np.inf) for column in judged]
    edges = np.array(ranges).reshape(-1, 2) / scale_v[:, None]
    return Limits(steps_v / np.abs(scale_v), edges.min(axis=1), edges.max(axis=1))


def with_shape(
    recording: Recording, setup: Setup, pulse: Pulse, limits: Limits, judged: NDArray[np.intp]
) -> Pulse:
    """Add what mark a pulse left in the signal.

    Parameters
    ----------
    recording : Recording
        Read around the pulse.
    setup : Setup
        Channels and segments.
    pulse : Pulse
        Aligned.
    limits : Limits
        From `limits_of`.
    judged : array of int
        The used channels by which pulses are judged.
    """
    segment = next((s for s in setup.facts.segments if s[0] <= pulse.sample < s[1]), None)
    if segment is None or not judged.size:
        return pulse
    lo, hi = segment
    rate_hz = setup.facts.rate_hz
    first = max(lo, pulse.sample - math.ceil(BEFORE_S * rate_hz))
    stop = min(hi, pulse.sample + math.ceil(AFTER_S * rate_hz))
    x = read_stored(recording, setup, first, stop)[:, judged]
    shape = describe_pulse(x, pulse.sample - first, rate_hz, limits, np.abs(setup.scale_v[judged]))
    if pulse.state is PulseState.MARKED_ONLY:
        return replace(pulse, amplitude_v=shape.amplitude)
    return replace(
        pulse,
        kind=_kind(shape),
        amplitude_v=shape.amplitude,
        clipped_s=shape.clipped_s,
        held_s=shape.held_s,
    )


def _kind(shape: PulseShape) -> PulseKind:
    if shape.clipped_s:
        return PulseKind.SLOW if shape.is_slow else PulseKind.CLIPPED
    return PulseKind.HELD if shape.held_s else PulseKind.SPIKE
