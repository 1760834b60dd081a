"""What the keys about trials, logs and labels must be to each other."""

from __future__ import annotations

import graphlib
import itertools
from collections.abc import Iterable

from pulsemend.errors import PlanError
from pulsemend.model.epochs import FIXED_COLUMNS
from pulsemend.model.keys import show
from pulsemend.model.label_columns import (
    LOG,
    SOURCE,
    STIMULATION,
    Meaning,
    known_columns,
    rule_columns,
    slot_columns,
    source_of,
    trial_columns,
    values_of,
)
from pulsemend.model.plan import DerivedLabel, Plan, Slot, StimulationFacts
from pulsemend.model.toml_lines import KeyPath, key_text
from pulsemend.model.trial_kinds import LARGEST_VARIANTS, count_variants, slot_names, variants
from pulsemend.model.vocabulary import Role, StandIn

KEPT_NAMES = ("log", "stimulation")
"""Names that stand before the point of other columns, so no slot may have them."""

_POSITIONS = ("block", "recording")


def check_trials(plan: Plan) -> None:
    """Check everything about trials that needs no recording.

    Parameters
    ----------
    plan : Plan
        What to check.

    Raises
    ------
    PlanError
        Keys contradict each other.
    """
    _check_bits(plan)
    _check_slots(plan)
    _check_groups(plan)
    _check_variants(plan)
    _check_blocks(plan)
    _check_log(plan)
    _check_onset(plan)
    _check_labels(plan)
    _check_rule_labels(plan)
    _check_balance(plan)
    _check_stimulation(plan)


def _check_bits(plan: Plan) -> None:
    for bits in plan.bits:
        for table, values in (("names", bits.names), ("roles", bits.roles)):
            for value in values:
                room = 1 << (bits.at[1] - bits.at[0] + 1)
                if not value.isdecimal() or str(int(value)) != value or int(value) >= room:
                    raise PlanError(
                        key_text(("bits", bits.name, table, value)),
                        "is no value of this field",
                        allowed=f"0 to {room - 1}",
                        received=show(value),
                    )


def _check_slots(plan: Plan) -> None:
    roles = {marker.role for marker in plan.markers}
    roles |= {role for bits in plan.bits for role in bits.roles.values()}
    earlier: list[str] = []
    for place, slot in enumerate(plan.trial, start=1):
        path: KeyPath = ("trial", place)
        if slot.slot in earlier or slot.slot in KEPT_NAMES:
            problem = (
                "names an earlier slot too" if slot.slot in earlier else "is kept for other columns of labels"
            )
            raise PlanError(key_text((*path, "slot")), problem, received=show(slot.slot))
        if place == 1:
            _check_first_slot(slot, path)
        if slot.after:
            _check_after(slot, path, earlier, plan)
        if slot.role not in roles and not slot.optional:
            raise PlanError(
                key_text((*path, "role")),
                "no code under [markers] has this role, so every trial would be incomplete",
                allowed=" | ".join(show(role) for role in Role if role in roles),
                received=show(slot.role),
            )
        _check_stand_in(slot, path)
        _check_source_label(slot, plan)
        earlier.append(slot.slot)


def _check_first_slot(first: Slot, path: KeyPath) -> None:
    if first.after_s is not None or first.after:
        key = "after_s" if first.after_s is not None else "after"
        raise PlanError(key_text((*path, key)), "the first slot starts the trial: nothing comes before it")
    if first.optional:
        raise PlanError(
            key_text((*path, "optional")),
            "the first slot starts the trial and cannot be optional",
            allowed="false",
            received="true",
        )


def _check_after(slot: Slot, path: KeyPath, earlier: list[str], plan: Plan) -> None:
    grouped = {one.slot for one in plan.trial if one.group and one.group != slot.group}
    allowed = [name for name in earlier if name not in grouped]
    allowed += [name for name in slot_names(plan) if name not in allowed and _is_repeat_of(name, grouped)]
    if slot.after not in allowed:
        raise PlanError(
            key_text((*path, "after")),
            "must name an earlier slot",
            allowed=" | ".join(show(name) for name in allowed),
            received=show(slot.after),
        )


def _is_repeat_of(name: str, slots: Iterable[str]) -> bool:
    return any(name.startswith(slot) and name[len(slot) :].isdecimal() for slot in slots)


def _check_stand_in(slot: Slot, path: KeyPath) -> None:
    if slot.stand_in is StandIn.FIXED and slot.stand_in_s is None:
        raise PlanError(
            key_text((*path, "stand_in_s")),
            "is missing: a fixed stand-in needs its time",
            allowed="a time in s",
        )
    if slot.stand_in_s is not None and slot.stand_in is not StandIn.FIXED:
        raise PlanError(
            key_text((*path, "stand_in_s")),
            "says nothing unless stand_in is fixed",
            allowed='stand_in = "fixed"',
            received=show(slot.stand_in),
        )
    if slot.stand_in is not StandIn.NONE and not slot.optional:
        raise PlanError(
            key_text((*path, "stand_in")),
            "only an optional slot can be missing in a complete trial and need a stand-in",
            allowed="optional = true",
            received=show(slot.stand_in),
        )
    if slot.from_signal and slot.role is not Role.PULSE:
        raise PlanError(
            key_text((*path, "from_signal")),
            "only a pulse can be found in the signal",
            allowed=f"role = {show(Role.PULSE)}",
            received=show(slot.role),
        )


