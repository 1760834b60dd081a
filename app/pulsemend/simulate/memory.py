"""A recording made of an array: for tests of engine and mending, and for simulated signal without files."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import UnusableSamples
from pulsemend.model.recording import Channel, FloatArray, Marker, RecordingFacts
from pulsemend.model.vocabulary import ChannelType
from pulsemend.simulate.lantern import Lantern, LanternSpec, blocks, make_lantern


@dataclass(frozen=True)
class MemoryForm:
    """What an array does not say about the recording it holds.

    Parameters
    ----------
    rate_hz : float
        Sampling rate.
    names : sequence of str
        Channel names; empty for E1, E2, ...
    types : mapping of str to ChannelType
        Types by name; channels that are not named are EEG.
    scale_v : float
        Volts per stored number.
    markers : sequence of Marker
        In order of time.
    boundaries : sequence of int
        First samples of all segments but the first.
    stem : str
        The recording's name.
    """

    rate_hz: float = 1000.0
    names: Sequence[str] = ()
    types: Mapping[str, ChannelType] = field(default_factory=dict)
    scale_v: float = 1.0
    markers: Sequence[Marker] = ()
    boundaries: Sequence[int] = ()
    stem: str = "memory"


class MemoryRecording:
    """A `Recording` that holds its samples in an array.

    Parameters
    ----------
    data : array, shape (n_samples, n_channels)
        Stored numbers, whole or floating; with ``scale_v`` 1 they are volts. Not copied.
    form : MemoryForm
        Everything else.

    Raises
    ------
    ValueError
        Names and channels differ in number.
    """

    def __init__(self, data: NDArray[Any], form: MemoryForm | None = None) -> None:
        form = form or MemoryForm()
        names = tuple(form.names) or tuple(f"E{i + 1}" for i in range(data.shape[1]))
        self._data = data
        self._facts = RecordingFacts(
            stem=form.stem,
            format="array in memory",
            rate_hz=form.rate_hz,
            n_samples=len(data),
            channels=tuple(
                Channel(name, form.types.get(name, ChannelType.EEG), form.scale_v)
                for name, _ in zip(names, data.T, strict=True)
            ),
            markers=tuple(form.markers),
            boundaries=tuple(form.boundaries),
        )

    @property
    def facts(self) -> RecordingFacts:
        """Facts, as given."""
        return self._facts

    def read(self, start: int, stop: int, out: FloatArray, offset: NDArray[np.float64] | None = None) -> None:
        """Fill ``out`` with the stored numbers of the samples [start, stop); see `Recording.read`."""
        shape = (stop - start, self._data.shape[1])
        if not 0 <= start < stop <= len(self._data) or out.shape != shape or not out.flags.c_contiguous:
            message = f"samples [{start}, {stop}) of {len(self._data)} into an array of shape {out.shape}"
            raise ValueError(message)
        block = self._data[start:stop]
        finite = np.isfinite(block)
        if not finite.all():
            row, column = np.argwhere(~finite)[0]
            raise UnusableSamples(
                f"channel {self._facts.channels[column].name} is not finite at sample {start + row}",
                where=self._facts.stem,
            )
        if offset is None:
            out[...] = block
        else:
            out[...] = block.astype(np.float64) - offset

    def fingerprint_paths(self) -> tuple[str, ...]:
        """No file makes it up."""
        return ()

    def close(self) -> None:
        """Do nothing: there is no file to release."""


@dataclass(frozen=True)
class Rehearsal:
    """A Lantern recording in memory with everything that is true about it.

    Parameters
    ----------
    recording : MemoryRecording
        As an amplifier would have stored it.
    clean_v : array, shape (n_samples, n_channels)
        Volts without pulse artifacts, before the converter.
    lantern : Lantern
        What happens in it.
    """

    recording: MemoryRecording
    clean_v: NDArray[np.float64]
    lantern: Lantern


def rehearse(spec: LanternSpec) -> Rehearsal:
    """Simulate a Lantern recording into memory.

    Parameters
    ----------
    spec : LanternSpec
        What to simulate; keep it small.
    """
    lantern = make_lantern(spec)
    (whole,) = blocks(lantern, lantern.n_samples)
    form = MemoryForm(
        rate_hz=spec.rate_hz,
        names=spec.channels,
        scale_v=lantern.scale_v,
        markers=lantern.markers,
        stem=spec.stem,
    )
    return Rehearsal(MemoryRecording(whole.stored, form), whole.clean, lantern)
