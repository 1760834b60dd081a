"""Epochs per condition, what a balance would leave out, and how kept and left-out ones differ."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, replace

from pulsemend.mending.prepare import Decision
from pulsemend.mending.selection_view import decision_differences
from pulsemend.model.epochs import NOT_AVAILABLE, Candidate
from pulsemend.model.label_columns import rule_columns
from pulsemend.model.plan import Plan
from pulsemend.model.vocabulary import Fate
from pulsemend.progress import Progress, Work
from pulsemend.trials.balance import ConditionCount, balanced, condition_counts
from pulsemend.trials.selection import MOST_VALUES, SelectionDifference


@dataclass(frozen=True)
class ConditionView:
    """Epochs per condition.

    Parameters
    ----------
    columns : tuple of str
        Label columns that can make conditions.
    picked : tuple of str
        Those that make them here.
    counts : tuple of ConditionCount
    left_out : int
        Epochs that the plan's own balance leaves out.
    would : int
        Epochs that a balance by the picked columns would leave out.
    """

    columns: tuple[str, ...]
    picked: tuple[str, ...]
    counts: tuple[ConditionCount, ...]
    left_out: int
    would: int


def condition_columns(ledger: Sequence[Candidate]) -> tuple[str, ...]:
    """Label columns with two values or more, but not as many as free text has.

    Parameters
    ----------
    ledger : sequence of Candidate
        Kept and left out.
    """
    values: defaultdict[str, set[str]] = defaultdict(set)
    for one in ledger:
        for column, value in one.labels.items():
            if value != NOT_AVAILABLE:
                values[column].add(value)
    return tuple(column for column, known in values.items() if 2 <= len(known) <= MOST_VALUES)


def usual_columns(plan: Plan, columns: Sequence[str]) -> tuple[str, ...]:
    """Columns that make the conditions unless somebody picks others: of the balance, else of the rules.

    Parameters
    ----------
    plan : Plan
        Balance and rules.
    columns : sequence of str
        Those there are.
    """
    by = tuple(column for column in plan.balance.by if column in columns)
    return by or tuple(column for column in rule_columns(plan) if column in columns)[:1]


def condition_view(
    decision: Decision, plan: Plan, picked: Sequence[str] | None = None
) -> Work[ConditionView]:
    """Count epochs per condition.

    Parameters
    ----------
    decision : Decision
        Candidates.
    plan : Plan
        The plan that was decided with.
    picked : sequence of str or None
        Label columns that make the conditions; those that do not exist play no part. None: the usual ones.

    Yields
    ------
    Progress

    Returns
    -------
    ConditionView
    """
    yield Progress("counting conditions", 0, 3)
    columns = condition_columns(decision.ledger)
    chosen = (
        usual_columns(plan, columns) if picked is None else tuple(one for one in columns if one in picked)
    )
    yield Progress("counting conditions", 1, 3)
    counts = condition_counts(decision.ledger, chosen)
    yield Progress("counting conditions", 2, 3)
    free = [replace(one, fate=Fate.KEPT) if one.fate is Fate.BALANCE else one for one in decision.ledger]
    matched = balanced(free, chosen, plan.balance.choose, plan.balance.seed).candidates
    return ConditionView(
        columns=columns,
        picked=chosen,
        counts=counts,
        left_out=sum(one.fate is Fate.BALANCE for one in decision.ledger),
        would=sum(one.fate is Fate.BALANCE for one in matched),
    )


def rule_differences(decision: Decision, plan: Plan, place: int) -> Work[tuple[SelectionDifference, ...]]:
    """Compare kept and left-out epochs of one rule, before balance.

    Parameters
    ----------
    decision : Decision
        Candidates and trials.
    plan : Plan
        The plan that was decided with.
    place : int
        Place of the rule, from 0.

    Yields
    ------
    Progress

    Returns
    -------
    tuple of NumberDifference or ShareDifference
    """
    yield Progress("comparing kept and left-out epochs", 0, 1)
    own = tuple(one for one in decision.ledger if one.rule_index == place)
    return decision_differences(replace(decision, ledger=own), plan)
