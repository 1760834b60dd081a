"""A set on paper: what `pulsemend mend --dry-run` prints of trials, counts and selection."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from pulsemend.mending.prepare import Prepared
    from pulsemend.model.epochs import Trial

_MOST_VALUES = 12
"""A column with more values is no condition, and is not counted by."""


def table_lines(rows: Sequence[Sequence[str]]) -> list[str]:
    """Put cells into columns.

    Parameters
    ----------
    rows : sequence of sequence of str
        All of the same length.
    """
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    return [
        "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
    ]


def trial_lines(prepared: Prepared) -> list[str]:
    """List every trial with its state and the instants of its slots in seconds.

    Parameters
    ----------
    prepared : Prepared
        The recording, matched and decided.
    """
    from pulsemend.model.trial_kinds import slot_names

    slots = slot_names(prepared.plan)
    rate_hz = prepared.setup.facts.rate_hz
    rows = [("trial", "kind", "block", "state", *slots)]
    for trial in prepared.trials.trials:
        times = [
            f"{trial.markers[slot].sample / rate_hz:.3f}"
            if slot in trial.markers
            else f"({trial.stand_ins[slot] / rate_hz:.3f})"
            if slot in trial.stand_ins
            else "-"
            for slot in slots
        ]
        rows.append((str(trial.number), trial.kind or "-", str(trial.block or "-"), state_of(trial), *times))
    return ["", "trials (in parentheses: stand-ins)", *table_lines(rows)]


def state_of(trial: Trial) -> str:
    """Say in a few words how a trial stands.

    Parameters
    ----------
    trial : Trial
        The trial.
    """
    if trial.set_aside:
        return f"set aside: {trial.set_aside}"
    if trial.missing:
        return f"no {', '.join(trial.missing)}"
    if trial.doubts:
        return f"doubtful: {'; '.join(trial.doubts)}"
    return "complete"


def count_lines(prepared: Prepared) -> list[str]:
    """Count kept and all candidates per rule and condition.

    Parameters
    ----------
    prepared : Prepared
        The recording, matched and decided.
    """
    columns = condition_columns(prepared)
    if not columns:
        return []
    from pulsemend.trials.balance import condition_counts

    rows = [("rule", *columns, "kept", "of")]
    rows += [
        (count.rule, *count.values, str(count.kept), str(count.total))
        for count in condition_counts(prepared.ledger, columns)
    ]
    return ["", "epochs per condition", *table_lines(rows)]


def condition_columns(prepared: Prepared) -> tuple[str, ...]:
    """Choose the columns that epochs are counted by: those of the balance, else those that rules make.

    Parameters
    ----------
    prepared : Prepared
        The recording, matched and decided.
    """
    from pulsemend.model.label_columns import rule_columns

    plan = prepared.plan
    if plan.balance.by:
        return plan.balance.by
    columns = [*rule_columns(plan), *(label.name for label in plan.labels)]
    return tuple(
        column
        for column in columns
        if len({one.labels.get(column) for one in prepared.ledger}) <= _MOST_VALUES
    )


def difference_lines(prepared: Prepared) -> list[str]:
    """Say how kept and left-out candidates differ, rule by rule.

    Parameters
    ----------
    prepared : Prepared
        The recording, matched and decided.
    """
    from pulsemend.mending.selection_view import decision_differences
    from pulsemend.trials.selection import overview, words

    differences = decision_differences(prepared.decision, prepared.plan)
    if not differences:
        return []
    able = [one for one in differences if one.interval is not None]
    few = len(differences) - len(able)
    return [
        "",
        "kept against left out, before balance (*: the 95 % interval leaves out 0)",
        *(f"{'* ' if one.notable else '  '}{words(one)}" for one in able),
        *([f"  {few} more with too few epochs to compare; --json has them"] if few else []),
        overview(differences),
    ]


def paper_json(prepared: Prepared) -> dict[str, object]:
    """Give all of it as values for JSON.

    Parameters
    ----------
    prepared : Prepared
        The recording, matched and decided.
    """
    from pulsemend.mending.selection_view import decision_differences
    from pulsemend.trials.balance import condition_counts
    from pulsemend.trials.selection import words

    rate_hz = prepared.setup.facts.rate_hz
    columns = condition_columns(prepared)
    return {
        "trial_table": [
            {
                "trial": trial.number,
                "kind": trial.kind or None,
                "block": trial.block or None,
                "state": state_of(trial),
                "onsets_s": {slot: marker.sample / rate_hz for slot, marker in trial.markers.items()},
                "stand_ins_s": {slot: sample / rate_hz for slot, sample in trial.stand_ins.items()},
            }
            for trial in prepared.trials.trials
        ],
        "ledger": [
            {
                "rule": one.rule,
                "trial": one.trial,
                "piece": one.piece,
                "anchor_s": None if one.anchor_sample is None else one.anchor_sample / rate_hz,
                "fate": one.fate,
                "detail": one.detail,
                "labels": dict(one.labels),
            }
            for one in prepared.ledger
        ],
        "counts": [
            {
                "rule": count.rule,
                "condition": dict(zip(columns, count.values, strict=True)),
                "kept": count.kept,
                "of": count.total,
            }
            for count in condition_counts(prepared.ledger, columns)
        ],
        "kept_against_left_out": [
            {**asdict(one), "words": words(one), "notable": one.notable}
            for one in decision_differences(prepared.decision, prepared.plan)
        ],
    }
