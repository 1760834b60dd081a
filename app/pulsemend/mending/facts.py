"""What is in a recording: `pulsemend facts`, and the evidence a draft starts from."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from statistics import median

import numpy as np

from pulsemend.engine.scan import find_pulse_like
from pulsemend.model.recording import RecordingFacts
from pulsemend.model.vocabulary import ChannelType
from pulsemend.progress import Work
from pulsemend.readers.opening import open_recording


@dataclass(frozen=True)
class CodeFacts:
    """One marker code.

    Parameters
    ----------
    code, type : str
    count : int
    first_s, last_s : float
    usual_interval_s : float or None
        Median time from one to the next; None for a single one.
    """

    code: str
    type: str
    count: int
    first_s: float
    last_s: float
    usual_interval_s: float | None


@dataclass(frozen=True)
class RecordingSummary:
    """Facts of a recording, its codes and the pulses found in its signal.

    Parameters
    ----------
    facts : RecordingFacts
    codes : tuple of CodeFacts
        In order of first occurrence.
    pulses_found : tuple of int
        Recorded samples of pulse-like events in the EEG channels.
    """

    facts: RecordingFacts
    codes: tuple[CodeFacts, ...]
    pulses_found: tuple[int, ...]

    @property
    def channel_types(self) -> Mapping[str, int]:
        """Channels per type."""
        return Counter(channel.type.value for channel in self.facts.channels)


def summarise(path: Path) -> Work[RecordingSummary]:
    """Read a recording's facts and look through its signal for pulses.

    Parameters
    ----------
    path : Path
        The recording.

    Yields
    ------
    Progress

    Returns
    -------
    RecordingSummary

    Raises
    ------
    RecordingError
        The file cannot be used.
    """
    recording = open_recording(path)
    try:
        facts = recording.facts
        eeg = np.flatnonzero([channel.type is ChannelType.EEG for channel in facts.channels])
        found: tuple[int, ...] = ()
        if eeg.size:
            found = yield from find_pulse_like(recording, eeg)
    finally:
        recording.close()
    return RecordingSummary(facts, code_facts(facts), found)


def code_facts(facts: RecordingFacts) -> tuple[CodeFacts, ...]:
    """Count every code and say where it is."""
    times: dict[str, list[float]] = {}
    types: dict[str, str] = {}
    for marker in facts.markers:
        times.setdefault(marker.code, []).append(marker.sample / facts.rate_hz)
        types.setdefault(marker.code, marker.type)
    return tuple(
        CodeFacts(
            code=code,
            type=types[code],
            count=len(at),
            first_s=at[0],
            last_s=at[-1],
            usual_interval_s=median(np.diff(at).tolist()) if len(at) > 1 else None,
        )
        for code, at in times.items()
    )
