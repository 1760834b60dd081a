"""What the keys about trials, blocks, logs and onsets must be to each other; of labels see `label_checks`."""

from __future__ import annotations

import itertools
from collections.abc import Iterator

from pulsemend.errors import PlanError
from pulsemend.model.keys import show
from pulsemend.model.label_checks import check_labels, is_readable
from pulsemend.model.label_columns import SOURCE, slot_columns
from pulsemend.model.plan import Group, Plan, Slot
from pulsemend.model.toml_lines import KeyPath, key_text
from pulsemend.model.trial_kinds import LARGEST_VARIANTS, count_variants, kinds, slot_names, variants
from pulsemend.model.vocabulary import Role, StandIn

KEPT_NAMES = ("log", "stimulation")
"""Names that stand before the point of other columns, so no slot may have them."""


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
    _check_codes(plan)
    _check_groups(plan)
    _check_slots(plan)
    _check_variants(plan)
    _check_blocks(plan)
    _check_log(plan)
    _check_onset(plan)
    check_labels(plan)


def _check_codes(plan: Plan) -> None:
    for marker in plan.markers:
        for label, value in marker.labels.items():
            if not is_readable(label):
                raise PlanError(
                    key_text(("markers", marker.code, "labels", label)),
                    "its label has no name that can be read",
                    allowed="another name",
                    received=f"{show(label)} = {show(value)}",
                )
    for bits in plan.bits:
        if not is_readable(bits.name):
            raise PlanError(
                key_text(("bits", bits.name, "at")),
                "its field has no name that can be read",
                allowed="another name",
                received=show(bits.name),
            )
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
    roles = used_roles(plan)
    for place, slot in enumerate(plan.trial, start=1):
        path: KeyPath = ("trial", place)
        earlier = [one.slot for one in plan.trial[: place - 1]]
        if slot.slot in earlier or slot.slot in KEPT_NAMES:
            problem = (
                "names an earlier slot too" if slot.slot in earlier else "is kept for other columns of labels"
            )
            raise PlanError(
                key_text((*path, "slot")), problem, allowed="another name", received=show(slot.slot)
            )
        if place == 1:
            _check_first_slot(slot, path)
        if slot.after:
            _check_after(slot, path, plan)
        from_signal = plan.finds_pulses and slot.role is Role.PULSE
        if slot.role not in roles and not slot.optional and not from_signal:
            raise PlanError(
                key_text((*path, "role")),
                "no code under [markers] has this role, nor any value under [bits], so every trial would be "
                "incomplete",
                allowed=" | ".join(
                    show(role) for role in Role if role in roles - {Role.IGNORE, Role.UNDECIDED}
                ),
                received=show(slot.role),
            )
        _check_stand_in(slot, path)
        _check_source_label(slot, plan)


def used_roles(plan: Plan) -> frozenset[Role]:
    """Roles that the plan gives to codes, by themselves or by fields of bits.

    Parameters
    ----------
    plan : Plan
        What to look at.
    """
    of_bits = {role for bits in plan.bits for role in bits.roles.values()}
    return frozenset({marker.role for marker in plan.markers} | of_bits)


def _check_first_slot(first: Slot, path: KeyPath) -> None:
    if first.after_s is not None or first.after:
        key = "after_s" if first.after_s is not None else "after"
        raise PlanError(
            key_text((*path, key)),
            "the first slot starts the trial: nothing comes before it",
            allowed=f"no {key}",
            received=show(getattr(first, key)),
        )
    if first.optional:
        raise PlanError(
            key_text((*path, "optional")),
            "the first slot starts the trial and cannot be optional",
            allowed="false",
            received="true",
        )


def _check_after(slot: Slot, path: KeyPath, plan: Plan) -> None:
    """Refuse what is no earlier slot; those of another group are named with the number of their repeat."""
    place = path[1]
    earlier = plan.trial[: place - 1] if isinstance(place, int) else ()
    allowed = [
        name
        for one in earlier
        for name in ([one.slot] if one.group in ("", slot.group) else _repeated(one, plan))
    ]
    if slot.after not in allowed:
        raise PlanError(
            key_text((*path, "after")),
            "must name an earlier slot",
            allowed=" | ".join(show(name) for name in allowed),
            received=show(slot.after),
        )


