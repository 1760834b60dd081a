"""The part of a window's state that is never undone: view, selection, stage, findings, messages."""

from __future__ import annotations

from pulsemend.session.changed import Callback, Changed, Observers
from pulsemend.session.found import NOTHING_FOUND, NOTHING_SELECTED, Found, Selected, Stage
from pulsemend.session.messages import Message
from pulsemend.session.view import View

MESSAGES_KEPT = 200


class Surroundings:
    """What a session shows and says around plan and marks, and whom it tells."""

    def __init__(self) -> None:
        self._observers = Observers()
        self._view: View = View()
        self._selected = NOTHING_SELECTED
        self._stage = Stage.RECORDING
        self._found = NOTHING_FOUND
        self._messages: tuple[Message, ...] = ()
        self._estimates_revision: int | None = None

    @property
    def view(self) -> View:
        """What is in view."""
        return self._view

    @property
    def selected(self) -> Selected:
        """The pulse or stretch that is selected."""
        return self._selected

    @property
    def stage(self) -> Stage:
        """The open stage."""
        return self._stage

    @property
    def found(self) -> Found:
        """What jobs found out."""
        return self._found

    @property
    def messages(self) -> tuple[Message, ...]:
        """What the user was told and has not put away, oldest first."""
        return self._messages

    @property
    def estimates_revision(self) -> int | None:
        """Revision that the estimates at hand belong to; None without any."""
        return self._estimates_revision

    def subscribe(self, kind: Changed, callback: Callback) -> Callback:
        """Tell a callback of every change of a kind, after it; the callable returned ends that.

        Parameters
        ----------
        kind : Changed
            Which changes.
        callback : callable
            Called without arguments.
        """
        return self._observers.subscribe(kind, callback)

    def set_view(self, view: View) -> None:
        """Show another part.

        Parameters
        ----------
        view : View
            What to show.
        """
        if view != self._view:
            self._view = view
            self._observers.tell(Changed.VIEW)

    def select(self, selected: Selected) -> None:
        """Select a pulse or a stretch, or nothing.

        Parameters
        ----------
        selected : Selected
            What the hand is on.
        """
        if selected != self._selected:
            self._selected = selected
            self._observers.tell(Changed.VIEW)

    def open_stage(self, stage: Stage) -> None:
        """Open a stage.

        Parameters
        ----------
        stage : Stage
            Any, at any time.
        """
        if stage != self._stage:
            self._stage = stage
            self._observers.tell(Changed.STAGE)

    def set_found(self, found: Found) -> None:
        """Take over what a job found out; a result of another revision is for the caller to throw away.

        Parameters
        ----------
        found : Found
            All that is known now.
        """
        if found != self._found:
            self._found = found
            self._observers.tell(Changed.STAGE)

    def set_estimates_revision(self, revision: int | None) -> None:
        """Say which revision the estimates at hand belong to.

        Parameters
        ----------
        revision : int or None
            None: there are none.
        """
        if revision != self._estimates_revision:
            self._estimates_revision = revision
            self._observers.tell(Changed.ESTIMATES)

    def say(self, message: Message) -> None:
        """Tell the user something; the oldest messages are forgotten in the end.

        Parameters
        ----------
        message : Message
            What to say.
        """
        self._messages = (*self._messages, message)[-MESSAGES_KEPT:]
        self._observers.tell(Changed.MESSAGE)

    def put_away(self, message: Message) -> None:
        """Forget a message the user has seen.

        Parameters
        ----------
        message : Message
            One of `messages`.
        """
        self._messages = tuple(one for one in self._messages if one is not message)
        self._observers.tell(Changed.MESSAGE)
