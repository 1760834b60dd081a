"""Keeps a session safe from crashes: its journal, begun, written, begun anew and ended."""

from __future__ import annotations

import logging
from collections.abc import Callable
from pathlib import Path

from pulsemend.session.history import History
from pulsemend.session.journal import Journal, Values, start_journal
from pulsemend.session.left_behind import LeftBehind, find_left_behind

log = logging.getLogger(__name__)


class Keeper:
    """The journal of one window.

    Without a folder it does nothing. Where the disk refuses, work goes on: the trouble is told once, and
    every later step tries to write the whole journal anew.

    Parameters
    ----------
    folder : Path or None
        Where journals lie.
    on_trouble : callable
        Told when the journal can no longer be written.
    """

    def __init__(self, folder: Path | None, on_trouble: Callable[[OSError], None]) -> None:
        self._folder = folder
        self._on_trouble = on_trouble
        self._key = ""
        self._journal: Journal | None = None
        self._is_broken = False
        self._left: LeftBehind | None = None

    @property
    def left(self) -> LeftBehind | None:
        """What a crash left behind, while nobody has decided about it."""
        return self._left

    def move(self, key: str, values: Values, history: History, *, look: bool = True) -> None:
        """Go on under another key.

        Parameters
        ----------
        key : str
            Of the recording and plan now open.
        values : Values
            State now.
        history : History
            What led to it.
        look : bool
            Look for what a crash left first; if there is something (`left`), `settle` has to follow.
        """
        old, self._journal, self._key = self._journal, None, key
        if self._folder is not None:
            if look:
                self._left = find_left_behind(self._folder, key)
            if self._left is None:
                self.restart(values, history)
        # Only now, so that a crash in between loses nothing.
        if old is not None:
            old.remove()

    def settle(self, values: Values, history: History) -> None:
        """End the decision about what was left behind: from now on these values count.

        Parameters
        ----------
        values : Values
            State now, brought back or not.
        history : History
            What led to it.
        """
        left, self._left = self._left, None
        if left is None:
            return
        self.restart(values, history)
        if self._is_broken:
            left.leave()
        else:
            left.remove()

    def restart(self, values: Values, history: History) -> None:
        """Write the whole journal anew.

        Parameters
        ----------
        values : Values
            State now.
        history : History
            What led to it.
        """
        if self._folder is None:
            return
        try:
            self._journal = start_journal(self._folder, self._key, values, history, self._journal)
        except OSError as error:
            self._trouble(error)
        else:
            self._is_broken = False

    def note(self, write: Callable[[Journal], None], values: Values, history: History) -> None:
        """Write a step that was made.

        Parameters
        ----------
        write : callable
            Writes it to the journal.
        values : Values
            State after it.
        history : History
            What led to it, the step included.
        """
        if self._folder is None or self._left is not None:
            return
        if self._journal is None or self._is_broken or self._journal.is_long:
            self.restart(values, history)
            return
        try:
            write(self._journal)
        except OSError as error:
            self._trouble(error)

    def close(self) -> None:
        """End cleanly; what nobody has decided about is offered again next time."""
        if self._journal is not None:
            self._journal.remove()
            self._journal = None
        if self._left is not None:
            self._left.leave()
            self._left = None

    def _trouble(self, error: OSError) -> None:
        log.error("the journal cannot be written: %s", type(error).__name__)
        if not self._is_broken:
            self._is_broken = True
            self._on_trouble(error)
