"""Triplets of header, samples and markers (.vhdr, .eeg, .vmrk), read directly.

Blocks go from the file into one reused buffer and from there into the caller's array in one operation; the
file is never mapped, so memory does not grow with its length.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import DamagedRecording
from pulsemend.model.recording import FloatArray, RecordingFacts
from pulsemend.readers.codes import Found, set_aside, sync_notes
from pulsemend.readers.common import check_finite, check_request, file_part, missing
from pulsemend.readers.source import Source, facts_of, with_tables
from pulsemend.readers.triplet_header import (
    SampleType,
    TripletHeader,
    find_part,
    read_header,
    read_markers,
)

_CHUNK_BYTES = 1 << 19  # stays in the processor's cache between reading and converting


class TripletRecording:
    """A recording of header, data and marker file.

    Parameters
    ----------
    path : Path
        The header (.vhdr).

    Raises
    ------
    MissingPart, UnknownFormat, DamagedRecording, UnusableChannels
    """

    def __init__(self, path: Path) -> None:
        self._fd: int | None = None
        self._buffer = np.empty(0, dtype=np.uint8)
        self._header = read_header(path)
        self._data, data_note = find_part(path, self._header.data_name, ".eeg")
        paths, notes = [path, self._data], [*self._header.notes, data_note]
        n_samples = _count_samples(self._header, self._data)
        found: list[Found] = []
        boundaries: tuple[int, ...] = ()
        if self._header.marker_name:
            marker_path, marker_note = find_part(path, self._header.marker_name, ".vmrk")
            found, boundaries, marker_notes = _read_events(marker_path, n_samples, self._header.codepage)
            paths.append(marker_path)
            notes += [marker_note, *marker_notes]
        else:
            notes.append("The header names no marker file.")
        source = Source(
            format="header, data and marker file",
            rate_hz=self._header.rate_hz,
            n_samples=n_samples,
            channels=self._header.channels,
            found=tuple(found),
            boundaries=boundaries,
            paths=tuple(paths),
            notes=tuple(filter(None, notes)),
            reference=self._header.reference,
        )
        self._facts, self._paths = facts_of(path, with_tables(path, source))

    @property
    def facts(self) -> RecordingFacts:
        """Facts from header and marker file."""
        return self._facts

    def fingerprint_paths(self) -> tuple[str, ...]:
        """Paths of header, data and, if there is one, marker file."""
        return tuple(map(str, self._paths))

    def read(self, start: int, stop: int, out: FloatArray, offset: NDArray[np.float64] | None = None) -> None:
        """Fill ``out`` with the stored numbers of the samples [start, stop); see `Recording.read`."""
        check_request(self._facts, start, stop, out)
        if offset is not None and out.dtype == np.float32 and _stays_exact(offset, self._header.sample_type):
            self._fill(start, stop, out, offset.astype(np.float32))
        else:
            self._fill(start, stop, out, offset)

    def close(self) -> None:
        """Release the data file; reading again opens it again."""
        if self._fd is not None:
            os.close(self._fd)
            self._fd = None

    def _fill(
        self, start: int, stop: int, out: FloatArray, offset: NDArray[np.float32] | NDArray[np.float64] | None
    ) -> None:
        chunks = self._by_channel if self._header.by_channel else self._by_instant
        names = [channel.name for channel in self._facts.channels]
        for first, channels, stored in chunks(start, stop):
            if stored.dtype.kind == "f":
                check_finite(stored, first, names, self._data.name, channels.start)
            rows = out[first - start : first - start + len(stored), channels]
            if offset is None:
                rows[...] = stored
            elif offset.dtype == rows.dtype == np.float32:
                # Exact, and quicker in two steps: numpy is slow where types are mixed.
                rows[...] = stored
                rows -= offset[channels]
            else:
                np.subtract(stored, offset[channels], out=rows, casting="same_kind")

    def _by_instant(self, start: int, stop: int) -> Iterator[tuple[int, slice, NDArray[Any]]]:
        """Pieces of a multiplexed file: first sample, all channels, numbers (samples, channels)."""
        n_channels = len(self._facts.channels)
        frame = n_channels * self._header.sample_type.itemsize
        step = max(1, _CHUNK_BYTES // frame)
        for first in range(start, stop, step):
            count = min(step, stop - first)
            yield (
                first,
                slice(0, n_channels),
                self._numbers(first * frame, count * n_channels).reshape(count, -1),
            )

    def _by_channel(self, start: int, stop: int) -> Iterator[tuple[int, slice, NDArray[Any]]]:
        """Pieces of a vectorized file: first sample, one channel, numbers (samples, 1)."""
        size = self._header.sample_type.itemsize
        step = _CHUNK_BYTES // size
        for first in range(start, stop, step):
            count = min(step, stop - first)
            for channel in range(len(self._facts.channels)):
                position = (channel * self._facts.n_samples + first) * size
                yield first, slice(channel, channel + 1), self._numbers(position, count).reshape(count, 1)

    def _numbers(self, position: int, count: int) -> NDArray[Any]:
        """Read ``count`` stored numbers from a byte position; valid until the next call."""
        n_bytes = count * self._header.sample_type.itemsize
        if self._buffer.size < n_bytes:
            self._buffer = np.empty(n_bytes, dtype=np.uint8)
        self._read_bytes(position, memoryview(self._buffer[:n_bytes].data))
        return self._buffer[:n_bytes].view(self._header.sample_type)

    def _read_bytes(self, position: int, target: memoryview) -> None:
        try:
            if self._fd is None:
                self._fd = os.open(self._data, os.O_RDONLY | getattr(os, "O_BINARY", 0))
            while target:
                n_read = _read_at(self._fd, position, target)
                if n_read == 0:
                    raise DamagedRecording(
                        "the file has become shorter since it was opened",
                        where=self._data.name,
                        todo="Copy it again",
                    )
                position, target = position + n_read, target[n_read:]
        except OSError as error:
            raise missing(self._data, error) from error

    def __getstate__(self) -> dict[str, object]:
        return {**self.__dict__, "_fd": None, "_buffer": np.empty(0, dtype=np.uint8)}

    def __del__(self) -> None:
        if getattr(self, "_fd", None) is not None:
            self.close()


def _read_at(fd: int, position: int, target: memoryview) -> int:
    """Read into a buffer from a byte position; return how many bytes came."""
    if hasattr(os, "preadv"):
        return os.preadv(fd, [target], position)
    os.lseek(fd, position, os.SEEK_SET)
    content = os.read(fd, len(target))
    target[: len(content)] = content
    return len(content)


def _stays_exact(offset: NDArray[np.float64], sample_type: SampleType) -> bool:
    """Tell whether 16-bit numbers minus ``offset`` are exact in float32: small whole offsets."""
    small = sample_type.kind == "i" and sample_type.itemsize == 2
    return small and bool(np.all((np.abs(offset) <= 2**16) & (offset == np.rint(offset))))


def _count_samples(header: TripletHeader, data: Path) -> int:
    """Count samples by the data file's size, which must fit header and frame.

    Raises
    ------
    DamagedRecording
    """
    size = file_part(data).size
    frame = len(header.channels) * header.sample_type.itemsize
    n_samples, rest = divmod(size, frame)
    again = "Copy the file again; if the recording was broken off, export what there is once more"
    if size == 0:
        raise DamagedRecording("the file is empty", where=data.name, todo=again)
    if rest:
        raise DamagedRecording(
            f"its {size} bytes are {n_samples} samples of {frame} bytes and {rest} bytes too many",
            where=data.name,
            todo=again,
        )
    stated = header.n_samples
    # Instants can be counted; where each channel stands in one piece a wrong count shifts every channel.
    if stated is not None and (stated > n_samples or (header.by_channel and stated != n_samples)):
        raise DamagedRecording(
            f"it holds {n_samples} samples, the header says {stated}", where=data.name, todo=again
        )
    return n_samples


def _read_events(path: Path, n_samples: int, codepage: str) -> tuple[list[Found], tuple[int, ...], list[str]]:
    """Markers, boundaries and notes from a marker file.

    Raises
    ------
    DamagedRecording
        A marker lies behind the last sample: the data file is cut short.
    """
    lines = list(read_markers(path, codepage))
    behind = [line.position for line in lines if line.position > n_samples]
    if behind:
        raise DamagedRecording(
            f"{len(behind)} of {len(lines)} markers lie behind the last sample, {n_samples}, "
            f"the first at {min(behind)}",
            where=path.name,
            todo="Copy the data file again; if the recording was broken off, delete those entries",
        )
    found, joints, n_sync = set_aside((line.position - 1, line.type, line.text) for line in lines)
    boundaries = tuple(sorted(joint for joint in joints if joint > 0))
    notes = sync_notes(n_sync)
    if boundaries:
        notes.append(f"Pauses in the recording: {len(boundaries)}; nothing is joined across a pause.")
    early = sum(sample < 0 for sample, _, _ in found)
    if early:
        notes.append(f"Markers before the first sample, moved onto it: {early}.")
    return [(max(sample, 0), kind, text) for sample, kind, text in found], boundaries, notes
