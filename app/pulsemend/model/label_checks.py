"""What the keys about labels, balance and stimulation must be to each other and to the slots."""

from __future__ import annotations

import graphlib
import itertools
from collections.abc import Collection

from pulsemend.errors import PlanError
from pulsemend.model.epochs import FIXED_COLUMNS
from pulsemend.model.keys import near_names, show
from pulsemend.model.label_columns import (
    LOG,
    Meaning,
    known_columns,
    rule_columns,
    source_of,
    trial_columns,
    values_of,
)
from pulsemend.model.plan import DerivedLabel, Plan, StimulationFacts
from pulsemend.model.toml_lines import KeyPath, key_text

_POSITIONS = ("block", "recording")
_PLAIN = DerivedLabel("")
_BELONGS = {
    "same": "compare",
    "different": "compare",
    "values": "map",
    "otherwise": "map",
    "edges": "bin",
    "names": "bin",
}
"""Keys of a derived label that say more about one way to make it."""


def check_labels(plan: Plan) -> None:
    """Check derived labels, labels of rules, and what is made from them.

    Parameters
    ----------
    plan : Plan
        Its slots are checked already.

    Raises
    ------
    PlanError
        Keys contradict each other.
    """
    _check_derived(plan)
    _check_rule_labels(plan)
    _check_balance(plan)
    _check_stimulation(plan)


def is_readable(name: str) -> bool:
    """Tell whether a name can stand at the head of a column: some sign to be seen, no tabs or line ends.

    Parameters
    ----------
    name : str
        As written.
    """
    return bool(name.strip()) and name.isprintable()


def _check_name(name: str, taken: Collection[str], key: str) -> None:
    """Refuse a column of the user's own that is called like another; points belong to slots and log."""
    if name in taken or not is_readable(name) or "." in name:
        raise PlanError(
            key,
            "is the name of another column"
            if name in taken
            else "is no name for a column of its own: it is empty, or holds a point or a control character",
            allowed="another name",
            received=show(name),
        )


def _check_derived(plan: Plan) -> None:
    taken = (*trial_columns(plan), "run", "kind", "block", *FIXED_COLUMNS)
    for label in plan.labels:
        path = ("labels", label.name)
        _check_name(label.name, taken, key_text(path))
        if len(label.ways) != 1:
            raise PlanError(
                key_text((*path, label.ways[1]) if label.ways else path),
                "a label is made in one way",
                allowed="one of compare | copy | map | bin | position | previous",
                received=" | ".join(label.ways) or "none",
            )
        _check_way(plan, label, path)
    _check_order(plan)


def _check_way(plan: Plan, label: DerivedLabel, path: KeyPath) -> None:
    way = label.ways[0]
    for key, owner in _BELONGS.items():
        if owner != way and getattr(label, key) != getattr(_PLAIN, key):
            raise PlanError(
                key_text((*path, key)),
                f"says nothing about {way}",
                allowed=f"{key} with {owner}",
                received=show(getattr(label, key)),
            )
    if way == "compare" and len(label.compare) < 2:
        raise PlanError(
            key_text((*path, way)),
            "needs two columns",
            allowed="two columns or more",
            received=show(label.compare),
        )
    if way == "position" and label.position not in _POSITIONS:
        raise PlanError(
            key_text((*path, way)),
            "is none of the words",
            allowed=" | ".join(map(show, _POSITIONS)),
            received=show(label.position),
        )
    if way == "map" and not label.values:
        raise PlanError(
            key_text((*path, "values")),
            "is missing: the new names of the values",
            allowed='{ "value" = "new name", ... }',
        )
    if way == "bin":
        rising = all(low < high for low, high in itertools.pairwise(label.edges))
        if not label.edges or not rising:
            raise PlanError(
                key_text((*path, "edges")),
                "must be one number or more, each above the one before",
                allowed="rising numbers",
                received=show(label.edges),
            )
        if label.names and len(label.names) != len(label.edges) + 1:
            raise PlanError(
                key_text((*path, "names")),
                "must be one more than edges",
                allowed=str(len(label.edges) + 1),
                received=str(len(label.names)),
            )
    for source in label.sources:
        _check_column(plan, source, key_text((*path, way)))


