"""Named checks as values."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Literal


@dataclass(frozen=True)
class CheckItem:
    """One named check.

    Parameters
    ----------
    id : str
        For scripts.
    title : str
        What is checked.
    value, limit : str
        What was found, and what is asked for.
    passed : bool
    kind : {"integrity", "readiness"}
        Integrity decides about the exit code.
    detail : str
        Where, if not passed.
    """

    id: str
    title: str
    value: str
    limit: str
    passed: bool
    kind: Literal["integrity", "readiness"] = "integrity"
    detail: str = ""


@dataclass(frozen=True)
class CheckResult:
    """All checks of a set.

    Parameters
    ----------
    folder : Path
    items : tuple of CheckItem
    """

    folder: Path
    items: tuple[CheckItem, ...]

    @property
    def ok(self) -> bool:
        """Whether every check of integrity is passed."""
        return all(item.passed for item in self.items if item.kind == "integrity")

    @property
    def within_limits(self) -> bool:
        """Whether every item, of readiness too, is within its limit."""
        return all(item.passed for item in self.items)


def integrity_item(item_id: str, title: str, value: str, limit: str, problems: list[str]) -> CheckItem:
    """Make an item of integrity, passed if there is no problem; the first few problems are its detail.

    Parameters
    ----------
    item_id, title, value, limit : str
        As in `CheckItem`.
    problems : list of str
        What is wrong, one sentence each.
    """
    detail = "; ".join(problems[:3]) + (f"; and {len(problems) - 3} more" if len(problems) > 3 else "")
    return CheckItem(item_id, title, value, limit, not problems, detail=detail)
