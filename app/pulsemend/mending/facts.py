"""What is in a recording: `pulsemend facts`, and the evidence a draft starts from."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from statistics import median

import numpy as np

from pulsemend.engine.fit import fit
from pulsemend.engine.scan import find_pulse_like
from pulsemend.errors import InputError, UsageError
from pulsemend.mending.event_table import PlannedEvents, event_table
from pulsemend.mending.prepare import bind_checked, decide, marks_path
from pulsemend.mending.pulse_evidence import pulse_evidence
from pulsemend.mending.study_log import read_study_log
from pulsemend.model.faults import MarkerFault
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.marks_file import check_files, check_samples, read_marks
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import read_plan
from pulsemend.model.recording import Marker, Recording, RecordingFacts
from pulsemend.model.toml_tables import write_text
from pulsemend.model.vocabulary import ChannelType
from pulsemend.progress import Work
from pulsemend.readers.opening import open_recording
from pulsemend.trials.blocks import with_blocks
from pulsemend.trials.effective import effective_markers
from pulsemend.trials.faults import find_faults
from pulsemend.trials.matching import match_trials
from pulsemend.trials.proposal import Guess, guess


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
    faults : tuple of MarkerFault
        What is wrong with the markers.
    proposal : Guess
        Roles and slots that names, intervals and pulses suggest.
    planned : PlannedEvents or None
        Trials by a plan, if one was given.
    notes : tuple of str
        What was done to the markers, one sentence each.
    cures : mapping of str to str
        "accepted" or "refused", by the key of a fault that the marks decide about.
    """

    facts: RecordingFacts
    codes: tuple[CodeFacts, ...]
    pulses_found: tuple[int, ...]
    faults: tuple[MarkerFault, ...]
    proposal: Guess
    planned: PlannedEvents | None = None
    notes: tuple[str, ...] = ()
    cures: Mapping[str, str] = field(default_factory=dict)

    @property
    def channel_types(self) -> Mapping[str, int]:
        """Channels per type."""
        return Counter(channel.type.value for channel in self.facts.channels)


def summarise(
    path: Path, plan_path: Path | None = None, marks_path: Path | None = None
) -> Work[RecordingSummary]:
    """Read a recording's facts and look through its signal for pulses and its markers for faults.

    Parameters
    ----------
    path : Path
        The recording.
    plan_path, marks_path : Path or None
        With a plan, faults and trials are judged by it, and the marks beside it count, too.

    Yields
    ------
    Progress

    Returns
    -------
    RecordingSummary

    Raises
    ------
    RecordingError, PlanError, MarksError
        A file cannot be used.
    """
    plan_file = None if plan_path is None else read_plan(plan_path)
    plan = None if plan_file is None else plan_file.plan
    recording = open_recording(path)
    try:
        facts = recording.facts
        marks = NO_MARKS
        if plan_path is not None or marks_path is not None:
            marks = marks_of(plan_path or path, facts, marks_path)
        eeg = np.flatnonzero([channel.type is ChannelType.EEG for channel in facts.channels])
        found: tuple[int, ...] = ()
        if eeg.size:
            found = yield from find_pulse_like(recording, eeg)
        counting = effective_markers(facts.markers, marks, facts.rate_hz)
        planned = None
        if plan is not None and plan.trial:
            planned = yield from _planned(recording, counting.markers, plan, marks)
    finally:
        recording.close()
    faults = find_faults(facts.markers, facts.rate_hz, plan, marks.cures_accepted)
    facts = replace(facts, markers=counting.markers)
    return RecordingSummary(
        facts=facts,
        codes=code_facts(facts),
        pulses_found=found,
        faults=faults,
        proposal=guess(facts.markers, facts.rate_hz, pulse_evidence(facts, found).pulse_codes),
        planned=planned,
        notes=(*counting.notes, *(planned.notes if planned else ())),
        cures={
            **dict.fromkeys(marks.cures_accepted, "accepted"),
            **dict.fromkeys(marks.cures_refused, "refused"),
        },
    )


def _planned(
    recording: Recording, markers: Sequence[Marker], plan: Plan, marks: Marks
) -> Work[PlannedEvents]:
    """Find the trials as `mend` would; by markers alone where a plan is not yet complete enough for that."""
    facts = recording.facts
    try:
        setup, _ = bind_checked(facts, plan, marks)
        estimates = yield from fit(recording, setup)
        decision = decide(setup, estimates, plan, marks, read_study_log(recording, plan, marks))
    except InputError as error:
        trials = match_trials(markers, plan, facts.rate_hz, marks)
        in_blocks = with_blocks(trials.trials, markers, plan, facts.rate_hz)
        note = f"trials are told by markers alone, without the log, because mend would refuse this: {error}"
        return PlannedEvents(plan, replace(trials, trials=in_blocks), tuple(markers), (note,))
    return PlannedEvents(plan, decision.trials, decision.markers, decision.notes)


def write_events(summary: RecordingSummary, out: Path) -> None:
    """Write all markers as a table, whole or not at all.

    Parameters
    ----------
    summary : RecordingSummary
        With a plan, its roles, trials and labels are in the table.
    out : Path
        The table; one that is there is replaced.

    Raises
    ------
    UsageError
        There is no folder for it.
    """
    if not out.parent.is_dir():
        raise UsageError("is no folder", where=str(out.parent), todo="Make it first")
    markers = summary.facts.markers if summary.planned is None else summary.planned.markers
    write_text(out, event_table(markers, summary.facts.rate_hz, summary.planned))


def marks_of(plan_path: Path, facts: RecordingFacts, path: Path | None = None) -> Marks:
    """Read the marks that belong to a recording: those named, else those beside the plan, else none.

    Raises
    ------
    MarksError
        They cannot be used, or are those of another recording.
    """
    place = path or marks_path(plan_path, facts.stem)
    if path is None and not place.exists():
        return NO_MARKS
    marks_file = read_marks(place)
    with marks_file.source.located():
        check_files(marks_file.marks, facts.parts)
        check_samples(marks_file.marks, facts.n_samples)
    return marks_file.marks


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