def _check_order(plan: Plan) -> None:
    """Refuse labels that are made from each other in a circle."""
    names = {label.name for label in plan.labels}
    graph = {label.name: [one for one in label.sources if one in names] for label in plan.labels}
    try:
        graphlib.TopologicalSorter(graph).prepare()
    except graphlib.CycleError as error:
        first = next(label for label in plan.labels if label.name in error.args[1])
        raise PlanError(
            key_text(("labels", first.name, first.ways[0])),
            "is made from itself in a circle",
            allowed="columns that are not made from it",
            received=" from ".join(map(show, error.args[1])),
        ) from None


def _check_column(plan: Plan, column: str, key: str, hint: str = "") -> None:
    if column.startswith(LOG):
        _check_log_column(plan, column, key)
        return
    known = known_columns(plan)
    if column not in known and column != "run":
        raise PlanError(
            key,
            f"{hint}must name a label of a slot's codes, slot.label, a column of the log, log.column, or a "
            "derived label",
            allowed=near_names(column, known) or "none: no code of a slot has labels",
            received=show(column),
        )


def _check_log_column(plan: Plan, column: str, key: str) -> None:
    """Refuse columns that no row can give: what the log itself has is seen only when it is read."""
    if not plan.log.file:
        raise PlanError(
            key,
            "is a column of the log, and the plan has none: log.file is empty",
            allowed="a column of another kind, or a log.file",
            received=show(column),
        )
    slots = plan.log.slots
    if len(slots) > 1 and not column.startswith(tuple(f"{LOG}{slot}." for slot in slots)):
        raise PlanError(
            key,
            "rows of the log belong to slots, so the slot stands before the column",
            allowed=" | ".join(f"{LOG}{slot}.COLUMN" for slot in slots),
            received=show(column),
        )


def _check_rule_labels(plan: Plan) -> None:
    taken = {*(label.name for label in plan.labels), *trial_columns(plan), "run", *FIXED_COLUMNS}
    for place, rule in enumerate(plan.epochs.rule, start=1):
        for column, text in rule.labels.items():
            key = key_text(("epochs", "rule", place, "labels", column))
            _check_name(column, taken, key)
            source = source_of(text)
            if source.meaning is not Meaning.TEXT:
                hint = "holds a point, so it " if source.meaning is Meaning.COLUMN else ""
                _check_column(plan, source.what, key, hint)
            if source.meaning is Meaning.OTHER and not source.what.startswith(LOG):
                _check_two_values(plan, source.what, key)


def _check_two_values(plan: Plan, column: str, key: str) -> None:
    values = values_of(plan, column)
    if len(values) != 2:
        raise PlanError(
            key,
            "there must be two values for one to be the other",
            allowed="a slot.label that the plan gives two values, or a column of the log",
            received=f"{show(column)}: {' | '.join(map(show, values)) or 'values that the plan cannot tell'}",
        )


def _check_balance(plan: Plan) -> None:
    known = {*known_columns(plan), *rule_columns(plan), "run"}
    for place, column in enumerate(plan.balance.by, start=1):
        key = key_text(("balance", "by", place))
        if column.startswith(LOG):
            _check_log_column(plan, column, key)
        elif column not in known:
            raise PlanError(
                key,
                "must name a label column",
                allowed=near_names(column, sorted(known)),
                received=show(column),
            )


def _check_stimulation(plan: Plan) -> None:
    facts = {name for name in StimulationFacts.__dataclass_fields__ if name != "columns"}
    for name in plan.stimulation.columns:
        key = key_text(("stimulation", "columns", name))
        if name not in facts:
            raise PlanError(
                key, "is no fact of stimulation", allowed=" | ".join(sorted(facts)), received=show(name)
            )
        if not plan.log.file:
            raise PlanError(
                key,
                "needs a log: log.file is empty",
                allowed=f"stimulation.{name} itself, or a log.file",
                received=show(plan.stimulation.columns[name]),
            )
