"""First pass: what is learned from a recording before a sample is changed."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.estimates import Estimates, basis
from pulsemend.engine.reading import read_stored
from pulsemend.engine.scan import find_pulse_like
from pulsemend.engine.setup import ExpectedPulse, Setup
from pulsemend.errors import InputError
from pulsemend.model.epochs import Pulse, nearest_sample
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import Fill, PulseState
from pulsemend.progress import Progress, Work
from pulsemend.signal.autocovariance import AutocovarianceSum
from pulsemend.signal.fills import lags_needed
from pulsemend.signal.find import align_onset, usual_steepness
from pulsemend.signal.gaps import merge_spans, window_to_samples

WINDOW_S = 2.0
LEAST_WINDOW_S = 0.1
MOST_WINDOWS = 30
"""Pulse-free signal is sampled in this many windows, spread over the recording: a minute tells a channel's
offset and autocovariance; reading hours more would not change a fill."""

AFTER_PULSE_S = 0.1
"""Kept free after a pulse's last gap, besides the gap itself, because artifacts outlast it."""

STEEPNESS_S = 0.25
"""Of each window as much is used for the usual steepness."""

_STAGE = "learning from the recording"


def fit(recording: Recording, setup: Setup) -> Work[Estimates]:
    """Learn offsets, pulse onsets and autocovariances.

    Parameters
    ----------
    recording : Recording
        Only pulse-free windows and the surroundings of pulses are read; all of it only where no pulse is
        known, to see whether it holds any.
    setup : Setup
        Plan and marks, bound to this recording.

    Yields
    ------
    Progress

    Returns
    -------
    Estimates

    Raises
    ------
    InputError
        No stretch free of pulses is long enough to learn from.
    """
    windows = quiet_windows(setup)
    total = len(windows) + len(setup.pulses)
    judged = _judged_channels(setup)
    sums = _autocovariance_sum(setup)
    scale_v = setup.scale_v.astype(np.float32)
    short = max(2, round(STEEPNESS_S * setup.facts.rate_hz))
    means: list[NDArray[np.float64]] = []
    steep: list[NDArray[np.float64]] = []
    for done, (start, until) in enumerate(windows):
        yield Progress(_STAGE, done, total)
        stop = until if sums is not None else min(until, start + short)
        # Counting from a sample of its own, single precision is enough.
        origin = read_stored(recording, setup, start, start + 1)[0]
        x = read_stored(recording, setup, start, stop, origin, np.float32)
        mean = x.mean(axis=0)
        means.append(origin + mean)
        x -= mean
        x *= scale_v
        if judged.size:
            steep.append(x[:short, judged])
        if sums is not None:
            sums.add(x)
    usual = usual_steepness(steep) if steep else 0.0
    pulses = []
    for done, expected in enumerate(setup.pulses):
        yield Progress(_STAGE, len(windows) + done, total)
        pulses.append(_align(recording, setup, expected, usual, judged))
    unmarked: tuple[int, ...] = ()
    if setup.pulses_known and not setup.pulses and judged.size:
        unmarked = yield from find_pulse_like(recording, setup.used[judged])
    if sums is not None and not sums.n_samples:
        raise InputError(
            "no stretch free of pulses is long enough to learn the signal's autocovariance from",
            where=setup.facts.stem,
            todo='Choose a fill that does not need one, such as pulses.fill = "cubic"',
        )
    return Estimates(
        offset=_offset(setup, means),
        pulses=tuple(sorted(pulses, key=lambda pulse: pulse.sample)),
        usual_steepness=usual,
        autocovariance=None if sums is None else sums.result(),
        unmarked=unmarked,
        rests_on=basis_of(setup),
    )


