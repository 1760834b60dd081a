"""The stages of the rail with their states, each computed by a plain function of the session."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from enum import StrEnum

from pulsemend.model.vocabulary import PulseTimes, Role
from pulsemend.session.found import Stage
from pulsemend.session.session import Session

NOT_YET: Mapping[Stage, str] = {
    Stage.REVIEW: (
        "Here every epoch will be a bead with its fate, to be compared before and after, and kept or left "
        "out by hand. Until then the ledger of a written set names the fate of each."
    ),
    Stage.ROSTER: (
        "Here all recordings of a study will be listed, run, stopped and resumed. Until then recordings are "
        "mended one at a time."
    ),
}
"""What will be in the stages whose time has not come."""


class State(StrEnum):
    """How far a stage is. The rail shows it by word and shape, never by colour alone."""

    UNTOUCHED = "untouched"
    ATTENTION = "needs attention"
    DONE = "done"


@dataclass(frozen=True)
class StageState:
    """State of one stage.

    Parameters
    ----------
    stage : Stage
    state : State
    count : int
        Things that need attention; 0 otherwise.
    words : str
        One or a few sentences: why.
    """

    stage: Stage
    state: State
    words: str
    count: int = 0

    @property
    def label(self) -> str:
        """State in words, for the rail and for screen readers."""
        if self.state is not State.ATTENTION:
            return str(self.state)
        return f"{self.count} {'needs' if self.count == 1 else 'need'} attention"


def stage_states(session: Session) -> tuple[StageState, ...]:
    """States of all stages, in the order of the rail.

    Parameters
    ----------
    session : Session
        The window's.
    """
    return tuple(_STATE_OF[stage](session) for stage in Stage)


def recording_state(session: Session) -> StageState:
    """Done when a recording is open and nothing keeps plan, marks and recording from going together.

    Parameters
    ----------
    session : Session
        The window's.
    """
    if session.recording is None:
        return StageState(Stage.RECORDING, State.UNTOUCHED, "No recording is open.")
    facts = session.recording.facts
    problems = session.found.problems
    if problems and not _has_open_ends(session):
        return _attention(Stage.RECORDING, problems)
    n_bad = len(session.marks.bad)
    words = f"{facts.stem}: {len(facts.channels)} channels, {facts.duration_s:.0f} s at {facts.rate_hz:g} Hz."
    return StageState(Stage.RECORDING, State.DONE, f"{words} {n_bad} marked bad by hand." if n_bad else words)


def _has_open_ends(session: Session) -> bool:
    """Whether other stages already say what of the plan is undecided."""
    plan = session.plan
    if plan is None:
        return False
    no_gap = plan.pulses.times is not PulseTimes.NONE and plan.pulses.window_ms is None
    no_trials = not plan.trial or not plan.epochs.rule
    return no_gap or no_trials or any(marker.role is Role.UNDECIDED for marker in plan.markers)


def markers_state(session: Session) -> StageState:
    """Needs attention for every open end: roles, absent codes, slots, cures, doubtful trials, the log.

    Parameters
    ----------
    session : Session
        The window's.
    """
    plan = session.plan
    if plan is None or session.recording is None:
        return _waiting(session, Stage.MARKERS)
    found, marks = session.found.markers, session.marks
    recorded = found.codes
    if recorded is None:
        recorded = frozenset(marker.code for marker in session.recording.facts.markers)
    problems = [
        f"Code {marker.code!r} has no role yet." for marker in plan.markers if marker.role is Role.UNDECIDED
    ]
    problems += [
        f"Code {marker.code!r} is in the plan, but not in the recording."
        for marker in plan.markers
        if marker.code not in recorded
    ]
    if not plan.trial:
        problems.append("The plan has no slot yet: its file has to name the markers of a trial.")
    decided = {*marks.cures_accepted, *marks.cures_refused}
    problems += [f"A cure is open: {key}." for key in found.curable if key not in decided]
    count = len(problems) + found.n_doubtful
    if found.n_doubtful:
        problems.append(f"{found.n_doubtful} trials have more than one explanation.")
    if found.log_problem:
        problems.append("The log was not joined.")
        count += 1
    if problems:
        return StageState(Stage.MARKERS, State.ATTENTION, " ".join(problems), count)
    others = sorted(code for code in recorded if not plan.names(code))
    words = f"All {len(plan.markers)} codes of the plan have a role."
    if others:
        words += f" Not in the plan, and so of role other: {', '.join(others)}."
    return StageState(Stage.MARKERS, State.DONE, words)


def pulses_state(session: Session) -> StageState:
    """Done when pulses are known and have a gap, or the plan says that there are none.

    Parameters
    ----------
    session : Session
        The window's.
    """
    plan = session.plan
    if plan is None or session.recording is None:
        return _waiting(session, Stage.PULSES)
    if plan.pulses.times is PulseTimes.NONE:
        return StageState(Stage.PULSES, State.DONE, "The plan says that there are no pulses.")
    if plan.pulses.window_ms is None:
        return _attention(Stage.PULSES, ["The gap around every pulse is not decided yet."])
    n_pulses, n_missing = session.found.n_pulses, session.found.n_not_in_signal
    if n_pulses is None:
        return StageState(Stage.PULSES, State.UNTOUCHED, "Pulses were not looked for yet.")
    if n_pulses == 0:
        return _attention(Stage.PULSES, ["No pulse is known, although the plan expects some."])
    if n_missing:
        words = f"{n_missing} of {n_pulses} pulses: marked, but not in the signal."
        return StageState(Stage.PULSES, State.ATTENTION, words, n_missing)
    start_ms, stop_ms = plan.pulses.window_ms
    words = f"{n_pulses} pulses, gap from {start_ms:g} to {stop_ms:g} ms."
    return StageState(Stage.PULSES, State.DONE, words)


def epochs_state(session: Session) -> StageState:
    """Needs attention for every rule that keeps no epoch, and without any rule.

    Parameters
    ----------
    session : Session
        The window's.
    """
    if session.plan is None or session.recording is None:
        return _waiting(session, Stage.EPOCHS)
    if not session.plan.epochs.rule:
        return _attention(Stage.EPOCHS, ["The plan has no epoch rule yet."])
    kept = session.found.kept
    if kept is None:
        return StageState(Stage.EPOCHS, State.UNTOUCHED, "Epochs were not counted yet.")
    problems = [f"Rule {name!r} keeps no epoch." for name, count in kept if count == 0]
    if problems:
        return _attention(Stage.EPOCHS, problems)
    counts = ", ".join(f"{name} {count}" for name, count in kept)
    return StageState(Stage.EPOCHS, State.DONE, f"Epochs kept: {counts}.")


def export_state(session: Session) -> StageState:
    """Done when a set was written from what the window shows and its check found nothing.

    Parameters
    ----------
    session : Session
        The window's.
    """
    written = session.found.written
    if written is None:
        return StageState(Stage.EXPORT, State.UNTOUCHED, "No set was written yet.")
    problems = list(written.problems)
    if written.revision != session.revision:
        problems.append("Plan or marks changed since the set was written.")
    if problems:
        return _attention(Stage.EXPORT, problems)
    return StageState(Stage.EXPORT, State.DONE, "The set was written, and its check found nothing to report.")


def review_state(_session: Session) -> StageState:
    """Untouched in this version."""
    return StageState(Stage.REVIEW, State.UNTOUCHED, NOT_YET[Stage.REVIEW])


def roster_state(_session: Session) -> StageState:
    """Untouched in this version."""
    return StageState(Stage.ROSTER, State.UNTOUCHED, NOT_YET[Stage.ROSTER])


def _attention(stage: Stage, problems: list[str] | tuple[str, ...]) -> StageState:
    return StageState(stage, State.ATTENTION, " ".join(problems), len(problems))


def _waiting(session: Session, stage: Stage) -> StageState:
    missing = "recording" if session.recording is None else "plan"
    words = f"Open a {missing} first."
    return StageState(stage, State.UNTOUCHED, f"{words} {NOT_YET[stage]}" if stage in NOT_YET else words)


_STATE_OF: Mapping[Stage, Callable[[Session], StageState]] = {
    Stage.RECORDING: recording_state,
    Stage.MARKERS: markers_state,
    Stage.PULSES: pulses_state,
    Stage.EPOCHS: epochs_state,
    Stage.REVIEW: review_state,
    Stage.EXPORT: export_state,
    Stage.ROSTER: roster_state,
}
