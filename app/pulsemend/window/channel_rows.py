"""The channels of the open recording as the Recording stage lists them, and edits of their marks. No Qt."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from enum import StrEnum
from types import MappingProxyType

from pulsemend.mending.channel_evidence import NO_EVIDENCE, ChannelEvidence
from pulsemend.mending.prepare import with_positions
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.model.recording import Channel, RecordingFacts
from pulsemend.model.vocabulary import ChannelType

TYPE_WORDS: Mapping[ChannelType, str] = {
    ChannelType.EEG: "EEG",
    ChannelType.EOG: "EOG",
    ChannelType.EMG: "EMG",
    ChannelType.ECG: "ECG",
    ChannelType.MISC: "other",
    ChannelType.TRIGGER: "trigger",
}


class Placed(StrEnum):
    """How a channel's position is known."""

    BY_FILE = "in file"
    BY_NAME = "by name"
    UNKNOWN = "none"


class Condition(StrEnum):
    """Whether a channel is bad, and who says so."""

    GOOD = "good"
    BAD = "bad"
    BAD_IN_PLAN = "bad by the plan"
    FOUND_BAD = "found bad"


@dataclass(frozen=True)
class ChannelRow:
    """One channel.

    Parameters
    ----------
    name : str
    type : ChannelType
        As the marks have it.
    type_of_file : ChannelType
    placed : Placed
    position_m : tuple of 3 float or None
    condition : Condition
    evidence : tuple of str
        What speaks against it in the signal, with limits; also where the marks say that it is good.
    """

    name: str
    type: ChannelType
    type_of_file: ChannelType
    placed: Placed
    position_m: tuple[float, float, float] | None
    condition: Condition
    evidence: tuple[str, ...] = ()

    @property
    def is_bad(self) -> bool:
        """Whether it is bad, whoever says so."""
        return self.condition is not Condition.GOOD

    @property
    def words(self) -> str:
        """Name, type and condition, for tooltips and screen readers."""
        return ", ".join([self.name, TYPE_WORDS[self.type], self.condition, *self.evidence])


def channel_rows(
    facts: RecordingFacts,
    plan: Plan | None,
    marks: Marks,
    against: Mapping[str, ChannelEvidence] = MappingProxyType({}),
) -> tuple[ChannelRow, ...]:
    """List the channels in the order of the file.

    Parameters
    ----------
    facts : RecordingFacts
        Of the recording.
    plan : Plan or None
        Its bad channels are bad in every recording.
    marks : Marks
        Of this recording.
    against : mapping of str to ChannelEvidence
        What was learned from the signal, by name.
    """
    in_plan = frozenset(plan.channels.bad) if plan is not None else frozenset()
    placed = with_positions(facts).channels
    return tuple(
        ChannelRow(
            name=channel.name,
            type=marks.types.get(channel.name, channel.type),
            type_of_file=channel.type,
            placed=_placed(channel, known),
            position_m=known.position_m,
            condition=_condition(channel.name, in_plan, marks, against.get(channel.name, NO_EVIDENCE)),
            evidence=against.get(channel.name, NO_EVIDENCE).lines,
        )
        for channel, known in zip(facts.channels, placed, strict=True)
    )


def with_type(marks: Marks, row: ChannelRow, kind: ChannelType) -> Marks:
    """Give a channel a type; that of the file needs no mark.

    Parameters
    ----------
    marks : Marks
        As they are.
    row : ChannelRow
        Which channel.
    kind : ChannelType
        What it is to be.
    """
    types = {name: one for name, one in marks.types.items() if name != row.name}
    if kind is not row.type_of_file:
        types[row.name] = kind
    return replace(marks, types=types)


def counts_of_types(rows: Iterable[ChannelRow]) -> str:
    """Count the channels of each type, in words."""
    counts = dict.fromkeys(ChannelType, 0)
    for row in rows:
        counts[row.type] += 1
    return ", ".join(f"{count} {TYPE_WORDS[kind]}" for kind, count in counts.items() if count)


def listed(names: Iterable[str], most: int = 3) -> str:
    """Name a few things and count the rest."""
    every = list(names)
    few = ", ".join(every[:most])
    return f"{few} and {len(every) - most} more" if len(every) > most else few


def _placed(channel: Channel, known: Channel) -> Placed:
    if channel.position_m is not None:
        return Placed.BY_FILE
    return Placed.UNKNOWN if known.position_m is None else Placed.BY_NAME


def _condition(name: str, in_plan: frozenset[str], marks: Marks, against: ChannelEvidence) -> Condition:
    if name in in_plan and name not in marks.good:
        return Condition.BAD_IN_PLAN
    if name in marks.bad:
        return Condition.BAD
    return Condition.FOUND_BAD if against.is_found and name not in marks.good else Condition.GOOD
