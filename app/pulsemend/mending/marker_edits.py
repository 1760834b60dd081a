"""Changes of plan and marks that the Markers stage makes, as pure functions."""

from __future__ import annotations

import re
from collections.abc import Collection, Mapping
from dataclasses import replace
from enum import StrEnum
from pathlib import Path

from pulsemend.errors import PlanError
from pulsemend.model.marks import MarkerKey, Marks
from pulsemend.model.plan import MarkerPlan, Plan
from pulsemend.model.vocabulary import Role

LABELS_ALLOWED = "name = value, name = value"

_PART = re.compile(r'\s*([^=,"]+?)\s*=\s*(?:"([^"]*)"|([^=,"]*?))\s*(?:,|$)')


class Verdict(StrEnum):
    """What was decided about a fault's cure."""

    OPEN = "open"
    ACCEPTED = "accepted"
    REFUSED = "refused"


def with_role(plan: Plan, codes: Collection[str], role: Role) -> Plan:
    """Give codes a role; those that the plan does not name get a table of their own.

    Parameters
    ----------
    plan : Plan
        The plan before.
    codes : collection of str
        As the recording has them.
    role : Role
        The new one.
    """
    named = {marker.code for marker in plan.markers}
    markers = [replace(one, role=role) if one.code in codes else one for one in plan.markers]
    markers += [MarkerPlan(code, role) for code in codes if code not in named]
    return replace(plan, markers=tuple(markers))


def with_labels(plan: Plan, code: str, labels: Mapping[str, str]) -> Plan:
    """Give a code other labels of its own; those of its bits stay.

    Parameters
    ----------
    plan : Plan
        The plan before.
    code : str
        As the recording has it.
    labels : mapping of str to str
        All of its own.
    """
    if all(marker.code != code for marker in plan.markers):
        plan = with_role(plan, [code], plan.role_of(code))
    markers = (replace(one, labels=dict(labels)) if one.code == code else one for one in plan.markers)
    return replace(plan, markers=tuple(markers))


def without_codes(plan: Plan, codes: Collection[str]) -> Plan:
    """Take codes out of the plan: where they occur, they count as other."""
    return replace(plan, markers=tuple(one for one in plan.markers if one.code not in codes))


def own_labels(plan: Plan, code: str) -> Mapping[str, str]:
    """Labels that the plan gives to a code itself."""
    return next((marker.labels for marker in plan.markers if marker.code == code), {})


def labels_text(labels: Mapping[str, str]) -> str:
    """Write labels as one line, as `parse_labels` reads them."""
    return ", ".join(f"{name} = {_quoted(value)}" for name, value in labels.items())


def parse_labels(text: str) -> dict[str, str]:
    """Read labels from one line.

    Parameters
    ----------
    text : str
        ``name = value, name = value``; a value with a comma or an equals sign stands in double quotes.

    Raises
    ------
    PlanError
        It is no such line; says from where on.
    """
    labels: dict[str, str] = {}
    place = 0
    while place < len(text.rstrip()):
        part = _PART.match(text, place)
        if part is None:
            raise PlanError("labels", "cannot be read", allowed=LABELS_ALLOWED, received=text[place:].strip())
        name = part[1].strip()
        value = part[2] if part[2] is not None else part[3]
        if not value:
            raise PlanError("labels", f"{name} has no value", allowed=LABELS_ALLOWED, received=text.strip())
        if name in labels:
            raise PlanError("labels", f"{name} stands there twice", received=text.strip())
        labels[name] = value
        place = part.end()
    return labels


def _quoted(value: str) -> str:
    return f'"{value}"' if re.search(r"[,=]", value) or value != value.strip() else value


def verdict_on(marks: Marks, key: str) -> Verdict:
    """Tell what the marks say about a fault's cure."""
    if key in marks.cures_accepted:
        return Verdict.ACCEPTED
    return Verdict.REFUSED if key in marks.cures_refused else Verdict.OPEN


def with_verdict(marks: Marks, key: str, verdict: Verdict) -> Marks:
    """Decide about a fault's cure; `Verdict.OPEN` takes a decision back."""
    accepted = [one for one in marks.cures_accepted if one != key]
    refused = [one for one in marks.cures_refused if one != key]
    if verdict is Verdict.ACCEPTED:
        accepted.append(key)
    elif verdict is Verdict.REFUSED:
        refused.append(key)
    return replace(marks, cures_accepted=tuple(accepted), cures_refused=tuple(refused))


def with_ignored(marks: Marks, keys: Collection[MarkerKey]) -> Marks:
    """Let markers count for nothing."""
    known = marks.markers_ignored
    new = sorted(set(keys) - set(known), key=lambda key: (key.sample, key.code))
    return replace(marks, markers_ignored=(*known, *new))


def without_ignored(marks: Marks, keys: Collection[MarkerKey]) -> Marks:
    """Let markers count again."""
    return replace(marks, markers_ignored=tuple(key for key in marks.markers_ignored if key not in keys))


def with_rows_excluded(marks: Marks, rows: Collection[int]) -> Marks:
    """Join rows of the log no more."""
    return replace(marks, log_rows_excluded=tuple(sorted({*marks.log_rows_excluded, *rows})))


def without_rows_excluded(marks: Marks, rows: Collection[int]) -> Marks:
    """Join rows of the log again."""
    return replace(marks, log_rows_excluded=tuple(row for row in marks.log_rows_excluded if row not in rows))


def with_log_file(marks: Marks, path: Path | None, recording: Path) -> Marks:
    """Name another log.

    Parameters
    ----------
    marks : Marks
        The marks before.
    path : Path or None
        None: the one that the plan names.
    recording : Path
        A log in its folder is named by its name alone, so that both can move together.
    """
    if path is None:
        return replace(marks, log_file="")
    beside = path.parent.resolve() == recording.parent.resolve()
    return replace(marks, log_file=path.name if beside else str(path))
