"""The journal: every change on the disk at once, so that a crash loses none.

One file per window and pair of recording and plan in the user's data folder: a first line with the state
the history starts from, then one JSON line per step, replayed through the same `History` that made them.
A file that its process still holds (a lock of the operating system) belongs to a living window and is nobody
else's business. Journals may hold names and paths; the log may not.
"""

from __future__ import annotations

import hashlib
import json
import logging
import os
import secrets
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import BinaryIO

from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.plan import Plan
from pulsemend.session.compact import compact_marks, compact_plan
from pulsemend.session.history import Entry, History, What
from pulsemend.session.lock import try_lock

SCHEMA = 1
LONG_BYTES = 4_000_000
"""When twice its first size and this are reached, a journal is begun anew from the history."""

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Values:
    """Plan and marks at one moment, and what is known of their files.

    Parameters
    ----------
    plan : Plan or None
    marks : Marks
    plan_base, marks_base : str
        Texts they were read from, whose comments are kept; empty if they were never a file.
    plan_digest, marks_digest : str
        `digest` of what the session last read from or wrote to the disk; empty without a file.
    """

    plan: Plan | None = None
    marks: Marks = NO_MARKS
    plan_base: str = ""
    marks_base: str = ""
    plan_digest: str = ""
    marks_digest: str = ""


def digest(text: str) -> str:
    """Hash by which a text on the disk is recognised."""
    return hashlib.sha256(text.encode()).hexdigest()


def journal_key(recording: Path | None, plan_file: Path | None) -> str:
    """Start of the names of a pair's journals.

    Parameters
    ----------
    recording, plan_file : Path or None
        Made absolute.
    """
    names = [os.fsencode(path.absolute()) if path else b"" for path in (recording, plan_file)]
    return hashlib.sha256(b"\0".join(names)).hexdigest()[:32]


class Journal:
    """An open journal of a living window; made by `start_journal`."""

    def __init__(self, path: Path, file: BinaryIO) -> None:
        self.path = path
        self._file = file
        self._long_bytes = 2 * file.tell() + LONG_BYTES

    @property
    def is_long(self) -> bool:
        """Whether it should be begun anew."""
        return self._file.tell() > self._long_bytes

    def edit(self, entry: Entry, *, into_last: bool) -> None:
        """Write a change down.

        Parameters
        ----------
        entry : Entry
            Its new value is what counts; the old one is known from the lines before.
        into_last : bool
            Part of a drag: safe from a crash of the program at once, from one of the computer with the
            next `sync`, because a disk is too slow for every move of the mouse.
        """
        self._append(_edit_line(entry, into_last=into_last), sync=not into_last)

    def undo(self) -> None:
        """Write an undo down."""
        self._append({"do": "undo"})

    def redo(self) -> None:
        """Write a redo down."""
        self._append({"do": "redo"})

    def saved(self, what: What, text: str) -> None:
        """Write down that a file was saved.

        Parameters
        ----------
        what : What
            Which file.
        text : str
            Its text.
        """
        self._append({"do": "saved", "what": what, "digest": digest(text)})

    def sync(self) -> None:
        """Wait until the disk has everything."""
        os.fsync(self._file.fileno())

    def remove(self) -> None:
        """End it: nothing is left to be recovered."""
        self.path.unlink(missing_ok=True)
        self._file.close()

    def leave(self) -> None:
        """End it as a crash would: the file stays and is offered next time."""
        self._file.close()

    def _append(self, line: Mapping[str, object], *, sync: bool = True) -> None:
        self._file.write(_bytes(line))
        self._file.flush()
        if sync:
            self.sync()


def start_journal(
    folder: Path, key: str, values: Values, history: History, old: Journal | None = None
) -> Journal:
    """Begin a journal from a state and its history.

    Parameters
    ----------
    folder : Path
        Made if it is missing.
    key : str
        From `journal_key`.
    values : Values
        State now.
    history : History
        What led to it, kept so that it can still be undone after a crash.
    old : Journal or None
        One of the same key to be replaced, whole or not at all.

    Raises
    ------
    OSError
        It cannot be written.
    """
    folder.mkdir(parents=True, exist_ok=True, mode=0o700)
    path = old.path if old else folder / f"{key}-{secrets.token_hex(4)}.journal"
    part = path.with_suffix(".part")
    file = part.open("wb")
    try:
        os.chmod(part, 0o600)
        try_lock(file)
        for line in _snapshot(values, history):
            file.write(_bytes(line))
        file.flush()
        os.fsync(file.fileno())
        part.replace(path)
    except OSError:
        file.close()
        part.unlink(missing_ok=True)
        raise
    _sync_folder(folder)
    if old is not None:
        old.leave()
    return Journal(path, file)


def with_value(values: Values, value: Plan | Marks) -> Values:
    """Values with another plan or other marks.

    Parameters
    ----------
    values : Values
        Before.
    value : Plan or Marks
        What it becomes.
    """
    return replace(values, plan=value) if isinstance(value, Plan) else replace(values, marks=value)


def with_digest(values: Values, what: What, text_digest: str) -> Values:
    """Values with another state of a file on the disk.

    Parameters
    ----------
    values : Values
        Before.
    what : What
        Which file.
    text_digest : str
        `digest` of its text.
    """
    if what is What.PLAN:
        return replace(values, plan_digest=text_digest)
    return replace(values, marks_digest=text_digest)


def _snapshot(values: Values, history: History) -> Iterator[dict[str, object]]:
    """Lines that replay to a state and its history."""
    entries = [*history.done, *reversed(history.undone)]
    start = values
    for entry in reversed(history.done):
        start = with_value(start, entry.old)
    yield {
        "journal": SCHEMA,
        "plan": None if start.plan is None else compact_plan(start.plan),
        "marks": compact_marks(start.marks),
        "plan_base": values.plan_base,
        "marks_base": values.marks_base,
        "plan_digest": values.plan_digest,
        "marks_digest": values.marks_digest,
    }
    for entry in entries:
        yield _edit_line(entry, into_last=False)
    for _ in history.undone:
        yield {"do": "undo"}


def _edit_line(entry: Entry, *, into_last: bool) -> dict[str, object]:
    value = compact_plan(entry.new) if isinstance(entry.new, Plan) else compact_marks(entry.new)
    return {
        "do": "edit",
        "what": entry.what,
        "label": entry.label,
        "value": value,
        "merge": entry.merge_key,
        "into_last": into_last,
    }


def _bytes(line: Mapping[str, object]) -> bytes:
    return json.dumps(line).encode() + b"\n"


def _sync_folder(folder: Path) -> None:
    number = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(number)
    finally:
        os.close(number)
