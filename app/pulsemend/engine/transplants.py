"""What is planted where: the recording's own artifacts, and test responses, in its pulse-free stretches.

The artifact within a gap is that of a single pulse, deviations and all. Behind the gap a single pulse cannot
be told from the background it came with, nor the median pulse from the response it evoked. So what is
planted there is the decay that was fitted, as large as in that pulse, and of the rest of the median pulse
what is too large for a response.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import open_stretches
from pulsemend.engine.planted import Artifact, Layout, Responses
from pulsemend.engine.reading import read_stored
from pulsemend.engine.setup import Setup
from pulsemend.errors import InputError
from pulsemend.model.epochs import Pulse, nearest_sample
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import Decay, PulseState
from pulsemend.progress import Progress, Work
from pulsemend.signal.absorption import LATENCIES_S, SIZES_UV, WIDTHS
from pulsemend.signal.gaps import merge_spans, window_to_samples
from pulsemend.units import uv_to_v

LEAST_GAPS = 20
"""With fewer, the error that one gap in twenty exceeds is not known."""

SEEN_S = (-0.25, 0.45)
"""Around the onset: what errors are looked for in, and rhythms need."""

MARGIN_S = 0.15
"""Each stretch reaches further by this, so that the next one cuts off neither flank nor error."""

AFTER_PULSE_S = 0.5
"""Stretches begin so long after a pulse's last gap: responses are over by then."""

BEFORE_PULSE_S = 0.02

LEVEL_S = 0.02
"""An artifact counts from its mean over this time before the gap."""

REST_S = (0.5, 0.1, 0.0)
"""What is left of the median pulse is looked at for so long after the onset; less in trains of pulses."""

PAUSE_S = 0.005
"""What is large again after a longer pause is background and no artifact."""

RESPONSE_UV = 20.0
"""Of the median pulse behind the gap, what exceeds this and three standard errors is no response."""

LEAST_PULSES = 10
"""The median of fewer is too much like the background."""

JUMP_S = (0.030, 0.250)
"""With resets, the background jumps ahead by so much at the onset."""

MOST_BYTES = 64_000_000
"""Pulses enough to fill so much memory, spread over the recording, give artifacts."""

_STAGE = "choosing stretches without pulses"

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class TransplantConfig:
    """How much is planted.

    Parameters
    ----------
    most_gaps : int
        Stretches used at most, spread over the recording.
    responses : bool
        Whether test responses are planted, too.
    resets : bool
        Whether the background jumps ahead at each onset, as if every rhythm's phase were reset.
    seed : int
        Of all draws.
    """

    most_gaps: int = 400
    responses: bool = True
    resets: bool = False
    seed: int = 7


def gap_reach(setup: Setup) -> tuple[int, int]:
    """Give the first sample of any gap from the onset, at most 0, and the first after all of them."""
    spans = [
        window_to_samples(0, window_s, setup.facts.rate_hz)
        for group in setup.groups
        for window_s in group.windows_s
    ]
    return min(0, *(start for start, _ in spans)), max(1, *(stop for _, stop in spans))


def seen_s(setup: Setup) -> tuple[float, float]:
    """Span around the onset that is looked at: longer where gaps are."""
    first, stop = gap_reach(setup)
    rate_hz = setup.facts.rate_hz
    return min(SEEN_S[0], first / rate_hz + SEEN_S[0]), max(SEEN_S[1], stop / rate_hz - SEEN_S[0])


