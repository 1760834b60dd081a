"""Everything that is known of a set before its first sample: opened, learned, matched, decided."""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import nullcontext
from dataclasses import dataclass, replace
from pathlib import Path

from pulsemend.engine.bad_channels import channel_notes
from pulsemend.engine.chain import Chain
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import fit
from pulsemend.engine.onsets import OnsetShift, shifted
from pulsemend.engine.setup import Setup, bind
from pulsemend.errors import InputError, LogError, NoEpochs
from pulsemend.mending.decay_words import decay_words
from pulsemend.mending.gap_findings import gap_warnings
from pulsemend.mending.pulse_findings import pulse_warnings
from pulsemend.mending.study_log import NO_LOG, StudyLog, read_study_log
from pulsemend.model.epochs import Candidate, Trials, nearest_sample
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.marks_file import (
    check_files,
    check_fingerprint,
    check_samples,
    marks_text,
    read_marks,
    update_text,
)
from pulsemend.model.plan import Plan
from pulsemend.model.plan_checks import check_against_rate, check_channels, check_decided
from pulsemend.model.plan_file import PlanFile, read_plan
from pulsemend.model.recording import Channel, Fingerprint, Marker, Recording, RecordingFacts
from pulsemend.model.vocabulary import PulseState, Role
from pulsemend.progress import Work
from pulsemend.readers.fingerprint import fingerprint
from pulsemend.readers.names import standard_positions
from pulsemend.readers.opening import open_recording
from pulsemend.signal.gaps import window_to_samples
from pulsemend.trials.balance import balanced
from pulsemend.trials.baselines import baseline_warnings
from pulsemend.trials.blocks import with_blocks
from pulsemend.trials.candidates import GapSpan, Geometry, candidates, set_order, stale_decisions
from pulsemend.trials.effective import effective_markers
from pulsemend.trials.logged import Logged, needs_log, with_log
from pulsemend.trials.matching import match_trials
from pulsemend.trials.mirrors import MirrorGaps, mirror_gaps, mirror_warnings
from pulsemend.units import s_to_ms

_MOST_LISTED = 30


@dataclass(frozen=True)
class Request:
    """What is to be mended.

    Parameters
    ----------
    recording, plan : Path
    marks : Path or None
        None: ``marks/STEM.marks.toml`` beside the plan, if it is there.
    """

    recording: Path
    plan: Path
    marks: Path | None = None


@dataclass(frozen=True)
class Decision:
    """What becomes of every trial and epoch.

    Parameters
    ----------
    trials : Trials
    markers : tuple of Marker
        That count, moved to measured onsets.
    logged : Logged or None
        How the behavioural log was joined; None without a log.
    log_problem : str
        Why the log was not joined; empty if it was, or if there is none.
    geometry : Geometry
    ledger : tuple of Candidate
        All candidates, in order of trial, rule and piece.
    kept : tuple of Candidate
        In the order of the set.
    notes : tuple of str
        What became of log and onsets, one sentence each.
    warnings : tuple of str
        The notes among them.
    """

    trials: Trials
    markers: tuple[Marker, ...]
    logged: Logged | None
    log_problem: str
    geometry: Geometry
    ledger: tuple[Candidate, ...]
    kept: tuple[Candidate, ...]
    notes: tuple[str, ...]
    warnings: tuple[str, ...]


@dataclass(frozen=True)
class Prepared:
    """A recording, opened, learned and cut on paper: what `mend` writes and `--dry-run` shows.

    Parameters
    ----------
    recording : Recording
        Open; whoever asked for the preparation closes it.
    plan_file : PlanFile
    marks : Marks
    marks_text : str
        As they will be written into the set.
    fingerprint : Fingerprint
    estimates : Estimates
    chain : Chain
    decision : Decision
    log : StudyLog
    warnings : tuple of str
        One sentence each.
    """

    recording: Recording
    plan_file: PlanFile
    marks: Marks
    marks_text: str
    fingerprint: Fingerprint
    estimates: Estimates
    chain: Chain
    decision: Decision
    log: StudyLog
    warnings: tuple[str, ...]

    @property
    def trials(self) -> Trials:
        """The recording's trials."""
        return self.decision.trials

    @property
    def ledger(self) -> tuple[Candidate, ...]:
        """All candidates, in order of trial, rule and piece."""
        return self.decision.ledger

    @property
    def kept(self) -> tuple[Candidate, ...]:
        """Kept candidates, in the order of the set."""
        return self.decision.kept

    @property
    def mirrors(self) -> tuple[MirrorGaps | None, ...]:
        """Mirror gaps of every kept candidate; None where it has none. Drawn anew whenever asked for."""
        return mirror_gaps(self.kept, self.plan, self.decision.geometry)

    @property
    def plan(self) -> Plan:
        """The plan's values."""
        return self.plan_file.plan

    @property
    def setup(self) -> Setup:
        """The plan, bound to the recording."""
        return self.chain.setup


