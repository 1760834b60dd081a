"""A first, coarse picture of long stretches: few samples here and there, until the pyramid is built."""

from __future__ import annotations

import time

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.columns import Grid
from pulsemend.model.recording import Recording

_PROBES = 256
"""Probes across a view, at least."""
_PROBE_SAMPLES = 16


class Sampler:
    """Reads short probes at even distances, middle ones first, and keeps those of one distance.

    Parameters
    ----------
    recording : Recording
        Read from by this sampler's thread alone.
    """

    def __init__(self, recording: Recording) -> None:
        self._recording = recording
        self._distance = 0
        self._known: NDArray[np.bool_] = np.zeros(0, dtype=np.bool_)
        self._values = np.empty((0, 2, 0), dtype=np.float32)

    def columns(self, grid: Grid, budget_s: float) -> tuple[NDArray[np.float32], NDArray[np.float32], bool]:
        """Lowest and highest values near every column, reading on for a while.

        Parameters
        ----------
        grid : Grid
            Columns outside the recording are left out.
        budget_s : float
            Time after which no further probe is read; at least one is.

        Returns
        -------
        lowest, highest : arrays, shape (n_channels, n_columns)
        complete : bool
            Whether every probe in view has been read.
        """
        n_samples = self._recording.facts.n_samples
        self._spread(max(1.0, grid.count * grid.per_column))
        middles = (grid.first + np.arange(grid.count) + 0.5) * grid.per_column
        middles = middles[(middles >= 0) & (middles < n_samples)]
        probes = np.minimum(middles // self._distance, len(self._known) - 1).astype(np.intp)
        if not probes.size:
            nothing = np.empty((self._values.shape[2], 0), dtype=np.float32)
            return nothing, nothing, True
        complete = self._read_on(int(probes[0]), int(probes[-1]) + 1, budget_s)
        known = np.flatnonzero(self._known)
        after = np.minimum(np.searchsorted(known, probes), known.size - 1)
        before = np.maximum(after - 1, 0)
        nearer = np.abs(known[before] - probes) < np.abs(known[after] - probes)
        near = self._values[known[np.where(nearer, before, after)]]
        return near[:, 0].T.copy(), near[:, 1].T.copy(), complete

    def _spread(self, samples_in_view: float) -> None:
        """Choose the distance by powers of two, so that panning and small zooms keep what was read."""
        distance = max(_PROBE_SAMPLES, 2 ** int(np.log2(max(1.0, samples_in_view / _PROBES))))
        if distance != self._distance:
            facts = self._recording.facts
            n_probes = -(-facts.n_samples // distance)
            self._distance = distance
            self._known = np.zeros(n_probes, dtype=np.bool_)
            self._values = np.empty((n_probes, 2, len(facts.channels)), dtype=np.float32)

    def _read_on(self, first: int, stop: int, budget_s: float) -> bool:
        until = time.perf_counter() + budget_s
        for probe in _halving(first, stop):
            if self._known[probe]:
                continue
            n_samples = self._recording.facts.n_samples
            start = min(probe * self._distance, max(0, n_samples - _PROBE_SAMPLES))
            samples = np.empty(
                (min(_PROBE_SAMPLES, n_samples - start), self._values.shape[2]), dtype=np.float32
            )
            self._recording.read(start, start + len(samples), samples)
            self._values[probe, 0], self._values[probe, 1] = samples.min(axis=0), samples.max(axis=0)
            self._known[probe] = True
            if time.perf_counter() > until:
                return bool(self._known[first:stop].all())
        return True


def _halving(first: int, stop: int) -> list[int]:
    """Order a range so that every part of it is reached early: by its numbers' bits, reversed."""
    bits = max(1, (stop - first - 1).bit_length())
    reversed_bits = (int(f"{number:0{bits}b}"[::-1], 2) for number in range(1 << bits))
    return [first + number for number in reversed_bits if first + number < stop]