def _check_source_label(slot: Slot, plan: Plan) -> None:
    """Refuse codes that carry the label which says what filled their slot."""
    if slot.stand_in is StandIn.NONE and not slot.from_signal:
        return
    for marker in plan.markers:
        if marker.role is slot.role and SOURCE in marker.labels:
            raise PlanError(
                key_text(("markers", marker.code, "labels", SOURCE)),
                f"is kept for what filled slot {show(slot.slot)}; choose another name",
                received=show(marker.labels[SOURCE]),
            )


def _check_groups(plan: Plan) -> None:
    known = {group.name for group in plan.groups}
    runs = [name for name, _ in itertools.groupby(plan.trial, key=lambda slot: slot.group) if name]
    for place, slot in enumerate(plan.trial, start=1):
        if slot.group and slot.group not in known:
            raise PlanError(
                key_text(("trial", place, "group")),
                "is no group of this plan; how often it is repeated stands under [group.NAME]",
                allowed=" | ".join(show(name) for name in sorted(known)) or "none",
                received=show(slot.group),
            )
        if slot.group and runs.count(slot.group) > 1:
            raise PlanError(
                key_text(("trial", place, "group")),
                "its slots must stand together",
                received=show(slot.group),
            )
    for group in plan.groups:
        path = ("group", group.name)
        members = [slot for slot in plan.trial if slot.group == group.name]
        if not members:
            raise PlanError(key_text((*path, "times")), "no slot belongs to this group")
        if group.times[1] > 1 and group.between_s is None:
            raise PlanError(
                key_text((*path, "between_s")),
                "is missing; repeats need the time from one to the next",
                allowed="[least, most] in s",
            )
        if members[0].optional or (members[0] is plan.trial[0] and group.times[0] == 0):
            raise PlanError(
                key_text((*path, "times")),
                "starts with an optional slot, or starts the trial and may be absent",
                received=show(list(group.times)),
            )


def _check_variants(plan: Plan) -> None:
    if count_variants(plan) > LARGEST_VARIANTS:
        raise PlanError(
            "trial",
            "has too many combinations of kinds and repeats",
            allowed=f"up to {LARGEST_VARIANTS}",
            received=str(count_variants(plan)),
        )
    names = slot_names(plan)
    doubled = next((name for name in names if names.count(name) > 1), None)
    if doubled is not None:
        raise PlanError("trial", "a repeated slot gets the name of another one", received=show(doubled))
    written = {slot.slot: place for place, slot in enumerate(plan.trial, start=1)}
    for variant in variants(plan):
        own = {slot.slot for slot in variant.slots}
        for place, slot in enumerate(variant.slots):
            at: KeyPath = ("trial", written.get(slot.slot, written.get(slot.slot.rstrip("0123456789"), 1)))
            if place == 0 and slot.optional:
                raise PlanError(
                    key_text((*at, "optional")),
                    f"the first slot of kind {show(variant.kind)} starts its trials and cannot be optional",
                )
            if place and slot.after_s is None:
                raise PlanError(
                    key_text((*at, "after_s")),
                    "is missing; every slot but the first needs its time limits",
                    allowed="[least, most] in s",
                )
            if place and slot.after not in own:
                raise PlanError(
                    key_text((*at, "after")),
                    "must name a slot that every kind and every number of repeats has",
                    received=show(slot.after),
                )


def _check_blocks(plan: Plan) -> None:
    blocks = plan.blocks
    if bool(blocks.practice_column) != bool(blocks.practice_values):
        missing = "practice_values" if blocks.practice_column else "practice_column"
        raise PlanError(
            f"blocks.{missing}", "is missing: practice is told by a column of the log and its values"
        )
    if blocks.practice_column and not plan.log.file:
        raise PlanError("blocks.practice_column", "needs a log: log.file is empty")
    for key, codes in (("codes", blocks.codes), ("practice_codes", blocks.practice_codes)):
        for place, code in enumerate(codes, start=1):
            if plan.role_of(code) not in (Role.OTHER, Role.IGNORE):
                raise PlanError(
                    key_text(("blocks", key, place)),
                    "begins a block, so it can be no marker of a trial",
                    allowed='role = "other"',
                    received=show(plan.role_of(code)),
                )


def _check_log(plan: Plan) -> None:
    log = plan.log
    names = slot_names(plan)
    if not log.file:
        for key in ("slots", "time", "trial", "recorded_trial", "columns"):
            if getattr(log, key):
                raise PlanError(f"log.{key}", "says nothing without a log: log.file is empty")
        return
    for place, slot in enumerate(log.slots, start=1):
        if slot not in names:
            raise PlanError(
                key_text(("log", "slots", place)),
                "must name a slot of the trial",
                allowed=" | ".join(show(name) for name in names),
                received=show(slot),
            )
    if not log.slots and plan.trial:
        raise PlanError(
            "log.slots",
            "is empty: the slots that the rows belong to",
            allowed=" | ".join(show(name) for name in names),
        )
    if log.recorded_trial and log.recorded_trial not in slot_columns(plan):
        raise PlanError(
            "log.recorded_trial",
            "must name a label of a slot's codes, slot.label",
            allowed=" | ".join(slot_columns(plan)) or "none",
            received=show(log.recorded_trial),
        )
    if log.recorded_trial and not log.trial:
        raise PlanError("log.trial", "is empty: the log's own trial numbers are needed for recorded_trial")


