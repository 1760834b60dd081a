"""The signal that follows the gaps, made small enough to fit decays to it."""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.decay_spans import decay_spans
from pulsemend.engine.reading import read_stored
from pulsemend.engine.setup import GapGroup, Setup
from pulsemend.model.recording import Recording
from pulsemend.progress import Progress, Work
from pulsemend.signal.autocovariance import AutocovarianceSum
from pulsemend.signal.decay_amplitudes import block_means
from pulsemend.signal.gaps import merge_spans, window_to_samples

LATE_S = (0.250, 0.500)
"""Since the gap's end: the level that the signal falls to is seen here, too, unless the stretch is that long.
Within 80 ms alone a slow decay and another level look alike, and a wrong level is a wrong tail."""

LATE_BLOCKS = 5

_FIT_HZ = 5000.0
_MOST_POINTS = 1000
_MOST_BLOCKS = 100

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class DecayGrid:
    """How the stretches after the gaps are made smaller before anything is fitted to them.

    Parameters
    ----------
    point : int
        Recorded samples per point of the shape's fit.
    block : int
        Points per block of the amplitudes' fit.
    n_points : int
        Points in the whole stretch.
    """

    point: int
    block: int
    n_points: int

    @property
    def block_samples(self) -> int:
        """Recorded samples per block."""
        return self.point * self.block

    @property
    def n_blocks(self) -> int:
        """Blocks in the whole stretch."""
        return self.n_points // self.block


