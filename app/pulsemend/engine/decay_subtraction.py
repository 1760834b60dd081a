"""Decays are subtracted wherever the chain reads, until they are over or the next pulse's gap begins."""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.decay import DecayEstimates
from pulsemend.engine.decay_spans import DecaySpan, decay_spans
from pulsemend.engine.setup import GapGroup, Setup
from pulsemend.signal.absorption import altered
from pulsemend.signal.gaps import window_to_samples
from pulsemend.units import uv_to_v

OVER_UV = 0.1
"""A decay smaller than this is over."""

LONGEST_S = 5.0
"""No decay is followed further: what the stretch fitted says about it has ended long before."""


class DecaySubtraction:
    """Subtracts the decays of one group of channels; the same at a sample whatever stretch it is asked in.

    Parameters
    ----------
    setup : Setup
    group : GapGroup
    onsets : sequence of int
        Of the pulses.
    estimates : DecayEstimates
    """

    def __init__(
        self, setup: Setup, group: GapGroup, onsets: Sequence[int], estimates: DecayEstimates
    ) -> None:
        rows = np.flatnonzero(np.isin(estimates.columns, group.columns))
        self.columns = estimates.columns[rows]
        self._all = self.columns.size == setup.used.size
        self._spans = [decay_spans(setup, group, onsets, segment) for segment in setup.facts.segments]
        self._stops = [[span.stop for span in spans] for spans in self._spans]
        longest = max((s.stop - s.origin for spans in self._spans for s in spans), default=0)
        n = min(longest, round(LONGEST_S * setup.facts.rate_hz)) if rows.size else 0
        times_s = np.arange(n) / setup.facts.rate_hz
        volts = np.array([estimates.shape(row).at(times_s) for row in rows.tolist()]).reshape(rows.size, n)
        lasts = np.abs(volts) >= uv_to_v(OVER_UV)
        self._table = np.ascontiguousarray(
            ((volts * lasts) / setup.scale_v[self.columns][:, None]).T.astype(setup.work)
        )[: int(lasts.any(axis=0).sum())]
        self._rate_hz = setup.facts.rate_hz
        self._end = window_to_samples(0, group.windows_s[0], self._rate_hz)[1]
        self._amplitudes = estimates.amplitudes[rows].T.astype(setup.work)
        self._marked = self._marked_runs(estimates, rows, lasts)

    @property
    def altered_until_s(self) -> list[tuple[int, float]]:
        """Used channels, and until when since the pulse a response may be altered in them."""
        return [(column, (self._end + stop) / self._rate_hz) for column, _, stop in self._marked]

    def subtract(self, x: NDArray[Any], origin: int, segment: int) -> None:
        """Subtract in place what reaches into a stretch of one segment.

        Parameters
        ----------
        x : array, shape (n_samples, n_used)
            Stored units.
        origin : int
            Recorded sample number of ``x[0]``.
        segment : int
            Place in the facts' segments.
        """
        columns: slice | NDArray[np.intp] = slice(None) if self._all else self.columns
        for span, a, b in self._reaching(segment, origin, origin + len(x), len(self._table)):
            decay = self._table[a - span.origin : b - span.origin] * self._amplitudes[span.pulse]
            x[a - origin : b - origin, columns] -= decay

    def altered_runs(self, segment: int, lo: float, hi: float) -> Iterator[tuple[int, int, int]]:
        """Give channels with the runs [start, stop) of recorded samples in which a response is altered."""
        reach = max((stop for _, _, stop in self._marked), default=0)
        for span, _, _ in self._reaching(segment, lo, hi, reach):
            for column, start, stop in self._marked:
                a, b = max(span.start, span.origin + start), min(span.stop, span.origin + stop)
                if a < b:
                    yield column, a, b

    def _reaching(
        self, segment: int, lo: float, hi: float, length: int
    ) -> Iterator[tuple[DecaySpan, int, int]]:
        """Decays of a given length that touch [lo, hi], and where."""
        spans = self._spans[segment]
        for span in spans[bisect_right(self._stops[segment], lo) :]:
            if span.start >= hi:
                return
            a, b = max(span.start, int(np.floor(lo))), min(span.stop, span.origin + length, int(np.ceil(hi)))
            if a < b:
                yield span, a, b

    def _marked_runs(
        self,
        estimates: DecayEstimates,
        rows: NDArray[np.intp],
        lasts: NDArray[np.bool_],
    ) -> list[tuple[int, int, int]]:
        """List the fitted channels with their runs of samples from the gap's end that alter a response."""
        since_s = (self._end + np.arange(lasts.shape[1])) / self._rate_hz
        runs: list[tuple[int, int, int]] = []
        for row, column, lasting in zip(rows.tolist(), self.columns.tolist(), lasts, strict=True):
            marked = altered(estimates.absorption(row), since_s) & lasting
            edges = np.flatnonzero(np.diff(np.concatenate([[False], marked, [False]])))
            runs += [(column, int(a), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True)]
        return runs
