"""What pulses still contribute to epochs, after the repair: the leak.

What a pulse leaves behind is the median of the repaired signal around all pulses, gap start to +100 ms. Alone
in an otherwise empty recording it goes through the same chain (rate, filters, reference); what arrives
elsewhere is what filters carried there.
"""

from __future__ import annotations

import math
from bisect import bisect_left, bisect_right
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.chain import Chain, Cut
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.setup import Setup
from pulsemend.engine.splits import gap_spans
from pulsemend.model.recording import FloatArray, RecordingFacts
from pulsemend.model.vocabulary import AcrossPulses
from pulsemend.progress import Progress, Work
from pulsemend.signal.gaps import window_to_samples

AFTER_S = 0.1
"""The pulse-locked median reaches this far after the onset."""

BEFORE_S = 0.02
"""Each pulse's stretch counts from its mean over this long before the gap: drift is none of the pulse's."""

MOST_BYTES = 64_000_000
"""Pulses enough to fill so much memory, spread over the recording, make the median."""

MOST_PHASES = 16
"""Onsets between output samples are told apart this finely, at most."""

_STAGE = "measuring the leak"


@dataclass(frozen=True)
class Leak:
    """Leak of every epoch.

    Parameters
    ----------
    peaks_v : array, shape (n_epochs,)
        Largest contribution of any pulse within the epoch, over its good EEG channels, in volts; samples
        within a pulse's own stretch (gap start to +100 ms) do not count for that pulse.
    n_pulses : int
        Pulses that the median was made of.
    """

    peaks_v: NDArray[np.float64]
    n_pulses: int


def measure_leak(chain: Chain, estimates: Estimates, cuts: Sequence[Cut]) -> Work[Leak]:
    """Measure the leak of epochs.

    Parameters
    ----------
    chain : Chain
        The chain that the epochs come from.
    estimates : Estimates
        The same that it was made with.
    cuts : sequence of Cut
        The epochs.

    Yields
    ------
    Progress

    Returns
    -------
    Leak
        All zero where no pulse is known or none lies alone for long enough.
    """
    setup = chain.setup
    nothing = Leak(np.zeros(len(cuts)), 0)
    if not setup.groups or not estimates.pulses:
        return nothing
    median, n_pulses = yield from _median(chain, estimates)
    if not n_pulses:
        return nothing
    response = _Response(setup)
    yield from response.learn(median)
    peaks, onsets = np.zeros(len(cuts)), estimates.onsets
    for place, cut in enumerate(cuts):
        if place % 64 == 0:
            yield Progress(_STAGE, place, len(cuts))
        peaks[place] = response.peak(cut, onsets)
    return Leak(peaks, n_pulses)


def _span(setup: Setup) -> tuple[int, int]:
    """First sample of any channel's gap and the end of the median, in samples from the onset, half open."""
    first_s = min(window_s[0] for group in setup.groups for window_s in group.windows_s[:1])
    first, _ = window_to_samples(0, (min(first_s, 0.0), 0.0), setup.facts.rate_hz)
    return min(first, 0), math.floor(AFTER_S * setup.facts.rate_hz) + 1


