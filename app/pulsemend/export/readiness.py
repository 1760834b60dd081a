"""Readiness: the few values of a set, known here, that a person must judge, each with its limit."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from statistics import median

from pulsemend.export.check_items import CheckItem
from pulsemend.export.contents import EPOCHS_TSV
from pulsemend.export.found_set import FoundSet
from pulsemend.export.integrity import epochs_per_rule
from pulsemend.model.epochs import NOT_AVAILABLE
from pulsemend.model.vocabulary import ChannelType
from pulsemend.units import v_to_uv

MOST_OVER_USUAL = 6.0
"""Range of an epoch, over its good EEG channels, in medians of the set, above which it should be looked at
(common practice: none known; blinks stay below, pulses are ten times larger and more)."""

_MOST_NAMED = 5

LEAK_LIMIT_UV = 0.5
"""Leak above which an epoch should be looked at (common practice: none known; the mean of 100 epochs of 10 uV
has a noise of 1 uV)."""

REPLACED_LIMIT = 0.01
"""Difference of replaced shares above which two conditions should be looked at before they are compared
(common practice: none known; in an epoch of 1 s it is 10 ms)."""

MOST_CONDITIONS = 12
"""Labels with more distinct values within a rule are numbers or free text, not conditions."""


def check_readiness(found: FoundSet) -> list[CheckItem]:
    """List what a person must judge; what cannot be read is a matter of integrity.

    Parameters
    ----------
    found : FoundSet
        What was read.
    """
    items = []
    counts = epochs_per_rule(found)
    if counts:
        value = ", ".join(f"{name} {count}" for name, count in counts.items())
        passed = 2 * min(counts.values()) >= max(counts.values())
        items.append(
            CheckItem(
                "balance", "epochs per rule", value, "fewest at least half the most", passed, "readiness"
            )
        )
    rank = (found.facts or {}).get("rank")
    if found.hdf5 is not None and isinstance(rank, int):
        eeg = sum(c.type is ChannelType.EEG and c.status == "good" for c in found.hdf5.channels)
        rebuilt = sum(c.type is ChannelType.EEG and c.status == "rebuilt" for c in found.hdf5.channels)
        limit = f"at least {eeg - 1}: {eeg} good EEG channels, one less for a common reference"
        if rebuilt:
            limit += f"; {rebuilt} rebuilt from these add nothing"
        items.append(CheckItem("rank", "rank of the samples", str(rank), limit, rank >= eeg - 1, "readiness"))
    items += _replaced_by_condition(found)
    items += _standing_out(found)
    leaks = _leak_per_rule(found)
    if leaks:
        every = [one for rule in leaks.values() for one in rule]
        above = sum(one > LEAK_LIMIT_UV for one in every)
        worst = ", ".join(f"{name} {max(rule):.3g} uV" for name, rule in leaks.items())
        value = f"{above} of {len(every)} epochs above the limit; largest: {worst}"
        limit = f"{LEAK_LIMIT_UV:g} uV in every epoch"
        items.append(CheckItem("leak", "leak of pulses into epochs", value, limit, not above, "readiness"))
    return items


def _replaced_by_condition(found: FoundSet) -> list[CheckItem]:
    """Compare replaced shares between rules, and between the conditions of each label within a rule."""
    if found.hdf5 is None or len(found.shares) != len(found.hdf5.labels.name) or not found.shares:
        return []
    labels = found.hdf5.labels
    rules = _mean_shares(labels.name, found.shares)
    value = ", ".join(f"{name} {share:.2%}" for name, share in rules.items())
    differences, apart = [_range(rules)], []
    for rule in rules:
        of_rule = [place for place, name in enumerate(labels.name) if name == rule]
        for column, texts in labels.more.items():
            known = [place for place in of_rule if texts[place] not in ("", NOT_AVAILABLE)]
            values = _mean_shares([texts[i] for i in known], [found.shares[i] for i in known])
            if not 2 <= len(values) <= MOST_CONDITIONS:
                continue
            differences.append(_range(values))
            if _range(values) > REPLACED_LIMIT:
                least, most = (choose(values, key=values.__getitem__) for choose in (min, max))
                apart.append(f"{rule}, {column}: {most} {values[most]:.2%}, {least} {values[least]:.2%}")
    limit = "rules, and conditions within a rule, within 1 percentage point of each other"
    title = "replaced share per rule and condition"
    passed = max(differences) <= REPLACED_LIMIT
    detail = "; ".join(apart)
    return [CheckItem("replaced_by_rule", title, value, limit, passed, "readiness", detail)]


def _mean_shares(groups: Sequence[str], shares: Sequence[float]) -> dict[str, float]:
    per_group: dict[str, list[float]] = {}
    for group, share in zip(groups, shares, strict=True):
        per_group.setdefault(group, []).append(share)
    return {group: sum(of_group) / len(of_group) for group, of_group in per_group.items()}


def _range(values: Mapping[str, float]) -> float:
    # Shares are sums of flags over counts: a limit that is met exactly must not be missed by rounding.
    return round(float(max(values.values()) - min(values.values())), 9)


def _standing_out(found: FoundSet) -> list[CheckItem]:
    """Epochs far larger than the others: a pulse that nobody marked looks like this."""
    if found.hdf5 is None or not found.ranges_v or len(found.ranges_v) != len(found.hdf5.labels.name):
        return []
    usual_v = median(found.ranges_v)
    labels = found.hdf5.labels
    out = [
        f"{name} trial {trial} piece {piece}: {v_to_uv(range_v):.3g} uV"
        for name, trial, piece, range_v in zip(
            labels.name, labels.trial, labels.piece, found.ranges_v, strict=True
        )
        if range_v > MOST_OVER_USUAL * usual_v
    ]
    more = len(out) - _MOST_NAMED
    return [
        CheckItem(
            "ranges",
            "epochs far larger than the others",
            f"{len(out)} of {len(found.ranges_v)}; usual range {v_to_uv(usual_v):.3g} uV",
            f"none above {MOST_OVER_USUAL:g} times the usual: an unmarked pulse, for example",
            not out,
            "readiness",
            "; ".join(out[:_MOST_NAMED]) + (f"; and {more} more" if more > 0 else ""),
        )
    ]


def _leak_per_rule(found: FoundSet) -> dict[str, list[float]]:
    """Leaks in microvolts by rule, as the table of epochs has them; empty where none was measured."""
    table = found.tables.get(EPOCHS_TSV, {})
    per_rule: dict[str, list[float]] = {}
    for name, text in zip(table.get("name", ()), table.get("leak", ()), strict=False):
        try:
            per_rule.setdefault(name, []).append(float(text))
        except ValueError:
            continue  # n/a: no pulse is known
    return {name: leaks for name, leaks in per_rule.items() if leaks}