def _repeated(slot: Slot, plan: Plan) -> list[str]:
    """Names of a slot in all repeats of its group."""
    if not slot.group:
        return [slot.slot]
    times = next((group.times[1] for group in plan.groups if group.name == slot.group), 0)
    return [f"{slot.slot}{repeat}" for repeat in range(1, times + 1)]


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
    """Refuse labels of the name that says what filled the slot."""
    from_signal = slot.from_signal or (plan.finds_pulses and slot.role is Role.PULSE)
    if slot.stand_in is StandIn.NONE and not from_signal:
        return
    problem = f"is kept for what filled slot {show(slot.slot)}"
    for bits in plan.bits:
        if bits.name == SOURCE:
            raise PlanError(
                key_text(("bits", SOURCE, "at")),
                f"its name {problem}",
                allowed="another name",
                received=show(SOURCE),
            )
    for marker in plan.markers:
        if marker.role is slot.role and SOURCE in marker.labels:
            raise PlanError(
                key_text(("markers", marker.code, "labels", SOURCE)),
                problem,
                allowed="another name",
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
                allowed="slots of one group next to each other",
                received=show(slot.group),
            )
    for group in plan.groups:
        _check_times(group, plan)
        _check_first_of_group(group, plan)


def _check_times(group: Group, plan: Plan) -> None:
    path = ("group", group.name)
    if all(slot.group != group.name for slot in plan.trial):
        raise PlanError(
            key_text((*path, "times")),
            "no slot belongs to this group",
            allowed=f"a slot with group = {show(group.name)}",
            received=show(list(group.times)),
        )
    if group.times[1] < 1:
        raise PlanError(
            key_text((*path, "times")),
            "its slots would never be there",
            allowed="[least, most] with a most of 1 or more",
            received=show(list(group.times)),
        )
    if group.times[1] > 1 and group.between_s is None:
        raise PlanError(
            key_text((*path, "between_s")),
            "is missing; repeats need the time from one to the next",
            allowed="[least, most] in s",
        )


