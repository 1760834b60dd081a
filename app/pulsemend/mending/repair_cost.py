"""What the repair costs, measured on this recording where no pulse was given, and said in words."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.bad_channels import found_bad
from pulsemend.engine.setup import Setup
from pulsemend.engine.transplant import (
    RHYTHM_S,
    Errors,
    Method,
    Truth,
    other_methods,
    own_method,
    prepare,
)
from pulsemend.engine.transplants import TransplantConfig
from pulsemend.mending.learned import Learned
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import Side
from pulsemend.progress import Progress, Work
from pulsemend.signal.absorption import LATENCIES_S
from pulsemend.signal.gaps import window_to_samples
from pulsemend.signal.repair_error import (
    BANDS,
    Band,
    Interval,
    amplitude_error,
    draw_counts,
    earliest_below,
    phase_error,
    quantiles,
    ratio_of_sums,
)
from pulsemend.units import s_to_ms, v_to_uv

SHARE = 0.1
"""An error below this share of the background's spread is small; common practice: none known."""

MOST = 0.95
"""What holds for most errors holds for this share of them."""

N_DRAWS = 200
"""Of each bootstrap over gaps."""

NEAR_S = 0.03
"""Errors are judged until so long before another gap of the same pulse."""

BEST_CASE = (
    "Best case: what this costs where no pulse was given. A reset, decay or muscle activity adds to it."
)

_STAGE = "summing up what the repair costs"

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class RhythmCost:
    """Error of one rhythm at one latency, over gaps and channels.

    Parameters
    ----------
    band : Band
    latency_s : float
        Since the pulse.
    amplitude, amplitude_most : Interval
        Size of the amplitude's error, as a part of the rhythm's usual amplitude: median, and what most stay
        below.
    phase, phase_most : Interval
        Size of the phase's error in radians, of rhythms large enough to have a phase.
    """

    band: Band
    latency_s: float
    amplitude: Interval
    amplitude_most: Interval
    phase: Interval
    phase_most: Interval


@dataclass(frozen=True)
class ResponseCost:
    """What comes back of test responses of one latency: 1 is all of it."""

    latency_s: float
    ratio: Interval
    n_gaps: int


@dataclass(frozen=True)
class MethodCost:
    """What one way to fill costs.

    Parameters
    ----------
    method : Method
    in_gap : Interval
        Root mean square of the error from the gap's start to its end, in volts.
    median_v, most_v : array, shape (n_latencies,)
        Size of the error over gaps and good EEG channels: median, and what most stay below.
    most_share : array, shape (n_latencies,)
        The latter, each channel's error as a part of the channel's spread.
    channel_most_v : array, shape (n_channels, n_latencies)
        What most errors of each channel stay below.
    earliest_s : float or None
        Earliest trustworthy latency: the first one after the gap from which on most errors stay below `SHARE`
        of the background's spread. None: there is none within what was looked at.
    channel_earliest_s : tuple of (float or None)
        The same for each channel.
    rhythms : tuple of RhythmCost
        Only bands that the filters leave.
    responses : tuple of ResponseCost
        By latency; empty without test responses.
    """

    method: Method
    in_gap: Interval
    median_v: Floats = field(repr=False)
    most_v: Floats = field(repr=False)
    most_share: Floats = field(repr=False)
    channel_most_v: Floats = field(repr=False)
    earliest_s: float | None
    channel_earliest_s: tuple[float | None, ...]
    rhythms: tuple[RhythmCost, ...]
    responses: tuple[ResponseCost, ...]


@dataclass(frozen=True)
class RepairCost:
    """Result of the transplant test.

    Parameters
    ----------
    config : TransplantConfig
    n_gaps : int
        Planted.
    names : tuple of str
        Channels, the recorded reference included if it is put back.
    latencies_s : array, shape (n_latencies,)
        Since the pulse.
    gap_s : (float, float)
        First and last instant of the gap in most channels.
    spread_v : array, shape (n_channels,)
        Standard deviation of the background, as the plan's filters leave it.
    methods : tuple of MethodCost
        The plan's own first.
    words : tuple of str
        What it means, one sentence or a few each.
    """

    config: TransplantConfig
    n_gaps: int
    names: tuple[str, ...]
    latencies_s: Floats = field(repr=False)
    gap_s: tuple[float, float]
    spread_v: Floats = field(repr=False)
    methods: tuple[MethodCost, ...]
    words: tuple[str, ...]


