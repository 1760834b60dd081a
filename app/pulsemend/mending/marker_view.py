"""What the markers of an open recording say: codes, faults, trials and the log, ready to be shown."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import PlanError
from pulsemend.mending.marker_log import NO_LOG_VIEW, LogView, log_view
from pulsemend.mending.prepare import Decision
from pulsemend.mending.study_log import StudyLog, read_study_log
from pulsemend.model.epochs import Trial, Trials, nearest_sample
from pulsemend.model.faults import MarkerFault
from pulsemend.model.marks import MarkerKey, Marks
from pulsemend.model.plan import Plan
from pulsemend.model.recording import Marker, Recording
from pulsemend.model.vocabulary import Role
from pulsemend.progress import Progress, Work
from pulsemend.trials.blocks import with_blocks
from pulsemend.trials.effective import effective_markers
from pulsemend.trials.faults import find_faults
from pulsemend.trials.logged import Logged, with_log
from pulsemend.trials.matching import match_trials
from pulsemend.trials.proposal import neighbours

FloatArray = NDArray[np.float64]

ABSENT = "not in this recording"
UNPLANNED = "not in the plan: counts as other"
BY_BITS = "role by its bits"

_MOVED_S = 0.5
"""A marker moved to a measured onset is looked for this far from there."""


@dataclass(frozen=True)
class CodeEvidence:
    """What a recording says of one code, whatever the plan says.

    Parameters
    ----------
    code : str
    times_s : float array, shape (count,)
        Where it is, in order.
    before, after : (str, float) or None
        The usual neighbour, and the median time to it in seconds.
    """

    code: str
    times_s: FloatArray = field(repr=False, compare=False)
    before: tuple[str, float] | None = None
    after: tuple[str, float] | None = None


@dataclass(frozen=True)
class CodeRow:
    """One code of recording or plan, with its role.

    Parameters
    ----------
    code : str
    role : Role
    labels : mapping of str to str
        Its own, and those of its bits.
    count : int
    first_s, last_s : float or None
        None for a code that never occurs.
    before, after : (str, float) or None
        The usual neighbour, and the median time to it in seconds.
    note : str
        `ABSENT`, `UNPLANNED`, `BY_BITS` or empty.
    """

    code: str
    role: Role
    labels: Mapping[str, str]
    count: int
    first_s: float | None
    last_s: float | None
    before: tuple[str, float] | None
    after: tuple[str, float] | None
    note: str


class TrialState(StrEnum):
    """What of a trial matters to its markers."""

    COMPLETE = "complete"
    INCOMPLETE = "incomplete"
    DOUBTFUL = "doubtful"
    SET_ASIDE = "set aside"


@dataclass(frozen=True)
class Spans:
    """Trials along the recording, in order of time.

    Parameters
    ----------
    start_s, stop_s : float array, shape (n_trials,)
        First and last marker.
    states : tuple of TrialState
    kinds : tuple of str
    numbers : tuple of int
    """

    start_s: FloatArray
    stop_s: FloatArray
    states: tuple[TrialState, ...]
    kinds: tuple[str, ...]
    numbers: tuple[int, ...]


@dataclass(frozen=True)
class Survey:
    """Everything the Markers stage shows.

    Parameters
    ----------
    plan : Plan or None
    marks : Marks
    rate_hz, duration_s : float
    raw : tuple of Marker
        The recording's markers.
    markers : tuple of Marker
        Those that count.
    evidence : tuple of CodeEvidence
        Of the markers that count, in order of first appearance.
    notes : tuple of str
        What was done to the recording's markers besides cures.
    faults : tuple of MarkerFault
    trials : Trials
        Empty without a plan.
    problem : str
        Why there can be no trials; empty otherwise.
    log : LogView
    decision : Decision or None
        What trials and log were taken from; None: from markers, plan and marks alone.
    """

    plan: Plan | None
    marks: Marks
    rate_hz: float
    duration_s: float
    raw: tuple[Marker, ...] = field(repr=False)
    markers: tuple[Marker, ...] = field(repr=False)
    evidence: tuple[CodeEvidence, ...] = field(repr=False)
    notes: tuple[str, ...]
    faults: tuple[MarkerFault, ...]
    trials: Trials = field(repr=False)
    problem: str
    log: LogView = field(repr=False)
    decision: Decision | None = field(repr=False)


def survey(
    recording: Recording,
    plan: Plan | None,
    marks: Marks,
    decision: Decision | None = None,
    earlier: Survey | None = None,
) -> Work[Survey]:
    """Look through a recording's markers; touches no sample.

    Parameters
    ----------
    recording : Recording
        Its facts, and the place of its log.
    plan : Plan or None
        As edited.
    marks : Marks
        As edited.
    decision : Decision or None
        What was decided under this plan and these marks, if anything could be.
    earlier : Survey or None
        Of the same recording: what has not changed is taken over.

    Yields
    ------
    Progress

    Returns
    -------
    Survey
    """
    facts = recording.facts
    yield Progress("looking through the markers", 0, 3)
    counting = effective_markers(facts.markers, marks, facts.rate_hz)
    markers = counting.markers if decision is None else decision.markers
    if earlier is not None and earlier.markers == markers:
        evidence = earlier.evidence
    else:
        evidence = code_evidence(markers, facts.rate_hz)
    if (
        earlier is not None
        and earlier.plan == plan
        and earlier.raw == facts.markers
        and earlier.marks.cures_accepted == marks.cures_accepted
    ):
        faults = earlier.faults
    else:
        faults = find_faults(facts.markers, facts.rate_hz, plan, marks.cures_accepted)
    yield Progress("looking through the markers", 1, 3)
    log = StudyLog() if plan is None else read_study_log(recording, plan, marks)
    trials, logged, problem = Trials(()), None, ""
    if decision is not None:
        trials, logged = decision.trials, decision.logged
    elif plan is not None:
        trials, logged, problem = _without_decision(markers, plan, marks, facts.rate_hz, log)
    yield Progress("looking through the markers", 2, 3)
    return Survey(
        plan=plan,
        marks=marks,
        rate_hz=facts.rate_hz,
        duration_s=facts.duration_s,
        raw=facts.markers,
        markers=markers,
        evidence=evidence,
        # Which cures are applied stands with the faults.
        notes=tuple(note for note in counting.notes if not note.startswith("cure of ")),
        faults=faults,
        trials=trials,
        problem=problem,
        log=NO_LOG_VIEW if plan is None else log_view(log, logged, plan, marks),
        decision=decision,
    )


def _without_decision(
    markers: Sequence[Marker], plan: Plan, marks: Marks, rate_hz: float, log: StudyLog
) -> tuple[Trials, Logged | None, str]:
    """Match trials and join the log although something else of the plan is still open."""
    try:
        trials = match_trials(markers, plan, rate_hz, marks)
    except PlanError as error:
        return Trials(()), None, str(error)
    logged = None
    if log.table is not None:
        logged = with_log(trials.trials, log.table, plan, marks, rate_hz)
        trials = replace(trials, trials=logged.trials)
    in_blocks = with_blocks(trials.trials, markers, plan, rate_hz)
    return replace(trials, trials=in_blocks), logged, ""


def code_evidence(markers: Sequence[Marker], rate_hz: float) -> tuple[CodeEvidence, ...]:
    """Say of every code where it is and what stands beside it.

    Parameters
    ----------
    markers : sequence of Marker
        In order of time.
    rate_hz : float
        Recorded rate.
    """
    before, after = neighbours(markers, rate_hz)
    times: dict[str, list[float]] = {}
    for marker in markers:
        times.setdefault(marker.code, []).append(marker.sample / rate_hz)
    return tuple(
        CodeEvidence(code, np.array(at), before.get(code), after.get(code)) for code, at in times.items()
    )


def code_rows(evidence: Sequence[CodeEvidence], plan: Plan | None) -> tuple[CodeRow, ...]:
    """Put the codes of recording and plan together.

    Parameters
    ----------
    evidence : sequence of CodeEvidence
        In order of first appearance.
    plan : Plan or None
        Without one, every code is undecided.

    Returns
    -------
    tuple of CodeRow
        Undecided ones first, those that the recording lacks last.
    """
    planned = {} if plan is None else {marker.code: marker for marker in plan.markers}
    rows = [_code_row(one, plan, one.code in planned) for one in evidence]
    recorded = {one.code for one in evidence}
    rows += [
        CodeRow(code, marker.role, marker.labels, 0, None, None, None, None, ABSENT)
        for code, marker in planned.items()
        if code not in recorded
    ]
    return tuple(sorted(rows, key=lambda row: (row.role is not Role.UNDECIDED, row.note == ABSENT)))


def _code_row(one: CodeEvidence, plan: Plan | None, is_planned: bool) -> CodeRow:
    note = ""
    if plan is not None and not is_planned:
        note = BY_BITS if plan.names(one.code) else UNPLANNED
    return CodeRow(
        code=one.code,
        role=Role.UNDECIDED if plan is None else plan.role_of(one.code),
        labels={} if plan is None else plan.labels_of(one.code),
        count=one.times_s.size,
        first_s=float(one.times_s[0]),
        last_s=float(one.times_s[-1]),
        before=one.before,
        after=one.after,
        note=note,
    )


def trial_state(trial: Trial) -> TrialState:
    """Tell what of a trial matters first."""
    if trial.set_aside:
        return TrialState.SET_ASIDE
    if trial.doubts:
        return TrialState.DOUBTFUL
    return TrialState.INCOMPLETE if trial.missing else TrialState.COMPLETE


def trial_spans(trials: Sequence[Trial], rate_hz: float) -> Spans:
    """Lay trials along the recording.

    Parameters
    ----------
    trials : sequence of Trial
        In order of time.
    rate_hz : float
        Recorded rate.
    """
    there = [trial for trial in trials if trial.markers]
    samples = [[marker.sample for marker in trial.markers.values()] for trial in there]
    return Spans(
        start_s=np.array([min(own) for own in samples], dtype=np.float64) / rate_hz,
        stop_s=np.array([max(own) for own in samples], dtype=np.float64) / rate_hz,
        states=tuple(trial_state(trial) for trial in there),
        kinds=tuple(trial.kind for trial in there),
        numbers=tuple(trial.number for trial in there),
    )


def raw_key(marker: Marker, raw: Sequence[Marker], rate_hz: float) -> MarkerKey | None:
    """Name a marker that counts as the recording has it: cures change codes, measured onsets times.

    Parameters
    ----------
    marker : Marker
        One that counts.
    raw : sequence of Marker
        The recording's.
    rate_hz : float
        Recorded rate.

    Returns
    -------
    MarkerKey or None
        None for a marker that the recording lacks.
    """
    at = nearest_sample(marker.sample)
    here = [one for one in raw if nearest_sample(one.sample) == at]
    same = [one for one in here if one.code == marker.code]
    if not here:
        near = [
            one
            for one in raw
            if one.code == marker.code and abs(one.sample - marker.sample) <= _MOVED_S * rate_hz
        ]
        here = sorted(near, key=lambda one: abs(one.sample - marker.sample))
    found = (same or here)[:1]
    return MarkerKey(nearest_sample(found[0].sample), found[0].code) if found else None
