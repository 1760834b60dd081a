"""From a path to a Recording: the reader is chosen by extension, and the contents must agree with it."""

from __future__ import annotations

import gzip
import zlib
from pathlib import Path

from pulsemend.errors import DamagedRecording, MissingPart, UnknownFormat
from pulsemend.model.recording import Recording
from pulsemend.readers.common import missing
from pulsemend.readers.triplet import TripletRecording

_HEADER, _DATA, _MARKERS = "the header of a triplet", "the samples of a triplet", "the markers of a triplet"
_EDF, _BDF, _FIF, _ALONE = "EDF", "BDF", "FIF", "a recording without header file"

_BY_EXTENSION = {
    ".vhdr": _HEADER,
    ".eeg": _DATA,
    ".vmrk": _MARKERS,
    ".edf": _EDF,
    ".bdf": _BDF,
    ".fif": _FIF,
    ".fif.gz": _FIF,
}
_ANONYMISED = {".ahdr": _HEADER, ".amrk": _MARKERS}  # the same text files under other names
_USUAL_EXTENSION = {_HEADER: ".vhdr", _MARKERS: ".vmrk", _EDF: ".edf", _BDF: ".bdf", _FIF: ".fif"}
_FIF_FIRST_TAG = bytes((0, 0, 0, 100, 0, 0, 0, 31))  # kind "file id", type "id structure", big-endian
_EEG_WITHOUT_HEADER = b"EEG-"  # what else ends in .eeg starts with the name of its recorder
_OTHER_STARTS = (
    (b"\x89HDF\r\n\x1a\n", "HDF5"),
    (b"MATLAB", "MAT"),
    (b"PK\x03\x04", "ZIP"),
    (b"GDF ", "GDF"),
    (b"%PDF", "PDF"),
)


def open_recording(path: Path) -> Recording:
    """Open a recording for reading in blocks.

    Parameters
    ----------
    path : Path
        A header, data or marker file of a triplet (.vhdr, .eeg, .vmrk), a file that ends in .edf, .bdf, .fif
        or .fif.gz, or any other file or folder that the reader library opens.

    Raises
    ------
    UnknownFormat
        No reader for it, or the contents are not what the extension says.
    MissingPart, DamagedRecording, UnusableChannels
        The file, or another that belongs to it, cannot be used.
    """
    if path.is_dir():
        return _folder(path)
    extension = _extension(path)
    expected = (_BY_EXTENSION | _ANONYMISED).get(extension)
    found = _contents(path)
    if expected == _DATA:
        header = _header_beside(path, found)
        return _through_library(path) if header is None else TripletRecording(header)
    if expected is None and found not in _USUAL_EXTENSION:
        return _any_other(path, extension, found)
    if found != expected:
        raise _wrong_kind(path, extension, expected, found)
    if expected == _MARKERS:
        return TripletRecording(_header_beside(path, found) or path)
    return TripletRecording(path) if expected == _HEADER else _through_library(path)


def _through_library(path: Path) -> Recording:
    # The reader library takes a second to load; plain triplets do without it.
    from pulsemend.readers.through_library import LibraryRecording

    return LibraryRecording(path)


def _folder(path: Path) -> Recording:
    """Open a folder, if it is of a kind whose recordings are folders."""
    from pulsemend.readers.library_formats import library_extension

    if not library_extension(path):
        raise UnknownFormat(
            "it is a folder, not a recording", where=path.name, todo="Name the file inside it"
        )
    return _through_library(path)


def _any_other(path: Path, extension: str, found: str | None) -> Recording:
    """Open a file of a format that is not read here, if the reader library knows its extension."""
    from pulsemend.readers.library_formats import library_extension

    if not library_extension(path):
        raise _wrong_kind(path, extension, None, found)
    return _through_library(path)


def _extension(path: Path) -> str:
    name = path.name.lower()
    return ".fif.gz" if name.endswith(".fif.gz") else path.suffix.lower()


def _contents(path: Path) -> str | None:
    """Tell what a file is by its first bytes; None where they say nothing."""
    try:
        with path.open("rb") as file:
            head = file.read(256)
        if head.startswith(b"\x1f\x8b"):
            with gzip.open(path) as packed:
                head = packed.read(256)
    except (gzip.BadGzipFile, EOFError, zlib.error) as error:
        raise DamagedRecording(
            f"it cannot be unpacked ({error})", where=path.name, todo="Copy the file again"
        ) from error
    except OSError as error:
        raise missing(path, error) from error
    if not head:
        raise DamagedRecording("the file is empty", where=path.name, todo="Copy the file again")
    first_line = head.splitlines()[0].lower().replace(b"exchange ", b"")
    if b"data header file" in first_line:
        return _HEADER
    if b"data marker file" in first_line:
        return _MARKERS
    if head.startswith(b"\xffBIOSEMI"):
        return _BDF
    if head.startswith(b"0       ") and head[184:192].strip().isdigit():
        return _EDF
    if head.startswith(_FIF_FIRST_TAG):
        return _FIF
    if head.startswith(_EEG_WITHOUT_HEADER):
        return _ALONE
    return next((kind for start, kind in _OTHER_STARTS if head.startswith(start)), None)


def _header_beside(path: Path, found: str | None) -> Path | None:
    """Find the header that belongs to a data or marker file; None where the file needs none."""
    for suffix in (".vhdr", ".ahdr"):
        if path.with_suffix(suffix).is_file():
            return path.with_suffix(suffix)
    if found == _ALONE:
        return None
    header = path.with_suffix(".vhdr")
    if found in (_EDF, _BDF, _FIF, _HEADER):
        raise _wrong_kind(path, _extension(path), (_BY_EXTENSION | _ANONYMISED)[_extension(path)], found)
    raise MissingPart(
        f"its header {header.name} is not there",
        where=path.name,
        todo="Put all files of the recording into one folder, or open the header itself",
    )


def _wrong_kind(path: Path, extension: str, expected: str | None, found: str | None) -> UnknownFormat:
    known = ", ".join(_BY_EXTENSION)
    ending = f"its name ends in {extension}" if extension else "its name has no extension"
    if found is None:
        what = (
            f"{ending}, but it is not {expected}"
            if expected
            else f"{ending}, and no reader knows its contents"
        )
        return UnknownFormat(
            what,
            where=path.name,
            todo=f"Recordings are read from {known} and what else the reader library opens",
        )
    if found not in _USUAL_EXTENSION:
        return UnknownFormat(
            f"it seems to be {found}",
            where=path.name,
            todo=f"Recordings are read from {known} and what else the reader library opens",
        )
    todo = f"Rename it to end in {_USUAL_EXTENSION[found]}"
    return UnknownFormat(f"it seems to be {found}, but {ending}", where=path.name, todo=todo)
