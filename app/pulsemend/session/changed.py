"""Who is told of what: the observers of a session."""

from __future__ import annotations

import logging
from collections.abc import Callable
from enum import StrEnum

log = logging.getLogger(__name__)

Callback = Callable[[], None]


class Changed(StrEnum):
    """What of a session changed."""

    RECORDING = "recording"
    PLAN = "plan"
    MARKS = "marks"
    VIEW = "view"
    """What is shown, and what is selected."""
    ESTIMATES = "estimates"
    STAGE = "stage"
    """The stage that is open, and what jobs found out for the states of stages."""
    HISTORY = "history"
    """Names of the next undo and redo, and whether everything is saved."""
    MESSAGE = "message"


class Observers:
    """Callbacks by kind of change."""

    def __init__(self) -> None:
        self._callbacks: dict[Changed, list[Callback]] = {kind: [] for kind in Changed}

    def subscribe(self, kind: Changed, callback: Callback) -> Callback:
        """Tell a callback of every change of a kind.

        Parameters
        ----------
        kind : Changed
            Which changes.
        callback : callable
            Called after each, in the order of subscription.

        Returns
        -------
        callable
            Ends it; calling it again does nothing.
        """

        # One object per subscription: the same function may be subscribed twice.
        def own() -> None:
            callback()

        self._callbacks[kind].append(own)

        def unsubscribe() -> None:
            if own in self._callbacks[kind]:
                self._callbacks[kind].remove(own)

        return unsubscribe

    def tell(self, *kinds: Changed) -> None:
        """Call everybody; one that raises is logged and keeps nobody else from being told.

        Parameters
        ----------
        *kinds : Changed
            What changed.
        """
        for kind in kinds:
            for callback in tuple(self._callbacks[kind]):
                # Another callback may have closed the widget behind this one.
                if callback not in self._callbacks[kind]:
                    continue
                try:
                    callback()
                except Exception:
                    log.exception("an observer of %s failed", kind)
