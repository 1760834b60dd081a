"""The words for what became of a check; one green word for a whole set there is none."""

from __future__ import annotations

from pulsemend.mending.check import CheckItem

HOLDS, LOOK_AT, BROKEN = "holds", "LOOK AT", "BROKEN"


def verdict(item: CheckItem) -> str:
    """Say in one word what became of a check.

    Parameters
    ----------
    item : CheckItem
        One check.

    Returns
    -------
    str
        `HOLDS`; `LOOK_AT` for readiness beyond its limit; `BROKEN` for integrity.
    """
    if item.passed:
        return HOLDS
    return LOOK_AT if item.kind == "readiness" else BROKEN


def problem_of(item: CheckItem) -> str:
    """Say in one sentence what a check that does not hold found.

    Parameters
    ----------
    item : CheckItem
        One check.
    """
    detail = f" ({item.detail})" if item.detail else ""
    return f"{verdict(item)}: {item.title}: {item.value}; limit: {item.limit}{detail}."
