"""A workbench on the sample that comes with the program, and stand-ins for what the main window does."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import shiboken6

from pulsemend.model.plan_file import read_plan
from pulsemend.readers.opening import open_recording
from pulsemend.resources import sample_folder
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.window.workbench import Workbench

HEADER = "sub-lt01_task-lantern_eeg.vhdr"


class Handlers:
    """Takes note of every action that is done: the names of handlers with their arguments."""

    def __init__(self) -> None:
        self.done: list[tuple[Any, ...]] = []

    def __getattr__(self, name: str) -> Callable[..., None]:
        if name.startswith("_"):
            raise AttributeError(name)
        return lambda *arguments: self.done.append((name, *arguments))


def sample_copy(folder: Path) -> Path:
    """Copy the sample's recording and plan into a folder; returns the recording."""
    for path in sample_folder().iterdir():
        if path.is_file():
            shutil.copy(path, folder / path.name)
    return folder / HEADER


def new_bench(
    folder: Path | None = None, settings: Settings | None = None, *, plan: bool = True
) -> Workbench:
    """Make a workbench, with the sample open if there is a folder for its copy."""
    session = Session()
    if folder is not None:
        path = sample_copy(folder)
        recording = open_recording(path)
        session.open_recording(path, recording.facts, None, folder / "marks" / "lt01.marks.toml")
        recording.close()
        if plan:
            session.open_plan(read_plan(folder / "lantern.toml"), folder / "lantern.toml")
    return Workbench(session, settings or Settings())


def end_bench(bench: Workbench) -> None:
    """Stop a workbench and delete it here and now.

    Left to the garbage collector it might be deleted in a worker of another test, and Qt ends the process.
    """
    bench.close()
    shiboken6.delete(bench)
