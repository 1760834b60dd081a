"""What the keys and menus do to the view: moving, zooming, showing and hiding. View state is not history."""

from __future__ import annotations

from dataclasses import replace

from pulsemend.session.session import Session
from pulsemend.session.view import Shown, View
from pulsemend.window.traces.navigation import FACTOR, SMALL_STEP, Extent, louder


class ViewActs:
    """Handlers of the actions that change the view alone.

    Parameters
    ----------
    session : Session
        The window's.
    """

    def __init__(self, session: Session) -> None:
        self._session = session

    @property
    def _extent(self) -> Extent:
        opened = self._session.recording
        return Extent(self._session.view.width_s if opened is None else opened.facts.duration_s)

    def _set(self, view: View) -> None:
        self._session.set_view(view)

    def show(self, shown: str) -> None:
        """Show as recorded, repaired or both."""
        self._set(replace(self._session.view, shown=Shown(shown)))

    def wider(self) -> None:
        """Show twice the time around the middle."""
        self._zoom(FACTOR)

    def narrower(self) -> None:
        """Show half the time around the middle."""
        self._zoom(1.0 / FACTOR)

    def rows_larger(self) -> None:
        """Let a row stand for fewer microvolts."""
        self._set(louder(self._session.view, 1))

    def rows_smaller(self) -> None:
        """Let a row stand for more microvolts."""
        self._set(louder(self._session.view, -1))

    def earlier(self) -> None:
        """Move a tenth of the view to the left."""
        self._set(self._extent.stepped(self._session.view, -SMALL_STEP))

    def later(self) -> None:
        """Move a tenth of the view to the right."""
        self._set(self._extent.stepped(self._session.view, SMALL_STEP))

    def page_earlier(self) -> None:
        """Move one view to the left."""
        self._set(self._extent.stepped(self._session.view, -1.0))

    def page_later(self) -> None:
        """Move one view to the right."""
        self._set(self._extent.stepped(self._session.view, 1.0))

    def to_start(self) -> None:
        """Show the first samples."""
        self._set(self._extent.at_start(self._session.view))

    def to_end(self) -> None:
        """Show the last samples."""
        self._set(self._extent.at_end(self._session.view))

    def centre(self, time_s: float) -> None:
        """Bring an instant into the middle."""
        self._set(self._extent.centred(self._session.view, time_s))

    def pick_all(self) -> None:
        """Pick every channel that is shown."""
        view = self._session.view
        self._set(replace(view, picked=frozenset(view.rows)))

    def hide_picked(self) -> None:
        """Leave the picked channels out of the traces, unless nothing would be left."""
        view = self._session.view
        rows = tuple(name for name in view.rows if name not in view.picked)
        if rows:
            self._set(replace(view, rows=rows, picked=frozenset()))

    def show_all_channels(self) -> None:
        """Show every channel again."""
        opened = self._session.recording
        if opened is not None:
            rows = tuple(channel.name for channel in opened.facts.channels)
            self._set(replace(self._session.view, rows=rows))

    def _zoom(self, factor: float) -> None:
        view = self._session.view
        self._set(self._extent.zoomed(view, 1.0 / factor, view.start_s + 0.5 * view.width_s))
