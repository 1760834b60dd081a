"""Slots as the plan means them: groups repeated and numbered, one list of slots for each kind of trial."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

from pulsemend.model.plan import Plan, Slot
from pulsemend.model.vocabulary import Role

LARGEST_VARIANTS = 60
"""More combinations of kinds and repeats than this are refused: no design needs them."""


@dataclass(frozen=True)
class Variant:
    """One way a trial may run: its slots in order, groups written out, every `after` named.

    Parameters
    ----------
    kind : str
        Empty where the plan has one kind only.
    repeats : mapping of str to int
        Repeats of every group.
    slots : tuple of Slot
    """

    kind: str
    repeats: Mapping[str, int] = field(hash=False)
    slots: tuple[Slot, ...]


def kinds(plan: Plan) -> tuple[str, ...]:
    """Kinds of trial in order of first mention; one empty name where the plan has a single kind."""
    found = dict.fromkeys(kind for slot in plan.trial for kind in slot.kinds)
    return tuple(found) or ("",)


def expanded_slots(plan: Plan) -> tuple[Slot, ...]:
    """All slots of all kinds in the plan's order, groups with most repeats: what columns are made of."""
    repeats = {group.name: group.times[1] for group in plan.groups}
    return _resolved(_written_out(_slots(plan), repeats, plan))


def slot_names(plan: Plan) -> tuple[str, ...]:
    """Names of all slots, repeats numbered."""
    return tuple(slot.slot for slot in expanded_slots(plan))


def count_variants(plan: Plan) -> int:
    """How many variants a plan has."""
    count = len(kinds(plan))
    for group in plan.groups:
        count *= max(0, group.times[1] - group.times[0] + 1)
    return count


def variants(plan: Plan) -> tuple[Variant, ...]:
    """All ways a trial may run.

    Parameters
    ----------
    plan : Plan
        A plan that `check_plan` accepts.
    """
    found: list[Variant] = []
    groups = [group for group in plan.groups if any(slot.group == group.name for slot in plan.trial)]
    ranges = [range(group.times[0], group.times[1] + 1) for group in groups]
    for kind in kinds(plan):
        own = [slot for slot in _slots(plan) if not slot.kinds or kind in slot.kinds]
        for counts in itertools.product(*ranges):
            repeats = dict(zip((group.name for group in groups), counts, strict=True))
            slots = _resolved(_written_out(own, repeats, plan))
            if slots and all(slots != other.slots for other in found if other.kind == kind):
                found.append(Variant(kind, repeats, slots))
    return tuple(found)


def _slots(plan: Plan) -> tuple[Slot, ...]:
    """Give the plan's slots; pulses of the signal fill those of pulses where it tells of them anyway."""
    if not plan.finds_pulses:
        return plan.trial
    return tuple(replace(one, from_signal=True) if one.role is Role.PULSE else one for one in plan.trial)


def _written_out(slots: Sequence[Slot], repeats: Mapping[str, int], plan: Plan) -> list[Slot]:
    """Repeat and number the slots of groups; references to slots of the same repeat are numbered, too."""
    between = {group.name: group.between_s for group in plan.groups}
    found: list[Slot] = []
    for name, run in itertools.groupby(slots, key=lambda slot: slot.group):
        members = list(run)
        if not name:
            found += members
            continue
        inside = {member.slot for member in members}
        for repeat in range(1, repeats.get(name, 1) + 1):
            for place, member in enumerate(members):
                after = f"{member.after}{repeat}" if member.after in inside else member.after
                after_s = between.get(name) if place == 0 and repeat > 1 else member.after_s
                after = "" if place == 0 and repeat > 1 else after
                found.append(replace(member, slot=f"{member.slot}{repeat}", after=after, after_s=after_s))
    return found


def _resolved(slots: Sequence[Slot]) -> tuple[Slot, ...]:
    """Name the slot that every `after_s` counts from."""
    found: list[Slot] = []
    reference = ""
    for slot in slots:
        after = slot.after or reference
        found.append(replace(slot, after=after) if found else replace(slot, after="", after_s=None))
        if not slot.optional:
            reference = slot.slot
    return tuple(found)
