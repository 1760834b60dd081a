"""A lock per recording, so that a second window on it can be warned.

The lock is the operating system's own on a file in the user's state folder: it ends with the process that
holds it, however that ends, so there is never a stale one to be judged by its age.
"""

from __future__ import annotations

import fcntl
import hashlib
import json
import logging
import os
import socket
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Holder:
    """Who holds a lock: a process and its computer; 0 and empty where the file does not say."""

    pid: int = 0
    host: str = ""

    @property
    def words(self) -> str:
        """One sentence for the warning."""
        who = f" (process {self.pid} on {self.host})" if self.pid else ""
        return f"This recording is open in another window{who}; neither shows what is changed in the other"


class RecordingLock:
    """A lock that is held, or that somebody else holds.

    Parameters
    ----------
    path : Path
        The lock file.
    file : binary file or None
        Open and locked; None if it could not be had.
    other : Holder or None
        Who holds it instead.
    """

    def __init__(self, path: Path, file: BinaryIO | None, other: Holder | None) -> None:
        self._path = path
        self._file = file
        self.other = other

    @property
    def is_held(self) -> bool:
        """Whether this window holds it."""
        return self._file is not None

    def release(self) -> None:
        """Give it up; again or without holding it this does nothing."""
        if self._file is not None:
            # Removed before it is unlocked: nobody may find a file that is about to go.
            self._path.unlink(missing_ok=True)
            self._file.close()
            self._file = None


def lock_recording(folder: Path, recording: Path) -> RecordingLock:
    """Lock a recording, or say who has it.

    Parameters
    ----------
    folder : Path
        The user's state folder for locks; made if it is missing.
    recording : Path
        The recording's file.

    Returns
    -------
    RecordingLock
        Neither held nor anybody else's where the folder cannot be written: a lock only warns.
    """
    name = hashlib.sha256(os.fsencode(recording.absolute())).hexdigest()[:32]
    path = folder / f"{name}.lock"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        while True:
            file = path.open("a+b")
            if not try_lock(file):
                other = _holder(file)
                file.close()
                return RecordingLock(path, None, other)
            if is_same_file(file, path):
                break
            # Its holder removed it between opening and locking.
            file.close()
        file.truncate(0)
        file.write(json.dumps({"pid": os.getpid(), "host": socket.gethostname()}).encode())
        file.flush()
    except OSError as error:
        log.info("recordings cannot be locked: %s", type(error).__name__)
        return RecordingLock(path, None, None)
    return RecordingLock(path, file, None)


def try_lock(file: BinaryIO) -> bool:
    """Lock an open file for this process; False if somebody else has it.

    Parameters
    ----------
    file : binary file
        Stays locked until it is closed.
    """
    try:
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    return True


def is_same_file(file: BinaryIO, path: Path) -> bool:
    """Whether an open file is the one a path leads to now.

    Parameters
    ----------
    file : binary file
        Open.
    path : Path
        Where it was found.
    """
    try:
        return os.path.samestat(os.fstat(file.fileno()), path.stat())
    except FileNotFoundError:
        return False


def _holder(file: BinaryIO) -> Holder:
    file.seek(0)
    try:
        data = json.loads(file.read(4096))
        return Holder(int(data["pid"]), str(data["host"]))
    except (ValueError, KeyError, TypeError):
        return Holder()
