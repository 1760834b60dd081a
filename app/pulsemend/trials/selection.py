"""What the kept epochs of a rule have in common: how they differ from those left out.

A guard on jittered pulses keeps the trials with late pulses; these numbers show it. They judge nothing.
"""

from __future__ import annotations

import math
import re
from collections import Counter, defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from scipy import special

from pulsemend.model.epochs import NOT_AVAILABLE, Candidate
from pulsemend.model.vocabulary import Fate
from pulsemend.trials.balance import value_order

TIME_ON_TASK = "time on task [s]"
"""The variable that needs no source: the anchor's instant since the start of the recording."""

MOST_VALUES = 12
"""Columns of words with more distinct values are free text, not conditions."""

_LEVEL = 0.95
_UNIT = re.compile(r"(?P<name>.*) \[(?P<bracketed>.*)\]|.*_(?P<ending>s|ms)")

Value: TypeAlias = float | str | None
Interval: TypeAlias = tuple[float, float]


@dataclass(frozen=True)
class NumberGroup:
    """A number among some epochs.

    Parameters
    ----------
    n : int
        Epochs in which it is known.
    mean, sd : float or None
        In the variable's own unit; the spread with n - 1. None where n is too small.
    """

    n: int
    mean: float | None
    sd: float | None


@dataclass(frozen=True)
class NumberDifference:
    """A number in kept and left-out epochs of one rule.

    Parameters
    ----------
    rule : str
    piece : int or None
        From 1; None in a rule of one piece.
    variable : str
    kept, left_out : NumberGroup
    difference : float or None
        Mean of kept minus mean of left out; like the rest None where one group has fewer than two.
    standardised : float or None
        Difference by pooled standard deviation, with Hedges' correction for small groups.
    interval : (float, float) or None
        95 % interval of the difference, by Welch's t.
    """

    rule: str
    piece: int | None
    variable: str
    kept: NumberGroup
    left_out: NumberGroup
    difference: float | None = None
    standardised: float | None = None
    interval: Interval | None = None

    @property
    def notable(self) -> bool:
        """Whether the interval leaves out 0; by chance alone about 1 of 20 does.

        Of skewed numbers (reaction times) in groups of four or five it is up to 1 of 10.
        """
        return _leaves_out_zero(self.interval)


@dataclass(frozen=True)
class ShareDifference:
    """A condition's values in kept and left-out epochs of one rule.

    Parameters
    ----------
    rule : str
    piece : int or None
        From 1; None in a rule of one piece.
    variable : str
    counts : mapping of str to (int, int)
        Epochs with every value, kept and left out.
    value : str
        The value whose share differs most.
    difference : float or None
        Its share of the kept minus its share of the left out, from -1 to 1; like the interval None where one
        group has fewer than two.
    interval : (float, float) or None
        95 % interval of the difference by Newcombe's hybrid score. Of three values or more the largest of
        several differences is picked, so it is widened to hold for all of them at once (Bonferroni).
    """

    rule: str
    piece: int | None
    variable: str
    counts: Mapping[str, tuple[int, int]]
    value: str
    difference: float | None = None
    interval: Interval | None = None

    @property
    def notable(self) -> bool:
        """Whether the interval leaves out 0; by chance alone at most about 1 of 20 does."""
        return _leaves_out_zero(self.interval)

    @property
    def n_kept(self) -> int:
        """Kept epochs in which the condition is known."""
        return sum(kept for kept, _ in self.counts.values())

    @property
    def n_left_out(self) -> int:
        """Left-out epochs in which the condition is known."""
        return sum(left_out for _, left_out in self.counts.values())


SelectionDifference: TypeAlias = NumberDifference | ShareDifference