def _check_onset(plan: Plan) -> None:
    seen: set[str] = set()
    for place, rule in enumerate(plan.onset, start=1):
        for number, code in enumerate(rule.codes, start=1):
            key = key_text(("onset", place, "codes", number))
            if plan.role_of(code) is Role.PULSE:
                raise PlanError(
                    key, "is a pulse: its onset is found in the EEG, never moved", received=show(code)
                )
            if code in seen:
                raise PlanError(key, "is moved by an earlier rule already", received=show(code))
            seen.add(code)


def _check_labels(plan: Plan) -> None:
    taken = (*trial_columns(plan), "run", "kind", "block", *FIXED_COLUMNS)
    for label in plan.labels:
        path = ("labels", label.name)
        if label.name in taken or "." in label.name:
            raise PlanError(
                key_text((*path, label.ways[0] if label.ways else "copy")),
                "its name is that of a fixed column, or holds a point; choose another",
                received=show(label.name),
            )
        if len(label.ways) != 1:
            raise PlanError(
                key_text((*path, label.ways[1] if label.ways else "copy")),
                "a label is made in one way",
                allowed="compare | copy | map | bin | position | previous",
                received=" | ".join(label.ways) or "none",
            )
        _check_way(plan, label, path)
    _check_order(plan)


def _check_way(plan: Plan, label: DerivedLabel, path: KeyPath) -> None:
    way = label.ways[0]
    if way == "compare" and len(label.compare) < 2:
        raise PlanError(key_text((*path, way)), "needs two columns or more", received=show(label.compare))
    if way == "position" and label.position not in _POSITIONS:
        raise PlanError(
            key_text((*path, way)),
            "is none of the words",
            allowed=" | ".join(map(show, _POSITIONS)),
            received=show(label.position),
        )
    if way == "map" and not label.values:
        raise PlanError(key_text((*path, "values")), "is missing: the new names of the values")
    if way == "bin":
        rising = all(low < high for low, high in itertools.pairwise(label.edges))
        if not label.edges or not rising:
            raise PlanError(key_text((*path, "edges")), "must be rising numbers", received=show(label.edges))
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
            received=" from ".join(map(show, error.args[1])),
        ) from None


def _check_column(plan: Plan, column: str, key: str) -> None:
    if column.startswith(LOG):
        if not plan.log.file:
            raise PlanError(
                key, "is a column of the log, and the plan has none: log.file is empty", received=show(column)
            )
        return
    known = known_columns(plan)
    if column not in known and column != "run":
        raise PlanError(
            key,
            "must name a label of a slot's codes, slot.label, a column of the log or a derived label",
            allowed=" | ".join(known) or "none: no code of a slot has labels",
            received=show(column),
        )


def _check_rule_labels(plan: Plan) -> None:
    taken = {*(label.name for label in plan.labels), *trial_columns(plan), "run"}
    for place, rule in enumerate(plan.epochs.rule, start=1):
        for column, text in rule.labels.items():
            key = key_text(("epochs", "rule", place, "labels", column))
            if column in FIXED_COLUMNS or column in taken:
                raise PlanError(
                    key, "is the name of a fixed or derived column; choose another", received=show(column)
                )
            if "." in column or not column:
                raise PlanError(key, "a rule's column has no point in its name", received=show(column))
            source = source_of(text)
            if source.meaning is not Meaning.TEXT:
                _check_column(plan, source.what, key)
            if source.meaning is Meaning.OTHER and not source.what.startswith(LOG):
                values = values_of(plan, source.what)
                if len(values) != 2:
                    raise PlanError(
                        key,
                        "there must be two values for one to be the other",
                        allowed="a column with two values",
                        received=" | ".join(map(show, values)) or "none known",
                    )


def _check_balance(plan: Plan) -> None:
    known = {*known_columns(plan), *rule_columns(plan), "run"}
    for place, column in enumerate(plan.balance.by, start=1):
        if column in known or (column.startswith(LOG) and plan.log.file):
            continue
        raise PlanError(
            key_text(("balance", "by", place)),
            "must name a label column",
            allowed=" | ".join(sorted(known)),
            received=show(column),
        )


def _check_stimulation(plan: Plan) -> None:
    facts = {name for name in StimulationFacts.__dataclass_fields__ if name != "columns"}
    for name in plan.stimulation.columns:
        key = key_text(("stimulation", "columns", name))
        if name not in facts:
            raise PlanError(key, "is unknown", allowed=" | ".join(sorted(facts)), received=show(name))
        if not plan.log.file:
            raise PlanError(key, f"needs a log: log.file is empty ({STIMULATION}{name})")
