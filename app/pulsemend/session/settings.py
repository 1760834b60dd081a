"""What the program remembers of its user: a frozen value, read, passed in and written; never a global."""

from __future__ import annotations

import json
import logging
from collections.abc import Callable, Mapping
from dataclasses import asdict, dataclass, replace
from enum import StrEnum
from pathlib import Path
from typing import Any

from pulsemend.model.toml_tables import write_text

SCHEMA = 1
RECENT_KEPT = 12
TEXT_SIZES = (100, 110, 125, 150, 175, 200)
"""Per cent of the system's text size."""

log = logging.getLogger(__name__)

Migration = Callable[[dict[str, Any]], dict[str, Any]]

MIGRATIONS: Mapping[int, Migration] = {}
"""By the schema they start from, each to the next one."""


class ThemeChoice(StrEnum):
    """Which colours to show."""

    SYSTEM = "system"
    LIGHT = "light"
    DARK = "dark"


@dataclass(frozen=True)
class Recent:
    """A recording that was open, and the plan beside it; empty without one."""

    recording: str
    plan: str = ""


@dataclass(frozen=True)
class Settings:
    """What is remembered.

    Parameters
    ----------
    theme : ThemeChoice
    text_percent : int
        One of `TEXT_SIZES`.
    recent : tuple of Recent
        Newest first.
    geometry : str
        Place of the window and of its parts, as the window wrote it.
    notice_shown : bool
        Whether the notice of the first start was read.
    export_folder : str
        Where the last set went.
    """

    theme: ThemeChoice = ThemeChoice.SYSTEM
    text_percent: int = 100
    recent: tuple[Recent, ...] = ()
    geometry: str = ""
    notice_shown: bool = False
    export_folder: str = ""

    def with_recent(self, recording: Path, plan: Path | None = None) -> Settings:
        """Make a recording the newest of the recent ones.

        Parameters
        ----------
        recording : Path
            Its file.
        plan : Path or None
            The plan open with it.
        """
        newest = Recent(str(recording.absolute()), str(plan.absolute()) if plan else "")
        others = [one for one in self.recent if one.recording != newest.recording]
        return replace(self, recent=(newest, *others)[:RECENT_KEPT])

    def with_text_step(self, step: int) -> Settings:
        """Make the text larger (1) or smaller (-1), as far as there are sizes.

        Parameters
        ----------
        step : int
            How many sizes up or down.
        """
        place = TEXT_SIZES.index(self.text_percent) + step
        return replace(self, text_percent=TEXT_SIZES[min(max(place, 0), len(TEXT_SIZES) - 1)])


@dataclass(frozen=True)
class Loaded:
    """Settings as read, and a sentence for the user if they could not be."""

    settings: Settings
    words: str = ""


def load_settings(
    path: Path, migrations: Mapping[int, Migration] = MIGRATIONS, schema: int = SCHEMA
) -> Loaded:
    """Read settings; whatever is wrong with the file, there are some.

    Parameters
    ----------
    path : Path
        The file; defaults are used if there is none.
    migrations : mapping of int to callable
        Steps from older schemas.
    schema : int
        The schema of today.

    Returns
    -------
    Loaded
        A broken file, or one of a later version, is kept beside it under another name, and the words say so.
    """
    try:
        text = path.read_text("utf-8")
    except FileNotFoundError:
        return Loaded(Settings())
    except (OSError, ValueError) as error:
        return _set_aside(path, f"cannot be read ({type(error).__name__})")
    try:
        tree = json.loads(text)
        found = tree.pop("schema")
        if type(found) is int and found > schema:
            return _set_aside(path, "were written by a later version")
        while found < schema:
            tree, found = migrations[found](tree), found + 1
        return Loaded(_settings(tree))
    except (ValueError, KeyError, TypeError, AttributeError, RecursionError):
        return _set_aside(path, "are damaged")


def save_settings(path: Path, settings: Settings) -> None:
    """Write settings, whole or not at all.

    Parameters
    ----------
    path : Path
        The file; its folder is made if it is missing.
    settings : Settings
        What to remember.

    Raises
    ------
    OSError
        They cannot be written.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    write_text(path, json.dumps({"schema": SCHEMA, **asdict(settings)}, indent=2) + "\n")


def _settings(tree: Mapping[str, Any]) -> Settings:
    """Take settings from their tree; keys of other versions are passed over.

    Raises ValueError, KeyError or TypeError where a value is not what it should be.
    """
    settings = Settings(
        theme=ThemeChoice(tree["theme"]),
        text_percent=TEXT_SIZES[TEXT_SIZES.index(tree["text_percent"])],
        recent=tuple(Recent(_text(one["recording"]), _text(one["plan"])) for one in tree["recent"]),
        geometry=_text(tree["geometry"]),
        notice_shown=tree["notice_shown"],
        export_folder=_text(tree["export_folder"]),
    )
    if not isinstance(settings.notice_shown, bool):
        raise TypeError("notice_shown")
    return settings


def _text(value: object) -> str:
    if not isinstance(value, str):
        raise TypeError("no text")
    return value


def _set_aside(path: Path, what: str) -> Loaded:
    log.warning("settings %s", what)
    number = 1
    while (kept := path.with_name(f"{path.name}.kept-{number}")).exists():
        number += 1
    try:
        path.rename(kept)
    except OSError:
        return Loaded(Settings(), f"The settings {what}; the usual ones are used.")
    return Loaded(
        Settings(), f"The settings {what}; the usual ones are used. The old file is kept as {kept.name}."
    )