def selection_differences(
    found: Sequence[Candidate], variables: Mapping[str, Mapping[int, Value]], recorded_hz: float
) -> tuple[SelectionDifference, ...]:
    """Compare kept and left-out candidates of every rule.

    Candidates left out for balance alone count as kept: the guards kept them, and balance changes the shares
    of its conditions by design. Trials set aside (practice) count in neither group: they were never to be
    kept. Pieces are compared each for itself, because pieces of one trial share its latency and answer, and
    counting a trial several times would make the intervals too narrow.

    Parameters
    ----------
    found : sequence of Candidate
        Kept and left out.
    variables : mapping of str to mapping of int to float, str or None
        Values by trial number, by name of the variable ("pulse1 latency [s]", "log.reaction_s"). Unknown is
        None, "n/a", not finite, or absent. A variable of words, or of numbers that take only two values in
        the comparison (correct 0 or 1), is a condition; so are the label columns, except those of the same
        name.
    recorded_hz : float
        Recorded sampling rate: time on task is the anchor's sample by it.

    Returns
    -------
    tuple of NumberDifference or ShareDifference
        In order of the rules and pieces: time on task, the variables, the label columns. Left out is what
        cannot differ: rules without kept or without left-out epochs, variables with one value; and columns of
        words with more than `MOST_VALUES` values.
    """
    groups: defaultdict[tuple[int, str, int], list[Candidate]] = defaultdict(list)
    for one in found:
        if one.fate is not Fate.SET_ASIDE:
            groups[one.rule_index, one.rule, one.piece].append(one)
    in_pieces = {rule for _, rule, piece in groups if piece > 1}
    differences = []
    for (_, rule, piece), members in sorted(groups.items()):
        kept = [one for one in members if one.kept or one.fate is Fate.BALANCE]
        left_out = [one for one in members if not one.kept and one.fate is not Fate.BALANCE]
        if not kept or not left_out:
            continue
        columns = list(dict.fromkeys(column for one in members for column in one.labels))
        for variable in dict.fromkeys([TIME_ON_TASK, *variables, *columns]):
            difference = _compare(
                (rule, piece if rule in in_pieces else None, variable),
                *(
                    [_value(one, variable, variables, recorded_hz) for one in group]
                    for group in (kept, left_out)
                ),
            )
            if difference is not None:
                differences.append(difference)
    return tuple(differences)


def words(difference: SelectionDifference) -> str:
    """Put a difference into one plain line, with units.

    Parameters
    ----------
    difference : NumberDifference or ShareDifference
        One of `selection_differences`.
    """
    piece = "" if difference.piece is None else f" piece {difference.piece}"
    name, unit = _name_and_unit(difference.variable)
    start = f"{difference.rule}{piece}, {name}: "
    if isinstance(difference, NumberDifference):
        return start + _number_words(difference, unit)
    return start + _share_words(difference)


def overview(differences: Sequence[SelectionDifference]) -> str:
    """Say how many comparisons were made, and how many to expect notable by chance.

    Parameters
    ----------
    differences : sequence of NumberDifference or ShareDifference
        All of `selection_differences`.
    """
    made = sum(one.interval is not None for one in differences)
    notable = sum(one.notable for one in differences)
    return (
        f"{made} comparisons of kept with left-out epochs; in {notable} the 95 % interval leaves out 0. "
        f"If nothing differed, about {made * (1 - _LEVEL):.1f} would by chance."
    )


def welch_interval(kept: Sequence[float], left_out: Sequence[float]) -> Interval:
    """95 % interval of the difference of two means with unequal spreads.

    Parameters
    ----------
    kept, left_out : sequence of float
        At least two each, and not all equal within both.

    References
    ----------
    Welch BL (1947) The generalization of 'Student's' problem when several different population variances are
    involved. Biometrika 34:28-35. doi:10.1093/biomet/34.1-2.28
    """
    squared = [float(np.var(group, ddof=1)) / len(group) for group in (kept, left_out)]
    error = sum(squared)
    freedom = error**2 / sum(
        part**2 / (len(group) - 1) for part, group in zip(squared, (kept, left_out), strict=True)
    )
    reach = float(special.stdtrit(freedom, (1 + _LEVEL) / 2)) * math.sqrt(error)
    difference = float(np.mean(kept) - np.mean(left_out))
    return difference - reach, difference + reach