def repair_cost(
    recording: Recording,
    learned: Learned,
    *,
    compare: bool = False,
    config: TransplantConfig | None = None,
) -> Work[RepairCost]:
    """Plant artifacts in pulse-free stretches, repair them as planned, and compare with the truth.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    learned : Learned
        With the present settings.
    compare : bool
        Whether the other fills are measured, too, with the plan's side.
    config : TransplantConfig or None
        How much is planted; None for the usual.

    Yields
    ------
    Progress

    Returns
    -------
    RepairCost

    Raises
    ------
    InputError
        There is nothing to measure, or too few stretches are free of pulses; said in one sentence.
    """
    config = config or TransplantConfig()
    setup = learned.setup
    methods = (own_method(setup), *(other_methods(setup) if compare else ()))
    bench = yield from prepare(recording, setup, learned.estimates, methods, config)
    truth, errors = yield from bench.measure(methods)
    yield Progress(_STAGE, 0, len(errors))
    bad = setup.bad | found_bad(setup, learned.estimates.channels)
    judge = _Judge(setup, truth, bad, config.seed)
    costs = []
    for done, of_method in enumerate(errors):
        costs.append((yield from judge.cost(of_method, done, len(errors))))
    found = tuple(costs)
    gap_s = judge.gap_s
    return RepairCost(
        config=config,
        n_gaps=bench.n_gaps,
        names=setup.names,
        latencies_s=truth.latencies_s,
        gap_s=gap_s,
        spread_v=judge.spread_v,
        methods=found,
        words=_words(setup, config, bench.n_gaps, found),
    )


