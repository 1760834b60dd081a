"""What the reader library raises, put into the user's words: the one place for it."""

from __future__ import annotations

import re
import struct
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np

from pulsemend.errors import DamagedRecording, MissingPart

# What the library lets through where a file is not as it expects.
LIBRARY_FAULTS = (
    ValueError, RuntimeError, OSError, LookupError, TypeError, AssertionError, EOFError, OverflowError,
    struct.error, zlib.error,
)  # fmt: skip
_LONGEST = 160  # characters of what the library tells
_PACKAGE = re.compile(r"the module ([\w.-]+)")


@contextmanager
def own_errors(path: Path) -> Iterator[None]:
    """Turn what the library raises on files it cannot read into errors for the user.

    Raises
    ------
    MissingPart, DamagedRecording
    """
    try:
        # Broken numbers end up in fields that are not used here; the warning would reach nobody.
        with np.errstate(all="ignore"):
            yield
    except FileNotFoundError as error:
        raise missing_beside(path, error) from error
    except Exception as error:
        # The library also raises the base class itself; any other class would be a fault of this program.
        if type(error) is not Exception and not isinstance(error, LIBRARY_FAULTS):
            raise
        what = told(error)
        if "Split raw file" in what:  # the library has no class of its own for it
            raise MissingPart(
                "the file that continues this recording is not there",
                where=path.name,
                todo="Put all files of the recording into one folder",
            ) from error
        raise DamagedRecording(
            f"the reader library cannot read it ({what})",
            where=path.name,
            todo="Copy the file again, or export it again",
        ) from error


def missing_beside(path: Path, error: FileNotFoundError) -> MissingPart:
    """Name the file that the library looked for in vain."""
    name = Path(error.filename).name if error.filename else ""
    return MissingPart(
        f"the file {name} is not there"
        if name
        else f"a file that belongs to it is not there ({told(error)})",
        where=path.name,
        todo="Put all files of the recording into one folder",
    )


def told(error: BaseException) -> str:
    """Put what the library says on one line of bearable length."""
    text = " ".join(str(error).split()).rstrip(".") or type(error).__name__
    return text if len(text) <= _LONGEST else text[:_LONGEST].rsplit(" ", 1)[0] + " ..."


def needed_package(error: BaseException) -> str:
    """Name the package that the library lacks for a format; empty if that is not the trouble."""
    if "HDF reader" in str(error):
        return "pymatreader"
    if isinstance(error, ImportError):
        return (error.name or "").split(".")[0]
    found = _PACKAGE.search(str(error)) if "is needed" in str(error) else None
    return found.group(1) if found else ""