def marks_path(plan: Path, stem: str) -> Path:
    """Name the place of a recording's marks: with the study, because recordings may be read-only."""
    return plan.parent / "marks" / f"{stem}.marks.toml"


def prepare(request: Request) -> Work[Prepared]:
    """Open, identify, learn, match and decide.

    Parameters
    ----------
    request : Request
        Recording, plan and marks.

    Yields
    ------
    Progress

    Returns
    -------
    Prepared

    Raises
    ------
    InputError
        The recording, plan or marks cannot be used; or pulses are in the signal and none is known.
    """
    plan_file = read_plan(request.plan)
    recording = open_recording(request.recording)
    try:
        return (yield from _prepare(request, plan_file, recording))
    except BaseException:
        recording.close()
        raise


def _prepare(request: Request, plan_file: PlanFile, recording: Recording) -> Work[Prepared]:
    plan, facts = plan_file.plan, recording.facts
    path = request.marks or marks_path(request.plan, facts.stem)
    marks_file = read_marks(path) if request.marks is not None or path.exists() else None
    marks = NO_MARKS if marks_file is None else marks_file.marks
    with plan_file.source.located(), marks_file.source.located() if marks_file else nullcontext():
        setup, warnings = bind_checked(facts, plan, marks)
    if marks_file is not None:
        with marks_file.source.located():
            check_files(marks, facts.parts)
            check_samples(marks, facts.n_samples)
    identity = yield from fingerprint(recording)
    if marks_file is not None:
        with marks_file.source.located():
            check_fingerprint(marks, identity)
    identified = replace(marks, fingerprint=identity)
    estimates = yield from fit(recording, setup)
    need_known_pulses(estimates, facts)
    log = read_study_log(recording, plan, marks)
    decision = decide(setup, estimates, plan, marks, log)
    need_log(decision, plan)
    return Prepared(
        recording=recording,
        plan_file=plan_file,
        marks=marks,
        marks_text=update_text(marks_file.text, identified) if marks_file else marks_text(identified),
        fingerprint=identity,
        estimates=estimates,
        chain=Chain(recording, setup, estimates),
        decision=decision,
        log=log,
        warnings=(*plan_file.warnings, *warnings, *decision.warnings),
    )


def bind_checked(facts: RecordingFacts, plan: Plan, marks: Marks) -> tuple[Setup, tuple[str, ...]]:
    """Check plan and marks against a recording and bind them to it.

    Returns
    -------
    setup : Setup
    warnings : tuple of str

    Raises
    ------
    PlanError, MarksError, UnusableChannels
        Something is undecided, or does not fit the recording.
    """
    check_decided(plan)
    check_against_rate(plan, facts.rate_hz)
    warnings = check_channels(plan, marks, [channel.name for channel in facts.channels])
    counting = effective_markers(facts.markers, marks, facts.rate_hz)
    setup = bind(replace(with_positions(facts), markers=counting.markers), plan, marks)
    return setup, (*warnings, *counting.notes)


