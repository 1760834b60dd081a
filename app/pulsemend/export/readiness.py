"""Readiness: the few values of a set, known here, that a person must judge, each with its limit."""

from __future__ import annotations

from pulsemend.export.check_items import CheckItem
from pulsemend.export.contents import EPOCHS_TSV
from pulsemend.export.found_set import FoundSet
from pulsemend.export.integrity import epochs_per_rule
from pulsemend.model.vocabulary import ChannelType

LEAK_LIMIT_UV = 0.5
"""Leak above which an epoch should be looked at (common practice: none known; the mean of 100 epochs of 10 uV
has a noise of 1 uV)."""


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
        limit = f"at least {eeg - 1}: {eeg} good EEG channels, one less for a common reference"
        items.append(CheckItem("rank", "rank of the samples", str(rank), limit, rank >= eeg - 1, "readiness"))
    shares = _share_per_rule(found)
    if shares:
        value = ", ".join(f"{name} {share:.2%}" for name, share in shares.items())
        passed = max(shares.values()) - min(shares.values()) <= 0.01
        limit = "rules within 1 percentage point of each other"
        items.append(
            CheckItem("replaced_by_rule", "replaced share per rule", value, limit, passed, "readiness")
        )
    leaks = _leak_per_rule(found)
    if leaks:
        every = [one for rule in leaks.values() for one in rule]
        above = sum(one > LEAK_LIMIT_UV for one in every)
        worst = ", ".join(f"{name} {max(rule):.3g} uV" for name, rule in leaks.items())
        value = f"{above} of {len(every)} epochs above the limit; largest: {worst}"
        limit = f"{LEAK_LIMIT_UV:g} uV in every epoch"
        items.append(CheckItem("leak", "leak of pulses into epochs", value, limit, not above, "readiness"))
    return items


def _share_per_rule(found: FoundSet) -> dict[str, float]:
    if found.hdf5 is None or len(found.shares) != len(found.hdf5.labels.name):
        return {}
    per_rule: dict[str, list[float]] = {}
    for name, share in zip(found.hdf5.labels.name, found.shares, strict=True):
        per_rule.setdefault(name, []).append(share)
    return {name: sum(shares) / len(shares) for name, shares in per_rule.items()}


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