def _check_first_of_group(group: Group, plan: Plan) -> None:
    """Refuse what a repeat cannot begin with, and a beginning of trials that may be absent."""
    for kind in kinds(plan):
        own = [slot for slot in plan.trial if not slot.kinds or kind in slot.kinds]
        first = next((slot for slot in own if slot.group == group.name), None)
        if first is None:
            continue
        of_kind = f" in kind {show(kind)}" if kind else ""
        if first.optional:
            raise PlanError(
                key_text(("trial", plan.trial.index(first) + 1, "optional")),
                f"is the first slot of group {show(group.name)}{of_kind}: every repeat starts with it, so it "
                "cannot be optional",
                allowed="false",
                received="true",
            )
        if first is own[0] and group.times[0] == 0:
            raise PlanError(
                key_text(("group", group.name, "times")),
                f"starts the trial{of_kind} and cannot be absent",
                allowed="[least, most] with a least of 1 or more",
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
    places: dict[str, int] = {}
    for name, place in _places(plan):
        if name in places:
            raise PlanError(
                key_text(("trial", place, "slot")),
                "a repeated slot gets the name of another one",
                allowed="another name",
                received=show(name),
            )
        places[name] = place
    for variant in variants(plan):
        for order, slot in enumerate(variant.slots):
            at: KeyPath = ("trial", places[slot.slot])
            if order == 0 and slot.optional:
                raise PlanError(
                    key_text((*at, "optional")),
                    f"the first slot of kind {show(variant.kind)} starts its trials and cannot be optional",
                    allowed="false",
                    received="true",
                )
            if order and slot.after_s is None:
                raise PlanError(
                    key_text((*at, "after_s")),
                    "is missing; every slot but the first needs its time limits",
                    allowed="[least, most] in s",
                )
            if order and slot.after not in {one.slot for one in variant.slots[:order]}:
                _refuse_absent(slot, at, plan)


def _places(plan: Plan) -> Iterator[tuple[str, int]]:
    """Names of all slots, repeats numbered, with the place in the plan that they come from."""
    for place, slot in enumerate(plan.trial, start=1):
        for name in _repeated(slot, plan):
            yield name, place


def _refuse_absent(slot: Slot, at: KeyPath, plan: Plan) -> None:
    """Refuse a reference to a slot that is not there in some kind, or with few repeats."""
    always = [
        {one.slot for one in variant.slots}
        for variant in variants(plan)
        if any(one.slot == slot.slot for one in variant.slots)
    ]
    earlier = itertools.takewhile(lambda name: name != slot.slot, slot_names(plan))
    raise PlanError(
        key_text((*at, "after")),
        "must name an earlier slot that is there in every kind of trial and with every number of repeats",
        allowed=" | ".join(show(name) for name in earlier if all(name in own for own in always)),
        received=show(slot.after),
    )


def _check_blocks(plan: Plan) -> None:
    blocks = plan.blocks
    if bool(blocks.practice_column) != bool(blocks.practice_values):
        missing = "practice_values" if blocks.practice_column else "practice_column"
        raise PlanError(
            f"blocks.{missing}",
            "is missing: practice is told by a column of the log and its values",
            allowed="text, not empty" if blocks.practice_values else "a list of texts, not empty",
        )
    if blocks.practice_column and not plan.log.file:
        raise PlanError(
            "blocks.practice_column",
            "needs a log: log.file is empty",
            allowed='"", or a log.file',
            received=show(blocks.practice_column),
        )
    if blocks.after_pause and not (blocks.codes or blocks.pause_s or blocks.practice_codes):
        raise PlanError(
            "blocks.after_pause",
            "sets trials aside at the beginning of blocks, and nothing begins one",
            allowed="0, or codes, practice_codes or pause_s",
            received=str(blocks.after_pause),
        )
    for key, codes in (("codes", blocks.codes), ("practice_codes", blocks.practice_codes)):
        for place, code in enumerate(codes, start=1):
            if plan.role_of(code) not in (Role.OTHER, Role.IGNORE):
                raise PlanError(
                    key_text(("blocks", key, place)),
                    "begins a block, so it can be no marker of a trial",
                    allowed='a code with role = "other" or "ignore", or one that has no role',
                    received=f"{show(code)}, role {show(plan.role_of(code))}",
                )


def _check_log(plan: Plan) -> None:
    log = plan.log
    names = slot_names(plan)
    if not log.file:
        for key in ("slots", "time", "trial", "recorded_trial", "columns"):
            if getattr(log, key):
                raise PlanError(
                    f"log.{key}",
                    "says nothing without a log: log.file is empty",
                    allowed="empty, or a log.file",
                    received=show(getattr(log, key)),
                )
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
            "is missing: the slots that the rows belong to",
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
        raise PlanError(
            "log.trial",
            "is missing: recorded_trial is compared with the log's own trial numbers",
            allowed="a column of the log",
        )


def _check_onset(plan: Plan) -> None:
    seen: set[str] = set()
    for place, rule in enumerate(plan.onset, start=1):
        if not rule.codes:
            raise PlanError(
                key_text(("onset", place, "codes")),
                "is empty: no marker is moved",
                allowed="codes of what is seen or heard",
                received="[]",
            )
        for number, code in enumerate(rule.codes, start=1):
            key = key_text(("onset", place, "codes", number))
            if plan.role_of(code) is Role.PULSE:
                raise PlanError(
                    key,
                    "is a pulse: its onset is found in the EEG, and no other sensor moves it",
                    allowed="codes of what is seen or heard",
                    received=show(code),
                )
            if code in seen:
                raise PlanError(
                    key,
                    "is moved by an earlier rule already",
                    allowed="every code once",
                    received=show(code),
                )
            seen.add(code)