class _Judge:
    """Sums up the errors of one method after another against the same truth."""

    def __init__(self, setup: Setup, truth: Truth, bad: NDArray[np.bool_], seed: int) -> None:
        self._setup, self._truth = setup, truth
        self.spread_v = spread_v = np.sqrt(np.median(truth.variance_v2, axis=0))
        extra = len(setup.names) - setup.used.size
        good = np.append(setup.eeg & ~bad, np.ones(extra, np.bool_))
        # A recording without EEG is judged by what there is; a flat channel has no spread to compare with.
        self._good = np.flatnonzero((good if good.any() else ~good) & (spread_v > 0.0))
        self._counts = draw_counts(len(truth.variance_v2), N_DRAWS, seed)
        rate_hz = setup.facts.rate_hz
        spans = [(group, window_to_samples(0, group.windows_s[0], rate_hz)) for group in setup.groups]
        _, (start, stop) = max(spans, key=lambda item: item[0].columns.size)
        self.gap_s = (start / rate_hz, (stop - 1) / rate_hz)
        latest_s = max(stop - 1 for _, (_, stop) in spans) / rate_hz
        # A channel that is put back holds what the others' reference is made of.
        self._ends_s = np.full(len(setup.names), latest_s)
        for group, (_, stop) in spans:
            self._ends_s[group.columns] = (stop - 1) / rate_hz
        later = [w[0] for group in setup.groups for w in group.windows_s if w[0] > self.gap_s[1]]
        self._until_s = min(later, default=math.inf) - NEAR_S

    def cost(self, errors: Errors, done: int, total: int) -> Work[MethodCost]:
        """Sum up one method; progress counts methods."""
        truth, good = self._truth, self._good
        size_v = np.abs(errors.error_v)
        of_good = size_v[:, good]
        median_v, most_v = (_over_all(of_good, share) for share in (0.5, MOST))
        yield Progress(_STAGE, done + 0.2, total)
        most_share = _over_all(of_good / self.spread_v[good, None].astype(np.float32), MOST)
        channel_most_v = np.quantile(size_v, MOST, axis=0).astype(np.float64)
        yield Progress(_STAGE, done + 0.4, total)
        times_s = truth.latencies_s
        inside = (times_s >= self.gap_s[0] - 1e-9) & (times_s <= self.gap_s[1] + 1e-9)
        squares = np.square(of_good[:, :, inside], dtype=np.float64).mean(axis=(1, 2))
        mean_square = ratio_of_sums(squares, np.ones(len(squares)), self._counts)
        rhythms = []
        for place, (b, r) in enumerate(itertools.product(range(len(BANDS)), range(len(RHYTHM_S)))):
            if self._leaves(BANDS[b]):
                rhythms.append(self._rhythm(errors, b, r))
            yield Progress(_STAGE, done + 0.5 + 0.5 * place / (len(BANDS) * len(RHYTHM_S)), total)
        spread_v = np.maximum(self.spread_v, np.finfo(np.float64).tiny)
        return MethodCost(
            method=errors.method,
            in_gap=Interval(*(math.sqrt(v) for v in (mean_square.value, mean_square.low, mean_square.high))),
            median_v=median_v,
            most_v=most_v,
            most_share=most_share,
            channel_most_v=channel_most_v,
            earliest_s=self._earliest(most_share, float(self._ends_s[good].max())),
            channel_earliest_s=tuple(
                self._earliest(curve / spread, end_s)
                for curve, spread, end_s in zip(channel_most_v, spread_v, self._ends_s.tolist(), strict=True)
            ),
            rhythms=tuple(rhythms),
            responses=self._responses(errors),
        )

    def _earliest(self, share: Floats, end_s: float) -> float | None:
        times_s = self._truth.latencies_s
        judged = np.flatnonzero((times_s > end_s + 1e-9) & (times_s < self._until_s))
        place = earliest_below(share[judged], SHARE)
        return None if place is None else float(times_s[judged[place]])

    def _leaves(self, band: Band) -> bool:
        """Whether the plan's filters leave a rhythm; near half the output rate there is none."""
        taps = self._setup.band
        rate_hz = self._setup.rate_hz
        if band.frequency_hz > 0.4 * rate_hz:
            return False
        if taps is None:
            return True
        turns = np.exp(-2j * np.pi * band.frequency_hz / rate_hz * np.arange(taps.size))
        return bool(abs(taps @ turns) >= 0.5)

    def _rhythm(self, errors: Errors, band: int, latency: int) -> RhythmCost:
        true = self._truth.rhythms[:, self._good, band, latency]
        repaired = errors.rhythms[:, self._good, band, latency]
        amplitude, amplitude_most = quantiles(amplitude_error(true, repaired), (0.5, MOST), self._counts)
        phase, phase_most = quantiles(phase_error(true, repaired), (0.5, MOST), self._counts)
        return RhythmCost(BANDS[band], RHYTHM_S[latency], amplitude, amplitude_most, phase, phase_most)

    def _responses(self, errors: Errors) -> tuple[ResponseCost, ...]:
        responses = self._truth.responses
        if responses is None:
            return ()
        taken = errors.taken_v2[:, self._good].sum(axis=1)
        whole = self._truth.response_v2[:, self._good].sum(axis=1)
        found = []
        for latency_s in LATENCIES_S:
            rows = responses.latencies_s == latency_s
            if rows.any():
                ratio = ratio_of_sums((whole + taken)[rows], whole[rows], self._counts[:, rows])
                found.append(ResponseCost(latency_s, ratio, int(rows.sum())))
        return tuple(found)


def _over_all(size: NDArray[Any], share: float) -> Floats:
    """Quantile over gaps and channels of an array of shape (n_gaps, n_channels, n_latencies)."""
    flat = size.reshape(-1, size.shape[-1])
    return np.asarray(np.quantile(flat, share, axis=0), dtype=np.float64)


