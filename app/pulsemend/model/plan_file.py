"""Plans as files: reading with every refusal named and placed, writing with comments kept."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from pulsemend.errors import PlanError
from pulsemend.model.keys import key_defaults, show
from pulsemend.model.plan import (
    About,
    Balance,
    BitField,
    Blocks,
    Channels,
    DerivedLabel,
    EpochRule,
    Epochs,
    Export,
    Filter,
    Group,
    Log,
    MarkerPlan,
    OnsetRule,
    OtherGap,
    Plan,
    Pulses,
    Slot,
    StimulationFacts,
)
from pulsemend.model.plan_checks import check_plan
from pulsemend.model.plan_keys import LATER_PLAN_KEYS, PLAN_KEYS, SCHEMA
from pulsemend.model.toml_edit import new_text, updated_text
from pulsemend.model.toml_lines import key_text
from pulsemend.model.toml_tables import Source, parse, read_text, write_text

_RECORDINGS = (".vhdr", ".eeg", ".vmrk", ".edf", ".bdf", ".fif", ".fif.gz")
_NAMED_BY = {"trial": "slot", "epochs.rule": "name", "pulses.also": "", "onset": ""}


@dataclass(frozen=True)
class PlanFile:
    """A plan together with the text it came from.

    Parameters
    ----------
    plan : Plan
    source : Source
        Text, name and lines; ``with plan_file.source.located(): ...`` gives later refusals their line.
    warnings : tuple of str
        One sentence each: allowed, but perhaps not meant.
    """

    plan: Plan
    source: Source
    warnings: tuple[str, ...] = ()

    @property
    def text(self) -> str:
        """The text as it was read."""
        return self.source.text


def read_plan(path: Path) -> PlanFile:
    """Read a plan.

    Parameters
    ----------
    path : Path
        The TOML file.

    Returns
    -------
    PlanFile

    Raises
    ------
    PlanError
        The file cannot be read, or a key is unknown, missing, impossible or of a later version.
    """
    try:
        return parse_plan(read_text(path, PlanError), str(path))
    except PlanError as error:
        if path.is_file() and _is_recording(path):
            raise PlanError(
                "",
                "is a recording, not a plan; name the plan's file (.toml), or draft one from the recording",
                path=str(path),
            ) from error
        raise


def _is_recording(path: Path) -> bool:
    """Whether a file that is no plan says by its extension or its first line that it is a recording."""
    if path.name.lower().endswith(_RECORDINGS):
        return True
    try:
        with path.open("rb") as file:
            first = file.readline(200)
    except OSError:
        return False
    return any(words in first for words in (b"Header File", b"Marker File"))


def parse_plan(text: str, name: str = "") -> PlanFile:
    """Read a plan from its text.

    Parameters
    ----------
    text : str
        TOML, schema 1.
    name : str
        The file's name for messages.

    Returns
    -------
    PlanFile

    Raises
    ------
    PlanError
        A key is unknown, missing, impossible or of a later version.
    """
    source = parse(text, name, PLAN_KEYS, LATER_PLAN_KEYS, PlanError)
    with source.located():
        plan = _plan(source.tree)
        warnings = check_plan(plan)
    return PlanFile(plan, source, warnings)


def plan_text(plan: Plan) -> str:
    """Write a plan as a new text without comments; defaults are left out.

    Parameters
    ----------
    plan : Plan
        What to write.
    """
    return new_text(plan_tree(plan), key_defaults(PLAN_KEYS), _NAMED_BY)


def update_text(text: str, plan: Plan) -> str:
    """Change a plan's text so that it means another plan, comments and order kept.

    Parameters
    ----------
    text : str
        A valid plan.
    plan : Plan
        What the new text has to mean.

    Returns
    -------
    str
        The text; only keys whose value changed are touched.

    Raises
    ------
    PlanError
        The text is no valid plan.
    """
    if _meaning(parse_plan(text).plan) == _meaning(plan):
        return text
    changed = updated_text(text, plan_tree(plan), key_defaults(PLAN_KEYS), _NAMED_BY)
    # Meaning goes before comments: some ways to write TOML (dotted keys, inline tables) cannot take every
    # change in place.
    return changed if _means(changed, plan) else plan_text(plan)


def write_plan(path: Path, plan: Plan, text: str = "") -> str:
    """Write a plan, whole or not at all.

    Parameters
    ----------
    path : Path
        Where to.
    plan : Plan
        What to write.
    text : str
        The text it was read from, whose comments are kept; empty: a new text.

    Returns
    -------
    str
        The text written.
    """
    new = update_text(text, plan) if text else plan_text(plan)
    write_text(path, new)
    return new


def _meaning(plan: Plan) -> Plan:
    """Give the plan with codes, groups and labels in a fixed order: theirs decides about nothing."""
    return replace(
        plan,
        markers=tuple(sorted(plan.markers, key=lambda marker: marker.code)),
        groups=tuple(sorted(plan.groups, key=lambda group: group.name)),
        labels=tuple(sorted(plan.labels, key=lambda label: label.name)),
    )


def _means(text: str, plan: Plan) -> bool:
    try:
        return _meaning(parse_plan(text).plan) == _meaning(plan)
    except PlanError:
        return False


def plan_tree(plan: Plan) -> dict[str, Any]:
    """All values of a plan as nested tables, absent ones as None.

    Parameters
    ----------
    plan : Plan
        What to take apart.
    """
    return {
        "pulsemend": SCHEMA,
        "about": vars(plan.about),
        "markers": {m.code: {"role": m.role, "labels": dict(m.labels)} for m in plan.markers},
        "bits": {
            bits.name: {"at": bits.at, "names": dict(bits.names), "roles": dict(bits.roles)}
            for bits in plan.bits
        },
        "trial": [vars(slot) for slot in plan.trial],
        "group": {group.name: {"times": group.times, "between_s": group.between_s} for group in plan.groups},
        "blocks": vars(plan.blocks),
        "log": vars(plan.log),
        "onset": [vars(rule) for rule in plan.onset],
        "pulses": {
            **vars(plan.pulses),
            "also": [vars(gap) for gap in plan.pulses.also],
            "channels": dict(plan.pulses.channels),
        },
        "filter": vars(plan.filter),
        "channels": vars(plan.channels),
        "epochs": {
            "length_s": plan.epochs.length_s,
            "rule": [{**vars(rule), "labels": dict(rule.labels)} for rule in plan.epochs.rule],
        },
        "labels": {label.name: _label_tree(label) for label in plan.labels},
        "balance": vars(plan.balance),
        "stimulation": {**vars(plan.stimulation), "columns": dict(plan.stimulation.columns)},
        "export": vars(plan.export),
    }


def _label_tree(label: DerivedLabel) -> dict[str, Any]:
    tree = {**vars(label), "values": dict(label.values)}
    del tree["name"]
    return tree


def _plan(tree: Mapping[str, Any]) -> Plan:
    pulses = tree["pulses"]
    return Plan(
        about=About(**tree["about"]),
        markers=tuple(MarkerPlan(code, **values) for code, values in tree["markers"].items()),
        trial=tuple(Slot(**slot) for slot in tree["trial"]),
        pulses=Pulses(**{**pulses, "also": tuple(OtherGap(**gap) for gap in pulses["also"])}),
        filter=Filter(**tree["filter"]),
        channels=Channels(**tree["channels"]),
        epochs=Epochs(
            length_s=tree["epochs"]["length_s"],
            rule=tuple(EpochRule(**rule) for rule in tree["epochs"]["rule"]),
        ),
        export=Export(**tree["export"]),
        bits=tuple(
            BitField(name, _wholes(values["at"], "bits", name, "at"), values["names"], values["roles"])
            for name, values in tree["bits"].items()
        ),
        groups=tuple(
            Group(name, _wholes(values["times"], "group", name, "times"), values["between_s"])
            for name, values in tree["group"].items()
        ),
        blocks=Blocks(**tree["blocks"]),
        log=Log(**tree["log"]),
        labels=tuple(DerivedLabel(name, **values) for name, values in tree["labels"].items()),
        onset=tuple(OnsetRule(**rule) for rule in tree["onset"]),
        balance=Balance(**tree["balance"]),
        stimulation=StimulationFacts(**tree["stimulation"]),
    )


def _wholes(pair: tuple[float, float], *path: str) -> tuple[int, int]:
    """Give two whole numbers, where TOML may write decimals too."""
    low, high = (round(number) for number in pair)
    if (low, high) != pair:
        raise PlanError(
            key_text(path), "must be two whole numbers", allowed="[least, most]", received=show(pair)
        )
    return low, high
