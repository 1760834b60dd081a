"""Epochs per condition, and equally many of them: matched subsets within every rule."""

from __future__ import annotations

import hashlib
import json
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from pulsemend.model.epochs import NOT_AVAILABLE, Candidate
from pulsemend.model.vocabulary import Choose, Fate

Values = tuple[str, ...]
"""Label values of some columns, in the order of the columns: one condition."""


@dataclass(frozen=True)
class Balanced:
    """Candidates after balance.

    Parameters
    ----------
    candidates : tuple of Candidate
        As they came, in the same order; only fate and detail of those left out for balance differ.
    warnings : tuple of str
        One sentence for each rule in which not all conditions could be matched.
    """

    candidates: tuple[Candidate, ...]
    warnings: tuple[str, ...] = ()


@dataclass(frozen=True)
class ConditionCount:
    """Epochs of one condition in one rule.

    Parameters
    ----------
    rule : str
    values : tuple of str
        Label values of the columns asked for, "n/a" where there is no label.
    kept, total : int
        Kept candidates, and all candidates.
    """

    rule: str
    values: Values
    kept: int
    total: int


def balanced(found: Sequence[Candidate], by: Sequence[str], choose: Choose, seed: int) -> Balanced:
    """Keep equally many epochs of every condition, within every rule.

    A condition is a combination of values of the columns `by`. Every condition of a rule keeps as many epochs
    as its smallest one has; the rest gets `Fate.BALANCE`. Pieces of one trial are chosen each for itself.

    - An epoch that lacks one of the labels belongs to no condition, cannot be matched, and is left out.
    - A condition of which a rule keeps no epoch, although another rule or the rule's left-out candidates show
      that it exists, does not empty the rule: the others are matched without it, and a warning names it.
      Whoever compares it finds nothing either way; whoever does not keeps the epochs.
    - A rule in which no kept epoch has all the labels (a baseline before the cue, say) is left as it is, with
      a warning: there is nothing to match.

    Parameters
    ----------
    found : sequence of Candidate
        Kept and left out, in any order.
    by : sequence of str
        Label columns; empty: nothing is changed.
    choose : Choose
        "spread": evenly over each condition's epochs in order of time, neither first nor last favoured.
        "drawn": at random; what is drawn depends on the seed and on the condition's own epochs in its rule,
        on nothing else, neither the order of `found` nor other rules.
    seed : int
        For "drawn".

    Returns
    -------
    Balanced
    """
    if not by:
        return Balanced(tuple(found))
    known = sorted({_values(one, by) for one in found if not _lacks(one, by)}, key=_in_order)
    details: dict[int, str] = {}
    warnings = []
    for rule, places in _by_rule(found).items():
        kept = [place for place in places if found[place].kept]
        groups: defaultdict[Values, list[int]] = defaultdict(list)
        for place in kept:
            if not _lacks(found[place], by):
                groups[_values(found[place], by)].append(place)
        if kept:
            warnings += _warnings(rule, by, known, groups)
        if not groups:
            continue
        details |= {
            place: "no " + ", ".join(lacking) for place in kept if (lacking := _lacks(found[place], by))
        }
        count = min(len(group) for group in groups.values())
        for values, group in groups.items():
            in_time = sorted(group, key=lambda place: _time_order(found[place]))
            if choose == Choose.DRAWN:
                ranks = _drawn(len(group), count, (seed, rule, sorted(zip(by, values, strict=True))))
            else:
                ranks = _spread(len(group), count)
            detail = f"{count} of {len(group)} kept, {_text(by, values)}"
            details |= {place: detail for rank, place in enumerate(in_time) if rank not in ranks}
    result = (
        replace(one, fate=Fate.BALANCE, detail=details[place]) if place in details else one
        for place, one in enumerate(found)
    )
    return Balanced(tuple(result), tuple(warnings))


