"""First pass: what is learned from a recording before a sample is changed."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.bad_channels import ChannelSearch
from pulsemend.engine.decay import learn_decay
from pulsemend.engine.decay_stretches import BackgroundSum
from pulsemend.engine.estimates import Estimates, basis
from pulsemend.engine.level_left import level_left
from pulsemend.engine.onsets import OnsetShift, measure_onsets
from pulsemend.engine.pulses import align_pulse, limits_of, seek_pulses, with_shape
from pulsemend.engine.reading import read_stored
from pulsemend.engine.scan import find_pulse_like
from pulsemend.engine.setup import ExpectedPulse, Setup
from pulsemend.errors import InputError
from pulsemend.model.epochs import nearest_sample
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import Decay, Fill, PulseState
from pulsemend.progress import Progress, Work
from pulsemend.signal.autocovariance import AutocovarianceSum
from pulsemend.signal.fills import lags_needed
from pulsemend.signal.find import usual_steepness, usual_steps
from pulsemend.signal.gaps import merge_spans, window_to_samples
from pulsemend.units import ms_to_s

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
    judged = _judged_channels(setup)
    found: tuple[ExpectedPulse, ...] = ()
    if setup.seeks_pulses and judged.size:
        found = yield from seek_pulses(recording, setup, judged)
    expected = (*setup.pulses, *found)
    windows = quiet_windows(setup, [nearest_sample(pulse.sample) for pulse in found])
    total = len(windows) + len(expected)
    sums = _autocovariance_sum(setup) if expected else None
    background = BackgroundSum(setup) if expected and setup.decay is not Decay.NONE else None
    search = ChannelSearch(setup) if setup.finds_bad else None
    whole = sums is not None or background is not None or search is not None
    scale_v = setup.scale_v.astype(np.float32)
    short = max(2, round(STEEPNESS_S * setup.facts.rate_hz))
    means: list[NDArray[np.float64]] = []
    steep: list[NDArray[np.float64]] = []
    for done, (start, until) in enumerate(windows):
        yield Progress(_STAGE, done, total)
        stop = until if whole else min(until, start + short)
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
        if background is not None:
            background.add(x)
        if search is not None:
            search.add(x)
    usual = usual_steepness(steep) if steep else 0.0
    limits = limits_of(setup, usual_steps(steep) if steep else np.zeros(judged.size), judged)
    pulses = []
    for done, one in enumerate(expected):
        yield Progress(_STAGE, len(windows) + done, total)
        aligned = align_pulse(recording, setup, one, usual, judged)
        pulses.append(with_shape(recording, setup, aligned, limits, judged))
    unmarked: tuple[int, ...] = ()
    if setup.pulses_known and not setup.seeks_pulses and not setup.pulses and judged.size:
        unmarked = yield from find_pulse_like(recording, setup.used[judged], setup.find_rules)
    if sums is not None and not sums.n_samples:
        raise InputError(
            "no stretch free of pulses is long enough to learn the signal's autocovariance from",
            where=setup.facts.stem,
            todo='Choose a fill that does not need one, such as pulses.fill = "cubic"',
        )
    onsets, notes = yield from _measure_onsets(recording, setup)
    pulses.sort(key=lambda pulse: pulse.sample)
    decay = None
    if background is not None:
        decay = yield from learn_decay(
            recording, setup, [pulse.sample for pulse in pulses], background.result()
        )
    left_v = None
    if setup.groups and setup.decay is Decay.NONE:
        seen = [pulse.sample for pulse in pulses if pulse.state is not PulseState.MARKED_ONLY]
        left_v = level_left(recording, setup, seen)
    return Estimates(
        offset=_offset(setup, means),
        pulses=tuple(pulses),
        usual_steepness=usual,
        autocovariance=None if sums is None else sums.result(),
        unmarked=unmarked,
        stimulus_onsets=onsets,
        decay=decay,
        level_left_v=left_v,
        channels=None if search is None else search.result(),
        notes=notes,
        rests_on=basis_of(setup),
    )


def quiet_windows(setup: Setup, found: Sequence[int] = ()) -> list[tuple[int, int]]:
    """Windows without pulses and bad stretches, spread evenly over the recording, as sample spans.

    Parameters
    ----------
    setup : Setup
        Pulses, gaps and bad stretches.
    found : sequence of int
        Further pulses, found in the signal.
    """
    rate = setup.facts.rate_hz
    closed = [*setup.barriers]
    around_s = _around_pulse_s(setup)
    if setup.decay is not Decay.NONE:
        # Until the decay is over, at least as long as it is fitted.
        around_s = around_s[0], around_s[1] - AFTER_PULSE_S + max(AFTER_PULSE_S, setup.decay_s)
    pulses = [*(nearest_sample(pulse.sample) for pulse in setup.pulses), *found]
    closed += [window_to_samples(sample, around_s, rate) for sample in pulses]
    length, least = round(WINDOW_S * rate), max(2, round(LEAST_WINDOW_S * rate))
    windows: list[tuple[int, int]] = []
    for start, stop in open_stretches(setup.facts.segments, merge_spans(closed)):
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


def _around_pulse_s(setup: Setup) -> tuple[float, float]:
    """Where around a marker its pulse, the pulse's gaps and what outlasts them may be."""
    edges = [window_s for group in setup.groups for window_s in group.windows_s]
    first = min([setup.search_s[0], *(w[0] for w in edges)])
    last = max([0.0, *(w[1] for w in edges)]) + max(setup.search_s[1], 0.0) + AFTER_PULSE_S
    return first, last


