"""Every other format that the reader library opens: its own table of extensions decides, not one of ours."""

from __future__ import annotations

import inspect
import os
import warnings
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any

# The library has no public way to ask which reader it would take, and why each of them refuses a file.
from mne.io import _read_raw as library_table

from pulsemend.errors import PulsemendError, UnknownFormat
from pulsemend.readers.library_errors import missing_beside, needed_package, told

# Recordings of several files that bear one stem: by the extension that is opened, what else belongs to it.
_BESIDE = {
    ".set": (".fdt",),
    ".lay": (".dat",),
    ".data": (".head",),
    ".eeg": (".pnt", ".log", ".21e", ".cmt"),
    ".cdt": (".dpa", ".dpo", ".cef", ".ceo"),
    ".dat": (".dap", ".rs3", ".cef", ".ceo"),
    ".dap": (".dat", ".rs3", ".cef", ".ceo"),
    ".rs3": (".dat", ".dap", ".cef", ".ceo"),
    ".hdr": (".wl1", ".wl2", ".evt", ".tri", ".inf", ".tpl", ".dat"),
}
# Events that a reader can give as annotations or as channels would else come as both.
_OPTIONS: dict[str, Any] = {"preload": False, "verbose": "warning", "events_as_annotations": True}
# The library takes this format's numbers for volts; a full scale of 32767 steps would be 2500 V.
MICROVOLTS = (".nxe",)
_NEEDS_MORE = "required positional argument"


def library_extension(path: Path) -> str:
    """Extension by which the reader library would choose a reader; empty if it knows none."""
    return str(library_table.split_name_ext(path.name)[1] or "")


def open_by_extension(path: Path) -> tuple[Any, tuple[str, ...]]:
    """Open a recording with the first of the library's readers for its extension that accepts it.

    Parameters
    ----------
    path : Path
        A file, or a folder that is a recording.

    Returns
    -------
    raw : mne.io.Raw
    notes : tuple of str
        What the library warned about.

    Raises
    ------
    UnknownFormat
        No reader, or none that accepts it; a package that is not installed.
    MissingPart
        Another file that belongs to it is not there.
    """
    extension = library_extension(path)
    readers = library_table._get_readers().get(extension, {})
    reasons: list[Exception] = []
    for reader in readers.values():
        try:
            return _opened(reader, path)
        except Exception as error:
            # Readers of many hands, standing on further packages, have no common class of error. None is
            # swallowed: the user is told why each of them refused.
            if isinstance(error, PulsemendError):
                raise
            reasons.append(error)
    lost = [error for error in reasons if isinstance(error, FileNotFoundError)]
    if lost and len(reasons) == 1:
        raise missing_beside(path, lost[0]) from lost[0]
    raise _refused(path, extension, reasons) from (reasons[0] if reasons else None)


def _opened(reader: Any, path: Path) -> tuple[Any, tuple[str, ...]]:
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        taken = inspect.signature(reader).parameters
        options = {key: value for key, value in _OPTIONS.items() if key in taken}
        try:
            raw = reader(path, **options)
        except NotImplementedError:
            # Some readers only know how to read everything at once.
            raw = reader(path, **{**options, "preload": True})
    said = dict.fromkeys(
        told(one.message)
        for one in caught
        if isinstance(one.message, Warning) and issubclass(one.category, RuntimeWarning)
    )
    return raw, tuple(f"The reader library warns: {text}." for text in said)


def _refused(path: Path, extension: str, reasons: Iterable[Exception]) -> UnknownFormat:
    """Say in one line why no reader took the file."""
    packages = dict.fromkeys(filter(None, map(needed_package, reasons)))
    others = [
        "it needs to be told more than the file holds" if _NEEDS_MORE in str(error) else told(error)
        for error in reasons
        if not needed_package(error)
    ]
    ending = f"its name ends in {extension or path.suffix}"
    if packages:
        lacking = " or ".join(packages)
        what = f"{ending}; to read it, the reader library needs the package {lacking}, which is not installed"
        todo = f"Install {lacking} where this program is installed, or export the recording as EDF or BDF"
        return UnknownFormat(what, where=path.name, todo=todo)
    why = f" ({'; or: '.join(others)})" if others else ""
    return UnknownFormat(
        f"{ending}, and no reader knows its contents{why}",
        where=path.name,
        todo="Export the recording as .vhdr, .edf, .bdf or .fif",
    )


def files_of(path: Path, raw: Any) -> tuple[Path, ...]:
    """List every file of a recording that the library has opened: the one named first.

    Parameters
    ----------
    path : Path
        The file or folder that was named.
    raw : mne.io.Raw
        The same, opened.
    """
    if path.is_dir():
        return tuple(sorted(file for file in path.rglob("*") if file.is_file()))
    named = (Path(name) for name in raw.filenames if name is not None)
    found = {os.path.realpath(file): file for file in (path, *named, *_beside(path)) if file.is_file()}
    return tuple(found.values())


def _beside(path: Path) -> Iterator[Path]:
    suffixes = _BESIDE.get(path.suffix.lower(), ())
    start = path.stem + "."
    for file in sorted(path.parent.iterdir()) if suffixes else ():
        if file.name.startswith(start) and file.suffix.lower() in suffixes:
            yield file