def decide(setup: Setup, estimates: Estimates, plan: Plan, marks: Marks, log: StudyLog = NO_LOG) -> Decision:
    """Match the trials, join the log and decide every candidate's fate; touches no sample.

    Raises
    ------
    PlanError
        The limits of the slots contradict each other.
    """
    facts = setup.facts
    markers = facts.markers
    for rule in plan.onset:
        own = [shift for shift in estimates.stimulus_onsets if shift.code in rule.codes]
        markers = shifted(markers, own, rule.use, facts.rate_hz)
    found = [pulse.sample for pulse in estimates.pulses if pulse.state is PulseState.FOUND]
    trials = match_trials(markers, plan, facts.rate_hz, _without_ghosts(marks, setup, estimates), found)
    logged = None
    if log.table is not None:
        logged = with_log(trials.trials, log.table, plan, marks, facts.rate_hz)
        trials = replace(trials, trials=logged.trials)
    in_blocks = with_blocks(trials.trials, markers, plan, facts.rate_hz)
    trials = replace(trials, trials=in_blocks, run=marks.run or run_of(facts.stem))
    geometry = lay_geometry(setup, estimates, marks)
    matched = balanced(
        candidates(trials, plan, geometry), plan.balance.by, plan.balance.choose, plan.balance.seed
    )
    ledger = matched.candidates
    kept = set_order(ledger, geometry)
    problem = log.problem or (logged.problem if logged else "")
    notes = (
        *([f"the log was not joined: {problem}"] if problem else []),
        *_log_notes(logged, log),
        *(_shift_note(shift) for shift in estimates.stimulus_onsets if shift.is_used),
        *channel_notes(setup, estimates.channels),
        *estimates.notes,
    )
    warnings = [
        *_trial_warnings(trials, facts, plan),
        *notes,
        *pulse_warnings(setup, estimates),
        *gap_warnings(setup, estimates),
        *decay_words(setup, estimates),
        *stale_decisions(trials, plan, geometry),
        *_stale_pulses(facts, plan, marks),
        *matched.warnings,
        *mirror_warnings(kept, plan, geometry),
        *baseline_warnings(kept, trials, plan, geometry),
    ]
    return Decision(
        trials=trials,
        markers=markers,
        logged=logged,
        log_problem=problem,
        geometry=geometry,
        ledger=ledger,
        kept=kept,
        notes=notes,
        warnings=tuple(warnings),
    )


def _without_ghosts(marks: Marks, setup: Setup, estimates: Estimates) -> Marks:
    """Remove pulse markers without a pulse, where the signal alone tells of pulses."""
    ghosts = (nearest_sample(sample) for sample in unmatched(setup, estimates))
    return replace(marks, pulses_removed=tuple(sorted({*marks.pulses_removed, *ghosts})))


def unmatched(setup: Setup, estimates: Estimates) -> tuple[float, ...]:
    """Pulse markers to which the signal shows no pulse, where it alone tells of pulses; recorded samples."""
    met = {pulse.marked for pulse in estimates.pulses}
    return tuple(sample for sample in setup.to_match if sample not in met)


def run_of(stem: str) -> str:
    """Give the label of a run that a file's name carries (``run-02``), or nothing."""
    return next((part.removeprefix("run-") for part in stem.split("_") if part.startswith("run-")), "")


def need_log(decision: Decision, plan: Plan) -> None:
    """Refuse a recording whose log is needed for labels, balance or practice, and was not joined.

    Raises
    ------
    LogError
    """
    if decision.log_problem and needs_log(plan):
        raise LogError(
            f"{decision.log_problem.rstrip('.')}. The plan takes labels or facts from it",
            todo="Name the right log in the marks (log.file), or take its columns out of the plan",
        )


def need_known_pulses(estimates: Estimates, facts: RecordingFacts) -> None:
    """Refuse a recording whose signal holds pulses while none is known.

    Raises
    ------
    InputError
    """
    if not estimates.unmarked:
        return
    first_s = estimates.unmarked[0] / facts.rate_hz
    raise InputError(
        f"no pulse is known, but {len(estimates.unmarked)} pulse-like events are in the signal, "
        f"the first at {first_s:.3f} s",
        where=facts.stem,
        todo='Give the pulse markers role = "pulse", set pulses.times = "signal" to take them from there, '
        'or pulses.times = "none" if these are no pulses',
    )


def with_positions(facts: RecordingFacts) -> RecordingFacts:
    """Give channels without a position of their own that of their name in the extended 10-20 system."""
    if all(channel.position_m is not None for channel in facts.channels):
        return facts
    known = standard_positions([channel.name for channel in facts.channels])
    placed = (
        replace(channel, position_m=channel.position_m or known.get(channel.name))
        for channel in facts.channels
    )
    return replace(facts, channels=tuple(placed))


def lay_geometry(setup: Setup, estimates: Estimates, marks: Marks) -> Geometry:
    """Put together where everything is that decides an epoch's fate."""
    windows_s = {window_s for group in setup.groups for window_s in group.windows_s}
    gaps = [
        GapSpan(*window_to_samples(onset, window_s, setup.facts.rate_hz), pulse=onset)
        for onset in estimates.onsets
        for window_s in windows_s
    ]
    return Geometry(
        recorded_hz=setup.facts.rate_hz,
        output_hz=setup.rate_hz,
        segments=setup.facts.segments,
        gaps=tuple(sorted(gaps)),
        onsets={pulse.marked: pulse.sample for pulse in estimates.pulses if pulse.marked is not None},
        bad_stretches=marks.bad_stretches,
        trials_excluded=marks.trials_excluded,
        epochs_left_out=marks.epochs_left_out,
    )


