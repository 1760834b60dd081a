"""Journals whose process is gone: found, locked and replayed."""

from __future__ import annotations

import json
import logging
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, BinaryIO

from pulsemend.errors import SettingError
from pulsemend.session.compact import checked_marks, checked_plan
from pulsemend.session.history import Entry, History, What
from pulsemend.session.journal import SCHEMA, Values, with_digest, with_value
from pulsemend.session.lock import is_same_file, try_lock

log = logging.getLogger(__name__)


@dataclass
class LeftBehind:
    """A journal whose process is gone: what it led to.

    Parameters
    ----------
    path : Path
    file : binary file
        Locked, so that no second window takes it too.
    values : Values
        State after the last step that could be read.
    history : History
        Ready to undo and redo.
    steps : int
        Changes, undos and redos read.
    lost : int
        Lines that could not be read; the torn last one does not count.
    written_s : float
        When it was last written, seconds since 1970.
    """

    path: Path
    file: BinaryIO = field(repr=False)
    values: Values
    history: History = field(repr=False)
    steps: int
    lost: int
    written_s: float

    @property
    def is_worth_it(self) -> bool:
        """Whether it holds anything that the files do not."""
        has_new_plan = self.values.plan is not None and not self.values.plan_digest
        return bool(self.steps or self.lost or has_new_plan)

    def remove(self) -> None:
        """Throw it away."""
        self.path.unlink(missing_ok=True)
        self.file.close()

    def leave(self) -> None:
        """Let it be for the next time."""
        self.file.close()


def find_left_behind(folder: Path, key: str) -> LeftBehind | None:
    """Find the newest journal that a crashed window left, and replay it.

    Parameters
    ----------
    folder : Path
        Where journals lie.
    key : str
        From `journal_key`.

    Returns
    -------
    LeftBehind or None
        None if there is none that brings anything back; those that bring nothing are removed.
    """
    for path in folder.glob(f"{key}-*.part"):
        # Begun, and killed before it was whole: the journal it was to replace is still there.
        if file := _taken(path):
            path.unlink(missing_ok=True)
            file.close()
    for path in sorted(folder.glob(f"{key}-*.journal"), key=_written_s, reverse=True):
        file = _taken(path)
        if file is None:
            continue
        left = _replay(path, file)
        if left is None:
            log.warning("a journal of another version or without a readable start is left alone")
            file.close()
        elif left.is_worth_it:
            return left
        else:
            left.remove()
    return None


def _taken(path: Path) -> BinaryIO | None:
    """Open and lock a file; None if a living window has it or it cannot be used."""
    try:
        file = path.open("r+b")
    except OSError as error:
        log.warning("a journal cannot be opened: %s", type(error).__name__)
        return None
    try:
        if try_lock(file) and is_same_file(file, path):
            return file
    except OSError as error:
        log.warning("a journal cannot be locked: %s", type(error).__name__)
    file.close()
    return None


def _replay(path: Path, file: BinaryIO) -> LeftBehind | None:
    # What is not closed by a line end was being written when the process ended.
    *lines, _torn = file.read().split(b"\n")
    steps = [_parsed(line) for line in lines]
    if not steps or steps[0] is None:
        return None
    try:
        values = _values(steps[0])
    except (KeyError, TypeError, SettingError):
        return None
    history, changes = History(), 0
    for place, step in enumerate(steps[1:], start=1):
        after = None if step is None else _stepped(values, history, step)
        if step is None or after is None:
            lost = len(steps) - place
            break
        values = after
        changes += step["do"] != "saved"
    else:
        lost = 0
    return LeftBehind(path, file, values, history, changes, lost, _written_s(path))


def _stepped(values: Values, history: History, step: Mapping[str, Any]) -> Values | None:
    """State after one step; None if the step says nothing that can be done."""
    try:
        if step["do"] == "edit":
            entry = _entry(values, step)
            if not step["into_last"]:
                history.end_merge()
            history.push(entry)
            return with_value(values, entry.new)
        if step["do"] == "saved":
            return with_digest(values, What(step["what"]), str(step["digest"]))
        moved = {"undo": history.undo, "redo": history.redo}[step["do"]]()
    except (KeyError, TypeError, ValueError, SettingError):
        return None
    if moved is None:
        return None
    return with_value(values, moved.old if step["do"] == "undo" else moved.new)


def _entry(values: Values, step: Mapping[str, Any]) -> Entry:
    label, merge = str(step["label"]), step["merge"]
    if What(step["what"]) is What.MARKS:
        return Entry(label, What.MARKS, values.marks, checked_marks(step["value"]), merge)
    if values.plan is None:
        raise KeyError("plan")
    return Entry(label, What.PLAN, values.plan, checked_plan(step["value"]), merge)


def _values(start: Mapping[str, Any]) -> Values:
    if start["journal"] != SCHEMA:
        raise KeyError("journal")
    return Values(
        plan=None if start["plan"] is None else checked_plan(start["plan"]),
        marks=checked_marks(start["marks"]),
        plan_base=str(start["plan_base"]),
        marks_base=str(start["marks_base"]),
        plan_digest=str(start["plan_digest"]),
        marks_digest=str(start["marks_digest"]),
    )


def _parsed(line: bytes) -> dict[str, Any] | None:
    try:
        step = json.loads(line)
    except ValueError:
        return None
    return step if isinstance(step, dict) else None


def _written_s(path: Path) -> float:
    try:
        return path.stat().st_mtime
    except FileNotFoundError:
        return 0.0
