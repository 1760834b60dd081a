"""What a recording is: its facts, and the protocol that every reader fulfils."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.vocabulary import ChannelType

FloatArray = NDArray[np.float32] | NDArray[np.float64]


@dataclass(frozen=True)
class Channel:
    """One channel of a recording.

    Parameters
    ----------
    name : str
    type : ChannelType
    scale_v : float
        Volts per stored unit (resolution x unit, the product taken first); 1.0 where volts are stored.
    position_m : tuple of 3 float or None
        Position on the head in metres (x right, y front, z up), if the file holds one.
    unit : str
        Unit as the file writes it.
    impedance_ohm : float or None
        Electrode impedance that the recorder measured last before or after the samples.
    highpass_hz, lowpass_hz : float or None
        Filters of the recorder, before the samples were stored; a high-pass of 0 is off. None: not said.
    coupling : str
        "DC" or "AC", where the file says so.
    reference : str
        The electrode it was recorded against, where the file names it.
    gain : float or None
        Of the amplifier, where the file gives one.
    status : str
        "good" or "bad", where the file or a table beside it says so; bad channels are not left out by that.
    range_v : tuple of 2 float or None
        Lowest and highest voltage that the file can hold, where its header says so.
    """

    name: str
    type: ChannelType
    scale_v: float = 1.0
    position_m: tuple[float, float, float] | None = None
    unit: str = "V"
    impedance_ohm: float | None = None
    highpass_hz: float | None = None
    lowpass_hz: float | None = None
    coupling: str = ""
    reference: str = ""
    gain: float | None = None
    status: str = ""
    range_v: tuple[float, float] | None = None


@dataclass(frozen=True)
class Marker:
    """One marker of a recording.

    Parameters
    ----------
    sample : float
        Recorded sample, from 0; whole for formats that count samples, not rounded for those that give times.
    code : str
        The description alone, without its type; runs of blanks made one, ends trimmed.
        ``type:text`` only where two types share a text.
    type : str
        The marker's type as the file gives it, or empty.
    """

    sample: float
    code: str
    type: str = ""


@dataclass(frozen=True)
class FilePart:
    """One file that makes up a recording: its name, without the recording's own folder, and size in bytes."""

    name: str
    size: int


@dataclass(frozen=True)
class RecordingFacts:
    """Everything known about a recording before its samples are read.

    Parameters
    ----------
    stem : str
        The recording's name: file name without extension, a trailing ``_eeg`` removed.
    format : str
        The kind of file, in words.
    rate_hz : float
        Recorded sampling rate.
    n_samples : int
    channels : tuple of Channel
        In file order, trigger channels included.
    markers : tuple of Marker
        In order of time. Segment marks and synchronisation marks are not among them.
    boundaries : tuple of int
        First samples of every contiguous segment but the first: nothing may be filtered or cut across them.
    parts : tuple of FilePart
        Every file that belongs to the recording.
    notes : tuple of str
        What a reader had to decide, one sentence each (shown by ``facts``).
    reference : str
        The electrode the whole recording refers to, where the header names one.
    """

    stem: str
    format: str
    rate_hz: float
    n_samples: int
    channels: tuple[Channel, ...]
    markers: tuple[Marker, ...]
    boundaries: tuple[int, ...] = ()
    parts: tuple[FilePart, ...] = ()
    notes: tuple[str, ...] = ()
    reference: str = ""

    @property
    def segments(self) -> tuple[tuple[int, int], ...]:
        """Contiguous stretches as half-open sample spans."""
        edges = (0, *self.boundaries, self.n_samples)
        return tuple((a, b) for a, b in itertools.pairwise(edges) if b > a)

    @property
    def duration_s(self) -> float:
        """Length of the recording in seconds."""
        return self.n_samples / self.rate_hz


@dataclass(frozen=True)
class Fingerprint:
    """Identity of a recording: name, size and SHA-256 of every file that makes it up."""

    parts: tuple[tuple[str, int, str], ...]

    @property
    def digest(self) -> str:
        """One hash over all parts' hashes, in the order of their names' roles (header first)."""
        import hashlib

        return hashlib.sha256("".join(part[2] for part in self.parts).encode()).hexdigest()


class Recording(Protocol):
    """A recording that can be read in blocks. Opened again by path in another process: it pickles."""

    @property
    def facts(self) -> RecordingFacts:
        """Facts from the headers and markers; never touches the samples of formats that need not."""
        ...

    def read(self, start: int, stop: int, out: FloatArray, offset: NDArray[np.float64] | None = None) -> None:
        """Fill ``out`` with the stored numbers of the samples [start, stop).

        Parameters
        ----------
        start, stop : int
            Recorded samples, 0 <= start < stop <= n_samples.
        out : array, shape (stop - start, n_channels), C-contiguous, float32 or float64
            Receives stored numbers minus ``offset``; times ``scale_v`` they are volts. With float64 and no
            offset, out x scale_v equals the recording's own float64 volts exactly.
        offset : array, shape (n_channels,), or None
            Subtracted in float64 before a conversion to float32 (or exactly, where both are whole numbers).

        Raises
        ------
        UnusableSamples
            A sample is not finite; names channel and sample.
        DamagedRecording
            The file ends before ``stop``.
        """
        ...

    def fingerprint_paths(self) -> tuple[str, ...]:
        """Paths of the files of `facts.parts`, in the same order."""
        ...

    def close(self) -> None:
        """Release files; reading again opens them again."""
        ...
