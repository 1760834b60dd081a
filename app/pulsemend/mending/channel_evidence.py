"""What speaks against each channel, by name and in words, for whoever shows it."""

from __future__ import annotations

from dataclasses import dataclass

from pulsemend.engine.bad_channels import evidence
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.setup import Setup


@dataclass(frozen=True)
class ChannelEvidence:
    """One channel.

    Parameters
    ----------
    is_found : bool
        Whether the search calls it bad, whatever plan and marks say.
    lines : tuple of str
        Value, limit and number of windows of everything that speaks against it, the reasons first.
    """

    is_found: bool = False
    lines: tuple[str, ...] = ()


NO_EVIDENCE = ChannelEvidence()


def channel_evidence(setup: Setup, estimates: Estimates) -> dict[str, ChannelEvidence]:
    """Collect the evidence of all channels against which anything speaks, or that may be bridged.

    Parameters
    ----------
    setup : Setup
        Names the channels.
    estimates : Estimates
        From `fit` with the same setup.
    """
    judgement = estimates.channels
    if judgement is None:
        return {}
    found: dict[str, ChannelEvidence] = {}
    names = [channel.name for channel in setup.channels]
    for place, name in enumerate(names):
        lines = evidence(judgement, place)
        for a, b in judgement.bridged:
            if place in (a, b):
                lines.append(f"records the same as {names[b if place == a else a]}: perhaps bridged")
        if lines:
            found[name] = ChannelEvidence(bool(judgement.bad[place]), tuple(lines))
    return found
