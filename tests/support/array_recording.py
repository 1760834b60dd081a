"""A recording held in an array, with a file that stands for its contents."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.recording import Channel, FloatArray, RecordingFacts
from pulsemend.model.vocabulary import ChannelType


class ArrayRecording:
    """Fulfils the protocol of a recording.

    Parameters
    ----------
    samples : array, shape (n_samples, n_channels)
        Stored numbers.
    rate_hz : float
    path : Path
        Written with the samples' bytes: what a quick stamp looks at.
    names : sequence of str, optional
    """

    def __init__(
        self,
        samples: NDArray[Any],
        path: Path,
        rate_hz: float = 1000.0,
        names: tuple[str, ...] = (),
        scale_v: float = 1e-7,
    ) -> None:
        self.samples = samples
        self.reads: list[tuple[int, int]] = []
        self._path = path
        path.write_bytes(np.ascontiguousarray(samples).tobytes())
        names = names or tuple(f"E{i + 1}" for i in range(samples.shape[1]))
        self._facts = RecordingFacts(
            stem="array",
            format="array",
            rate_hz=rate_hz,
            n_samples=len(samples),
            channels=tuple(Channel(name, ChannelType.EEG, scale_v) for name in names),
            markers=(),
        )

    @property
    def facts(self) -> RecordingFacts:
        return self._facts

    def read(self, start: int, stop: int, out: FloatArray, offset: NDArray[np.float64] | None = None) -> None:
        if not 0 <= start < stop <= len(self.samples) or out.shape != (stop - start, self.samples.shape[1]):
            raise ValueError((start, stop, out.shape))
        self.reads.append((start, stop))
        out[...] = self.samples[start:stop]
        if offset is not None:
            out -= offset

    def fingerprint_paths(self) -> tuple[str, ...]:
        return (str(self._path),)

    def close(self) -> None:
        """Nothing is open."""
