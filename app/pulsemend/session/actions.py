"""Everything that can be done in the window as one table, and what is built from it.

Menus, toolbar, action finder, tooltips and the list of keys come from these records. An action's id is the
object name of its control; the window has one function per handler, which is given the argument.
Keys are written as the toolkit's portable text writes them.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from enum import StrEnum

from pulsemend.session.conditions import always
from pulsemend.session.session import Session


class Menu(StrEnum):
    """The menus, from left to right."""

    FILE = "File"
    EDIT = "Edit"
    TRACES = "Traces"
    GO = "Go to"
    MARK = "Mark"
    SET = "Set"
    STAGES = "Stages"
    LOOKS = "Looks"
    HELP = "Help"


class Where(StrEnum):
    """Where an action's keys count."""

    WINDOW = "in the whole window"
    TRACES = "in the traces and the ribbon"
    """Elsewhere these keys move through lists and texts, as everywhere on the platform."""


Condition = Callable[[Session], bool]


@dataclass(frozen=True)
class Action:
    """One thing that can be done.

    Parameters
    ----------
    id : str
        Its name in the program, and the object name of its control.
    title : str
        As the menu shows it; "..." at the end where something is asked first.
    tooltip : str
        One sentence: what it does.
    menu : Menu
    section : int
        Actions of a menu with different numbers are parted by a line.
    keys : tuple of str
        Portable text; the first one is shown.
    where : Where
        Where the keys count.
    icon : str
        Name of the icon; empty without one.
    enabled : callable
        Whether it can be done now.
    checked : callable or None
        For a choice: whether it is the one in force.
    handler : str
        The window's function that does it; empty: the one named like the id.
    argument : str
        Given to the handler; empty for none.
    toolbar : bool
        Whether the toolbar shows it too.
    """

    id: str
    title: str
    tooltip: str
    menu: Menu
    section: int = 1
    keys: tuple[str, ...] = ()
    where: Where = Where.WINDOW
    icon: str = ""
    enabled: Condition = always
    checked: Condition | None = None
    handler: str = ""
    argument: str = ""
    toolbar: bool = False

    @property
    def does(self) -> str:
        """Name of the handler."""
        return self.handler or self.id

    @property
    def full_tooltip(self) -> str:
        """Tooltip with the first key."""
        return f"{self.tooltip} ({self.keys[0]})" if self.keys else self.tooltip


class DuplicateAction(Exception):
    """Two actions share an id or a key: a fault of ours, named so that it is found at once."""


def check_actions(actions: Sequence[Action]) -> None:
    """Refuse actions that share an id or a key.

    Parameters
    ----------
    actions : sequence of Action
        The table.

    Raises
    ------
    DuplicateAction
        Names both.
    """
    by_id: dict[str, Action] = {}
    by_key: dict[str, Action] = {}
    for action in actions:
        if action.id in by_id:
            other = by_id[action.id]
            raise DuplicateAction(f"{other.title!r} and {action.title!r} share the id {action.id}")
        by_id[action.id] = action
        for key in action.keys:
            plain = plain_key(key)
            if plain in by_key:
                raise DuplicateAction(f"{by_key[plain].id} and {action.id} share the key {key}")
            by_key[plain] = action


def plain_key(key: str) -> str:
    """Write a key in one way whatever the order and case of its parts.

    Parameters
    ----------
    key : str
        Portable text.
    """
    *modifiers, last = key.lower().split("+")
    names = {"pagedown": "pgdown", "pageup": "pgup", "delete": "del", "insert": "ins", "escape": "esc"}
    return "+".join([*sorted(modifiers), names.get(last, last)])


def menus(actions: Sequence[Action]) -> tuple[tuple[Menu, tuple[tuple[Action, ...], ...]], ...]:
    """Arrange actions in menus: per menu its sections, per section its actions, all in order.

    Parameters
    ----------
    actions : sequence of Action
        The table.
    """
    built = []
    for menu in Menu:
        own = [action for action in actions if action.menu is menu]
        numbers = sorted({action.section for action in own})
        sections = tuple(tuple(one for one in own if one.section == number) for number in numbers)
        if sections:
            built.append((menu, sections))
    return tuple(built)


def toolbar(actions: Sequence[Action]) -> tuple[Action, ...]:
    """Actions of the toolbar, in order.

    Parameters
    ----------
    actions : sequence of Action
        The table.
    """
    return tuple(action for action in actions if action.toolbar)


MOUSE_HELP = (
    ("Wheel", "Earlier or later"),
    ("Ctrl+Wheel", "Wider or narrower around the pointer"),
    ("Shift+Wheel", "Channels up or down"),
    ("Drag", "Move the traces along"),
)
"""What the mouse does in the traces, for the list of keys."""


def key_help(actions: Sequence[Action]) -> tuple[tuple[str, tuple[tuple[str, str], ...]], ...]:
    """List all keys: per menu its name and pairs of keys and what they do; the mouse at the end.

    Parameters
    ----------
    actions : sequence of Action
        The table.
    """
    listed: list[tuple[str, tuple[tuple[str, str], ...]]] = []
    for menu in Menu:
        rows = tuple(
            (" or ".join(action.keys), action.title.removesuffix("..."))
            for action in actions
            if action.menu is menu and action.keys
        )
        if rows:
            listed.append((str(menu), rows))
    return (*listed, ("Mouse in the traces", MOUSE_HELP))


def key_help_text(actions: Sequence[Action]) -> str:
    """List all keys as plain text.

    Parameters
    ----------
    actions : sequence of Action
        The table.
    """
    listed = key_help(actions)
    width = max(len(keys) for _, rows in listed for keys, _ in rows)
    blocks = [
        "\n".join([name, *(f"  {keys:<{width}}  {title}" for keys, title in rows)]) for name, rows in listed
    ]
    return "\n\n".join(blocks) + "\n"


def find_actions(actions: Sequence[Action], typed: str) -> tuple[Action, ...]:
    """Find actions by words, parts of words or their letters in order; the best first.

    Parameters
    ----------
    actions : sequence of Action
        The table.
    typed : str
        What the user typed; nothing finds everything.

    Returns
    -------
    tuple of Action
        Those in which every word was found.
    """
    words = typed.casefold().split()
    scored = [
        (sum(scores), place) for place, action in enumerate(actions) if all(scores := _scores(action, words))
    ]
    return tuple(actions[place] for _, place in sorted(scored, key=lambda one: (-one[0], one[1])))


def _scores(action: Action, words: Sequence[str]) -> list[int]:
    title = action.title.casefold()
    rest = f"{action.tooltip} {action.menu} {' '.join(action.keys)}".casefold()
    return [_score(word, title, rest) for word in words]


def _score(word: str, title: str, rest: str) -> int:
    """How well a word fits: 0 not at all."""
    if title.startswith(word):
        return 6
    if any(part.startswith(word) for part in title.split()):
        return 5
    if word in title:
        return 4
    if any(part.startswith(word) for part in rest.split()):
        return 3
    if word in rest:
        return 2
    letters = iter(title)
    return int(all(letter in letters for letter in word))