def decay_grid(setup: Setup) -> DecayGrid:
    """Choose points of at most 0.2 ms, as long as these are not too many, and about a hundred blocks."""
    n_samples = round(setup.decay_s * setup.facts.rate_hz)
    point = max(1, int(setup.facts.rate_hz // _FIT_HZ), -(-n_samples // _MOST_POINTS))
    n_points = max(1, n_samples // point)
    return DecayGrid(point, -(-n_points // _MOST_BLOCKS), n_points)


class BackgroundSum:
    """Collects the autocovariance of the background, in blocks as long as those of the amplitudes' fit."""

    def __init__(self, setup: Setup) -> None:
        self._grid = decay_grid(setup)
        self._sum = AutocovarianceSum(setup.used.size, max(2, self._grid.n_blocks))

    def add(self, volts: NDArray[Any]) -> None:
        """Take in one pulse-free window, shape (n_samples, n_used)."""
        self._sum.add(block_means(volts, self._grid.block_samples))

    def result(self) -> Floats | None:
        """Autocovariance of blocks, shape (n_used, n_blocks); None where no window was long enough."""
        return self._sum.result() if self._sum.n_samples else None


@dataclass(frozen=True)
class Stretches:
    """The signal after the gaps, in volts minus a constant of each.

    Parameters
    ----------
    grid : DecayGrid
    since_pulse_s : float
        Where the gap ends.
    points : float32 array, shape (n_chosen, n_points, n_members)
        Of the pulses that the median is taken over; as long as at least half of them reach.
    blocks : float32 array, shape (n_spans, n_blocks, n_members)
        Of all pulses; NaN from where the next gap begins.
    late : float32 array, shape (n_chosen, LATE_BLOCKS, n_members)
        Medians over parts of `LATE_S`; NaN where these are not clean.
    late_s : array, shape (LATE_BLOCKS,)
        Their middles, from the gap's end.
    pulses : tuple of int
        Place of each row of `blocks` among the pulses.
    fitted : bool array, shape (n_spans,)
        Which of these are rows of `points`.
    times_s : array, shape (n_points,)
        From the gap's end.
    n_onsets : int
        All pulses.
    """

    grid: DecayGrid
    since_pulse_s: float
    points: NDArray[np.float32]
    blocks: NDArray[np.float32]
    late: NDArray[np.float32]
    late_s: Floats
    pulses: tuple[int, ...]
    fitted: NDArray[np.bool_]
    times_s: Floats
    n_onsets: int

    @property
    def n_pulses(self) -> int:
        """Pulses that the median is taken over."""
        return len(self.points)


def read_stretches(
    recording: Recording,
    setup: Setup,
    group: GapGroup,
    members: NDArray[np.intp],
    onsets: Sequence[int],
    most: int,
    chosen_only: bool = False,
) -> Work[Stretches]:
    """Read what follows the gaps of a group of channels, pulse by pulse.

    Parameters
    ----------
    recording : Recording
        Read from.
    setup : Setup
        Bound to it.
    group : GapGroup
        Whose gaps count.
    members : array of int
        Channels of the group that are kept, as places among the used ones.
    onsets : sequence of int
        Of the pulses, in order of time.
    most : int
        So many pulses for the median, spread evenly over the recording.
    chosen_only : bool
        Whether the other pulses are left unread.

    Yields
    ------
    Progress

    Returns
    -------
    Stretches
    """
    grid = decay_grid(setup)
    rate_hz = setup.facts.rate_hz
    # Where a joined gap ends later than the pulse's own, the shape's beginning is not there to be seen.
    spans = [
        span
        for segment in setup.facts.segments
        for span in decay_spans(setup, group, onsets, segment)
        if span.start == span.origin
    ]
    reach = np.array([min((s.clean_stop - s.origin) // grid.point, grid.n_points) for s in spans], np.intp)
    n_points = int(np.sort(reach)[::-1][(len(reach) - 1) // 2]) if len(reach) else 0
    far = np.flatnonzero(reach >= max(n_points, 1))
    if far.size > most:
        far = far[np.linspace(0, far.size - 1, most).round().astype(int)]
    row_of = {int(span): row for row, span in enumerate(far)}
    points = np.empty((far.size, n_points, members.size), np.float32)
    late = np.full((far.size, LATE_BLOCKS, members.size), np.nan, np.float32)
    edges = _late_edges(setup)
    gaps = [gap for segment in setup.facts.segments for gap in setup.lay(group, onsets, segment)]
    closed = merge_spans([*((gap.start, gap.stop) for gap in gaps), *setup.barriers])
    blocks = np.full((len(spans), grid.n_blocks, members.size), np.nan, np.float32)
    scale_v = setup.scale_v[members]
    for place, span in enumerate(spans):
        yield Progress("reading the decay", place, len(spans))
        n = int(reach[place])
        if n < grid.block or (chosen_only and place not in row_of):
            continue
        stop = span.origin + n * grid.point
        # Counting from a sample of its own, single precision is enough.
        origin = read_stored(recording, setup, span.origin, span.origin + 1)[0]
        x = read_stored(recording, setup, span.origin, stop, origin, np.float32)[:, members]
        volts = block_means((x * scale_v).astype(np.float32), grid.point)
        coarse = block_means(volts, grid.block)
        blocks[place, : len(coarse)] = coarse
        if place in row_of:
            points[row_of[place]] = volts[:n_points]
            for block, (a, b) in enumerate(pairwise(edges)):
                if span.origin + b <= span.stop and not _touches(closed, span.origin + a, span.origin + b):
                    y = read_stored(recording, setup, span.origin + a, span.origin + b, origin, np.float32)
                    late[row_of[place], block] = np.median(y[:, members], axis=0) * scale_v
    # Each point is the mean of its samples and stands in their middle.
    times_s = np.asarray((np.arange(n_points) * grid.point + (grid.point - 1) / 2.0) / rate_hz)
    since_s = window_to_samples(0, group.windows_s[0], rate_hz)[1] / rate_hz
    pulses = tuple(span.pulse for span in spans)
    late_s = (np.array(edges[1:]) + np.array(edges[:-1]) - 1) / 2.0 / rate_hz
    fitted = np.isin(np.arange(len(spans)), far)
    return Stretches(grid, since_s, points, blocks, late, late_s, pulses, fitted, times_s, len(onsets))


def _touches(closed: Sequence[tuple[int, int]], start: int, stop: int) -> bool:
    """Whether one of some sorted spans reaches into [start, stop)."""
    place = bisect_right(closed, start, key=lambda span: span[1])
    return place < len(closed) and closed[place][0] < stop


def _late_edges(setup: Setup) -> list[int]:
    """Edges of the late blocks in samples from the gap's end."""
    first_s = max(LATE_S[0], setup.decay_s)
    edges_s = np.linspace(first_s, first_s + LATE_S[1] - LATE_S[0], LATE_BLOCKS + 1)
    return [round(edge * setup.facts.rate_hz) for edge in edges_s.tolist()]