def quiet_windows(setup: Setup) -> list[tuple[int, int]]:
    """Windows without pulses and bad stretches, spread evenly over the recording, as sample spans."""
    rate = setup.facts.rate_hz
    closed = [*setup.barriers]
    edges = [window_s for group in setup.groups for window_s in group.windows_s]
    first = min([setup.search_s[0], *(w[0] for w in edges)])
    last = max([0.0, *(w[1] for w in edges)]) + max(setup.search_s[1], 0.0) + AFTER_PULSE_S
    closed += [window_to_samples(nearest_sample(p.sample), (first, last), rate) for p in setup.pulses]
    length, least = round(WINDOW_S * rate), max(2, round(LEAST_WINDOW_S * rate))
    windows: list[tuple[int, int]] = []
    for start, stop in _open_stretches(setup.facts.segments, merge_spans(closed)):
        pieces = max(1, (stop - start) // length)
        for piece in range(pieces):
            at = start + piece * length
            if min(at + length, stop) - at >= least:
                windows.append((at, min(at + length, stop)))
    if len(windows) <= MOST_WINDOWS:
        return windows
    # The longest serve best; among equals an even spread.
    chosen = np.linspace(0, len(windows) - 1, MOST_WINDOWS).round().astype(int)
    return [windows[i] for i in chosen]


def _open_stretches(
    segments: Sequence[tuple[int, int]], closed: Sequence[tuple[int, int]]
) -> Iterator[tuple[int, int]]:
    for lo, hi in segments:
        at = lo
        for start, stop in closed:
            if stop <= at or start >= hi:
                continue
            if start > at:
                yield at, start
            at = max(at, stop)
        if at < hi:
            yield at, hi


def _judged_channels(setup: Setup) -> NDArray[np.intp]:
    """Choose the channels by which a pulse is judged: good EEG, or whatever is good if there is none."""
    good = setup.eeg & ~setup.bad
    return np.flatnonzero(good if good.any() else ~setup.bad)


def _autocovariance_sum(setup: Setup) -> AutocovarianceSum | None:
    if setup.fill is not Fill.COVARIANCE or not setup.pulses:
        return None
    spans = [window_to_samples(0, w, setup.facts.rate_hz) for g in setup.groups for w in g.windows_s]
    longest = max(stop - start for start, stop in spans)
    return AutocovarianceSum(setup.used.size, lags_needed(longest, setup.flank))


def _offset(setup: Setup, means: list[NDArray[np.float64]]) -> NDArray[np.float64]:
    """Constant offset in stored units, whole where the file stores units other than volts.

    A whole number of stored units leaves integers integers: float32 then holds them without loss.
    """
    if not setup.removes_offset or not means:
        return np.zeros(setup.used.size)
    offset = np.median(means, axis=0)
    return np.where(setup.scale_v == 1.0, offset, np.round(offset))


def _align(
    recording: Recording, setup: Setup, expected: ExpectedPulse, usual: float, judged: NDArray[np.intp]
) -> Pulse:
    """Find a pulse's onset near its marker; it stays at the marker where the signal shows none."""
    if expected.placed is not None:
        return Pulse(nearest_sample(expected.sample), expected.marked, expected.placed)
    near = nearest_sample(expected.sample)
    rate = setup.facts.rate_hz
    lo, hi = next((s for s in setup.facts.segments if s[0] <= near < s[1]), (0, setup.facts.n_samples))
    first = max(lo, near + math.floor(setup.search_s[0] * rate) - 1)
    stop = min(hi, near + math.ceil(setup.search_s[1] * rate) + 1)
    onset = None
    if stop - first >= 2 and judged.size:
        x = read_stored(recording, setup, first, stop)[:, judged] * setup.scale_v[judged]
        onset = align_onset(x, usual)
    if onset is None:
        return Pulse(min(max(near, 0), setup.facts.n_samples - 1), expected.marked, PulseState.MARKED_ONLY)
    return Pulse(first + 1 + onset, expected.marked, PulseState.ALIGNED)


def basis_of(setup: Setup) -> dict[str, str]:
    """Hash, for every estimate, the settings it rests on."""
    source = [setup.facts.parts, setup.facts.n_samples, setup.used, setup.barriers]
    quiet = [*source, setup.pulses, setup.groups, setup.search_s]
    return {
        "offset": basis(*quiet, setup.removes_offset, setup.fill),
        "pulses": basis(*quiet, setup.bad),
        "usual_steepness": basis(*quiet, setup.bad),
        "autocovariance": basis(*quiet, setup.flank, setup.fill),
    }
