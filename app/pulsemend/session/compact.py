"""Plan and marks as compact TOML: what an edit is checked by, and what the journal holds.

The texts are valid files, so the readers of `model` judge an edit exactly as they would judge the saved file.
They have no comments and no layout, which makes them several times faster to write than files for people.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from enum import Enum
from numbers import Integral, Real

from pulsemend.errors import MarksError, PlanError, SettingError
from pulsemend.model.marks import Marks
from pulsemend.model.marks_file import marks_tree, parse_marks
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan, plan_tree


def compact_plan(plan: Plan) -> str:
    """Write a plan as compact TOML.

    Parameters
    ----------
    plan : Plan
        What to write.
    """
    return _text(plan_tree(plan))


def compact_marks(marks: Marks) -> str:
    """Write marks as compact TOML.

    Parameters
    ----------
    marks : Marks
        What to write.
    """
    return _text(marks_tree(marks))


def checked_plan(text: str) -> Plan:
    """Read a compact plan, as strictly as a file.

    Parameters
    ----------
    text : str
        What `compact_plan` wrote.

    Returns
    -------
    Plan
        The values that reading the saved file would give.

    Raises
    ------
    PlanError
        Names the key; lines of the compact text would mean nothing to anybody.
    """
    try:
        return parse_plan(text).plan
    except PlanError as error:
        raise _without_line(error) from error


def checked_marks(text: str) -> Marks:
    """Read compact marks, as strictly as a file.

    Parameters
    ----------
    text : str
        What `compact_marks` wrote.

    Returns
    -------
    Marks
        The values that reading the saved file would give.

    Raises
    ------
    MarksError
        Names the key.
    """
    try:
        return parse_marks(text).marks
    except MarksError as error:
        raise _without_line(error) from error


def _without_line(error: SettingError) -> SettingError:
    return type(error)(error.key, error.problem, allowed=error.allowed, received=error.received)


def _text(tree: Mapping[str, object]) -> str:
    return "".join(
        f"{_quoted(name)} = {_value(value)}\n" for name, value in tree.items() if value is not None
    )


def _value(value: object) -> str:
    if isinstance(value, Enum):
        value = value.value
    if isinstance(value, str):
        return _quoted(value)
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, Mapping):
        inner = (f"{_quoted(name)} = {_value(one)}" for name, one in value.items() if one is not None)
        return "{" + ", ".join(inner) + "}"
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_value(one) for one in value) + "]"
    # Values from a drag may be numpy's, whose repr is no TOML.
    if isinstance(value, Integral):
        return str(int(value))
    if isinstance(value, Real):
        return repr(float(value))
    raise TypeError(f"{type(value).__name__} is no value of a plan or of marks")


def _quoted(text: str) -> str:
    # JSON's escapes are TOML's too; the delete sign is the one that only TOML wants escaped.
    return json.dumps(str(text), ensure_ascii=False).replace("\x7f", "\\u007f")
