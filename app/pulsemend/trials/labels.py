"""Labels of trials and epochs: from markers, block, log and plan, and those made from them.

"n/a" stands wherever nothing is known, and what is made from it is "n/a" again.
"""

from __future__ import annotations

import graphlib
from bisect import bisect_right
from collections.abc import Mapping, Sequence
from itertools import pairwise

import numpy as np

from pulsemend.model.epochs import NOT_AVAILABLE, Trial
from pulsemend.model.label_columns import (
    LOG,
    SOURCE,
    STIMULATION,
    LabelSource,
    Meaning,
    rule_columns,
    slot_columns,
    source_of,
    stimulation_columns,
    trial_columns,
    values_of,
)
from pulsemend.model.plan import DerivedLabel, EpochRule, Plan
from pulsemend.model.trial_kinds import expanded_slots
from pulsemend.model.vocabulary import StandIn
from pulsemend.trials.log_columns import is_number
from pulsemend.trials.matching import ADDED, FOUND_IN_SIGNAL

MARKER = "marker"
STAND_IN = "stand-in"
"""With `ADDED` and `FOUND_IN_SIGNAL`: what may have filled a slot, its label `SOURCE`."""

Row = dict[str, str]


class TrialLabels:
    """All labels of a recording's trials.

    Parameters
    ----------
    plan : Plan
        A plan that `check_plan` accepts.
    trials : sequence of Trial
        All trials of the recording in order: positions, the trial before and the values of log columns
        count incomplete ones and those set aside, too.
    run : str
        Label of the run; empty: no such column.

    Attributes
    ----------
    columns : tuple of str
        In the order of every `of`: of slots, kind and block, run, log, stimulation, derived, of rules.
    """

    def __init__(self, plan: Plan, trials: Sequence[Trial], run: str = "") -> None:
        self._plan = plan
        self._run = run
        log = dict.fromkeys(f"{LOG}{column}" for trial in trials for column in trial.log)
        of_trials = (
            *slot_columns(plan),
            *trial_columns(plan),
            *(("run",) if run else ()),
            *log,
            *stimulation_columns(plan),
            *(label.name for label in plan.labels),
        )
        self._rule_columns = rule_columns(plan)
        self.columns: tuple[str, ...] = tuple(dict.fromkeys((*of_trials, *self._rule_columns)))
        self._with_source = {
            slot.slot
            for slot in expanded_slots(plan)
            if slot.stand_in is not StandIn.NONE or slot.from_signal
        }
        self._of_code: dict[str, Mapping[str, str]] = {}
        self._sources: dict[str, LabelSource] = {}
        self._pairs: dict[str, Sequence[str]] = {}
        rows = [self._own(trial, of_trials) for trial in trials]
        for label in _in_order(plan.labels):
            _derive(label, trials, rows)
        self._rows = {trial.number: row for trial, row in zip(trials, rows, strict=True)}

    def of(self, trial: Trial, rule: EpochRule) -> dict[str, str]:
        """Labels of the epochs of one trial and rule; the keys are `columns`, always.

        Parameters
        ----------
        trial : Trial
            One of the trials.
        rule : EpochRule
            One of the plan's rules.
        """
        row = self._rows[trial.number]
        return {**row, **{column: self._rule_label(row, rule, column) for column in self._rule_columns}}

    def _own(self, trial: Trial, columns: Sequence[str]) -> Row:
        """Labels that are not made from others; derived ones still n/a."""
        known = {
            "kind": trial.kind,
            "block": str(trial.block) if trial.block else "",
            "run": self._run,
            **{f"{LOG}{column}": value for column, value in trial.log.items()},
            **_stimulation(self._plan, trial),
        }
        for slot, marker in trial.markers.items():
            code = marker.code
            if code not in self._of_code:
                self._of_code[code] = self._plan.labels_of(code)
            known.update({f"{slot}.{label}": value for label, value in self._of_code[code].items()})
        known.update({f"{slot}.{SOURCE}": _filled_by(trial, slot) for slot in self._with_source})
        return {column: known.get(column) or NOT_AVAILABLE for column in columns}

    def _rule_label(self, row: Row, rule: EpochRule, column: str) -> str:
        text = rule.labels.get(column)
        if text is None:
            return NOT_AVAILABLE
        if text not in self._sources:
            self._sources[text] = source_of(text)
        source = self._sources[text]
        if source.meaning is Meaning.TEXT:
            return source.what
        value = row.get(source.what, NOT_AVAILABLE)
        return self._other(source.what, value) if source.meaning is Meaning.OTHER else value

    def _other(self, column: str, value: str) -> str:
        """Give the other of a column's two values; n/a where there are not two, or the value is neither."""
        if column not in self._pairs:
            self._pairs[column] = self._values(column)
        values = self._pairs[column]
        if len(values) != 2 or value not in values:
            return NOT_AVAILABLE
        return values[1] if value == values[0] else values[0]

    def _values(self, column: str) -> Sequence[str]:
        if not column.startswith(LOG):
            return values_of(self._plan, column)
        return sorted({row.get(column, NOT_AVAILABLE) for row in self._rows.values()} - {NOT_AVAILABLE})