def standardised_difference(kept: Sequence[float], left_out: Sequence[float]) -> float:
    """Difference of two means by their pooled standard deviation, corrected for small groups.

    Parameters
    ----------
    kept, left_out : sequence of float
        At least two each, and not all equal within both.

    References
    ----------
    Hedges LV (1981) Distribution theory for Glass's estimator of effect size and related estimators. Journal
    of Educational Statistics 6:107-128. doi:10.3102/10769986006002107
    """
    freedom = len(kept) + len(left_out) - 2
    pooled = sum((len(group) - 1) * float(np.var(group, ddof=1)) for group in (kept, left_out)) / freedom
    correction = 1 - 3 / (4 * freedom - 1)
    return correction * float(np.mean(kept) - np.mean(left_out)) / math.sqrt(pooled)


def share_interval(kept: tuple[int, int], left_out: tuple[int, int], at_once: int = 1) -> Interval:
    """95 % interval of the difference of two independent shares.

    Parameters
    ----------
    kept, left_out : (int, int)
        How many of how many; the latter at least 1.
    at_once : int
        For how many differences together the 95 % shall hold (Bonferroni).

    References
    ----------
    Newcombe RG (1998) Interval estimation for the difference between independent proportions: comparison of
    eleven methods. Statistics in Medicine 17:873-890 (its method 10).
    doi:10.1002/(SICI)1097-0258(19980430)17:8<873::AID-SIM779>3.0.CO;2-I

    Dunn OJ (1961) Multiple comparisons among means. Journal of the American Statistical Association 56:52-64.
    doi:10.1080/01621459.1961.10482090
    """
    z = float(special.ndtri(1 - (1 - _LEVEL) / (2 * at_once)))
    first, second = kept[0] / kept[1], left_out[0] / left_out[1]
    first_low, first_high = _score_interval(*kept, z)
    second_low, second_high = _score_interval(*left_out, z)
    return (
        first - second - math.hypot(first - first_low, second_high - second),
        first - second + math.hypot(first_high - first, second - second_low),
    )


def _score_interval(count: int, n: int, z: float) -> Interval:
    """Wilson's score interval of one share."""
    middle = 2 * count + z**2
    reach = z * math.sqrt(z**2 + 4 * count * (n - count) / n)
    return (middle - reach) / (2 * (n + z**2)), (middle + reach) / (2 * (n + z**2))


def _leaves_out_zero(interval: Interval | None) -> bool:
    return interval is not None and not interval[0] <= 0 <= interval[1]


def _value(
    candidate: Candidate, variable: str, variables: Mapping[str, Mapping[int, Value]], recorded_hz: float
) -> Value:
    """Value of a variable or label column at one candidate; None where it is not known."""
    value: Value
    if variable in variables:
        value = variables[variable].get(candidate.trial)
    elif variable == TIME_ON_TASK:
        sample = candidate.anchor_sample
        value = None if sample is None else sample / recorded_hz
    else:
        value = candidate.labels.get(variable)
    if isinstance(value, str):
        return None if value in ("", NOT_AVAILABLE) else value
    return None if value is None or not math.isfinite(value) else float(value)


def _compare(
    key: tuple[str, int | None, str], kept: Sequence[Value], left_out: Sequence[Value]
) -> SelectionDifference | None:
    """Compare as numbers or as conditions; None where nothing can differ."""
    groups = [[value for value in group if value is not None] for group in (kept, left_out)]
    distinct = {value for group in groups for value in group}
    if len(distinct) < 2:
        return None
    if len(distinct) == 2 or any(isinstance(value, str) for value in distinct):
        return _share_difference(key, *([_text(value) for value in group] for group in groups))
    return _number_difference(key, *([float(value) for value in group] for group in groups))


def _text(value: float | str) -> str:
    return value if isinstance(value, str) else f"{value:g}"