def _measure_onsets(
    recording: Recording, setup: Setup
) -> Work[tuple[tuple[OnsetShift, ...], tuple[str, ...]]]:
    """Measure the onsets that the plan wants; what is left as it was says so."""
    shifts: list[OnsetShift] = []
    for rule in setup.onset_rules:
        markers = [marker for marker in setup.facts.markers if marker.code in rule.codes]
        search_s = (ms_to_s(rule.search_ms[0]), ms_to_s(rule.search_ms[1]))
        shifts += yield from measure_onsets(recording, rule.channel, markers, search_s)
    return tuple(shifts), tuple(note for shift in shifts for note in shift.notes)


def open_stretches(
    segments: Sequence[tuple[int, int]], closed: Sequence[tuple[int, int]]
) -> Iterator[tuple[int, int]]:
    """Give what sorted, separate closed spans leave open of each segment, as sample spans."""
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
    if setup.fill is not Fill.COVARIANCE:
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


def basis_of(setup: Setup) -> dict[str, str]:
    """Hash, for every estimate, the settings it rests on."""
    source = [setup.facts.parts, setup.facts.n_samples, setup.used, setup.barriers]
    decay = [setup.decay, setup.decay_s] if setup.decay is not Decay.NONE else []
    sought = [setup.seeks_pulses, setup.find_rules, setup.to_match, setup.no_pulses]
    quiet = [*source, setup.pulses, setup.groups, setup.search_s, *sought, *decay]
    return {
        "offset": basis(*quiet, setup.removes_offset, setup.fill),
        "pulses": basis(*quiet, setup.bad),
        "usual_steepness": basis(*quiet, setup.bad),
        "autocovariance": basis(*quiet, setup.flank, setup.fill),
        "decay": basis(*quiet, setup.decay_least_v, setup.bad) if decay else basis("none"),
        "level_left_v": basis(*quiet, setup.bad) if not decay else basis("none"),
        "channels": basis(*quiet, setup.bad, setup.channels, setup.line_hz)
        if setup.finds_bad
        else basis("none"),
        "stimulus_onsets": basis(
            *source, setup.onset_rules, setup.facts.markers if setup.onset_rules else ()
        ),
    }
