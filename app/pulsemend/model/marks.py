"""Marks: everything decided about one recording by hand, as frozen values. Files: `marks_file`."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from pulsemend.model.recording import Fingerprint
from pulsemend.model.vocabulary import ChannelType


@dataclass(frozen=True)
class BadStretch:
    """A stretch of the recording that nothing may learn from and no kept epoch may touch.

    Recorded samples, half open; `kind` says why, in the user's own words.
    """

    start: int
    stop: int
    kind: str = ""


@dataclass(frozen=True)
class EpochKey:
    """Names an epoch by trial (from 1), rule and piece (from 1), never by index."""

    trial: int
    rule: str
    piece: int = 1


@dataclass(frozen=True)
class MovedPulse:
    """A pulse whose marker stands at `sample` and whose onset is `to` (recorded samples)."""

    sample: int
    to: int


@dataclass(frozen=True)
class MarkerKey:
    """Names a marker by recorded sample (nearest) and code, as the file has it."""

    sample: int
    code: str


@dataclass(frozen=True)
class Marks:
    """Everything decided about one recording by hand.

    Parameters
    ----------
    fingerprint : Fingerprint or None
        The recording these marks belong to; None for marks that were never a file.
    bad : tuple of str
        Channels bad in this recording, besides the plan's.
    good : tuple of str
        Channels good in this recording, whatever the plan says or the search finds.
    types : mapping of str to ChannelType
        Channel types that override the file's.
    pulses_added, pulses_removed : tuple of int
        Recorded samples: new onsets, and marker positions that are no pulse.
    pulses_moved : tuple of MovedPulse
    gaps_ms : mapping of str to (float, float)
        Gap windows of channels in this recording; they win over the plan's exceptions.
    bad_stretches : tuple of BadStretch
    trials_excluded : tuple of int
        From 1.
    epochs_left_out : tuple of EpochKey
    markers_ignored, markers_added : tuple of MarkerKey
        Markers of the recording that count for nothing, and markers that it lacks.
    cures_accepted, cures_refused : tuple of str
        Keys of trigger faults whose cure was decided about.
    log_file : str
        The behavioural log, over the plan's: absolute, or beside the recording. Empty: as the plan says.
    log_rows_excluded : tuple of int
        Rows of the log, from 1, that are not joined.
    run : str
        Label of this run where several files belong together; empty: as the file's name says.
    """

    fingerprint: Fingerprint | None = None
    bad: tuple[str, ...] = ()
    good: tuple[str, ...] = ()
    types: Mapping[str, ChannelType] = field(default_factory=dict)
    pulses_added: tuple[int, ...] = ()
    pulses_removed: tuple[int, ...] = ()
    pulses_moved: tuple[MovedPulse, ...] = ()
    gaps_ms: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    bad_stretches: tuple[BadStretch, ...] = ()
    trials_excluded: tuple[int, ...] = ()
    epochs_left_out: tuple[EpochKey, ...] = ()
    markers_ignored: tuple[MarkerKey, ...] = ()
    markers_added: tuple[MarkerKey, ...] = ()
    cures_accepted: tuple[str, ...] = ()
    cures_refused: tuple[str, ...] = ()
    log_file: str = ""
    log_rows_excluded: tuple[int, ...] = ()
    run: str = ""


NO_MARKS = Marks()
