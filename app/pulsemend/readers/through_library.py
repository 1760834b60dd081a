"""EDF(+), BDF(+), FIF and all further files, their samples read by the reader library (mne)."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import mne
import numpy as np
from numpy.typing import NDArray

from pulsemend.model.recording import FloatArray, RecordingFacts
from pulsemend.model.vocabulary import ChannelType
from pulsemend.readers.codes import Found
from pulsemend.readers.common import check_finite, check_request
from pulsemend.readers.edf_header import EdfHeader, read_edf_header
from pulsemend.readers.library_errors import own_errors
from pulsemend.readers.library_formats import MICROVOLTS, files_of, library_extension, open_by_extension
from pulsemend.readers.library_source import check_fif, edf_source, raw_source
from pulsemend.readers.source import Source, facts_of, with_tables
from pulsemend.readers.triggers import LOW_16_BITS, trigger_events

_LOOKED_AT, _NO_EEG_V = 2000, 0.05  # samples at the start; even pulses and drifts spread by less
_TRIGGER_BLOCK = 1 << 16  # samples per piece when a trigger channel is searched


class LibraryRecording:
    """A recording whose samples come through the reader library, as volts.

    Parameters
    ----------
    path : Path
        An .edf, .bdf, .fif or .fif.gz file, or any other that the library opens by its extension.

    Raises
    ------
    UnknownFormat, MissingPart, DamagedRecording, UnusableChannels
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        self._raw: Any = None
        self._header: EdfHeader | None = None
        source = self._source()
        self._n_samples = source.n_samples
        source = with_tables(path, source)
        events, notes = self._trigger_markers(source)
        if self._header is None and not _is_fif(path):
            notes += self._doubtful_volts(source)
        self._facts, self._paths = facts_of(path, replace(source, notes=(*source.notes, *notes)), events)

    def _source(self) -> Source:
        path = self._path
        if path.suffix.lower() in (".edf", ".bdf"):
            self._header = read_edf_header(path)
            return edf_source(self._header)
        if _is_fif(path):
            check_fif(path)
            raw = self._library()
            for part in raw.filenames[1:]:
                check_fif(Path(part), first=False)
            with own_errors(path):
                return raw_source(path, raw, "FIF", tuple(map(Path, raw.filenames)))
        self._raw, warned = open_by_extension(path)
        with own_errors(path):
            extension = library_extension(path)
            kind = f"{extension} {'folder' if path.is_dir() else 'file'}"
            unit = "uV" if extension in MICROVOLTS else "V"
            return raw_source(path, self._raw, kind, files_of(path, self._raw), warned, unit)

    @property
    def facts(self) -> RecordingFacts:
        """Facts from the header, the annotations and the trigger channels."""
        return self._facts

    def fingerprint_paths(self) -> tuple[str, ...]:
        """Paths of all files of the recording."""
        return tuple(map(str, self._paths))

    def read(self, start: int, stop: int, out: FloatArray, offset: NDArray[np.float64] | None = None) -> None:
        """Fill ``out`` with the samples [start, stop); see `Recording.read`."""
        check_request(self._facts, start, stop, out)
        block = self._volts(slice(None), start, stop).T
        check_finite(block, start, [channel.name for channel in self._facts.channels], self._path.name)
        if offset is None:
            out[...] = block
        else:
            np.subtract(block, offset, out=out, casting="same_kind")

    def close(self) -> None:
        """Release the file; reading again opens it again."""
        if self._raw is not None:
            self._raw.close()
            self._raw = None

    def _library(self) -> Any:
        """Open the file in the library, if it is not."""
        if self._raw is None:
            with own_errors(self._path):
                self._raw = _open(self._path, self._header)
        return self._raw

    def _volts(self, rows: slice | list[int], start: int, stop: int) -> NDArray[np.float64]:
        raw = self._library()
        with own_errors(self._path):
            if raw.n_times != self._n_samples:
                raise ValueError(f"{raw.n_times} samples instead of {self._n_samples}")
            block: NDArray[np.float64] = raw[rows, start:stop][0]
        return block

    def _trigger_markers(self, source: Source) -> tuple[list[Found], list[str]]:
        """Events of all trigger channels, each with its channel's name as type."""
        channels = source.channels
        rows = [row for row, channel in enumerate(channels) if channel.type is ChannelType.TRIGGER]
        events = [
            (float(sample), channels[row].name, str(level))
            for row in rows
            for sample, level in trigger_events(self._levels(row, source.n_samples))
        ]
        names = ", ".join(channels[row].name for row in rows)
        if not rows:
            return events, []
        return events, [f"Markers from {names}: {len(events)}; from annotations: {len(source.found)}."]

    def _doubtful_volts(self, source: Source) -> list[str]:
        """Say so where a format that may lack units gives numbers that no electrode reaches."""
        rows = [row for row, channel in enumerate(source.channels) if channel.type is ChannelType.EEG]
        if not rows or not source.n_samples:
            return []
        block = self._volts(rows, 0, min(source.n_samples, _LOOKED_AT))
        with np.errstate(all="ignore"):
            scales_v = [source.channels[row].scale_v for row in rows]
            spread_v = float(np.sort(np.std(block, axis=1) * scales_v)[len(rows) // 2])
        if not spread_v > _NO_EEG_V:
            return []
        return [
            f"The numbers of the EEG channels spread by {spread_v:.3g} V: perhaps the file's unit is not V."
        ]

    def _levels(self, row: int, n_samples: int) -> Iterator[NDArray[np.int64]]:
        for start in range(0, n_samples, _TRIGGER_BLOCK):
            block = self._volts([row], start, min(start + _TRIGGER_BLOCK, n_samples))
            levels = np.rint(np.nan_to_num(block[0])).astype(np.int64)
            # In EDF and BDF the higher bits report the state of the amplifier.
            yield levels & LOW_16_BITS if self._header is not None else levels

    def __getstate__(self) -> dict[str, object]:
        return {**self.__dict__, "_raw": None}


def _open(path: Path, header: EdfHeader | None) -> Any:
    if header is None and not _is_fif(path):
        return open_by_extension(path)[0]
    if header is None:
        return mne.io.read_raw_fif(path, preload=False, verbose="error")
    read = mne.io.read_raw_edf if header.sample_bytes == 2 else mne.io.read_raw_bdf
    return read(
        path,
        stim_channel=[signal.library_label for signal in header.used if signal.is_trigger] or None,
        exclude=[signal.library_label for signal in header.left_out],
        # Annotations are read here by other means; in this code page none can fail.
        encoding="latin1",
        preload=False,
        verbose="error",
    )


def _is_fif(path: Path) -> bool:
    return path.name.lower().endswith((".fif", ".fif.gz"))
