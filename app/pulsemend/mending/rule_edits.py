"""Changes of a plan's epoch rules, as pure functions from plan to plan."""

from __future__ import annotations

import re
from collections.abc import Collection, Mapping
from dataclasses import replace

from pulsemend.errors import PlanError
from pulsemend.model.plan import Balance, EpochRule, Plan
from pulsemend.model.plan_checks import check_against_rate, need_rules, need_slots
from pulsemend.model.trial_kinds import slot_names

_PARTS = re.compile(r'(?:"[^"]*"|[^,;\n"]|")+')
"""Labels, parted by commas, semicolons or lines outside quotes."""


def with_length(plan: Plan, length_s: float) -> Plan:
    """Give the set another length.

    Parameters
    ----------
    plan : Plan
        The plan before.
    length_s : float
        Seconds.
    """
    return replace(plan, epochs=replace(plan.epochs, length_s=length_s))


def with_balance(plan: Plan, balance: Balance) -> Plan:
    """Give the plan another balance.

    Parameters
    ----------
    plan : Plan
        The plan before.
    balance : Balance
        The new one.
    """
    return replace(plan, balance=balance)


def with_rule(plan: Plan, place: int, rule: EpochRule) -> Plan:
    """Put a rule in the place of another.

    Parameters
    ----------
    plan : Plan
        The plan before.
    place : int
        From 0.
    rule : EpochRule
        The new one.
    """
    rules = list(plan.epochs.rule)
    rules[place] = rule
    return _with_rules(plan, rules)


def with_new_rule(plan: Plan, place: int) -> Plan:
    """Add a rule that starts at the first slot, before the given place.

    Parameters
    ----------
    plan : Plan
        The plan before.
    place : int
        From 0; the number of rules for the end.

    Raises
    ------
    PlanError
        The plan has no slot that a rule could start at.
    """
    need_slots(plan)
    taken = [rule.name for rule in plan.epochs.rule]
    return _with_inserted(plan, place, EpochRule(free_name("epoch", taken), slot_names(plan)[0], 0.0))


def with_copy(plan: Plan, place: int) -> Plan:
    """Add a copy of a rule behind it, under a free name.

    Parameters
    ----------
    plan : Plan
        The plan before.
    place : int
        From 0.
    """
    rule = plan.epochs.rule[place]
    taken = [other.name for other in plan.epochs.rule]
    stem = re.sub(r"\d+$", "", rule.name) or rule.name
    return _with_inserted(plan, place + 1, replace(rule, name=free_name(stem, taken)))


def without_rule(plan: Plan, place: int) -> Plan:
    """Remove a rule.

    Parameters
    ----------
    plan : Plan
        The plan before.
    place : int
        From 0.

    Raises
    ------
    PlanError
        It is the last one.
    """
    new = _with_rules(plan, [rule for i, rule in enumerate(plan.epochs.rule) if i != place])
    need_rules(new)
    return new


def with_moved_rule(plan: Plan, place: int, to: int) -> Plan:
    """Move a rule to another place; nothing changes beyond either end.

    Parameters
    ----------
    plan : Plan
        The plan before.
    place, to : int
        From 0.
    """
    rules = list(plan.epochs.rule)
    if not 0 <= to < len(rules):
        return plan
    rules.insert(to, rules.pop(place))
    return _with_rules(plan, rules)


def free_name(stem: str, taken: Collection[str]) -> str:
    """Find the first name "stem1", "stem2", ... that is free.

    Parameters
    ----------
    stem : str
        What it begins with.
    taken : collection of str
        Names in use.
    """
    number = 1
    while f"{stem}{number}" in taken:
        number += 1
    return f"{stem}{number}"


def labels_text(labels: Mapping[str, str]) -> str:
    """Write labels for a person: ``cued = cue1.item, side = other(cue1.item), order = "first, or so"``.

    Parameters
    ----------
    labels : mapping of str to str
        Source by column.
    """
    return ", ".join(f"{column} = {_quoted(source)}" for column, source in labels.items())


def labels_from_text(text: str) -> dict[str, str]:
    """Read labels as a person writes them, parted by commas, semicolons or lines.

    Parameters
    ----------
    text : str
        See `labels_text`; a source in double quotes may hold what parts labels otherwise.

    Returns
    -------
    dict of str to str
        Source by column; whether they exist is for the plan's own checks.

    Raises
    ------
    PlanError
        A part is no pair, or a column stands there twice.
    """
    labels: dict[str, str] = {}
    for part in _PARTS.findall(text):
        if not part.strip():
            continue
        column, sign, source = (piece.strip() for piece in part.partition("="))
        if len(source) > 1 and source[0] == source[-1] == '"':
            source = source[1:-1]
        if not (column and sign and source) or '"' in column + source:
            raise PlanError(
                "labels",
                "each label needs a column and where it comes from",
                allowed="column = slot.label, other(slot.label), log.column, or a word; parted by commas",
                received=part.strip(),
            )
        if column in labels:
            raise PlanError("labels", "names a column twice", received=column)
        labels[column] = source
    return labels


def _quoted(source: str) -> str:
    return f'"{source}"' if re.search(r"[,;\n]", source) or source != source.strip() else source


def check_epochs(plan: Plan, recorded_rate_hz: float) -> None:
    """Refuse epochs that are no whole number of samples at a recording's rate.

    A plan whose rate is "as recorded" can be checked only once there is a recording. What is wrong elsewhere
    in the plan is no reason to refuse a change of its epochs.

    Parameters
    ----------
    plan : Plan
        The new plan.
    recorded_rate_hz : float
        The open recording's rate.

    Raises
    ------
    PlanError
        A length or a start.
    """
    try:
        check_against_rate(plan, recorded_rate_hz)
    except PlanError as error:
        if error.key.startswith("epochs."):
            raise


def _with_inserted(plan: Plan, place: int, rule: EpochRule) -> Plan:
    rules = list(plan.epochs.rule)
    rules.insert(place, rule)
    return _with_rules(plan, rules)


def _with_rules(plan: Plan, rules: list[EpochRule]) -> Plan:
    return replace(plan, epochs=replace(plan.epochs, rule=tuple(rules)))
