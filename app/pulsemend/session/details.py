"""Details for a fault report: versions and settings, without names, texts or paths of the user. No Qt."""

from __future__ import annotations

import platform
import sys
from collections import Counter
from collections.abc import Iterable
from dataclasses import fields
from enum import Enum

import pulsemend
from pulsemend.model.plan import Plan
from pulsemend.session.libraries import Library
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.session.stages import stage_states


def fault_details(
    session: Session, settings: Settings, libraries: Iterable[Library], screen: str = ""
) -> str:
    """Write what helps to understand a fault.

    Numbers and our own words only: no name of a study, recording, channel, code, label or rule, no path, and
    no message, because messages may hold such names.

    Parameters
    ----------
    session : Session
        The window's state.
    settings : Settings
        The user's.
    libraries : iterable of Library
        With their versions.
    screen : str
        What the window knows of the screen.

    Returns
    -------
    str
        Lines of plain text.
    """
    lines = [
        f"Pulsemend {pulsemend.__version__}",
        f"Python {platform.python_version()} on {sys.platform} {platform.machine()}",
        f"screen: {screen or 'unknown'}",
        f"colours: {settings.theme}, text {settings.text_percent} %",
        "",
        *_recording_lines(session),
        *_plan_lines(session.plan),
        *_marks_lines(session),
        *_state_lines(session),
        "",
        *(f"{one.name} {one.version}" for one in libraries),
    ]
    return "\n".join(lines) + "\n"


def _recording_lines(session: Session) -> list[str]:
    if session.recording is None:
        return ["recording: none"]
    facts = session.recording.facts
    types = Counter(str(channel.type) for channel in facts.channels)
    return [
        f"recording: {facts.format}, {facts.rate_hz:g} Hz, {facts.n_samples} samples, "
        f"{len(facts.segments)} segments",
        "channels: " + ", ".join(f"{count} {kind}" for kind, count in sorted(types.items())),
        f"markers: {len(facts.markers)} of {len({marker.code for marker in facts.markers})} codes",
    ]


def _plan_lines(plan: Plan | None) -> list[str]:
    if plan is None:
        return ["plan: none"]
    roles = Counter(str(marker.role) for marker in plan.markers)
    lines = [
        "roles: " + (", ".join(f"{count} {role}" for role, count in sorted(roles.items())) or "none"),
        f"slots: {len(plan.trial)}, rules: {len(plan.epochs.rule)}, length {plan.epochs.length_s:g} s",
    ]
    for part in (plan.pulses, plan.filter, plan.channels, plan.export):
        values = ", ".join(f"{one.name} {_plain(getattr(part, one.name))}" for one in fields(part))
        lines.append(f"{type(part).__name__.lower()}: {values}")
    return lines


def _marks_lines(session: Session) -> list[str]:
    marks = session.marks
    counts = ", ".join(
        f"{one.name} {len(value)}"
        for one in fields(marks)
        if isinstance(value := getattr(marks, one.name), tuple | dict)
    )
    return [f"marks: {counts}"]


def _state_lines(session: Session) -> list[str]:
    view = session.view
    states = ", ".join(f"{one.stage} {one.label}" for one in stage_states(session))
    levels = Counter(str(message.level) for message in session.messages)
    return [
        f"view: {view.width_s:g} s across, {view.row_uv:g} uV a row, {view.shown}, "
        f"{len(view.rows)} rows, {len(view.picked)} picked",
        f"stage: {session.stage}; {states}",
        f"revision {session.revision}, estimates of {session.estimates_revision}, "
        f"plan saved {session.plan_is_saved}, marks saved {session.marks_are_saved}",
        "messages: " + (", ".join(f"{count} {level}" for level, count in sorted(levels.items())) or "none"),
    ]


def _plain(value: object) -> str:
    """Write a number, flag or word of ours; of what the user wrote only how much there is."""
    if isinstance(value, Enum | bool):
        return str(value)
    if isinstance(value, int | float):
        return f"{value:g}"
    if value is None:
        return "none"
    if isinstance(value, str):
        return value if value in {"average", "as recorded", "10-05"} else ("a text" if value else "empty")
    if isinstance(value, tuple) and value and all(isinstance(part, Enum | int | float) for part in value):
        return " ".join(_plain(part) for part in value)
    return f"{len(value)} entries" if isinstance(value, tuple | dict) else type(value).__name__
