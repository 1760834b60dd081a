"""Second pass: the one chain from recorded samples to repaired epochs.

    offset -> decay -> fill -> anti-alias + decimate -> drift, line and band filters -> bad channels rebuilt
      -> reference -> cut

Nothing is estimated here. Every step is a pure function of recorded samples, estimates and absolute sample
number, computed on a fixed grid of blocks counted from the start of the recording, and pulled from the end:
whoever asks for a stretch gets the same samples, to the last bit, whatever was asked for before. So what
a preview shows is what an export writes. Blocks used last are kept for the next request; that is the only
state.
"""

from __future__ import annotations

import math
from bisect import bisect_left, bisect_right
from collections import OrderedDict
from collections.abc import Callable, Iterator, Sequence
from copy import copy
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cache
from typing import Any

import numpy as np
import threadpoolctl
from numpy.typing import NDArray

from pulsemend.engine.bad_channels import found_bad, rebuilding, reference_from
from pulsemend.engine.decay_subtraction import DecaySubtraction
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.reading import read_stored
from pulsemend.engine.setup import Setup
from pulsemend.engine.splits import gap_spans, overlapping, stretches
from pulsemend.model.epochs import nearest_sample
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import AcrossPulses, Fill
from pulsemend.signal.apply_fir import BandedFilter, FftFilter, banded
from pulsemend.signal.design import fractional_delay
from pulsemend.signal.extend import LEARN_S, extended
from pulsemend.signal.fills import FillConfig, Filler
from pulsemend.signal.gaps import Gap

Samples = NDArray[Any]

BLOCK_SAMPLES = 10_240
"""Recorded samples per block, about: a block of 62 channels then fits the second-level cache."""

DELAY_HALF = 32
WHOLE_SHIFT = 1e-9
"""Sub-sample shifts smaller than this part of a sample are none."""


@dataclass(frozen=True)
class Cut:
    """Where one epoch lies on the output grid.

    Parameters
    ----------
    segment : int
        Place in the facts' segments.
    first, n_times : int
        First output sample and number of output samples.
    part : float
        How much later than the grid the epoch's samples are, as a part of an output sample.
    shift_s : float
        The same in seconds: the signal is shifted by it, so that the anchor is exactly at time zero.
    remainder_s : float
        Anchor minus the instant taken as time zero. Zero unless the recorded rate is kept.
    """

    segment: int
    first: int
    n_times: int
    part: float
    shift_s: float
    remainder_s: float


