"""The behavioural log that belongs to a recording: where it is, and its table."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from pulsemend.errors import LogError
from pulsemend.model.log import LogTable
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.model.recording import Recording
from pulsemend.readers.log_file import read_log

STEM = "{stem}"


@dataclass(frozen=True)
class StudyLog:
    """The log of a recording.

    Parameters
    ----------
    path : Path or None
        None where neither plan nor marks name one.
    table : LogTable or None
        None where there is none, or it cannot be read.
    problem : str
        Why it cannot be read; empty if it can, or if there is none.
    """

    path: Path | None = None
    table: LogTable | None = None
    problem: str = ""


NO_LOG = StudyLog()


def log_path(recording: Recording, plan: Plan, marks: Marks) -> Path | None:
    """Find the place of a recording's log: as the marks say, else as the plan says, beside the recording.

    Parameters
    ----------
    recording : Recording
        Its folder and name count.
    plan : Plan
        Without ``log.file`` there is no log.
    marks : Marks
        Their ``log.file`` wins over the plan's.
    """
    if not plan.log.file:
        return None
    folder = Path(recording.fingerprint_paths()[0]).parent
    return folder / (marks.log_file or plan.log.file.replace(STEM, recording.facts.stem))


def read_study_log(recording: Recording, plan: Plan, marks: Marks) -> StudyLog:
    """Read a recording's log; what keeps it from being read becomes words.

    Parameters
    ----------
    recording : Recording
        Its folder and name count.
    plan : Plan
        Without ``log.file`` there is no log.
    marks : Marks
        Their ``log.file`` wins over the plan's.
    """
    path = log_path(recording, plan, marks)
    if path is None:
        return NO_LOG
    try:
        return StudyLog(path, read_log(path))
    except LogError as error:
        return StudyLog(path, None, str(error))