def lay_out(setup: Setup, estimates: Estimates, config: TransplantConfig) -> Layout:
    """Choose pulse-free stretches and, with resets, how far each jumps.

    Parameters
    ----------
    setup : Setup
        Gaps and bad stretches.
    estimates : Estimates
        With the pulses of the recording.
    config : TransplantConfig
        How many are wanted.

    Raises
    ------
    InputError
        Too few are long enough.
    """
    rate_hz, step = setup.facts.rate_hz, setup.ratio.denominator
    first_s, last_s = seen_s(setup)
    # Whole output samples: every onset then lies on the output's grid.
    before = math.ceil((MARGIN_S - first_s) * rate_hz / step) * step
    size = before + math.ceil((MARGIN_S + last_s) * rate_hz / step) * step
    rng = np.random.default_rng(config.seed)
    longest = math.ceil(JUMP_S[1] * rate_hz) if config.resets else 0
    starts = [
        at
        for start, stop in open_stretches(setup.facts.segments, _closed(setup, estimates))
        for at in range(start, stop - size - longest + 1, size + longest)
    ]
    if len(starts) < LEAST_GAPS:
        raise InputError(
            f"only {len(starts)} stretches of {(size + longest) / rate_hz:.2f} s are free of pulses, "
            f"and what the repair costs is told from {LEAST_GAPS} or more",
            where=setup.facts.stem,
        )
    if len(starts) > config.most_gaps:
        starts = [starts[i] for i in np.linspace(0, len(starts) - 1, config.most_gaps).round().astype(int)]
    jumps = np.zeros(len(starts), np.intp)
    if config.resets:
        jumps = np.round(rng.uniform(*JUMP_S, len(starts)) * rate_hz).astype(np.intp)
    return Layout(tuple(starts), before, size, tuple(jumps.tolist()))


def _closed(setup: Setup, estimates: Estimates) -> list[tuple[int, int]]:
    """Spans around pulses, and bad stretches."""
    first, stop = gap_reach(setup)
    rate_hz = setup.facts.rate_hz
    after_s = max(AFTER_PULSE_S, setup.decay_s if setup.decay is not Decay.NONE else 0.0)
    around_s = (first / rate_hz - BEFORE_PULSE_S, stop / rate_hz + after_s)
    # A marker whose pulse was found elsewhere may still have its own reason.
    pulses = {*estimates.onsets, *(nearest_sample(pulse.sample) for pulse in setup.pulses)}
    return merge_spans([*setup.barriers, *(window_to_samples(one, around_s, rate_hz) for one in pulses)])


def draw_responses(setup: Setup, n_stretches: int, seed: int) -> Responses:
    """Draw a response for every stretch and channel: size, polarity, latency and width.

    Parameters
    ----------
    setup : Setup
        With the channels.
    n_stretches, seed : int
        How many, and of the draws.
    """
    rng = np.random.default_rng([seed, 1])
    latencies_s = rng.permutation(np.resize(LATENCIES_S, n_stretches))
    shape = (n_stretches, setup.used.size)
    sizes_v = uv_to_v(rng.uniform(*SIZES_UV, shape)) * rng.choice([-1.0, 1.0], shape)
    return Responses(latencies_s, rng.uniform(*WIDTHS, n_stretches) * latencies_s, sizes_v)


