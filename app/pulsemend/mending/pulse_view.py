"""All pulses of a recording at time zero, as recorded and as repaired: the numbers of one picture.

A picture rests on a `Ground`: plan and marks bound to the recording, and what was learned from it. After an
edit the earlier estimates serve until new ones are there, which makes a first picture fast; that ground, and
the picture made from it, say that they are provisional.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from enum import StrEnum
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.chain import Chain
from pulsemend.engine.decay import NOT_LOOKED_AT, learn_decay
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import basis_of, fit, quiet_windows
from pulsemend.engine.reading import read_stored
from pulsemend.engine.setup import GapGroup, Setup, bind
from pulsemend.mending.learned import Learned
from pulsemend.model.epochs import Pulse, nearest_sample
from pulsemend.model.marks import Marks
from pulsemend.model.plan import About, Channels, Filter, Plan
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import Decay, Fill, PulseState
from pulsemend.progress import Progress, Work
from pulsemend.signal.autocovariance import AutocovarianceSum
from pulsemend.signal.fills import lags_needed
from pulsemend.signal.gaps import window_to_samples
from pulsemend.units import ms_to_s, s_to_ms

PROPOSED_MS = (-2.0, 14.0)
"""Where a gap's handles stand before it is decided; a place to drag from, not a default."""

USUAL_SPAN_MS = (-80.0, 120.0)
WIDEST_SPAN_MS = (-500.0, 1000.0)
FIRST_BATCH = 40
"""Pulses of the first picture after an edit."""

LEVEL_S = 0.002
"""A level beside a gap is the mean over this time."""

LARGE_STEP_UV = 20.0
"""A step left at a gap's end above this is told; common practice: none known."""

QUICK_WINDOWS = 6
QUICK_CHANNELS = 8
"""A provisional picture of all channels shows so many of them, because every channel's fill is its own."""

_STAGE = "aligning pulses at zero"

Window = tuple[float, float]


@dataclass(frozen=True)
class Ground:
    """What a picture of the pulses rests on.

    Parameters
    ----------
    setup : Setup
    estimates : Estimates
    decided : bool
        Whether the plan has a gap; else `PROPOSED_MS` stands in for it and nothing counts as repaired.
    provisional : bool
        Whether the estimates may belong to other settings.
    """

    setup: Setup
    estimates: Estimates
    decided: bool = True
    provisional: bool = False


def ground_of(learned: Learned) -> Ground:
    """Ground of what was learned with the present settings."""
    return Ground(learned.setup, learned.estimates)


class Pick(StrEnum):
    """Which channels a picture shows."""

    ONE = "one channel"
    ALL = "all channels"
    WORST = "the worst channel"


@dataclass(frozen=True)
class PulseRequest:
    """What a picture is to show.

    Parameters
    ----------
    pick : Pick
    channel : str
        Name, for one channel.
    span_ms : tuple of 2 float
        Time since the onsets; at least `USUAL_SPAN_MS` is read.
    most : int or None
        So many pulses, spread over the recording; None: all.
    """

    pick: Pick = Pick.ALL
    channel: str = ""
    span_ms: Window = USUAL_SPAN_MS
    most: int | None = None


