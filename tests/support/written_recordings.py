"""One small recording, written in every format: by the public writers, and by hand where they cannot."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import edfio
import mne
import numpy as np
import pybv
from numpy.typing import NDArray

RATE_HZ = 500.0
NAMES = ("Fz", "C3", "C4", "VEOG")
N_SAMPLES = 1500
EVENTS = (
    (0, "Stimulus", "arrow left"),
    (249, "Stimulus", "pulse"),
    (250, "Response", "R 1"),
    (1499, "", "end"),
)
"""Sample from 0, type, text."""
UV_STEP_V = 0.1 * 1e-6
"""A tenth of a microvolt, as resolution x unit."""
FIRST_LINE = "Brain Vision Data Exchange {} File Version 1.0\n"

Event = tuple[int, str, str]


@dataclass(frozen=True)
class Written:
    """A recording on disk and the truth about it.

    Parameters
    ----------
    path : Path
        The file to open.
    data : Path
        The file that holds the samples.
    volts : array, shape (n_channels, n_samples)
    within_v : float
        How far the volts read may be from these: 0 where the format keeps them exactly.
    """

    path: Path
    data: Path
    volts: NDArray[np.float64]
    within_v: float


def counts() -> NDArray[np.int16]:
    """Stored whole numbers over nearly all of 16 bits, shape (n_channels, n_samples)."""
    return np.random.default_rng(20).integers(-32767, 32767, (len(NAMES), N_SAMPLES), dtype=np.int16)


def in_volts(stored: NDArray[Any]) -> NDArray[np.float64]:
    """Turn stored numbers of a tenth of a microvolt into volts."""
    return stored.astype(np.float64) * UV_STEP_V


def triplet_by_hand(
    folder: Path,
    stored: NDArray[Any],
    binary: str,
    *,
    names: Sequence[str] = NAMES,
    orientation: str = "MULTIPLEXED",
    resolution: str = "0.1",
    events: Sequence[Event] = EVENTS,
) -> Path:
    """Write a triplet from stored numbers, shape (n_channels, n_samples); return its header."""
    rows = stored if orientation == "VECTORIZED" else stored.T
    (folder / "lt01.eeg").write_bytes(np.ascontiguousarray(rows).tobytes())
    channels = "".join(f"Ch{i}={name},,{resolution},uV\n" for i, name in enumerate(names, start=1))
    (folder / "lt01.vhdr").write_text(
        FIRST_LINE.format("Header")
        + f"[Common Infos]\nCodepage=UTF-8\nDataFile=lt01.eeg\nMarkerFile=lt01.vmrk\n"
        f"DataFormat=BINARY\nDataOrientation={orientation}\nNumberOfChannels={len(names)}\n"
        f"SamplingInterval=2000\n[Binary Infos]\nBinaryFormat={binary}\n[Channel Infos]\n{channels}",
        encoding="utf-8",
    )
    write_markers(folder / "lt01.vmrk", [("New Segment", "", 1), *((k, t, s + 1) for s, k, t in events)])
    return folder / "lt01.vhdr"


def write_markers(path: Path, entries: Sequence[tuple[str, str, int]]) -> None:
    """Write a marker file of (type, text, position from 1)."""
    lines = "".join(f"Mk{i}={k},{t},{p},1,0\n" for i, (k, t, p) in enumerate(entries, start=1))
    path.write_text(
        FIRST_LINE.format("Marker") + f"[Common Infos]\nCodepage=UTF-8\n[Marker Infos]\n{lines}",
        encoding="utf-8",
    )


def _triplet_by_writer(folder: Path, events: Sequence[Event], fmt: str) -> Path:
    # It cuts towards zero: half a step further out, the numbers written are the counts.
    volts = in_volts(counts() + np.sign(counts()) / 2)
    pybv.write_brainvision(
        data=volts,
        sfreq=RATE_HZ,
        ch_names=list(NAMES),
        fname_base="lt01",
        folder_out=folder,
        # It allows free text in comments only.
        events=[{"onset": sample, "type": "Comment", "description": text} for sample, _, text in events],
        resolution=0.1,
        unit="µV",
        fmt=fmt,
    )
    return folder / "lt01.vhdr"


def _triplet_int16(folder: Path, events: Sequence[Event]) -> Written:
    path = _triplet_by_writer(folder, events, "binary_int16")
    return Written(path, folder / "lt01.eeg", in_volts(counts()), within_v=0.0)


def _triplet_float32(folder: Path, events: Sequence[Event]) -> Written:
    path = _triplet_by_writer(folder, events, "binary_float32")
    volts = in_volts(counts() + np.sign(counts()) / 2)
    return Written(path, folder / "lt01.eeg", volts, within_v=UV_STEP_V * 2**-9)


def _triplet_int32(folder: Path, events: Sequence[Event]) -> Written:
    stored = counts().astype(np.int32) * 60_000 + 1  # more than float32 can hold
    path = triplet_by_hand(folder, stored, "INT_32", events=events)
    return Written(path, folder / "lt01.eeg", in_volts(stored), within_v=0.0)


def _vectorized_int16(folder: Path, events: Sequence[Event]) -> Written:
    path = triplet_by_hand(folder, counts(), "INT_16", orientation="VECTORIZED", events=events)
    return Written(path, folder / "lt01.eeg", in_volts(counts()), within_v=0.0)


def _vectorized_float32(folder: Path, events: Sequence[Event]) -> Written:
    stored = (counts() / 7).astype(np.float32)
    path = triplet_by_hand(folder, stored, "IEEE_FLOAT_32", orientation="VECTORIZED", events=events)
    return Written(path, folder / "lt01.eeg", in_volts(stored), within_v=0.0)


def _described(events: Sequence[Event]) -> list[tuple[float, str]]:
    return [(sample / RATE_HZ, f"{kind}/{text}" if kind else text) for sample, kind, text in events]


def _edf(folder: Path, events: Sequence[Event]) -> Written:
    microvolts = counts().astype(np.float64) / 10
    annotations = [edfio.EdfAnnotation(onset, None, text) for onset, text in _described(events)]
    signals = [
        edfio.EdfSignal(row, RATE_HZ, label=name, physical_dimension="uV", physical_range=(-3276.8, 3276.7))
        for row, name in zip(microvolts, NAMES, strict=True)
    ]
    edfio.Edf(signals, annotations=annotations, data_record_duration=0.5).write(folder / "lt01.edf")
    return Written(folder / "lt01.edf", folder / "lt01.edf", microvolts * 1e-6, within_v=1e-15)


def _bdf(folder: Path, events: Sequence[Event]) -> Written:
    stored = counts().astype(np.int64) * 200 + 77  # needs 24 bits
    lowest, step = -262144.0, 524288.0 / (2**24 - 1)
    microvolts = (stored + 2**23).astype(np.float64) * step + lowest
    annotations = [edfio.EdfAnnotation(onset, None, text) for onset, text in _described(events)]
    signals = [
        edfio.BdfSignal(row, RATE_HZ, label=name, physical_dimension="uV", physical_range=(lowest, -lowest))
        for row, name in zip(microvolts, NAMES, strict=True)
    ]
    edfio.Bdf(signals, annotations=annotations, data_record_duration=0.5).write(folder / "lt01.bdf")
    return Written(folder / "lt01.bdf", folder / "lt01.bdf", microvolts * 1e-6, within_v=1e-15)


def fif_raw(events: Sequence[Event] = EVENTS) -> mne.io.RawArray:
    """Make the recording in the reader library, values that float32 holds."""
    info = mne.create_info(list(NAMES), RATE_HZ, ["eeg", "eeg", "eeg", "eog"])
    raw = mne.io.RawArray(np.float32(counts() * 1e-7).astype(np.float64), info, verbose="error")
    marks = _described(events)
    raw.set_annotations(
        mne.Annotations([t for t, _ in marks], [0.0] * len(marks), [text for _, text in marks])
    )
    return raw


def _fif(folder: Path, events: Sequence[Event]) -> Written:
    raw = fif_raw(events)
    raw.save(folder / "lt01_raw.fif", buffer_size_sec=0.3, verbose="error")
    return Written(folder / "lt01_raw.fif", folder / "lt01_raw.fif", raw.get_data(), within_v=0.0)


def _fif_packed(folder: Path, events: Sequence[Event]) -> Written:
    raw = fif_raw(events)
    raw.save(folder / "lt01_raw.fif.gz", verbose="error")
    return Written(folder / "lt01_raw.fif.gz", folder / "lt01_raw.fif.gz", raw.get_data(), within_v=0.0)


FORMATS: dict[str, Callable[[Path, Sequence[Event]], Written]] = {
    "triplet int16": _triplet_int16,
    "triplet int32": _triplet_int32,
    "triplet float32": _triplet_float32,
    "triplet int16 vectorized": _vectorized_int16,
    "triplet float32 vectorized": _vectorized_float32,
    "EDF+": _edf,
    "BDF+": _bdf,
    "FIF": _fif,
    "FIF packed": _fif_packed,
}
"""Name of a format: function (folder, events) that writes the recording there."""
