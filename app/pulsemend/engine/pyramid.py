"""Lowest and highest values of a recording at falling resolution: what wide views are drawn from.

Level 0 holds the extremes of bins of 16 samples, every further level those of 4 bins of the one below. Bins
are counted from the recording's first sample and stored instant by instant: a view is one read in one piece.
"""

from __future__ import annotations

import json
import threading
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.columns import FIRST_BIN, STEP, Extremes, Grid, bin_samples, extremes, pooled
from pulsemend.engine.store import Store, quick_stamp
from pulsemend.errors import DamagedRecording
from pulsemend.model.recording import Recording
from pulsemend.progress import Progress, Work

_BLOCK_LEVELS = 6
_BLOCK = FIRST_BIN * STEP ** (_BLOCK_LEVELS - 1)
"""Samples per block of the build: a whole number of bins of the first levels, about the cache's size."""
_FEWEST_BINS = 64
_KIND, _VERSION = "pyramid", 1
_HEADER_BYTES = 4096
_STAGE = "drawing the overview"


class Pyramid:
    """An open pyramid. Threads may share it: the window draws from it while a worker patches it.

    Parameters
    ----------
    path : Path
        Written by `build`.

    Raises
    ------
    DamagedRecording
        It is no pyramid of this version, or not all of it is there.
    """

    def __init__(self, path: Path) -> None:
        self._file = path.open("rb", buffering=0)
        try:
            shape = _read_shape(self._file)
        except DamagedRecording:
            self._file.close()
            raise
        self._shape = shape
        self._reading = threading.Lock()

    @property
    def n_levels(self) -> int:
        """How many levels there are."""
        return len(self._shape.n_bins)

    @property
    def n_samples(self) -> int:
        """Length of the recording."""
        return self._shape.n_samples

    @property
    def n_channels(self) -> int:
        """All channels of the file."""
        return self._shape.n_channels

    @property
    def whole(self) -> bool:
        """Whether it holds whole numbers (int16), or float32."""
        return self._shape.number == np.int16

    def columns(
        self, grid: Grid, patch: Patch | None = None
    ) -> tuple[NDArray[np.int64], NDArray[np.float32], NDArray[np.float32]]:
        """Lowest and highest stored numbers in pixel columns.

        Parameters
        ----------
        grid : Grid
            At least 16 samples per column.
        patch : Patch or None
            Bins that differ, e.g. where the signal was repaired.

        Returns
        -------
        edges : int array, shape (n_columns + 1,)
            What the columns hold, exactly: samples edges[j] to edges[j + 1]. Columns outside the recording
            are left out.
        lowest, highest : float32 arrays, shape (n_channels, n_columns)
        """
        level = grid.level
        if level is None:
            raise ValueError(f"{grid.per_column} samples per column are fewer than a bin holds")
        level = min(level, self.n_levels - 1)
        edges = grid.edges(self.n_samples, self.n_levels)
        if not edges.size:
            nothing = np.empty((self.n_channels, 0), np.float32)
            return edges, nothing, nothing
        bins = -(-edges // bin_samples(level))
        found = self.bins(level, int(bins[0]), int(bins[-1]), patch)
        lowest, highest = extremes(found[:, 0], found[:, 1], bins)
        return edges, _by_channel(lowest), _by_channel(highest)

    def bins(self, level: int, start: int, stop: int, patch: Patch | None = None) -> Extremes:
        """Read bins [start, stop) of a level, shape (stop - start, 2, n_channels).

        Raises
        ------
        DamagedRecording
            The file has become shorter.
        """
        with self._reading:
            found = self._shape.read(self._file, level, start, stop)
        return found if patch is None else patch.laid_over(found, level, start)

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def __del__(self) -> None:
        if hasattr(self, "_file"):
            self._file.close()


@dataclass(frozen=True)
class Patch:
    """Bins that differ from a pyramid's: the same pyramid of a signal changed in few places.

    Parameters
    ----------
    levels : mapping of int to (int array, float32 array)
        For each level the numbers of the bins, rising, shape (n,), and their extremes,
        shape (n, 2, n_channels).
    """

    levels: Mapping[int, tuple[NDArray[np.int64], NDArray[np.float32]]]

    def laid_over(self, found: Extremes, level: int, start: int) -> Extremes:
        """Bins from number ``start`` on, those of the patch in place of the pyramid's."""
        if level not in self.levels:
            return found
        numbers, values = self.levels[level]
        a, b = np.searchsorted(numbers, [start, start + len(found)])
        if a == b:
            return found
        changed = found.astype(np.float32)
        changed[numbers[a:b] - start] = values[a:b]
        return changed


def pyramid(recording: Recording, store: Store) -> Work[Pyramid]:
    """Open the pyramid of a recording, after building it if the store has none of the files as they are.

    Yields
    ------
    Progress
        In samples. Closed at any of them, nothing is left behind.

    Raises
    ------
    MissingPart, DamagedRecording, UnusableSamples
        The recording cannot be read.
    OutOfSpace, InputError
        The store cannot be written.
    """
    stamp = quick_stamp(recording.fingerprint_paths())
    path = store.find(stamp, _KIND, _VERSION)
    if path is not None:
        try:
            return Pyramid(path)
        except DamagedRecording:
            store.discard(path)
    with store.writing(stamp, _KIND, _VERSION) as file:
        yield from build(recording, file)
    found = store.find(stamp, _KIND, _VERSION)
    if found is None:
        raise DamagedRecording("the overview vanished from the cache while it was opened")
    return Pyramid(found)


def build(recording: Recording, file: BinaryIO) -> Work[None]:
    """Write the pyramid of a recording: as int16 if all its extremes are whole and fit, else as float32.

    Yields
    ------
    Progress
        In samples.
    """
    if not (yield from _build(recording, file, np.dtype("<i2"))):
        yield from _build(recording, file, np.dtype("<f4"))


def patch(
    of: Pyramid, spans: Sequence[tuple[int, int]], read: Callable[[int, int], NDArray[Any]]
) -> Work[Patch]:
    """Work out the bins of a signal that differs from the recording within spans alone.

    Parameters
    ----------
    of : Pyramid
        Of the recording.
    spans : sequence of (int, int)
        Recorded samples, half open, in order of time; they may overlap.
    read : callable
        Gives the changed signal of samples [start, stop), shape (stop - start, n_channels), stored units.

    Yields
    ------
    Progress
        In spans.
    """
    merged: list[list[int]] = []
    for start, stop in spans:
        a, b = start // FIRST_BIN, -(-stop // FIRST_BIN)
        if merged and a <= merged[-1][1]:
            merged[-1][1] = max(b, merged[-1][1])
        else:
            merged.append([a, b])
    numbers = [np.arange(a, b, dtype=np.int64) for a, b in merged]
    values = []
    for done, (a, b) in enumerate(merged):
        samples = read(a * FIRST_BIN, min(b * FIRST_BIN, of.n_samples))
        values.append(pooled(samples.astype(np.float32, copy=False), None, FIRST_BIN))
        yield Progress(_STAGE, done + 1, len(merged))
    if not merged:
        return Patch({})
    levels = {0: (np.concatenate(numbers), np.concatenate(values))}
    for level in range(1, of.n_levels):
        levels[level] = _patched_above(of, Patch(levels), level)
    return Patch(levels)


@dataclass(frozen=True)
class _Shape:
    """What a pyramid's file holds, and where."""

    n_samples: int
    n_channels: int
    number: np.dtype[Any]

    @property
    def n_bins(self) -> tuple[int, ...]:
        counts = [-(-self.n_samples // FIRST_BIN)]
        while counts[-1] > _FEWEST_BINS:
            counts.append(-(-counts[-1] // STEP))
        return tuple(counts)

    @property
    def bin_bytes(self) -> int:
        return 2 * self.n_channels * self.number.itemsize

    @property
    def size(self) -> int:
        return _HEADER_BYTES + sum(self.n_bins) * self.bin_bytes

    def position(self, level: int, number: int) -> int:
        return _HEADER_BYTES + (sum(self.n_bins[:level]) + number) * self.bin_bytes

    def read(self, file: Any, level: int, start: int, stop: int) -> Extremes:
        found = np.empty((stop - start, 2, self.n_channels), self.number)
        file.seek(self.position(level, start))
        target = memoryview(found.reshape(-1).view(np.uint8).data)
        while target:
            n_read = file.readinto(target)
            if not n_read:
                raise DamagedRecording("the overview in the cache has become shorter")
            target = target[n_read:]
        return found

    def header(self) -> bytes:
        facts = {
            "pulsemend pyramid": _VERSION,
            "n_samples": self.n_samples,
            "n_channels": self.n_channels,
            "number": self.number.str,
        }
        return json.dumps(facts).encode().ljust(_HEADER_BYTES)


def _read_shape(file: Any) -> _Shape:
    try:
        facts = json.loads(file.read(_HEADER_BYTES))
        shape = _Shape(int(facts["n_samples"]), int(facts["n_channels"]), np.dtype(facts["number"]))
        known = facts["pulsemend pyramid"] == _VERSION
    except (ValueError, KeyError, TypeError) as error:
        raise DamagedRecording("the overview in the cache cannot be read") from error
    if not known or file.seek(0, 2) != shape.size:
        raise DamagedRecording("the overview in the cache is not whole")
    return shape


def _build(recording: Recording, file: BinaryIO, number: np.dtype[Any]) -> Work[bool]:
    """Write all levels; False as soon as an extreme does not fit the kind of number."""
    facts = recording.facts
    shape = _Shape(facts.n_samples, len(facts.channels), number)
    n_bins = shape.n_bins
    file.seek(0)
    file.write(shape.header())
    samples = np.empty((min(_BLOCK, facts.n_samples), shape.n_channels), np.float32)
    tops: list[Extremes] = []
    for start in range(0, facts.n_samples, _BLOCK):
        stop = min(start + _BLOCK, facts.n_samples)
        block = samples[: stop - start]
        recording.read(start, stop, block)
        found = pooled(block, None, FIRST_BIN)
        stored = _stored(found, number)
        if stored is None:
            return False
        found = stored
        for level in range(min(_BLOCK_LEVELS, len(n_bins))):
            if level:
                found = pooled(found[:, 0], found[:, 1], STEP)
            file.seek(shape.position(level, start // bin_samples(level)))
            file.write(found.data)
        tops.append(found)
        yield Progress(_STAGE, stop, facts.n_samples)
    found = np.concatenate(tops)
    for level in range(_BLOCK_LEVELS, len(n_bins)):
        found = pooled(found[:, 0], found[:, 1], STEP)
        file.seek(shape.position(level, 0))
        file.write(found.data)
    return True


def _stored(found: NDArray[np.float32], number: np.dtype[Any]) -> Extremes | None:
    """Extremes as they are written; None if that would change one."""
    with np.errstate(invalid="ignore"):
        stored = found.astype(number)
    return stored if number.kind == "f" or np.array_equal(stored, found) else None


def _patched_above(of: Pyramid, known: Patch, level: int) -> tuple[NDArray[np.int64], NDArray[np.float32]]:
    """Bins of a level that hold changed bins of the one below."""
    numbers = np.unique(known.levels[level - 1][0] // STEP)
    values = np.empty((numbers.size, 2, of.n_channels), np.float32)
    n_below = -(-of.n_samples // bin_samples(level - 1))
    for row, number in enumerate(numbers):
        a = int(number) * STEP
        below = of.bins(level - 1, a, min(a + STEP, n_below), known)
        values[row, 0], values[row, 1] = below[:, 0].min(axis=0), below[:, 1].max(axis=0)
    return numbers, values


def _by_channel(rows: NDArray[Any]) -> NDArray[np.float32]:
    return np.ascontiguousarray(rows.T, dtype=np.float32)
