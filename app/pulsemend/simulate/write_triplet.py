"""Write a recording as a header, marker and sample file (.vhdr, .vmrk, .eeg), samples in blocks."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Self

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.recording import Marker
from pulsemend.units import MS_PER_S

_BINARY_OF = {"int16": "INT_16", "float32": "IEEE_FLOAT_32"}


@dataclass(frozen=True)
class TripletFormat:
    """What the header says.

    Parameters
    ----------
    channels : tuple of str
        Their names.
    rate_hz : float
        Sampling rate.
    resolution_uv : float
        Microvolts per stored unit.
    reference : str
        Name of the recorded reference; empty if unknown.
    number : str
        Stored numbers: ``int16`` or ``float32``, little-endian.
    comment : str
        Free text for the header's last section.
    """

    channels: tuple[str, ...]
    rate_hz: float
    resolution_uv: float = 0.1
    reference: str = ""
    number: str = "int16"
    comment: str = ""


@dataclass(frozen=True)
class TripletPaths:
    """Where the three files are written; the stem is what header and markers call them by."""

    header: Path
    markers: Path
    samples: Path
    stem: str

    @classmethod
    def beside(cls, header: Path) -> Self:
        """Name the files of a header (.vhdr) by its own stem."""
        return cls(header, header.with_suffix(".vmrk"), header.with_suffix(".eeg"), header.stem)


class TripletWriter:
    """Writes the three files; used as a context manager.

    Samples go straight to their file; header and markers follow when the context is left without an error.

    Parameters
    ----------
    paths : TripletPaths
        Where to.
    form : TripletFormat
        What the header says.
    markers : sequence of Marker
        In order of time, with whole samples.
    """

    def __init__(self, paths: TripletPaths, form: TripletFormat, markers: Sequence[Marker]) -> None:
        self._paths = paths
        self._form = form
        self._markers = markers
        self._samples = paths.samples.open("wb")

    def write(self, block: NDArray[np.int16] | NDArray[np.float32]) -> None:
        """Append stored numbers, shape (n_samples, n_channels).

        Raises
        ------
        ValueError
            The block's type or number of channels is not the header's.
        """
        if block.dtype != np.dtype(self._form.number) or block.shape[1:] != (len(self._form.channels),):
            message = (
                f"a block of {block.dtype} {block.shape} does not fit {self._form.number} and the channels"
            )
            raise ValueError(message)
        little = block.dtype.newbyteorder("<")
        self._samples.write(np.ascontiguousarray(block, dtype=little).data)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._samples.close()
        if kind is None:
            stem = self._paths.stem
            self._paths.header.write_bytes(header_text(stem, self._form).encode())
            self._paths.markers.write_bytes(marker_text(stem, self._markers).encode())


def header_text(stem: str, form: TripletFormat) -> str:
    """Text of the .vhdr file."""
    interval_us = MS_PER_S * MS_PER_S / form.rate_hz
    lines = [
        "Brain Vision Data Exchange Header File Version 1.0",
        "",
        "[Common Infos]",
        "Codepage=UTF-8",
        f"DataFile={stem}.eeg",
        f"MarkerFile={stem}.vmrk",
        "DataFormat=BINARY",
        "DataOrientation=MULTIPLEXED",
        f"NumberOfChannels={len(form.channels)}",
        f"SamplingInterval={interval_us:.15g}",
        "",
        "[Binary Infos]",
        f"BinaryFormat={_BINARY_OF[form.number]}",
        "",
        "[Channel Infos]",
    ]
    lines += [
        f"Ch{i}={_escaped(name)},{_escaped(form.reference)},{form.resolution_uv:.15g},µV"
        for i, name in enumerate(form.channels, start=1)
    ]
    if form.comment:
        lines += ["", "[Comment]", form.comment]
    return "\n".join(lines) + "\n"


def marker_text(stem: str, markers: Sequence[Marker]) -> str:
    """Text of the .vmrk file: one segment from the first sample on, and the markers."""
    lines = [
        "Brain Vision Data Exchange Marker File, Version 1.0",
        "",
        "[Common Infos]",
        "Codepage=UTF-8",
        f"DataFile={stem}.eeg",
        "",
        "[Marker Infos]",
        "Mk1=New Segment,,1,1,0",
    ]
    # Positions in the file count from 1.
    lines += [
        f"Mk{i}={_escaped(marker.type)},{_escaped(marker.code)},{round(marker.sample) + 1},1,0"
        for i, marker in enumerate(markers, start=2)
    ]
    return "\n".join(lines) + "\n"


def _escaped(text: str) -> str:
    return text.replace(",", r"\1")