def first_batch(request: PulseRequest) -> PulseRequest:
    """Ask for a part of the pulses that is there at once.

    Parameters
    ----------
    request : PulseRequest
        For all pulses.
    """
    return replace(request, most=FIRST_BATCH // 2 if request.pick is Pick.ALL else FIRST_BATCH)


@dataclass(frozen=True)
class Spread:
    """Median and middle half over the pulses, volts, each of shape (n_times,)."""

    median_v: NDArray[np.float32]
    low_v: NDArray[np.float32]
    high_v: NDArray[np.float32]


@dataclass(frozen=True)
class PulseView:
    """One picture.

    Parameters
    ----------
    request : PulseRequest
    channel : str
        The channel shown; empty for all channels.
    times_s : array, shape (n_times,)
        Since the onsets.
    recorded : Spread
        Each pulse minus its mean before the gap; for all channels the median over them.
    repaired : Spread or None
        None while no gap is decided; NaN where a gap is left empty.
    n_shown, n_pulses : int
        Pulses in the picture and in all. Those too near an end of the recording are not shown.
    windows_s : tuple of (float, float)
        The gap, then the other gaps of the channel shown.
    flanks : tuple of int
        Samples before and after the gap that its fill may learn from.
    leftover_v : float or None
        How much the level after the gap differs from that before it, median over the pulses; None for all.
    decided, provisional : bool
        See `Ground`.
    """

    request: PulseRequest
    channel: str
    times_s: NDArray[np.float64]
    recorded: Spread
    repaired: Spread | None
    n_shown: int
    n_pulses: int
    windows_s: tuple[Window, ...]
    flanks: tuple[int, int]
    leftover_v: float | None
    decided: bool
    provisional: bool


def sketch(
    recording: Recording, plan: Plan, marks: Marks, earlier: Ground | None, request: PulseRequest
) -> Work[Ground]:
    """Make a provisional ground: the present plan and marks with the estimates of earlier ones.

    Filters and reference are left out, which a repair does not rest on, so that the pulses can be seen
    while other parts of the plan are still open.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    plan, marks : Plan, Marks
        As they are edited.
    earlier : Ground or None
        Of the same recording. Without it the recording is learned from, which takes a second.
    request : PulseRequest
        Whose channels matter.

    Yields
    ------
    Progress

    Returns
    -------
    Ground

    Raises
    ------
    UnusableChannels
        No channel of a usable type.
    InputError
        There is nothing to learn from.
    """
    decided = plan.pulses.window_ms is not None
    pulses = plan.pulses
    if not decided:
        pulses = replace(pulses, window_ms=PROPOSED_MS, fill=Fill.LINE, flank_ms=None)
    bare = replace(
        plan,
        pulses=pulses,
        about=About(),
        filter=Filter(0.0, 0.0, 0.0),
        channels=Channels(plan.channels.bad, find_bad=False, rebuild_bad=False, reference="as recorded"),
    )
    setup = bind(recording.facts, bare, marks)
    if earlier is None or not np.array_equal(earlier.setup.used, setup.used):
        # Decays are fitted to all channels and pulses only once, by whoever learns for good.
        estimates = yield from fit(recording, replace(setup, decay=Decay.NONE))
        if setup.decay is not Decay.NONE:
            estimates = yield from _adapted(recording, setup, estimates, request)
    else:
        estimates = yield from _adapted(recording, setup, earlier.estimates, request)
    return Ground(setup, estimates, decided, provisional=True)


def _adapted(
    recording: Recording, setup: Setup, earlier: Estimates, request: PulseRequest
) -> Work[Estimates]:
    """Earlier estimates with the pulses and the autocovariance that the present settings need."""
    found = {pulse.marked: pulse for pulse in earlier.pulses if pulse.marked is not None}
    pulses = []
    for expected in setup.pulses:
        near = min(max(nearest_sample(expected.sample), 0), setup.facts.n_samples - 1)
        known = None if expected.marked is None else found.get(expected.marked)
        if expected.placed is not None:
            pulses.append(Pulse(near, expected.marked, expected.placed))
        elif known is not None and known.state is not PulseState.MOVED:
            pulses.append(known)
        else:
            pulses.append(Pulse(near, expected.marked, PulseState.MARKED_ONLY))
    pulses += _found_before(setup, earlier)
    offset = earlier.offset if setup.removes_offset else np.zeros(setup.used.size)
    adapted = replace(
        earlier,
        offset=offset,
        pulses=tuple(sorted(pulses, key=lambda one: one.sample)),
        decay=None,
        level_left_v=None,
        rests_on={},
    )
    if earlier.rests_on.get("decay") == basis_of(setup)["decay"] and adapted.onsets == earlier.onsets:
        adapted = replace(adapted, decay=earlier.decay)
    elif setup.decay is not Decay.NONE:
        columns = yield from _decaying(recording, Ground(setup, adapted, provisional=True), request)
        decay = yield from learn_decay(recording, setup, adapted.onsets, None, columns)
        adapted = replace(adapted, decay=decay)
    if setup.fill is not Fill.COVARIANCE or not pulses:
        return replace(adapted, autocovariance=None)
    rows = earlier.autocovariance
    # A few lags too few shorten the flanks a little, which a provisional picture may do.
    if rows is None or rows.shape[1] < 0.8 * _lags(setup):
        ground = Ground(setup, adapted, provisional=True)
        columns, _ = yield from _picked(recording, ground, request)
        rows = yield from _quick_autocovariance(recording, setup, columns)
    return replace(adapted, autocovariance=rows)


def _found_before(setup: Setup, earlier: Estimates) -> list[Pulse]:
    """Pulses that earlier estimates found in the signal, where the present settings look for them, too."""
    if not setup.seeks_pulses:
        return []
    to_match = set(setup.to_match)
    return [pulse for pulse in earlier.pulses if pulse.state is PulseState.FOUND or pulse.marked in to_match]


def _decaying(recording: Recording, ground: Ground, request: PulseRequest) -> Work[NDArray[np.intp]]:
    """Find the channels whose decay a provisional picture needs: those shown, or the largest steps."""
    columns = _columns(ground.setup, request)
    if request.pick is not Pick.WORST:
        shown, _ = yield from _picked(recording, ground, request)
        return shown
    steps_v = yield from _leftover_steps(recording, ground, _onsets(ground, request), columns)
    return columns[np.sort(np.argsort(-steps_v)[:QUICK_CHANNELS])]


def _lags(setup: Setup) -> int:
    spans = [
        window_to_samples(0, window, setup.facts.rate_hz) for g in setup.groups for window in g.windows_s
    ]
    return lags_needed(max(stop - start for start, stop in spans), setup.flank)


def _quick_autocovariance(
    recording: Recording, setup: Setup, columns: NDArray[np.intp]
) -> Work[NDArray[np.float64]]:
    """Learn the autocovariance of some channels from a few windows; all others count as white noise."""
    windows = quiet_windows(setup)
    chosen = np.linspace(0, len(windows) - 1, min(len(windows), QUICK_WINDOWS)).round().astype(int)
    sums = AutocovarianceSum(columns.size, _lags(setup))
    for done, place in enumerate(chosen):
        yield Progress(_STAGE, done, len(chosen))
        x = read_stored(recording, setup, *windows[place])[:, columns] * setup.scale_v[columns]
        sums.add((x - x.mean(axis=0)).astype(np.float32))
    rows = np.zeros((setup.used.size, _lags(setup)))
    rows[:, 0] = 1.0
    if sums.n_samples:
        rows[columns] = sums.result()
    return rows


def gather(recording: Recording, ground: Ground, request: PulseRequest) -> Work[PulseView | None]:
    """Align all pulses at zero.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    ground : Ground
        What is known.
    request : PulseRequest
        What to show.

    Yields
    ------
    Progress

    Returns
    -------
    PulseView or None
        None where no pulse is known, or none far enough from the recording's ends.

    Raises
    ------
    UnusableSamples
        A sample is not finite.
    """
    setup = ground.setup
    first, stop = _span(setup, request)
    shown = _onsets(ground, request)
    if not shown.size or not setup.groups:
        return None
    usual_windows_s = _windows_of(setup, _columns(setup, request))
    columns, leftover_v = yield from _picked(recording, ground, request)
    # A provisional autocovariance is known of these channels only; otherwise all are repaired as for a set.
    of_these = _only(setup, columns) if ground.provisional else setup
    chain = Chain(recording, of_these, ground.estimates)
    recorded = np.empty((len(shown), stop - first), np.float32)
    repaired = np.empty_like(recorded)
    windows_s = _windows_of(setup, columns) if columns.size == 1 else usual_windows_s
    before = max(1, window_to_samples(0, windows_s[0], setup.facts.rate_hz)[0] - first)
    for row, onset in enumerate(shown.tolist()):
        yield Progress(_STAGE, row, len(shown))
        for into, x in zip(
            (recorded, repaired), _both(recording, chain, ground, onset + first, onset + stop), strict=True
        ):
            volts = x[:, columns] * setup.scale_v[columns]
            volts -= volts[:before].mean(axis=0)
            into[row] = np.median(volts, axis=1)
    return PulseView(
        request=request,
        channel="" if request.pick is Pick.ALL else setup.channels[columns[0]].name,
        times_s=np.arange(first, stop) / setup.facts.rate_hz,
        recorded=_over_pulses(recorded),
        repaired=_emptied(_over_pulses(repaired), setup, windows_s, first) if ground.decided else None,
        n_shown=len(shown),
        n_pulses=len(ground.estimates.pulses),
        windows_s=windows_s,
        flanks=_flanks(setup),
        leftover_v=leftover_v,
        decided=ground.decided,
        provisional=ground.provisional,
    )


def _span(setup: Setup, request: PulseRequest) -> tuple[int, int]:
    """Find the samples since the onset that are read; the usual span is always among them."""
    start_ms = max(min(request.span_ms[0], USUAL_SPAN_MS[0]), WIDEST_SPAN_MS[0])
    stop_ms = min(max(request.span_ms[1], USUAL_SPAN_MS[1]), WIDEST_SPAN_MS[1])
    return window_to_samples(0, (ms_to_s(start_ms), ms_to_s(stop_ms)), setup.facts.rate_hz)


def _onsets(ground: Ground, request: PulseRequest) -> NDArray[np.intp]:
    """Choose the pulses shown: of those that lie well inside the recording so many, spread evenly."""
    first, stop = _span(ground.setup, request)
    segments = ground.setup.facts.segments
    inside = [
        onset
        for onset in ground.estimates.onsets
        if any(lo <= onset + first and onset + stop <= hi for lo, hi in segments)
    ]
    return _spread_out(np.array(inside, dtype=np.intp), request.most)


def _spread_out(values: NDArray[np.intp], most: int | None) -> NDArray[np.intp]:
    if most is None or len(values) <= most:
        return values
    return np.asarray(values[np.linspace(0, len(values) - 1, most).round().astype(int)])


def _columns(setup: Setup, request: PulseRequest) -> NDArray[np.intp]:
    """Find the used channels that a request is about: one, or all good EEG channels."""
    names = [channel.name for channel in setup.channels]
    if request.pick is Pick.ONE and request.channel in names:
        return np.array([names.index(request.channel)], dtype=np.intp)
    good = setup.eeg & ~setup.bad
    return np.flatnonzero(good if good.any() else np.ones_like(good))


def _picked(
    recording: Recording, ground: Ground, request: PulseRequest
) -> Work[tuple[NDArray[np.intp], float | None]]:
    """Find the used channels shown, and the step left at the gap of a single one."""
    columns = _columns(ground.setup, request)
    if request.pick is Pick.ALL:
        return (_spread_out(columns, QUICK_CHANNELS) if ground.provisional else columns), None
    onsets = _onsets(ground, request)
    if not onsets.size:
        return columns[:1], None
    decay = ground.estimates.decay
    if decay is not None:
        # A first picture knows the decays of the largest steps only; others would pass for the worst.
        looked_at = np.array([reason != NOT_LOOKED_AT for reason in decay.reasons])
        columns = columns[looked_at[columns]]
    steps_v = yield from _leftover_steps(recording, ground, onsets, columns)
    worst = int(np.argmax(steps_v))
    return columns[worst : worst + 1], float(steps_v[worst])


@dataclass(frozen=True)
class StepLeft:
    """The largest step left at the gap's end, over the good EEG channels.

    Parameters
    ----------
    channel : str
    step_v : float
        Level after the gap minus that before it, size of the median over the pulses.
    """

    channel: str
    step_v: float


def step_left(recording: Recording, ground: Ground) -> Work[StepLeft | None]:
    """Find the worst channel and the step left in it, as the picture of the worst channel has them.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    ground : Ground
        What is known.

    Yields
    ------
    Progress

    Returns
    -------
    StepLeft or None
        None without gaps, or without a pulse far enough from the recording's ends.
    """
    if not ground.setup.groups:
        return None
    columns, step_v = yield from _picked(recording, ground, PulseRequest(Pick.WORST))
    return None if step_v is None else StepLeft(ground.setup.channels[columns[0]].name, step_v)


def _leftover_steps(
    recording: Recording, ground: Ground, onsets: NDArray[np.intp], columns: NDArray[np.intp]
) -> Work[NDArray[np.float64]]:
    """Level just after a gap minus just before it: size of the median over the pulses, volts per column.

    A fill changes neither level, so this is what gap and subtraction of decays left behind at its edges.
    """
    setup = ground.setup
    rate_hz = setup.facts.rate_hz
    width = max(1, round(LEVEL_S * rate_hz))
    groups = [
        (np.isin(columns, group.columns), *window_to_samples(0, group.windows_s[0], rate_hz))
        for group in setup.groups
    ]
    lowest = min(start for _, start, _ in groups) - width
    highest = max(stop for _, _, stop in groups) + width
    steps = np.empty((len(onsets), columns.size))
    # Nothing is filled here, so that no fill needs what may not be learned yet.
    chain = Chain(recording, replace(setup, fill=Fill.LEAVE), ground.estimates)
    for row, onset in enumerate(onsets.tolist()):
        yield Progress(_STAGE, row, len(onsets))
        lo, hi = next(segment for segment in setup.facts.segments if segment[0] <= onset < segment[1])
        a, b = max(lo, onset + lowest), min(hi, onset + highest)
        x = chain.before_fill(a, b)[:, columns]
        for members, start, stop in groups:
            # At an end of the recording one sample has to do.
            at, end = max(onset + start - a, 1), min(onset + stop - a, b - a - 1)
            before, after = x[max(0, at - width) : at, members], x[end : end + width, members]
            steps[row, members] = after.mean(axis=0) - before.mean(axis=0)
    return np.abs(np.median(steps, axis=0)) * setup.scale_v[columns]


def _both(
    recording: Recording, chain: Chain, ground: Ground, start: int, stop: int
) -> Iterator[NDArray[Any]]:
    """Read a stretch as recorded, then as repaired; stored units minus offsets."""
    setup = chain.setup
    yield read_stored(recording, setup, start, stop, ground.estimates.offset, setup.work)
    yield chain.repaired(start, stop)


def _only(setup: Setup, columns: NDArray[np.intp]) -> Setup:
    """Repair some of the channels, each exactly as all together would be."""
    groups = [GapGroup(np.intersect1d(g.columns, columns), g.windows_s) for g in setup.groups]
    return replace(setup, groups=tuple(group for group in groups if group.columns.size))


def _windows_of(setup: Setup, columns: NDArray[np.intp]) -> tuple[Window, ...]:
    """Windows of one channel; of several, those that most of the channels have."""
    if columns.size == 1:
        return next(group.windows_s for group in setup.groups if columns[0] in group.columns)
    return max(setup.groups, key=lambda group: group.columns.size).windows_s


def _flanks(setup: Setup) -> tuple[int, int]:
    if setup.fill is Fill.LEAVE:
        return 0, 0
    return (0 if setup.side == "after" else setup.flank), (0 if setup.side == "before" else setup.flank)


def _over_pulses(x: NDArray[np.float32]) -> Spread:
    low, middle, high = np.percentile(x, [25.0, 50.0, 75.0], axis=0).astype(np.float32)
    return Spread(middle, low, high)


def _emptied(spread: Spread, setup: Setup, windows_s: Sequence[Window], first: int) -> Spread:
    """Show nothing where gaps are left empty."""
    if setup.fill is Fill.LEAVE:
        for window in windows_s:
            start, stop = window_to_samples(-first, window, setup.facts.rate_hz)
            for values in (spread.median_v, spread.low_v, spread.high_v):
                values[max(0, start) : max(0, stop)] = np.nan
    return spread


def edge_ms(sample: int, rate_hz: float) -> float:
    """Time of a whole sample from the onset, as a plan's window has it.

    Parameters
    ----------
    sample : int
        Since the onset.
    rate_hz : float
        Recorded rate.
    """
    return round(s_to_ms(sample / rate_hz), 9)


def on_sample_ms(shown_ms: float, rate_hz: float, within_ms: float = 0.0005) -> float:
    """Give a time that was shown rounded its exact value, if a whole sample lies there.

    Parameters
    ----------
    shown_ms : float
        As typed or stepped in a field.
    rate_hz : float
        Recorded rate.
    within_ms : float
        Half of the field's last digit.
    """
    exact = edge_ms(math.floor(ms_to_s(shown_ms) * rate_hz + 0.5), rate_hz)
    return exact if abs(exact - shown_ms) <= within_ms * 1.001 else shown_ms
