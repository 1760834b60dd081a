"""Label columns of a plan: which there are, and what a label's source means."""

from __future__ import annotations

import re
from dataclasses import dataclass, fields
from enum import Enum

from pulsemend.model.plan import Plan
from pulsemend.model.trial_kinds import expanded_slots, kinds
from pulsemend.model.vocabulary import Role, StandIn

LOG = "log."
STIMULATION = "stimulation."
SOURCE = "source"
"""Label of a slot that may be filled by something else than its marker: what filled it."""

_NUMBER = re.compile(r"[+-]?\d*\.?\d*")
_OTHER = re.compile(r"other\(\s*([^()]*?)\s*\)")


class Meaning(Enum):
    """What the source of a label is."""

    COLUMN = "another column"
    OTHER = "the other of two values of a column"
    TEXT = "this very text"


@dataclass(frozen=True)
class LabelSource:
    """The source of a label, understood.

    Parameters
    ----------
    meaning : Meaning
    what : str
        The column, or the text.
    """

    meaning: Meaning
    what: str


def source_of(text: str) -> LabelSource:
    """Understand a rule label's source: ``other(column)``, a column, else plain text.

    A column holds a point (``cue1.item``, ``log.answer``); numbers do, too, and stay texts. Derived labels
    are columns of every rule anyway, so their names are plain texts here.

    Parameters
    ----------
    text : str
        As written.
    """
    other = _OTHER.fullmatch(text.strip())
    if other:
        return LabelSource(Meaning.OTHER, other[1])
    if "." in text and not _NUMBER.fullmatch(text.strip()):
        return LabelSource(Meaning.COLUMN, text)
    return LabelSource(Meaning.TEXT, text)


def slot_columns(plan: Plan) -> tuple[str, ...]:
    """Label columns that come from markers, ``slot.label``: slots in order, their labels sorted.

    Parameters
    ----------
    plan : Plan
        Slots, codes, fields of bits, and their labels.
    """
    labels: dict[Role, set[str]] = {}
    for marker in plan.markers:
        labels.setdefault(marker.role, set()).update(marker.labels)
    everywhere = {bits.name for bits in plan.bits}
    columns = []
    for slot in expanded_slots(plan):
        own = labels.get(slot.role, set()) | everywhere
        if slot.stand_in is not StandIn.NONE or slot.from_signal:
            own = own | {SOURCE}
        columns += [f"{slot.slot}.{label}" for label in sorted(own)]
    return tuple(columns)


def trial_columns(plan: Plan) -> tuple[str, ...]:
    """Columns that tell of a whole trial: its kind and its block, where the plan has such."""
    columns = ["kind"] if kinds(plan) != ("",) else []
    if plan.blocks.codes or plan.blocks.pause_s or plan.blocks.practice_codes:
        columns.append("block")
    return tuple(columns)


def stimulation_columns(plan: Plan) -> tuple[str, ...]:
    """Columns of stimulation facts that the plan gives, or takes from the log."""
    facts = plan.stimulation
    given = [
        one.name
        for one in fields(facts)
        if one.name != "columns" and getattr(facts, one.name) not in (None, "")
    ]
    return tuple(f"{STIMULATION}{name}" for name in dict.fromkeys([*given, *facts.columns]))


def rule_columns(plan: Plan) -> tuple[str, ...]:
    """Label columns that come from epoch rules, sorted.

    Parameters
    ----------
    plan : Plan
        Rules and their labels.
    """
    return tuple(sorted({column for rule in plan.epochs.rule for column in rule.labels}))


def known_columns(plan: Plan) -> tuple[str, ...]:
    """Columns that a label may be made from, without those of a log, which only the log knows.

    Parameters
    ----------
    plan : Plan
        What to look at.
    """
    derived = tuple(label.name for label in plan.labels)
    return (*slot_columns(plan), *trial_columns(plan), *stimulation_columns(plan), *derived)


def values_of(plan: Plan, column: str) -> tuple[str, ...]:
    """Values that a ``slot.label`` column can have by the plan, sorted; empty where the plan cannot tell.

    Parameters
    ----------
    plan : Plan
        Codes and their labels.
    column : str
        E.g. ``cue1.item``.
    """
    slot_name, _, label = column.partition(".")
    role = next((slot.role for slot in expanded_slots(plan) if slot.slot == slot_name), None)
    values = {
        marker.labels[label] for marker in plan.markers if marker.role is role and label in marker.labels
    }
    for bits in plan.bits:
        if bits.name == label:
            values.update(bits.names.values())
            if bits.at[0] == bits.at[1]:
                values.update(bits.names.get(value, value) for value in "01")
    return tuple(sorted(values))
