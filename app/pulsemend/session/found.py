"""The stages of the window, and what is opened, selected and found out in it, as frozen values."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path

from pulsemend.model.recording import RecordingFacts


class Stage(StrEnum):
    """The stages, in the order of the rail; any of them opens at any time."""

    RECORDING = "Recording"
    MARKERS = "Markers"
    PULSES = "Pulses"
    EPOCHS = "Epochs"
    REVIEW = "Review"
    EXPORT = "Export"
    ROSTER = "Roster"


@dataclass(frozen=True)
class OpenRecording:
    """The recording of a window: its file and its facts."""

    path: Path
    facts: RecordingFacts


@dataclass(frozen=True)
class Selected:
    """What the hand is on: a pulse (recorded sample) or a stretch (recorded samples, half open)."""

    pulse: int | None = None
    stretch: tuple[int, int] | None = None


NOTHING_SELECTED = Selected()


@dataclass(frozen=True)
class WrittenSet:
    """An epoch set that was written from the window.

    Parameters
    ----------
    folder : Path
    revision : int
        Of the session when it was begun.
    problems : tuple of str
        What its check found, one sentence each; empty if nothing.
    """

    folder: Path
    revision: int
    problems: tuple[str, ...] = ()


@dataclass(frozen=True)
class FoundMarkers:
    """What was found out about the markers.

    Parameters
    ----------
    codes : frozenset of str or None
        Codes of the markers that count; None until they were looked through.
    curable : tuple of str
        Keys of faults that have a cure, decided about or not.
    n_doubtful : int
        Trials with more than one explanation.
    log_problem : str
        Why the log was not joined; empty if it was, or if there is none.
    """

    codes: frozenset[str] | None = None
    curable: tuple[str, ...] = ()
    n_doubtful: int = 0
    log_problem: str = ""


@dataclass(frozen=True)
class Found:
    """What jobs found out about the recording under the plan and the marks.

    Parameters
    ----------
    problems : tuple of str
        What keeps plan, marks and recording from going together, one sentence each.
    kept : mapping as tuple of (str, int)
        Epochs kept per rule, in the plan's order; None until they were counted.
    n_pulses : int or None
        Pulses known; None until they were looked for.
    n_not_in_signal : int
        Pulses among them that have a marker, but no artifact.
    written : WrittenSet or None
        The set written last.
    markers : FoundMarkers
    """

    problems: tuple[str, ...] = ()
    kept: tuple[tuple[str, int], ...] | None = None
    n_pulses: int | None = None
    n_not_in_signal: int = 0
    written: WrittenSet | None = None
    markers: FoundMarkers = FoundMarkers()


NOTHING_FOUND = Found()
