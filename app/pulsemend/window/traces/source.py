"""Where the traces' numbers come from: the signal, its pyramid, or samples until that is there. No Qt."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from enum import Enum

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.columns import FIRST_BIN, Grid, extremes
from pulsemend.engine.pyramid import Patch, Pyramid
from pulsemend.model.recording import Recording
from pulsemend.session.view import Shown
from pulsemend.units import v_to_uv
from pulsemend.window.traces.sampler import Sampler

LINES_BELOW = 2.0
"""Samples per column below which true lines between samples are drawn."""
_MOST_VALUES = 3_000_000
"""Numbers read at once in place of a pyramid that is not there yet; about 30 ms."""
_BUDGET_S = 0.012


class Detail(Enum):
    """What the columns are, for the word shown beside them."""

    EXACT = "exact"
    COARSE = "coarse until the overview is ready"
    NOT_REPAIRED = "as recorded; the repair of this stretch is being computed"
    OLD_REPAIR = "repaired with earlier settings; being computed again"


@dataclass(frozen=True)
class Columns:
    """Lowest and highest stored numbers of channels in pixel columns.

    Parameters
    ----------
    first : int
        Number of the first column.
    lowest, highest : float32 arrays, shape (n_rows, n_columns)
    lines : bool
        Whether neighbours meet already, as true lines do.
    detail : Detail
    complete : bool
        False where asking again gives more.
    """

    first: int
    lowest: NDArray[np.float32]
    highest: NDArray[np.float32]
    lines: bool = False
    detail: Detail = Detail.EXACT
    complete: bool = True


@dataclass(frozen=True)
class RepairedStretch:
    """Repaired samples, computed by a worker.

    Parameters
    ----------
    start : int
        First recorded sample.
    samples : float32 array, shape (n_samples, n_used)
        Stored units, offsets included.
    channels : int array, shape (n_used,)
        Places of these channels in the recording.
    revision : int
        Of plan and marks.
    """

    start: int
    samples: NDArray[np.float32]
    channels: NDArray[np.intp]
    revision: int

    @property
    def stop(self) -> int:
        """First recorded sample behind it."""
        return self.start + len(self.samples)


class TraceSource:
    """Columns and values of one recording.

    Parameters
    ----------
    recording : Recording
        Opened for this source alone.
    request_repaired : callable or None
        Called with a stretch (start, stop) of recorded samples that is in view and not repaired yet; the
        result is handed to `set_repaired` later, in the window's thread. None: nothing to repair with.
    """

    def __init__(
        self, recording: Recording, request_repaired: Callable[[int, int], None] | None = None
    ) -> None:
        self._recording = recording
        self._request = request_repaired
        self._sampler = Sampler(recording)
        self._pyramid: Pyramid | None = None
        self._repaired: RepairedStretch | None = None
        self._patch: tuple[Patch, int] | None = None
        self._asked: tuple[int, int, int] | None = None
        self._revision = 0
        self.version = 0
        """Rises whenever the same columns may hold other numbers."""
        self.facts = recording.facts
        scale_v = np.array([channel.scale_v for channel in self.facts.channels], dtype=np.float64)
        self.uv_per_unit: NDArray[np.float64] = v_to_uv(scale_v)

    @property
    def pyramid(self) -> Pyramid | None:
        """The pyramid, once there."""
        return self._pyramid

    def new_sampler(self) -> Sampler:
        """Make a sampler of the same recording for another picture in the same thread."""
        return Sampler(self._recording)

    def set_pyramid(self, pyramid: Pyramid) -> None:
        """Draw wide views exactly from now on."""
        self._pyramid = pyramid
        self.version += 1

    def set_revision(self, revision: int) -> None:
        """Take note that plan or marks changed; what was repaired before is shown until it is replaced."""
        self._revision = revision
        # Also for the same revision: what was asked for may not have been answerable then.
        self._asked = None
        self.version += 1

    def set_repaired(self, stretch: RepairedStretch) -> bool:
        """Take a stretch a worker repaired; False if it is stale and was thrown away."""
        if stretch.revision != self._revision:
            return False
        self._repaired = stretch
        self.version += 1
        return True

    def set_repaired_overview(self, patch: Patch, revision: int) -> bool:
        """Take the bins that repair changes in the pyramid; False if they are stale and were thrown away."""
        if revision != self._revision:
            return False
        self._patch = (patch, revision)
        self.version += 1
        return True

    def columns(self, kind: Shown, grid: Grid, rows: NDArray[np.intp]) -> Columns:
        """Lowest and highest values in pixel columns.

        Parameters
        ----------
        kind : Shown
            As recorded or repaired.
        grid : Grid
            Columns outside the recording are left out.
        rows : int array, shape (n_rows,)
            Places of the channels in the recording.
        """
        if grid.per_column < FIRST_BIN:
            return self._from_signal(kind, grid, rows)
        if self._pyramid is not None:
            return self._from_pyramid(self._pyramid, kind, grid, rows)
        if grid.count * grid.per_column * len(self.facts.channels) <= _MOST_VALUES:
            return self._from_signal(kind, grid, rows)
        lowest, highest, complete = self._sampler.columns(grid, _BUDGET_S)
        return Columns(
            max(0, grid.first), lowest[rows], highest[rows], detail=Detail.COARSE, complete=complete
        )

    def values_uv(self, kind: Shown, sample: int) -> NDArray[np.float64]:
        """Microvolts of all channels at one recorded sample; as recorded where it is not repaired yet."""
        stored, _ = self._samples(kind, sample, sample + 1, ask=False)
        values: NDArray[np.float64] = stored[0] * self.uv_per_unit
        return values

    def _from_signal(self, kind: Shown, grid: Grid, rows: NDArray[np.intp]) -> Columns:
        n_samples = self.facts.n_samples
        if grid.per_column < LINES_BELOW:
            return self._lines(kind, grid, rows)
        edges = grid.edges(n_samples)
        if not edges.size:
            return _nothing(grid, rows)
        stored, detail = self._samples(kind, int(edges[0]), int(edges[-1]))
        lowest, highest = extremes(stored, stored, edges)
        return Columns(
            max(0, grid.first),
            np.ascontiguousarray(lowest.T[rows]),
            np.ascontiguousarray(highest.T[rows]),
            detail=detail,
        )

    def _lines(self, kind: Shown, grid: Grid, rows: NDArray[np.intp]) -> Columns:
        """Columns of the lines between samples, cut at the columns' edges."""
        n_samples = self.facts.n_samples
        most = int((n_samples - 1) / grid.per_column)
        first, last = max(0, grid.first), min(grid.first + grid.count, most)
        if last <= first:
            return _nothing(grid, rows)
        at = np.arange(first, last + 1, dtype=np.float64) * grid.per_column
        start, stop = int(at[0]), min(int(at[-1]) + 2, n_samples)
        stored, detail = self._samples(kind, start, stop)
        stored = stored[:, rows]
        at -= start
        before = np.minimum(at.astype(np.intp), len(stored) - 1)
        part = (at - before).astype(np.float32)[:, None]
        left = stored[before]
        edges = left + (stored[np.minimum(before + 1, len(stored) - 1)] - left) * part
        lowest = np.minimum(edges[:-1], edges[1:])
        highest = np.maximum(edges[:-1], edges[1:])
        for step in (1, 2):
            # A column narrower than 2 samples holds up to two between its edges.
            inner = np.minimum(before[:-1] + step, len(stored) - 1)
            inside = (inner < at[1:])[:, None]
            more = stored[inner]
            np.minimum(lowest, more, out=lowest, where=inside)
            np.maximum(highest, more, out=highest, where=inside)
        return Columns(
            first,
            np.ascontiguousarray(lowest.T),
            np.ascontiguousarray(highest.T),
            lines=True,
            detail=detail,
        )

    def _from_pyramid(self, pyramid: Pyramid, kind: Shown, grid: Grid, rows: NDArray[np.intp]) -> Columns:
        patch, detail = None, Detail.EXACT
        if kind is Shown.REPAIRED and self._request is not None:
            if self._patch is None:
                detail = Detail.NOT_REPAIRED
            else:
                patch, revision = self._patch
                detail = Detail.EXACT if revision == self._revision else Detail.OLD_REPAIR
        _, lowest, highest = pyramid.columns(grid, patch)
        if rows.size != pyramid.n_channels or np.any(np.diff(rows) != 1):
            lowest, highest = lowest[rows], highest[rows]
        return Columns(max(0, grid.first), lowest, highest, detail=detail)

    def _samples(
        self, kind: Shown, start: int, stop: int, *, ask: bool = True
    ) -> tuple[NDArray[np.float32], Detail]:
        """Read stored numbers of all channels, shape (stop - start, n_channels)."""
        if kind is not Shown.REPAIRED or self._request is None:
            return self._recorded(start, stop), Detail.EXACT
        held = self._repaired
        covered = held is not None and held.start <= start and stop <= held.stop
        current = held is not None and held.revision == self._revision
        if ask and not (covered and current):
            self._ask(start, stop)
        if held is None or not covered:
            return self._recorded(start, stop), Detail.NOT_REPAIRED
        detail = Detail.EXACT if current else Detail.OLD_REPAIR
        repaired = held.samples[start - held.start : stop - held.start]
        if np.array_equal(held.channels, np.arange(len(self.facts.channels))):
            return repaired, detail
        stored = self._recorded(start, stop)
        stored[:, held.channels] = repaired
        return stored, detail

    def _recorded(self, start: int, stop: int) -> NDArray[np.float32]:
        stored = np.empty((stop - start, len(self.facts.channels)), dtype=np.float32)
        self._recording.read(start, stop, stored)
        return stored

    def _ask(self, start: int, stop: int) -> None:
        """Ask for the stretch and as much again on either side, unless that is on its way."""
        asked = self._asked
        if asked is not None and asked[2] == self._revision and asked[0] <= start and stop <= asked[1]:
            return
        length = stop - start
        begin, end = max(0, start - length), min(self.facts.n_samples, stop + length)
        self._asked = (begin, end, self._revision)
        if self._request is not None:
            self._request(begin, end)


def _nothing(grid: Grid, rows: NDArray[np.intp]) -> Columns:
    nothing = np.empty((rows.size, 0), dtype=np.float32)
    return Columns(max(0, grid.first), nothing, nothing)