class Chain:
    """All stages for one recording.

    Parameters
    ----------
    recording : Recording
        Read from by this chain alone.
    setup : Setup
        Plan and marks, bound to it.
    estimates : Estimates
        From `fit` with the same setup.
    pulse_spans : sequence of (int, int) or None
        Recorded samples across which nothing is filtered; None: the pulses' gaps, if the plan wants that.
    """

    def __init__(
        self,
        recording: Recording,
        setup: Setup,
        estimates: Estimates,
        pulse_spans: Sequence[tuple[int, int]] | None = None,
    ) -> None:
        _one_blas_thread()
        self._recording = recording
        self._setup = setup
        self._estimates = estimates
        self._repairs = _repairs(setup, estimates)
        self._decays: list[DecaySubtraction] = []
        if estimates.decay is not None:
            self._decays = [
                DecaySubtraction(setup, group, estimates.onsets, estimates.decay) for group in setup.groups
            ]
        self._output_spans = [
            (_ceil(lo * setup.ratio), _floor((hi - 1) * setup.ratio) + 1) for lo, hi in setup.facts.segments
        ]
        self._scale = setup.scale_v.astype(setup.work)[:, None]
        found = found_bad(setup, estimates.channels)
        mean_of = reference_from(setup, found)
        self._mean_of = (mean_of / max(1, mean_of.sum())).astype(setup.work)
        self._rebuilding = rebuilding(setup, found)
        self._weights = self._rebuilding.weights.astype(setup.work)
        offset_v = estimates.offset * setup.scale_v
        offset_v[self._rebuilding.rows] = self._rebuilding.weights @ offset_v
        self._offset_v = offset_v.astype(setup.work)[:, None]
        self._subtracted_from = _runs(setup.reference_to)
        self._decimator: BandedFilter | None = None
        if setup.antialias is not None:
            self._decimator = banded(setup.antialias, setup.ratio, setup.work)
        self._fft = None if setup.band is None else FftFilter(setup.band, setup.work)
        self._low_size = self._low_block_size()
        self._low_blocks = _Recent(2 + (2 * self._fft.margin if self._fft else 0) // self._low_size)
        if pulse_spans is None:
            is_split = setup.across_pulses is AcrossPulses.SPLIT
            pulse_spans = gap_spans(setup, estimates.onsets) if is_split else []
        self._stretches = [
            stretches(pulse_spans, span, setup.ratio, setup.rate_hz) for span in self._output_spans
        ]
        self._ends = _Recent(6)
        self._band_size = self._fft.block if self._fft else self._low_size
        self._band_blocks = _Recent(3)
        self._shares: Chain | None = None
        self._unlike: list[list[Gap]] = []

    @property
    def setup(self) -> Setup:
        """The binding this chain was made with."""
        return self._setup

    @property
    def estimates(self) -> Estimates:
        """What it rests on."""
        return self._estimates

    def with_gaps_at(self, onsets: Sequence[int]) -> Chain:
        """Make a chain that also fills gaps where no pulse was, as if one had its onset there.

        Decays are subtracted and filters split at the real pulses only. The new chain shares what never
        changes and keeps blocks of its own, so what it fills appears in nothing that this one gives.

        Parameters
        ----------
        onsets : sequence of int
            Recorded samples.
        """
        setup, other = self._setup, copy(self)
        every = (*self._estimates.onsets, *onsets)
        other._repairs = [
            replace(repair, gaps=[setup.lay(group, every, segment) for segment in setup.facts.segments])
            for repair, group in zip(self._repairs, setup.groups, strict=True)
        ]
        other._low_blocks, other._band_blocks, other._ends = (
            blocks.empty() for blocks in (self._low_blocks, self._band_blocks, self._ends)
        )
        pairs = list(zip(self._repairs, other._repairs, strict=True))
        other._unlike = [
            [gap for one, its in pairs for gap in {*one.gaps[segment]} ^ {*its.gaps[segment]}]
            for segment in range(len(setup.facts.segments))
        ]
        other._shares = self
        # Both filter the same decimated blocks, but those around the further gaps: keep them for one block.
        margin = self._fft.margin if self._fft else 0
        self._low_blocks.hold(3 + (self._band_size + 2 * margin) // self._low_size)
        return other

    def gaps(self, columns_of: int, segment: int) -> list[Gap]:
        """List the gaps of one group of channels in one segment."""
        return self._repairs[columns_of].gaps[segment]

    def repaired(self, start: int, stop: int) -> Samples:
        """Read used channels at the recorded rate, subtract decays and then fill the gaps.

        Parameters
        ----------
        start, stop : int
            Recorded samples within one segment.

        Returns
        -------
        array, shape (stop - start, n_used), C-contiguous
            Stored units minus the channels' offsets.
        """
        segment = self._segment_at(start)
        touched = [(repair, gap) for repair in self._repairs for gap in repair.touching(segment, start, stop)]
        first = min([start, *(gap.start - gap.left for _, gap in touched)])
        last = max([stop, *(gap.stop + gap.right for _, gap in touched)])
        x = self.before_fill(first, last)
        for repair, gap in touched:
            repair.fill(x, first, gap)
        return x[start - first : stop - first]

    def before_fill(self, start: int, stop: int) -> Samples:
        """Read used channels at the recorded rate and subtract decays, with the pulses still in them.

        Parameters
        ----------
        start, stop : int
            Recorded samples within one segment.

        Returns
        -------
        array, shape (stop - start, n_used), C-contiguous
            Stored units minus the channels' offsets.
        """
        offset = self._estimates.offset if self._setup.removes_offset else None
        x = read_stored(self._recording, self._setup, start, stop, offset, self._setup.work)
        segment = self._segment_at(start)
        for decay in self._decays:
            decay.subtract(x, start, segment)
        return x

    def output_span(self, segment: int) -> tuple[int, int]:
        """Output samples [first, stop) whose instants lie within a segment."""
        return self._output_spans[segment]

    def stretch(self, segment: int, start: int, stop: int) -> Samples:
        """Output samples of a stretch, filtered and referenced; mirrored oddly beyond the segment's ends.

        Parameters
        ----------
        segment : int
            Place in the facts' segments.
        start, stop : int
            Output samples; sample k stands at recorded sample k / ratio.

        Returns
        -------
        array, shape (n_channels, stop - start)
            Volts, in the working precision.
        """
        lo, hi = self.output_span(segment)
        return _mirrored(lambda a, b: self._from_blocks(segment, a, b), lo, hi, start, stop, stop - start)

    def cut(self, anchor_sample: float, start_s: float, n_times: int) -> Cut:
        """Lay an epoch onto the output grid.

        Parameters
        ----------
        anchor_sample : float
            Recorded sample of the anchor; need not be whole.
        start_s : float
            First sample minus anchor; times the output rate a whole number.
        n_times : int
            Output samples.
        """
        setup = self._setup
        ratio, recorded_hz = setup.ratio, setup.facts.rate_hz
        begin = round(start_s * setup.rate_hz)
        at = anchor_sample * ratio.numerator / ratio.denominator
        nearest = nearest_sample(at)
        middle = anchor_sample + (begin + n_times // 2) / float(ratio)
        part = at - nearest
        remainder_s = 0.0
        if ratio == 1:
            part, remainder_s = 0.0, part / recorded_hz
        elif abs(part) < WHOLE_SHIFT:
            part = 0.0
        return Cut(
            self._segment_at(int(middle)), nearest + begin, n_times, part, part / setup.rate_hz, remainder_s
        )

    def samples(self, cut: Cut) -> Samples:
        """Read one epoch.

        Returns
        -------
        array, shape (n_channels, n_times)
            Volts, in the precision of the plan; NaN where a gap was left.
        """
        setup = self._setup
        if cut.part:
            delay = _delay(round(cut.part, 9), setup.work.str)
            blocks = -(-cut.n_times // delay.block)
            lo, hi = delay.span(0, blocks)
            x = np.ascontiguousarray(self.stretch(cut.segment, cut.first + lo, cut.first + hi).T)
            data = delay.run(x, blocks)[: cut.n_times].T
        else:
            data = self.stretch(cut.segment, cut.first, cut.first + cut.n_times)
        data = np.array(data, dtype=setup.out, order="C")
        if setup.fill is Fill.LEAVE:
            data[self.replaced(cut)] = np.nan
        return data

    def replaced(self, cut: Cut) -> NDArray[np.bool_]:
        """Tell which samples of an epoch rest on replaced recorded ones within half an output period.

        Returns
        -------
        bool array, shape (n_channels, n_times)
        """
        marked = np.zeros((len(self._setup.names), cut.n_times), dtype=np.bool_)
        for columns, start, stop in self._replaced_runs(cut):
            marked[columns, start:stop] = True
        return self._as_rebuilt(marked)

    def decay_fitted(self, cut: Cut) -> NDArray[np.bool_] | None:
        """Tell which samples of an epoch lie where the decay's fit would alter a response.

        Returns
        -------
        bool array, shape (n_channels, n_times), or None
            By the same rule as `replaced`; None where no decay is looked for.
        """
        if self._estimates.decay is None:
            return None
        marked = np.zeros((len(self._setup.names), cut.n_times), dtype=np.bool_)
        lo, hi = self._recorded_reach(cut)
        for decay in self._decays:
            for column, a, b in decay.altered_runs(cut.segment, lo, hi):
                start, stop = self._output_run(cut, a, b)
                marked[column, start:stop] = True
        return self._as_rebuilt(marked)

    def decay_share(self, cut: Cut) -> float:
        """Give the share of an epoch's samples, over all channels, that `decay_fitted` marks."""
        marked = self.decay_fitted(cut)
        return 0.0 if marked is None else float(marked.mean())

    def replaced_share(self, cut: Cut) -> float:
        """Give the share of an epoch's samples, over all channels, that `replaced` marks."""
        if self._rebuilding.rows.size:
            return float(self.replaced(cut).mean())
        # Runs of one group may share an output sample that two gaps touch.
        touched: dict[int, NDArray[np.bool_]] = {}
        sizes: dict[int, int] = {}
        for columns, start, stop in self._replaced_runs(cut):
            touched.setdefault(id(columns), np.zeros(cut.n_times, dtype=np.bool_))[start:stop] = True
            sizes[id(columns)] = columns.size
        marked = sum(sizes[group] * int(times.sum()) for group, times in touched.items())
        return marked / (len(self._setup.names) * cut.n_times)

    def _as_rebuilt(self, marked: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Mark a rebuilt channel where any of the channels is marked that it rests on, and nowhere else."""
        ways = self._rebuilding
        if ways.rows.size:
            used = marked[: self._setup.used.size]
            marked[ways.rows] = [used[sources].any(axis=0) for sources in ways.sources]
        return marked

    def _replaced_runs(self, cut: Cut) -> Iterator[tuple[NDArray[np.intp], int, int]]:
        """Places of channels, and the run [start, stop) of output samples that one gap touches in them."""
        lo, hi = self._recorded_reach(cut)
        for repair in self._repairs:
            for gap in repair.touching(cut.segment, lo, hi):
                start, stop = self._output_run(cut, gap.start, gap.stop)
                if stop > start:
                    yield repair.columns, start, stop

    def _recorded_reach(self, cut: Cut) -> tuple[float, float]:
        """First and last instant, in recorded samples, that lie within half an output period of an epoch."""
        ratio = float(self._setup.ratio)
        first = cut.first + cut.part
        reach = _half_period(ratio)
        return first / ratio - reach, (first + cut.n_times - 1) / ratio + reach

    def _output_run(self, cut: Cut, start: int, stop: int) -> tuple[int, int]:
        """Run of an epoch's samples within half an output period of recorded samples [start, stop)."""
        ratio = float(self._setup.ratio)
        first = cut.first + cut.part
        reach = _half_period(ratio)
        return (
            max(0, math.ceil((start - reach) * ratio - first)),
            max(0, min(cut.n_times, math.floor((stop - 1 + reach) * ratio - first) + 1)),
        )

    def _segment_at(self, sample: int) -> int:
        segments = self._setup.facts.segments
        return next(i for i, (_, hi) in enumerate(segments) if sample < hi or i == len(segments) - 1)

    def _low_block_size(self) -> int:
        if self._decimator is None:
            return BLOCK_SAMPLES
        return max(1, BLOCK_SAMPLES // self._decimator.advance) * self._decimator.block

    def _low(self, segment: int, start: int, stop: int) -> Samples:
        """Decimated volts, shape (n_used, stop - start), of output samples within the segment."""
        return self._joined(self._low_blocks, self._low_size, self._low_block, segment, start, stop)

    def _low_block(self, segment: int, block: int) -> Samples:
        """One block of the grid; what lies outside the segment is left undefined."""
        lo, hi = self.output_span(segment)
        first = block * self._low_size
        start, stop = max(lo, first), min(hi, first + self._low_size)
        if self._shares is not None and not self._is_unlike(segment, start, stop):
            return self._shares._low_blocks.get((segment, block), self._shares._low_block)
        volts = np.zeros((self._setup.used.size, self._low_size), self._setup.work)
        if self._decimator is None:
            stored = self.repaired(start, stop)
        else:
            banded_first = start // self._decimator.block
            n_blocks = -(-stop // self._decimator.block) - banded_first
            segment_lo, segment_hi = self._setup.facts.segments[segment]
            x = _mirrored(
                lambda a, b: self.repaired(a, b).T,
                segment_lo,
                segment_hi,
                *self._decimator.span(banded_first, n_blocks),
                self._decimator.margin,
            )
            skipped = start - banded_first * self._decimator.block
            y = self._decimator.run(np.ascontiguousarray(x.T), n_blocks)
            stored = y[skipped : skipped + stop - start]
        np.multiply(stored.T, self._scale, out=volts[:, start - first : stop - first])
        return volts

    def _is_unlike(self, segment: int, start: int, stop: int) -> bool:
        """Whether decimated samples differ from those of the chain that blocks are shared with."""
        ratio = float(self._setup.ratio)
        # Mirrored at a segment's end, a block rests on samples up to twice the margin away.
        reach = 2 * self._decimator.matrix.shape[1] if self._decimator is not None else 0
        low, high = start / ratio - reach, stop / ratio + reach
        return any(gap.start < high and gap.stop > low for gap in self._unlike[segment])

    def _from_blocks(self, segment: int, start: int, stop: int) -> Samples:
        return self._joined(self._band_blocks, self._band_size, self._band_block, segment, start, stop)

    def _band_block(self, segment: int, block: int) -> Samples:
        lo, hi = self.output_span(segment)
        first = block * self._band_size
        if self._fft is None:
            x = self._low(segment, max(lo, first), min(hi, first + self._band_size))
            filtered = np.zeros((x.shape[0], self._band_size), x.dtype)
            filtered[:, max(lo, first) - first : min(hi, first + self._band_size) - first] = x
        elif len(self._stretches[segment]) == 1:
            filtered = self._filtered_alone(self._fft, segment, 0, first)
        else:
            filtered = np.zeros((self._setup.used.size, self._band_size), self._setup.work)
            for place, part in overlapping(self._stretches[segment], first, first + self._band_size):
                weights = part.weights(first, first + self._band_size).astype(self._setup.work)
                filtered += weights * self._filtered_alone(self._fft, segment, place, first)
        return self._referenced(filtered)

    def _filtered_alone(self, fft: FftFilter, segment: int, place: int, first: int) -> Samples:
        """Filter one stretch as if there were no other; a segment's ends are mirrored, others continued."""
        part, margin = self._stretches[segment][place], fft.margin
        start, stop = first - margin, first + self._band_size + margin
        x = _mirrored(lambda a, b: self._low(segment, a, b), part.start, part.stop, start, stop, margin)
        lo, hi = self.output_span(segment)
        if part.start > lo and start < part.start:
            end = self._ends.get((segment, -place - 1), self._continued)
            n = min(part.start - start, end.shape[1])
            x[:, part.start - n - start : part.start - start] = end[:, ::-1][:, end.shape[1] - n :]
        if part.stop < hi and stop > part.stop:
            end = self._ends.get((segment, place), self._continued)
            n = min(stop - part.stop, end.shape[1])
            x[:, part.stop - start : part.stop - start + n] = end[:, :n]
        return fft.run(x)

    def _continued(self, segment: int, end: int) -> Samples:
        """Continue a stretch beyond its end, or, with a negative number, before its start (backwards)."""
        place = end if end >= 0 else -end - 1
        part, setup = self._stretches[segment][place], self._setup
        near = round(LEARN_S * setup.rate_hz)
        margin = self._fft.margin if self._fft else 0
        if end >= 0:
            known = self._low(segment, max(part.start, part.stop - near), part.stop)
            n_ahead = margin + part.gap_after - part.stop
        else:
            known = self._low(segment, part.start, min(part.stop, part.start + near))[:, ::-1]
            n_ahead = margin + part.start - part.gap_before
        return extended(known, n_ahead, setup.rate_hz).astype(setup.work)

    def _referenced(self, volts: Samples) -> Samples:
        """Rebuild bad channels, put offsets back where no high-pass removed them, subtract the reference."""
        setup = self._setup
        if self._rebuilding.rows.size:
            volts[self._rebuilding.rows] = self._weights @ volts
        if setup.removes_offset and not setup.highpass_on:
            volts = volts + self._offset_v
        if setup.restored:
            volts = np.concatenate([volts, np.zeros((1, volts.shape[1]), volts.dtype)])
        if setup.reference_from.any():
            mean = self._mean_of @ volts
            for run in self._subtracted_from:
                volts[run] -= mean
        return volts

    @staticmethod
    def _joined(
        recent: _Recent,
        size: int,
        make: Callable[[int, int], Samples],
        segment: int,
        start: int,
        stop: int,
    ) -> Samples:
        """Put a stretch together from blocks of a grid."""
        pieces = []
        for block in range(start // size, -(-stop // size)):
            whole = recent.get((segment, block), make)
            first = block * size
            pieces.append(whole[:, max(0, start - first) : min(size, stop - first)])
        return pieces[0] if len(pieces) == 1 else np.concatenate(pieces, axis=1)


@dataclass(frozen=True)
class _Repair:
    """The gaps of one group of channels, by segment, and what fills them."""

    columns: NDArray[np.intp]
    gaps: list[list[Gap]]
    filler: Filler | None

    def touching(self, segment: int, start: float, stop: float) -> list[Gap]:
        """List the gaps that reach into [start, stop]; they are in order and do not overlap."""
        gaps = self.gaps[segment]
        first = bisect_left(gaps, start, key=lambda gap: gap.stop)
        return gaps[first : bisect_right(gaps, stop, key=lambda gap: gap.start)]

    def fill(self, x: Samples, origin: int, gap: Gap) -> None:
        if self.filler is None:
            x[gap.start - origin : gap.stop - origin, self.columns] = 0.0
        else:
            self.filler.fill(x, origin, gap)


def _repairs(setup: Setup, estimates: Estimates) -> list[_Repair]:
    repairs = []
    for group in setup.groups:
        everyone = group.columns.size == setup.used.size
        filler = None
        # Without pulses nothing was learned for a fill, and nothing is filled.
        if estimates.pulses and setup.fill is not Fill.LEAVE:
            known = estimates.autocovariance
            config = FillConfig(
                kind=setup.fill,
                side=setup.side,
                flank=setup.flank,
                rate_hz=setup.facts.rate_hz,
                autocovariance=None if known is None else known[group.columns],
            )
            filler = Filler(config, setup.used.size, setup.work, None if everyone else group.columns)
        gaps = [setup.lay(group, estimates.onsets, segment) for segment in setup.facts.segments]
        repairs.append(_Repair(group.columns, gaps, filler))
    return repairs


class _Recent:
    """The blocks used last, so that neighbours need not be computed again."""

    def __init__(self, most: int) -> None:
        self._most = most
        self._blocks: OrderedDict[tuple[int, int], Samples] = OrderedDict()

    def empty(self) -> _Recent:
        """Make another for as many blocks, with none in it."""
        return _Recent(self._most)

    def hold(self, most: int) -> None:
        """Keep so many from now on, if it were fewer."""
        self._most = max(self._most, most)

    def get(self, key: tuple[int, int], make: Callable[[int, int], Samples]) -> Samples:
        if key in self._blocks:
            self._blocks.move_to_end(key)
        else:
            while len(self._blocks) >= self._most:
                self._blocks.popitem(last=False)
            self._blocks[key] = make(*key)
        return self._blocks[key]


def _mirrored(
    get: Callable[[int, int], Samples], lo: int, hi: int, start: int, stop: int, reach: int
) -> Samples:
    """Get samples [start, stop) of a signal known on [lo, hi): mirrored oddly beyond.

    Parameters
    ----------
    get : callable
        Gives samples [a, b) within [lo, hi), shape (n_channels, b - a).
    lo, hi : int
        Where the signal is known.
    start, stop : int
        What is asked for.
    reach : int
        How far beyond an end samples are mirrored; further out they are zero because nothing rests on them.

    Returns
    -------
    array, shape (n_channels, stop - start)
    """
    before = min(max(0, lo - start), reach)
    after = min(max(0, stop - hi), reach)
    if not before and not after and start >= lo and stop <= hi:
        return get(start, stop)
    first, last = max(lo, min(start, hi - 1 - after)), min(hi, max(stop, lo + 1 + before))
    known = get(first, last)
    # Where the whole signal is shorter than the mirror reaches, numpy mirrors again at the other end.
    padded = np.pad(known, ((0, 0), (before, after)), mode="reflect", reflect_type="odd")
    origin = first - before
    x = np.zeros((known.shape[0], stop - start), known.dtype)
    a, b = max(start, origin), min(stop, origin + padded.shape[1])
    if b > a:
        x[:, a - start : b - start] = padded[:, a - origin : b - origin]
    return x


@cache
def _delay(part: float, dtype: str) -> BandedFilter:
    return banded(fractional_delay(part, DELAY_HALF)[::-1], Fraction(1), dtype, least_block=16)


@cache
def _one_blas_thread() -> None:
    """Keep matrix products to one thread in the whole process: here workers are what runs in parallel."""
    threadpoolctl.threadpool_limits(1)


def _runs(chosen: NDArray[np.bool_]) -> list[slice]:
    """List the runs of chosen places as slices, which change an array in place without a copy."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], chosen, [False]])))
    return [slice(int(a), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def _half_period(ratio: float) -> float:
    """Half an output period in recorded samples, a rounding's width more."""
    return 0.5 / ratio + 1e-6


def _ceil(x: Fraction) -> int:
    return -(-x.numerator // x.denominator)


def _floor(x: Fraction) -> int:
    return x.numerator // x.denominator
