"""Labels that tell of what comes later in the trial than the epoch.

An analysis that predicts such a label from the epoch predicts the future; one that compares epochs by it may
do so for good reasons. They are marked, never refused.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

from pulsemend.model.epochs import Candidate, Trial
from pulsemend.model.label_columns import LOG, Meaning, slot_columns, source_of
from pulsemend.model.plan import EpochRule, Plan
from pulsemend.trials.candidates import Geometry

Origins = Mapping[str, frozenset[str]]

# An epoch's end is a sum of seconds times rates, whole only within rounding.
_ROUNDING = 1e-6


def later_columns(
    plan: Plan, rule: EpochRule, trial: Trial, last_sample: float, columns: Iterable[str]
) -> frozenset[str]:
    """Columns whose labels are taken from later in the trial than an epoch.

    A column is later if any slot it is made from, directly or through other labels, has its marker (or its
    stand-in) after the epoch's last sample. A log is written after the response, so a row of a whole trial is
    known at the trial's last marker; where rows belong to slots, at the last marker before the next such
    slot. Facts of stimulation, kind, block, positions, labels of the trial before and plain texts never are.

    Parameters
    ----------
    plan : Plan
        Tells what labels are made from.
    rule : EpochRule
        The epoch's rule.
    trial : Trial
        The epoch's trial.
    last_sample : float
        Recorded sample of the epoch's last sample.
    columns : iterable of str
        Label columns to look at.
    """
    return _later(plan, _origins(plan, rule, columns), trial, last_sample)


def later_by_rule(
    found: Sequence[Candidate], trials: Iterable[Trial], plan: Plan, geometry: Geometry
) -> dict[str, tuple[str, ...]]:
    """Columns that are later than at least one kept epoch, each with the rules of these epochs.

    Parameters
    ----------
    found : sequence of Candidate
        Kept and left out; only kept ones count.
    trials : iterable of Trial
        The trials they were made from.
    plan : Plan
        Its rules and what labels are made from.
    geometry : Geometry
        The same that decided the fates.

    Returns
    -------
    dict of str to tuple of str
        Columns in their order, rules in that of the plan; columns that are never later are absent.
    """
    by_number = {trial.number: trial for trial in trials}
    columns = tuple(found[0].labels) if found else ()
    origins = [_origins(plan, rule, columns) for rule in plan.epochs.rule]
    seen = {
        (column, candidate.rule_index)
        for candidate in found
        if candidate.kept
        for column in _later(
            plan,
            origins[candidate.rule_index],
            by_number[candidate.trial],
            last_sample(candidate, plan, geometry),
        )
    }
    rules = {
        column: [rule.name for index, rule in enumerate(plan.epochs.rule) if (column, index) in seen]
        for column in columns
    }
    return {column: tuple(dict.fromkeys(names)) for column, names in rules.items() if names}


def last_sample(candidate: Candidate, plan: Plan, geometry: Geometry) -> float:
    """Give the recorded sample at which an epoch's last output sample lies.

    Parameters
    ----------
    candidate : Candidate
        With an anchor.
    plan : Plan
        Its length of epochs.
    geometry : Geometry
        Its rates.
    """
    first = geometry.first_sample(candidate.anchor_sample or 0.0, candidate.start_s)
    return first + (round(plan.epochs.length_s * geometry.output_hz) - 1) * geometry.step


def _later(plan: Plan, origins: Origins, trial: Trial, end: float) -> frozenset[str]:
    late = {
        origin
        for origin in frozenset[str]().union(*origins.values())
        if (known := _known_from(plan, trial, origin)) is not None and known > end + _ROUNDING
    }
    return frozenset(column for column, own in origins.items() if own & late)


def _origins(plan: Plan, rule: EpochRule, columns: Iterable[str]) -> Origins:
    """Find what columns are made from in the end: names of slots, and columns of the log."""
    of_slots = frozenset(slot_columns(plan))
    derived = {label.name: label for label in plan.labels}

    def of(column: str) -> frozenset[str]:
        if column in rule.labels:
            source = source_of(rule.labels[column])
            return frozenset() if source.meaning is Meaning.TEXT else of(source.what)
        if column in derived:
            label = derived[column]
            sources = () if label.previous else label.sources
            return frozenset[str]().union(*map(of, sources))
        if column.startswith(LOG):
            return frozenset({column})
        return frozenset({column.partition(".")[0]}) if column in of_slots else frozenset()

    return {column: of(column) for column in columns}


def _known_from(plan: Plan, trial: Trial, origin: str) -> float | None:
    """Give the recorded sample from which an origin is known; None if the trial does not have it."""
    if not origin.startswith(LOG):
        marker = trial.markers.get(origin)
        return trial.stand_ins.get(origin) if marker is None else marker.sample
    if origin.removeprefix(LOG) not in trial.log:
        return None
    samples = [marker.sample for marker in trial.markers.values()]
    slot = origin.removeprefix(LOG).partition(".")[0]
    own = trial.markers.get(slot) if slot in plan.log.slots else None
    if own is not None:
        following = [trial.markers[other].sample for other in plan.log.slots if other in trial.markers]
        next_row = min((sample for sample in following if sample > own.sample), default=None)
        samples = [sample for sample in samples if next_row is None or sample < next_row]
    return max(samples, default=None)
