"""The icons: which there are, and their drawings as text in any colour. No Qt.

Every icon is a drawing of our own on a grid of 24 in one colour, `currentColor`. The program's picture,
`pulsemend.svg`, has colours of its own and stands outside this.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache

from pulsemend.errors import PulsemendError
from pulsemend.resources import icons_folder
from pulsemend.session.messages import Level
from pulsemend.session.stages import State

PROGRAM = "pulsemend"
"""The program's own picture, for the window manager."""

STATE_ICONS: Mapping[State, str] = {
    State.UNTOUCHED: "untouched",
    State.ATTENTION: "attention",
    State.DONE: "done",
}
"""Shape by which the state of a stage is known."""

LEVEL_ICONS: Mapping[Level, str] = {
    Level.NOTE: "note",
    Level.ATTENTION: "attention",
    Level.PROBLEM: "problem",
}
"""Shape by which the level of a message is known."""

OTHER_ICONS = ("mark", "put_away", "drop", "lantern")
"""Icons that stand for neither an action nor a state: the header's mark, banner and start page."""


@lru_cache
def icon_text(name: str, colour: str) -> str:
    """Drawing of an icon in a colour.

    Parameters
    ----------
    name : str
        File name without ending.
    colour : str
        As ``#rrggbb``.

    Returns
    -------
    str
        SVG.

    Raises
    ------
    PulsemendError
        There is no such icon.
    """
    path = icons_folder() / f"{name}.svg"
    try:
        text = path.read_text("utf-8")
    except OSError as error:
        raise PulsemendError(f"the icon {name} is missing", todo="Install Pulsemend again") from error
    return text.replace("currentColor", colour)