def _words(
    setup: Setup, config: TransplantConfig, n_gaps: int, costs: Sequence[MethodCost]
) -> tuple[str, ...]:
    planted = f"{n_gaps} of the recording's own artifacts were planted in stretches without a pulse"
    if config.responses:
        planted += ", with test responses of 3 to 9 \u00b5V at 20 to 200 ms"
    if config.resets:
        planted += ", and the background's phase was reset at each"
    words = [BEST_CASE, planted + "."]
    own = costs[0].in_gap
    words.append(
        f"In the gap the error is {v_to_uv(own.value):.1f} \u00b5V "
        f"({v_to_uv(own.low):.1f} to {v_to_uv(own.high):.1f}), root mean square."
    )
    words.append(_earliest_words(costs[0]))
    words += [*_rhythm_words(costs[0]), *_response_words(costs[0])]
    if setup.side is Side.BOTH:
        words.append(
            "Samples after the pulse shaped the fill, so that the gap holds something of what follows."
        )
    elif setup.side is Side.AFTER:
        words.append("Only samples after the pulse shaped the fill: the gap holds something of what follows.")
    if config.resets and setup.side is Side.BOTH:
        words.append("A reset that the fill bridges is smoothed over.")
    return (*words, *_compared(costs))


def _earliest_words(cost: MethodCost) -> str:
    rule = (
        f"after the gap from which on {100 * MOST:.0f} % of the errors stay below {100 * SHARE:.0f} % "
        "of the background's spread"
    )
    if cost.earliest_s is None:
        return f"No latency that was looked at is trustworthy: there is none {rule}."
    return f"Earliest trustworthy latency: {s_to_ms(cost.earliest_s):.0f} ms, the first {rule}."


def _rhythm_words(cost: MethodCost) -> list[str]:
    at_pulse = [one for one in cost.rhythms if one.latency_s == RHYTHM_S[0]]
    if not at_pulse:
        return []
    told = "; ".join(
        f"{one.band.name} {100 * one.amplitude.value:.0f} % and {math.degrees(one.phase.value):.0f}\u00b0, "
        f"up to {100 * one.amplitude_most.value:.0f} % and {math.degrees(one.phase_most.value):.0f}\u00b0"
        for one in at_pulse
    )
    return [
        "Errors of amplitude and phase at the pulse, in the middle and up to what "
        f"{100 * MOST:.0f} % stay below: {told}."
    ]


def _response_words(cost: MethodCost) -> list[str]:
    known = [one for one in cost.responses if math.isfinite(one.ratio.value)]
    if not known:
        return []
    least = min(known, key=lambda one: one.ratio.value)
    ratio = least.ratio
    return [
        f"Of test responses least comes back at {s_to_ms(least.latency_s):.0f} ms: {100 * ratio.value:.0f} % "
        f"({100 * ratio.low:.0f} to {100 * ratio.high:.0f})."
    ]


def _compared(costs: Sequence[MethodCost]) -> list[str]:
    """Compare methods by their error in the gap: with what is equal to the best one, and what is not."""
    if len(costs) < 2:
        return []
    ordered = sorted(costs, key=lambda cost: cost.in_gap.value)
    best = ordered[0]
    equal = [cost for cost in ordered[1:] if cost.in_gap.overlaps(best.in_gap)]
    words = []
    if equal:
        names = [_named(cost) for cost in (best, *equal)]
        words.append(
            f"Equal in the gap, because their intervals overlap: {', '.join(names[:-1])} and {names[-1]}."
        )
    else:
        words.append(f"Smallest error in the gap: {_named(best)}.")
    worse = [cost for cost in ordered if cost is not best and cost not in equal]
    if worse:
        words.append(f"Larger: {', '.join(_named(cost) for cost in worse)}.")
    return words


def _named(cost: MethodCost) -> str:
    low, high = (v_to_uv(edge) for edge in (cost.in_gap.low, cost.in_gap.high))
    return f"{cost.method.fill.value} ({low:.1f} to {high:.1f} \u00b5V)"
