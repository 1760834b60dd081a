"""A real session and workbench on a small recording, for tests of stages."""

from __future__ import annotations

import shutil
from pathlib import Path

from pytestqt.qtbot import QtBot

from pulsemend.mending.prepare import marks_path
from pulsemend.model.plan_file import read_plan
from pulsemend.readers.opening import open_recording
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.window.workbench import Workbench
from support.small_lantern import Study

LEARN_MS = 20_000
"""More than learning takes; nothing waits for as long."""


def new_bench() -> Workbench:
    """Nothing is open."""
    return Workbench(Session(), Settings())


def open_study(bench: Workbench, study: Study, folder: Path) -> Path:
    """Open the recording with a copy of its plan that may be written to; gives the copy."""
    plan = folder / "plan.toml"
    shutil.copy(study.plan, plan)
    open_only(bench, study, plan)
    bench.session.open_plan(read_plan(plan), plan)
    return plan


def open_only(bench: Workbench, study: Study, plan: Path) -> None:
    """Open the recording without a plan."""
    recording = open_recording(study.recording)
    facts = recording.facts
    recording.close()
    bench.session.open_recording(study.recording, facts, None, marks_path(plan, facts.stem))


def wait_learned(qtbot: QtBot, bench: Workbench) -> None:
    """Wait until what is learned is of the plan and marks shown."""
    qtbot.waitUntil(lambda: bench.learned is not None and not bench.provisional, timeout=LEARN_MS)
