"""When an action can be done: plain questions to the session."""

from __future__ import annotations

from pulsemend.session.session import Session, usual_rows


def always(_session: Session) -> bool:
    """Whatever is open."""
    return True


def has_recording(session: Session) -> bool:
    """Whether a recording is open."""
    return session.recording is not None


def has_plan(session: Session) -> bool:
    """Whether a plan is open."""
    return session.plan is not None


def has_both(session: Session) -> bool:
    """Whether a recording and a plan are open."""
    return has_recording(session) and has_plan(session)


def has_pulses(session: Session) -> bool:
    """Whether pulses of the open recording are known."""
    return has_recording(session) and bool(session.found.n_pulses)


def has_events(session: Session) -> bool:
    """Whether the recording has markers."""
    return session.recording is not None and bool(session.recording.facts.markers)


def has_picked(session: Session) -> bool:
    """Whether channels are picked."""
    return has_recording(session) and bool(session.view.picked)


def has_hidden(session: Session) -> bool:
    """Whether the recording has channels that are not shown."""
    return session.recording is not None and not set(usual_rows(session.recording.facts)) <= set(
        session.view.rows
    )


def has_pulse_selected(session: Session) -> bool:
    """Whether a pulse is selected."""
    return has_recording(session) and session.selected.pulse is not None


def has_stretch_selected(session: Session) -> bool:
    """Whether a stretch is selected."""
    return has_recording(session) and session.selected.stretch is not None


def has_selected(session: Session) -> bool:
    """Whether a pulse or a stretch is selected."""
    return has_pulse_selected(session) or has_stretch_selected(session)


def has_set(session: Session) -> bool:
    """Whether a set was written from this window."""
    return session.found.written is not None


def has_changed_plan(session: Session) -> bool:
    """Whether the plan has unsaved changes."""
    return has_plan(session) and not session.plan_is_saved


def can_undo(session: Session) -> bool:
    """Whether there is something to undo."""
    return bool(session.next_undo)


def can_redo(session: Session) -> bool:
    """Whether there is something to redo."""
    return bool(session.next_redo)