def condition_counts(found: Sequence[Candidate], columns: Sequence[str]) -> tuple[ConditionCount, ...]:
    """Epochs per rule and condition.

    Parameters
    ----------
    found : sequence of Candidate
        Kept and left out, in any order.
    columns : sequence of str
        Label columns whose combinations are the conditions; empty: one row for each rule.

    Returns
    -------
    tuple of ConditionCount
        In order of the rules, then of the values; combinations without a candidate have no row.
    """
    rows = []
    for rule, places in _by_rule(found).items():
        groups: defaultdict[Values, list[Candidate]] = defaultdict(list)
        for place in places:
            groups[_values(found[place], columns)].append(found[place])
        for values in sorted(groups, key=_in_order):
            kept = sum(one.kept for one in groups[values])
            rows.append(ConditionCount(rule, values, kept, len(groups[values])))
    return tuple(rows)


def value_order(value: str) -> tuple[int, float, str]:
    """Give a key that sorts label values: numbers by size, then words, "n/a" last.

    Parameters
    ----------
    value : str
        A label's value.
    """
    if value == NOT_AVAILABLE:
        return 2, 0.0, value
    try:
        number = float(value)
    except ValueError:
        return 1, 0.0, value
    # "nan" reads as a number, but has no place among them.
    return (0, number, value) if number == number else (1, 0.0, value)


def _in_order(values: Values) -> list[tuple[int, float, str]]:
    return [value_order(value) for value in values]


def _by_rule(found: Sequence[Candidate]) -> dict[str, list[int]]:
    """Places in `found` by rule, in order of the rules."""
    rules: defaultdict[str, list[int]] = defaultdict(list)
    for place in sorted(range(len(found)), key=lambda place: found[place].rule_index):
        rules[found[place].rule].append(place)
    return rules


def _values(candidate: Candidate, columns: Sequence[str]) -> Values:
    return tuple(candidate.labels.get(column, NOT_AVAILABLE) for column in columns)


def _lacks(candidate: Candidate, by: Sequence[str]) -> list[str]:
    """Columns in which the candidate has no label."""
    return [column for column in by if candidate.labels.get(column, NOT_AVAILABLE) == NOT_AVAILABLE]


def _text(by: Sequence[str], values: Values) -> str:
    return ", ".join(f"{column} = {value}" for column, value in zip(by, values, strict=True))


def _warnings(
    rule: str, by: Sequence[str], known: Sequence[Values], groups: dict[Values, list[int]]
) -> list[str]:
    """Say what keeps a rule from being matched in all conditions."""
    if not groups:
        return [f"balance: no epoch of {rule} has {' and '.join(by)}; all of them stay"]
    empty = [_text(by, values) for values in known if values not in groups]
    alone = "" if len(groups) > 1 else f"{_text(by, next(iter(groups)))} is its only condition"
    if empty:
        rest = f"{alone} left" if alone else "the other conditions are matched without it"
        return [f"balance: {rule} keeps no epoch of {'; nor of '.join(empty)}; {rest}"]
    return [f"balance: nothing to match in {rule}: {alone}"] if alone else []


def _time_order(candidate: Candidate) -> tuple[float, float, int, int]:
    # Within a rule all epochs hang on the same slot, so no rate is needed.
    return candidate.anchor_sample or 0.0, candidate.start_s, candidate.trial, candidate.piece


def _spread(size: int, count: int) -> set[int]:
    """Ranks nearest to the middles of `count` equal parts of `size`; halves go to the middle of the whole.

    The second half mirrors the first: rounding all halves one way would always keep the last and never the
    first where every second epoch is left out.
    """
    early = [(2 * part + 1) * size // (2 * count) for part in range((count + 1) // 2)]
    return {*early, *(size - 1 - rank for rank in early[: count // 2])}


def _drawn(size: int, count: int, stream: object) -> set[int]:
    """Ranks drawn at random, each as likely as any other.

    Raw bits are sorted because only the bit streams of numpy are promised to stay the same in later versions.
    """
    digest = hashlib.sha256(json.dumps(stream).encode()).digest()
    bits = np.random.PCG64(int.from_bytes(digest)).random_raw(size)
    return {int(rank) for rank in np.argsort(bits, kind="stable")[:count]}