def _filled_by(trial: Trial, slot: str) -> str:
    if slot in trial.markers:
        code = trial.markers[slot].code
        return code if code in (ADDED, FOUND_IN_SIGNAL) else MARKER
    return STAND_IN if slot in trial.stand_ins else ""


def _stimulation(plan: Plan, trial: Trial) -> Row:
    """Facts of the plan; those that a log column tells come from it alone, trial by trial."""
    facts = plan.stimulation
    known: Row = {}
    for column in stimulation_columns(plan):
        name = column.removeprefix(STIMULATION)
        if name in facts.columns:
            known[column] = trial.log.get(facts.columns[name].removeprefix(LOG), "")
        else:
            value = getattr(facts, name)
            known[column] = _number_text(value) if isinstance(value, float) else str(value)
    return known


def _in_order(labels: Sequence[DerivedLabel]) -> list[DerivedLabel]:
    """Every label after those it is made from."""
    by_name = {label.name: label for label in labels}
    order = graphlib.TopologicalSorter({label.name: label.sources for label in labels}).static_order()
    return [by_name[name] for name in order if name in by_name]


def _derive(label: DerivedLabel, trials: Sequence[Trial], rows: Sequence[Row]) -> None:
    """Give one derived label to all trials."""
    names = label.names or _bin_names(label.edges)
    for place, (trial, row) in enumerate(zip(trials, rows, strict=True)):
        if label.position:
            number = trial.place_in_block if label.position == "block" else trial.place
            row[label.name] = str(number) if number else NOT_AVAILABLE
        elif label.previous:
            row[label.name] = _before(label.previous, place, trials, rows)
        else:
            values = [row.get(source, NOT_AVAILABLE) for source in label.sources]
            row[label.name] = _made(label, values, names)


def _before(column: str, place: int, trials: Sequence[Trial], rows: Sequence[Row]) -> str:
    """Give the value in the trial before, whatever became of it; n/a in a block's first, and after doubts."""
    if place == 0 or trials[place - 1].block != trials[place].block or trials[place - 1].doubts:
        return NOT_AVAILABLE
    return rows[place - 1].get(column, NOT_AVAILABLE)


def _made(label: DerivedLabel, values: Sequence[str], names: Sequence[str]) -> str:
    value = values[0]
    if label.map and value in label.values:
        return label.values[value]  # "n/a", too, if the plan gives it a name
    if NOT_AVAILABLE in values:
        return NOT_AVAILABLE
    if label.compare:
        return label.same if len(set(values)) == 1 else label.different
    if label.map:
        return label.otherwise or value
    if label.bin:
        number = value.strip()
        return names[bisect_right(label.edges, float(number))] if is_number(number) else NOT_AVAILABLE
    return value


def _bin_names(edges: Sequence[float]) -> tuple[str, ...]:
    if not edges:
        return ()
    texts = [_number_text(edge) for edge in edges]
    between = (f"{low} to {high}" for low, high in pairwise(texts))
    return (f"below {texts[0]}", *between, f"{texts[-1]} and above")


def _number_text(value: float) -> str:
    """Write a number with as many digits as it needs, never as a power of ten."""
    return np.format_float_positional(value, trim="-")
