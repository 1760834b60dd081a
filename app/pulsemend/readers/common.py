"""What all readers share: names, and the checks every recording must pass."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import MissingPart, UnusableChannels, UnusableSamples
from pulsemend.model.recording import FilePart, FloatArray, RecordingFacts

_FIRST_PART = re.compile(r"_split-0*1$")


def stem_of(path: Path) -> str:
    """Name of a recording: its file's name without extension, ``_eeg`` and the number of a first part."""
    name = path.name[: -len(".gz")] if path.name.lower().endswith(".gz") else path.name
    return _FIRST_PART.sub("", Path(name).stem.removesuffix("_eeg"))


def power_of_ten(exponent: int) -> float:
    """Ten to a whole power, rounded correctly (repeated division would not be)."""
    return float(f"1e{exponent}")


def check_names(names: Sequence[str], where: str) -> None:
    """Refuse a recording without channels or with names that occur twice.

    Raises
    ------
    UnusableChannels
    """
    if not names:
        raise UnusableChannels(
            "it holds no channel of signal",
            where=where,
            todo="Export the recording again with its EEG channels",
        )
    twice = [name for name, count in Counter(names).items() if count > 1]
    if twice:
        raise UnusableChannels(
            f"channel names occur more than once: {', '.join(twice)}",
            where=where,
            todo="Give every channel its own name in the file's header",
        )


def check_request(facts: RecordingFacts, start: int, stop: int, out: FloatArray) -> None:
    """Refuse a request that breaks the contract of `Recording.read`: a fault of the caller.

    Raises
    ------
    ValueError
    """
    if not 0 <= start < stop <= facts.n_samples:
        raise ValueError(f"samples [{start}, {stop}) of a recording of {facts.n_samples}")
    shape = (stop - start, len(facts.channels))
    if out.shape != shape or not out.flags.c_contiguous or out.dtype not in (np.float32, np.float64):
        raise ValueError(f"out must be C-contiguous float32 or float64 of shape {shape}")


def check_finite(
    block: NDArray[np.floating], first_sample: int, names: Sequence[str], where: str, first_channel: int = 0
) -> None:
    """Refuse samples that are not finite.

    Parameters
    ----------
    block : array, shape (n_samples, n_channels)
        Samples in any unit.
    first_sample, first_channel : int
        What row and column 0 of the block are in the recording.
    names : sequence of str
        All channel names of the recording.
    where : str
        The file's name.

    Raises
    ------
    UnusableSamples
        Names the earliest such sample and its channel.
    """
    finite = np.isfinite(block)
    if finite.all():
        return
    row, column = np.argwhere(~finite)[0]
    raise UnusableSamples(
        f"channel {names[first_channel + column]} holds {block[row, column]} at sample {first_sample + row}",
        where=where,
        todo="Export the recording again; missing stretches must be cut out, not written as NaN",
    )


def file_part(path: Path, folder: Path | None = None) -> FilePart:
    """Name and size of a file; ``folder`` is the recording itself where that is a folder.

    Raises
    ------
    MissingPart
        It is not there or cannot be reached.
    """
    try:
        name = path.relative_to(folder).as_posix() if folder else path.name
        return FilePart(name, path.stat().st_size)
    except OSError as error:
        raise missing(path, error) from error


def missing(path: Path, error: OSError) -> MissingPart:
    """Put an error of the file system into the user's words."""
    reason = error.strerror or str(error)
    return MissingPart(
        f"the file cannot be opened ({reason[:1].lower()}{reason[1:]})",
        where=path.name,
        todo="Check its name and that all files of the recording lie in one folder",
    )