def need_epochs(prepared: Prepared) -> None:
    """Refuse a recording of which nothing is kept, with the commonest reason.

    Raises
    ------
    NoEpochs
    """
    if prepared.kept:
        return
    stem = prepared.setup.facts.stem
    if not prepared.ledger:
        raise NoEpochs(
            "no trial was found, so there is no epoch to keep",
            where=stem,
            todo="Compare the plan's roles and slots with what `pulsemend facts` lists",
        )
    fates = [candidate.fate for candidate in prepared.ledger]
    commonest = max(dict.fromkeys(fates), key=fates.count)
    example = next(c for c in prepared.ledger if c.fate is commonest)
    raise NoEpochs(
        f"none of {len(fates)} epochs is kept; {fates.count(commonest)} of them: {commonest.value}"
        + (f" ({example.detail})" if example.detail else ""),
        where=stem,
        todo="`pulsemend mend --dry-run` lists the reasons",
    )


def _trial_warnings(trials: Trials, facts: RecordingFacts, plan: Plan) -> list[str]:
    lines = []
    of_blocks = (*plan.blocks.codes, *plan.blocks.practice_codes)
    unnamed = {code: count for code, count in trials.unnamed.items() if code not in of_blocks}
    if unnamed:
        listed = _listed([f"{code} ({count})" for code, count in unnamed.items()])
        lines.append(f"codes that the plan does not name count as other: {listed}")
    present = {marker.code for marker in facts.markers}
    absent = dict.fromkeys([*trials.absent, *(code for code in of_blocks if code not in present)])
    if absent:
        lines.append(f"codes that the plan names but the recording lacks: {_listed([*absent])}")
    if trials.extra:
        first = trials.extra[0]
        at = f"{first.code} at {first.sample / facts.rate_hz:.3f} s"
        many = f"{len(trials.extra)} markers belong to no trial, the first is"
        lines.append(f"one marker belongs to no trial: {at}" if len(trials.extra) == 1 else f"{many} {at}")
    return lines


def _listed(texts: Sequence[str]) -> str:
    more = len(texts) - _MOST_LISTED
    return ", ".join(texts) if more <= 0 else f"{', '.join(texts[:_MOST_LISTED])} and {more} more"


def _log_notes(logged: Logged | None, log: StudyLog) -> list[str]:
    """Say what of a log was joined and what was not."""
    if logged is None or logged.join is None or logged.problem or log.table is None:
        return []
    return [
        *(f"{log.table.name}: {note}" for note in log.table.notes),
        " ".join(line.strip() for line in logged.join.words.splitlines()),
    ]


def _shift_note(shift: OnsetShift) -> str:
    """Say by how much the markers of a code were moved."""
    moved = 0.0 if shift.shift_s is None else s_to_ms(shift.shift_s)
    spread = "" if shift.spread_s is None else f", spread {s_to_ms(shift.spread_s):.2f} ms"
    return (
        f'{shift.channel} shows the onset of "{shift.code}" {moved:+.1f} ms from its marker{spread}, '
        f"at {shift.n_found} of {shift.n_markers}: markers are moved"
    )


def _stale_pulses(facts: RecordingFacts, plan: Plan, marks: Marks) -> list[str]:
    """Pulses moved or removed by hand where no marker is a pulse: plan or marks have changed since."""
    at = {nearest_sample(one.sample) for one in facts.markers if plan.role_of(one.code) is Role.PULSE}
    named = [("moved", pulse.sample) for pulse in marks.pulses_moved]
    if not plan.seeks_pulses:  # else it was perhaps one that had been found in the signal
        named += [("removed", sample) for sample in marks.pulses_removed]
    return [
        f"marks: the pulse at sample {sample} is {what}, but no pulse marker is there"
        for what, sample in named
        if sample not in at
    ]


def marked_only(estimates: Estimates) -> int:
    """Count the pulses that have a marker but no artifact."""
    return sum(pulse.state is PulseState.MARKED_ONLY for pulse in estimates.pulses)


def set_channels(setup: Setup) -> tuple[Channel, ...]:
    """Output channels in order: the used ones, then the recorded reference if it is put back."""
    if not setup.restored:
        return setup.channels
    eeg = setup.channels[int(setup.eeg.argmax())].type
    known = with_positions(replace(setup.facts, channels=(Channel(setup.restored, eeg),)))
    return (*setup.channels, *known.channels)