def _median(chain: Chain, estimates: Estimates) -> Work[tuple[NDArray[np.float64], int]]:
    """Pulse-locked median of the repaired signal, shape (n_times, n_used), stored units; and of how many."""
    setup = chain.setup
    first, stop = _span(setup)
    before = max(1, round(BEFORE_S * setup.facts.rate_hz))
    alone = [
        onset
        for onset, following in zip(estimates.onsets, [*estimates.onsets[1:], math.inf], strict=True)
        if onset + stop <= following + first
        and any(lo <= onset + first - before and onset + stop <= hi for lo, hi in setup.facts.segments)
        and not any(a < onset + stop and b > onset + first - before for a, b in setup.barriers)
    ]
    size = (stop - first) * setup.used.size * np.dtype(np.float32).itemsize
    most = max(3, MOST_BYTES // size)
    if len(alone) > most:
        alone = [alone[place] for place in np.linspace(0, len(alone) - 1, most).round().astype(int)]
    pieces = np.empty((len(alone), stop - first, setup.used.size), np.float32)
    for place, onset in enumerate(alone):
        yield Progress(_STAGE, 0, 0)
        x = chain.repaired(onset + first - before, onset + stop)
        pieces[place] = x[before:] - x[:before].mean(axis=0)
    if not alone:
        return np.zeros((0, setup.used.size)), 0
    return np.median(pieces, axis=0).astype(np.float64), len(alone)


class _Response:
    """What arrives of one pulse's median at the end of the chain, wherever between samples its onset is."""

    def __init__(self, setup: Setup) -> None:
        self.setup = setup
        self.ratio = float(setup.ratio)
        self.first, stop = _span(setup)
        self.reach = math.ceil(setup.replaced_reach_s * setup.rate_hz) + 2
        self.own = (self.first * self.ratio, (stop - 1) * self.ratio)  # in output samples from the onset
        self.judged = np.append(setup.eeg & ~setup.bad, np.ones(len(setup.names) - setup.used.size, np.bool_))
        self.offsets: list[float] = []  # output samples from the onset to the response's first sample
        self.curves: list[NDArray[np.floating]] = []

    def learn(self, median: NDArray[np.float64]) -> Work[None]:
        """Send the median through the chain, once for each place of the onset between output samples."""
        setup = self.setup
        denominator = setup.ratio.denominator
        phases = sorted(
            {round(k * denominator / MOST_PHASES) for k in range(MOST_PHASES)} & set(range(denominator))
        )
        quiet = math.ceil((self.reach + 4) / self.ratio)
        n_samples = 2 * quiet + len(median) + denominator
        facts = replace(setup.facts, n_samples=n_samples, boundaries=(), markers=())
        # Nothing is filled, learned or put back: the median is of repaired signal.
        alone = replace(setup, facts=facts, pulses=(), barriers=(), groups=())
        for phase in phases:
            yield Progress(_STAGE, 0, 0)
            recording = _Alone(facts, setup.used, median, quiet + phase)
            is_split = setup.across_pulses is AcrossPulses.SPLIT
            spans = gap_spans(setup, [quiet + phase - self.first]) if is_split else []
            chain = Chain(recording, alone, Estimates(np.zeros(setup.used.size), (), 0.0), spans)
            lo, hi = chain.output_span(0)
            self.curves.append(np.array(chain.stretch(0, lo, hi)))
            self.offsets.append(lo - (quiet + phase - self.first) * self.ratio)

    def peak(self, cut: Cut, onsets: Sequence[int]) -> float:
        """Give the largest contribution of pulses near an epoch, in volts."""
        first = cut.first + cut.part  # output samples
        low = (first - self.own[1] - self.reach) / self.ratio
        high = (first + cut.n_times - self.own[0] + self.reach) / self.ratio
        start, stop = self.setup.facts.segments[cut.segment]
        near = onsets[bisect_left(onsets, max(low, start)) : bisect_right(onsets, min(high, stop - 1))]
        if not near:
            return 0.0
        total = np.zeros((len(self.setup.names), cut.n_times))
        for onset in near:
            begins = first - onset * self.ratio  # the epoch's first sample, from the onset
            misses = [(begins - offset) - round(begins - offset) for offset in self.offsets]
            best = int(np.argmin(np.abs(misses)))
            at = round(begins - self.offsets[best])
            curve = self.curves[best]
            lo, hi = max(0, -at), min(cut.n_times, curve.shape[1] - at)
            if hi <= lo:
                continue
            part = curve[:, at + lo : at + hi].astype(np.float64)
            inside = np.arange(lo, hi) + begins
            part[:, (inside >= self.own[0] - 1.0) & (inside <= self.own[1] + 1.0)] = 0.0
            total[:, lo:hi] += part
        return float(np.abs(total[self.judged]).max(initial=0.0))


class _Alone:
    """A recording of nothing but one stretch."""

    def __init__(
        self, facts: RecordingFacts, used: NDArray[np.intp], stretch: NDArray[np.float64], at: int
    ) -> None:
        self._facts, self._used, self._stretch, self._at = facts, used, stretch, at

    @property
    def facts(self) -> RecordingFacts:
        """Facts of the recording it stands for, shorter."""
        return self._facts

    def read(self, start: int, stop: int, out: FloatArray, offset: NDArray[np.float64] | None = None) -> None:
        """Fill ``out`` with the stretch where it lies and zeros elsewhere; see `Recording.read`."""
        out[...] = 0.0
        lo, hi = max(start, self._at), min(stop, self._at + len(self._stretch))
        if lo < hi:
            out[lo - start : hi - start, self._used] = self._stretch[lo - self._at : hi - self._at]

    def fingerprint_paths(self) -> tuple[str, ...]:
        """There is no file."""
        return ()

    def close(self) -> None:
        """Nothing is open."""
