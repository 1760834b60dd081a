"""Undo and redo of the plan and of the marks: one line of named entries, bounded.

Old and new are frozen values, so an entry is undone by putting the old value back.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import StrEnum

from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan

LONGEST = 500
"""Entries kept; beyond it the oldest is forgotten."""


class What(StrEnum):
    """What an entry changed."""

    PLAN = "plan"
    MARKS = "marks"


@dataclass(frozen=True)
class Entry:
    """One change.

    Parameters
    ----------
    label : str
        What was done, in words for the menu: "Gap from -2 to 14 ms".
    what : What
    old, new : Plan or Marks
        Values before and after.
    merge_key : str or None
        Changes of one drag share a key and become one entry.
    """

    label: str
    what: What
    old: Plan | Marks
    new: Plan | Marks
    merge_key: str | None = None


class History:
    """What can be undone and redone.

    Parameters
    ----------
    longest : int
        Entries kept.
    """

    def __init__(self, longest: int = LONGEST) -> None:
        self._longest = longest
        self._done: list[Entry] = []
        self._undone: list[Entry] = []
        self._merging = False

    @property
    def done(self) -> tuple[Entry, ...]:
        """Entries that can be undone, oldest first."""
        return tuple(self._done)

    @property
    def undone(self) -> tuple[Entry, ...]:
        """Entries that can be redone, the next one last."""
        return tuple(self._undone)

    @property
    def is_merging(self) -> bool:
        """Whether the next change may become part of the last entry."""
        return self._merging

    @property
    def next_undo(self) -> str:
        """Label of what an undo would take back; empty if there is nothing."""
        return self._done[-1].label if self._done else ""

    @property
    def next_redo(self) -> str:
        """Label of what a redo would do again; empty if there is nothing."""
        return self._undone[-1].label if self._undone else ""

    def would_merge(self, entry: Entry) -> bool:
        """Whether pushing an entry makes it part of the last one."""
        return (
            self._merging
            and bool(self._done)
            and entry.merge_key is not None
            and (entry.merge_key, entry.what) == (self._done[-1].merge_key, self._done[-1].what)
        )

    def push(self, entry: Entry) -> None:
        """Keep a change that was just made; what was undone can no longer be redone.

        Parameters
        ----------
        entry : Entry
            A drag that ends where it began leaves no entry.
        """
        if self.would_merge(entry):
            entry = replace(entry, old=self._done.pop().old)
        self._undone.clear()
        # Without an entry of its own a drag must not go on in the one before, which may have the same key.
        self._merging = entry.merge_key is not None and entry.old != entry.new
        if entry.old != entry.new:
            self._done.append(entry)
            del self._done[: -self._longest]

    def end_merge(self) -> None:
        """Let the next change be an entry of its own, whatever its key."""
        self._merging = False

    def undo(self) -> Entry | None:
        """Take the last entry back; its old value has to be put in place."""
        return self._move(self._done, self._undone)

    def redo(self) -> Entry | None:
        """Do the last undone entry again; its new value has to be put in place."""
        return self._move(self._undone, self._done)

    def forget(self, what: What) -> None:
        """Drop every entry about the plan or about the marks, because another one was opened."""
        self._done = [entry for entry in self._done if entry.what is not what]
        self._undone = [entry for entry in self._undone if entry.what is not what]
        self._merging = False

    def _move(self, source: list[Entry], target: list[Entry]) -> Entry | None:
        self._merging = False
        if not source:
            return None
        target.append(source.pop())
        return target[-1]
