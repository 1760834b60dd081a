"""The only cache: a folder of files that can be made again, each bound to the state of one recording.

An entry is one file, named by the recording's paths, by its state and by what it holds. Entries appear whole
or not at all, and what is kept of an earlier state of a recording goes when a new entry of it is written.
"""

from __future__ import annotations

import errno
import hashlib
import os
import re
import time
import uuid
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from pulsemend.errors import InputError, MissingPart, OutOfSpace

DEFAULT_LIMIT_BYTES = 8 << 30
_EDGE_BYTES = 1 << 20
_PART_LIFE_S = 24 * 3600
_DIGITS = 16
_ENTRY = re.compile(rf"[0-9a-f]{{{_DIGITS}}}-[0-9a-f]{{{_DIGITS}}}\.[a-z]+-[0-9]+")
_PART = re.compile(_ENTRY.pattern + r"\.part-[0-9a-f]{32}")


@dataclass(frozen=True)
class Stamp:
    """Quick identity of a recording.

    Parameters
    ----------
    source : str
        Which recording: digest of its files' full paths.
    state : str
        As which it was found: digest of sizes, times of change, and first and last MiB of every file.
    """

    source: str
    state: str


def quick_stamp(paths: Sequence[str]) -> Stamp:
    """Stamp a recording without reading all of it.

    Parameters
    ----------
    paths : sequence of str
        Its files, as `Recording.fingerprint_paths` gives them.

    Raises
    ------
    MissingPart
        One of them cannot be read.
    """
    source, state = hashlib.sha256(), hashlib.sha256()
    for path in map(Path, paths):
        try:
            with path.open("rb", buffering=0) as file:
                facts = os.fstat(file.fileno())
                head = file.read(_EDGE_BYTES)
                file.seek(max(0, facts.st_size - _EDGE_BYTES))
                tail = file.read(_EDGE_BYTES)
        except OSError as error:
            raise MissingPart(
                f"the file cannot be read ({error.strerror or error})", where=path.name
            ) from error
        source.update(f"{path.resolve()}\0".encode("utf-8", "surrogateescape"))
        state.update(f"{facts.st_size} {facts.st_mtime_ns} ".encode())
        state.update(hashlib.sha256(head).digest() + hashlib.sha256(tail).digest())
    return Stamp(source.hexdigest()[:_DIGITS], state.hexdigest()[:_DIGITS])


class Store:
    """The cache folder.

    Parameters
    ----------
    folder : Path
        The store's own; made when the first entry is written. Only files named like entries are ever removed.
    limit_bytes : int
        Entries used longest ago are removed when all together are larger. The newest always stays.
    """

    def __init__(self, folder: Path, limit_bytes: int = DEFAULT_LIMIT_BYTES) -> None:
        self._folder = folder
        self._limit_bytes = limit_bytes

    def find(self, stamp: Stamp, kind: str, version: int) -> Path | None:
        """Path of an entry, or None; counts as its use."""
        path = self._path(stamp, kind, version)
        try:
            os.utime(path)
        except OSError:
            # A cache that cannot be touched (read-only) can still be read.
            return path if path.is_file() else None
        return path

    @contextmanager
    def writing(self, stamp: Stamp, kind: str, version: int) -> Iterator[BinaryIO]:
        """Write an entry: whole when the context is left without an error, otherwise without a trace.

        Nothing is synced to the disk: who opens an entry checks its size, and it can be made again.

        Raises
        ------
        OutOfSpace
            The disk is full.
        InputError
            The folder cannot be written.
        """
        path = self._path(stamp, kind, version)
        part = path.with_name(f"{path.name}.part-{uuid.uuid4().hex}")
        try:
            self._folder.mkdir(parents=True, exist_ok=True)
            with part.open("xb") as file:
                yield file
            part.replace(path)
        except OSError as error:
            if error.errno == errno.ENOSPC:
                raise OutOfSpace(
                    "the disk is full",
                    where=str(self._folder),
                    todo="Make room there; what is kept can be deleted",
                ) from error
            raise InputError(
                f"the cache cannot be written ({error.strerror or error})", where=str(self._folder)
            ) from error
        finally:
            with suppress(OSError):
                part.unlink(missing_ok=True)
        self._forget_earlier(stamp)
        self._trim(path)

    def discard(self, path: Path) -> None:
        """Remove an entry that turned out to be damaged; one that is in use elsewhere stays."""
        if path.parent == self._folder and _ENTRY.fullmatch(path.name):
            _remove(path)

    def _path(self, stamp: Stamp, kind: str, version: int) -> Path:
        name = f"{stamp.source}-{stamp.state}.{kind}-{version}"
        if not _ENTRY.fullmatch(name):
            raise ValueError(f"an entry cannot be named {name!r}")
        return self._folder / name

    def _files(self, names: re.Pattern[str]) -> list[tuple[Path, os.stat_result]]:
        """Plain files of the folder with such names; those that vanish meanwhile are left out."""
        found = []
        with suppress(OSError), os.scandir(self._folder) as entries:
            for entry in entries:
                with suppress(OSError):
                    if names.fullmatch(entry.name) and entry.is_file(follow_symlinks=False):
                        found.append((Path(entry.path), entry.stat(follow_symlinks=False)))
        return found

    def _forget_earlier(self, stamp: Stamp) -> None:
        for path, _ in self._files(_ENTRY):
            if path.name.startswith(f"{stamp.source}-") and not path.name.startswith(
                f"{stamp.source}-{stamp.state}."
            ):
                _remove(path)

    def _trim(self, newest: Path) -> None:
        now = time.time()
        for path, facts in self._files(_PART):
            # Whoever wrote it ended without warning, or still writes: a day tells the two apart.
            if now - facts.st_mtime > _PART_LIFE_S:
                _remove(path)
        entries = sorted(self._files(_ENTRY), key=lambda entry: entry[1].st_mtime_ns)
        total = sum(facts.st_size for _, facts in entries)
        for path, facts in entries:
            if total <= self._limit_bytes:
                return
            if path != newest and _remove(path):
                total -= facts.st_size


def _remove(path: Path) -> bool:
    """Remove a file; False where another process holds it open and the system forbids it."""
    try:
        path.unlink()
    except OSError:
        return False
    return True