def _number_difference(
    key: tuple[str, int | None, str], kept: Sequence[float], left_out: Sequence[float]
) -> NumberDifference:
    groups = _number_group(kept), _number_group(left_out)
    if min(len(kept), len(left_out)) < 2:
        return NumberDifference(*key, *groups)
    return NumberDifference(
        *key,
        *groups,
        difference=float(np.mean(kept) - np.mean(left_out)),
        standardised=standardised_difference(kept, left_out),
        interval=welch_interval(kept, left_out),
    )


def _number_group(values: Sequence[float]) -> NumberGroup:
    return NumberGroup(
        n=len(values),
        mean=float(np.mean(values)) if values else None,
        sd=float(np.std(values, ddof=1)) if len(values) > 1 else None,
    )


def _share_difference(
    key: tuple[str, int | None, str], kept: Sequence[str], left_out: Sequence[str]
) -> ShareDifference | None:
    if len({*kept, *left_out}) > MOST_VALUES:
        return None
    of_kept, of_left_out = Counter(kept), Counter(left_out)
    counts = {
        value: (of_kept[value], of_left_out[value]) for value in sorted({*kept, *left_out}, key=value_order)
    }
    # In whole numbers: two values differ equally, and always the one more common among kept is named.
    excess = {value: one * len(left_out) - other * len(kept) for value, (one, other) in counts.items()}
    largest = max(excess, key=lambda value: (abs(excess[value]), excess[value]))
    if min(len(kept), len(left_out)) < 2:
        return ShareDifference(*key, counts, largest)
    one, other = (counts[largest][0], len(kept)), (counts[largest][1], len(left_out))
    return ShareDifference(
        *key,
        counts,
        largest,
        difference=one[0] / one[1] - other[0] / other[1],
        interval=share_interval(one, other, at_once=1 if len(counts) == 2 else len(counts)),
    )


def _name_and_unit(variable: str) -> tuple[str, str]:
    """Take "pulse1 latency [s]" apart; "log.reaction_s" keeps its name."""
    found = _UNIT.fullmatch(variable)
    if found is None:
        return variable, ""
    return found["name"] or variable, " " + (found["bracketed"] or found["ending"])


def _number_words(difference: NumberDifference, unit: str) -> str:
    kept = _group_words("kept", difference.kept, unit)
    groups = f"{kept}; {_group_words('left out', difference.left_out, unit)}; "
    if difference.difference is None or difference.interval is None or difference.standardised is None:
        return groups + "too few to compare"
    low, high = difference.interval
    return (
        f"{groups}difference {_digits(difference.difference)}{unit}, "
        f"95 % interval {_digits(low)} to {_digits(high)}{unit}, "
        f"{_digits(difference.standardised)} pooled SD"
    )


def _group_words(name: str, group: NumberGroup, unit: str) -> str:
    mean = "none known" if group.mean is None else f"mean {_digits(group.mean)}{unit}"
    sd = "" if group.sd is None else f"SD {_digits(group.sd)}{unit}, "
    return f"{name} {mean} ({sd}n = {group.n})"


def _share_words(difference: ShareDifference) -> str:
    kept, left_out = difference.counts[difference.value]
    groups = (
        f"{difference.value} in {kept} of {difference.n_kept} kept{_percent(kept, difference.n_kept)} and in "
        f"{left_out} of {difference.n_left_out} left out{_percent(left_out, difference.n_left_out)}; "
    )
    if difference.difference is None or difference.interval is None:
        return groups + "too few to compare"
    low, high = (100 * edge for edge in difference.interval)
    return (
        f"{groups}difference {100 * difference.difference:.0f} percentage points, "
        f"95 % interval {low:.0f} to {high:.0f}"
    )


def _percent(count: int, n: int) -> str:
    return f" ({100 * count / n:.0f} %)" if n else ""


def _digits(number: float) -> str:
    """Three digits, more only before the point, none in powers of ten from 0.001 on."""
    return f"{number:.0f}" if abs(number) >= 100 else f"{number:.3g}"