def draw_artifacts(
    recording: Recording, setup: Setup, estimates: Estimates, layout: Layout, seed: int
) -> Work[Artifact]:
    """Choose a pulse for every stretch, and take its artifact.

    Parameters
    ----------
    recording : Recording
        Read around pulses.
    setup : Setup
        Gaps and channels.
    estimates : Estimates
        Pulses and their decays.
    layout : Layout
        Of the stretches.
    seed : int
        Of the draws.

    Yields
    ------
    Progress

    Returns
    -------
    Artifact

    Raises
    ------
    InputError
        No pulse lies alone.
    """
    rate_hz = setup.facts.rate_hz
    first, stop = gap_reach(setup)
    before, until = max(1, round(LEVEL_S * rate_hz)), stop
    alone: list[int] = []
    for rest_s in REST_S:
        if len(alone) < LEAST_PULSES:
            until = max(stop, round(rest_s * rate_hz))
            alone = _lying_alone(setup, estimates.pulses, first - before, until)
    if not alone:
        raise InputError("no pulse lies alone, so its artifact cannot be taken", where=setup.facts.stem)
    most = max(3, MOST_BYTES // ((until - first) * setup.used.size * np.dtype(np.float32).itemsize))
    if len(alone) > most:
        alone = [alone[i] for i in np.linspace(0, len(alone) - 1, most).round().astype(int)]
    levels = np.empty((len(alone), setup.used.size))
    courses = np.empty((len(alone), until - first, setup.used.size), np.float32)
    for row, pulse in enumerate(alone):
        yield Progress("taking artifacts", row, len(alone))
        onset = estimates.onsets[pulse]
        x = read_stored(recording, setup, onset + first - before, onset + until)
        levels[row] = x[:before].mean(axis=0)
        courses[row] = x[before:] - levels[row]
    in_gap = _in_gap(setup, first, until)
    decay = _decay(setup, estimates, layout.size + first)
    rest = _rest(setup, courses[:, -first:], decay[:until], in_gap[-first:])
    # Within gaps everything is the single pulse's.
    for course in (rest, decay):
        course[:until][in_gap[-first:]] = 0.0
    rows = np.random.default_rng([seed, 2]).integers(len(alone), size=len(layout.starts))
    amplitudes = np.ones((len(alone), setup.used.size))
    if estimates.decay is not None:
        amplitudes[:, estimates.decay.columns] = estimates.decay.amplitudes[:, alone].T
    return Artifact(
        first=first,
        in_gap=in_gap[: stop - first],
        pulses=np.array([estimates.onsets[alone[row]] for row in rows], np.int64),
        levels=levels[rows],
        rest=rest,
        decay=decay,
        amplitudes=amplitudes[rows],
    )


def _lying_alone(setup: Setup, pulses: Sequence[Pulse], first: int, stop: int) -> list[int]:
    """List the places of pulses with no other, no break and no bad stretch within reach.

    Those that the signal shows, if it shows any.
    """
    onsets = [pulse.sample for pulse in pulses]
    earlier, later = [-math.inf, *onsets[:-1]], [*onsets[1:], math.inf]
    gap_first, gap_stop = gap_reach(setup)
    alone = [
        place
        for place, onset in enumerate(onsets)
        if earlier[place] + gap_stop <= onset + first
        and onset + stop <= later[place] + gap_first
        and any(lo <= onset + first and onset + stop <= hi for lo, hi in setup.facts.segments)
        and not any(a < onset + stop and b > onset + first for a, b in setup.barriers)
    ]
    seen = [place for place in alone if pulses[place].state is not PulseState.MARKED_ONLY]
    return seen or alone


def _in_gap(setup: Setup, first: int, until: int) -> NDArray[np.bool_]:
    """Tell which samples from `first` on lie in each channel's gaps, shape (until - first, n_used)."""
    marked = np.zeros((until - first, setup.used.size), np.bool_)
    for group in setup.groups:
        for window_s in group.windows_s:
            start, stop = window_to_samples(0, window_s, setup.facts.rate_hz)
            marked[start - first : stop - first, group.columns] = True
    return marked


def _decay(setup: Setup, estimates: Estimates, n_samples: int) -> Floats:
    """Decay of the median pulse from the onset on, in stored units; zero within the pulse's own gap."""
    table = np.zeros((n_samples, setup.used.size))
    if estimates.decay is None:
        return table
    ends = np.zeros(setup.used.size, np.intp)
    for group in setup.groups:
        ends[group.columns] = max(0, window_to_samples(0, group.windows_s[0], setup.facts.rate_hz)[1])
    for row, column in enumerate(estimates.decay.columns.tolist()):
        since_s = np.arange(max(0, n_samples - int(ends[column]))) / setup.facts.rate_hz
        table[ends[column] :, column] = estimates.decay.shape(row).at(since_s) / setup.scale_v[column]
    return table


def _rest(setup: Setup, courses: NDArray[np.float32], decay: Floats, in_gap: NDArray[np.bool_]) -> Floats:
    """Find what of the median pulse, besides its decay, is too large for a response, in stored units."""
    if len(courses) < LEAST_PULSES:
        return np.zeros(decay.shape)
    median = np.median(courses, axis=0)
    spread = np.median(np.abs(courses - median), axis=0)
    # Standard error of a median: 1.2533 times that of a mean; 1.4826 times the MAD is a standard deviation.
    error = 1.2533 * 1.4826 * spread / math.sqrt(len(courses))
    limit = uv_to_v(RESPONSE_UV) / np.abs(setup.scale_v) + 3.0 * error
    left = median.astype(np.float64) - decay
    excess = np.maximum(np.abs(left) - limit, 0.0)
    # An artifact follows its gap; what is large only later is background.
    pause = max(1, round(PAUSE_S * setup.facts.rate_hz))
    since = np.full(setup.used.size, pause + 1)
    for at, (in_gap_now, large_now) in enumerate(zip(in_gap, excess > 0.0, strict=True)):
        since = np.where(in_gap_now | (large_now & (since <= pause)), 0, since + 1)
        excess[at, since > pause] = 0.0
    return np.asarray(np.sign(left) * excess)
