"""A suggestion for the gap around the pulses, for all channels and for those that need a longer one."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

from pulsemend.engine.estimates import Estimates
from pulsemend.engine.gap_evidence import GapEvidence, gap_evidence
from pulsemend.engine.repeats import repeats_of
from pulsemend.engine.setup import Setup
from pulsemend.model.plan import OtherGap, Plan, Window
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import PulseState
from pulsemend.progress import Work
from pulsemend.signal.gap_end import SEARCH_S, GapEnd
from pulsemend.signal.repeats import Repeat
from pulsemend.units import s_to_ms, v_to_uv

USUAL_START_MS = -2.0
"""Where gaps mostly begin (facts 1g and 1h: -2 ms in the commonest windows)."""

MARGIN_MS = 0.5
STEP_MS = 0.5
COVERED_SHARE = 0.8
NEAR_MS = 3.0
"""The suggested gap is long enough for so many of the channels, and for those that end shortly after; the
others get one of their own. Common practice: none known."""

RISE_SAMPLES = 2
"""So many samples before the onset are the rise of the spike itself, no ringing."""

REPEAT_MARGIN_MS = 1.0


@dataclass(frozen=True)
class ChannelEnd:
    """When the artifact is over in one channel.

    Parameters
    ----------
    channel : str
    end_ms : float or None
        Since the onset; None where there is nothing beyond the pulse itself.
    sign : str
        What tells so; empty without an end.
    goes_on : bool
        Whether it is not over where the search ends: a matter of the decay.
    """

    channel: str
    end_ms: float | None
    sign: str = ""
    goes_on: bool = False


@dataclass(frozen=True)
class RechargeOffer:
    """A further gap that is offered.

    Parameters
    ----------
    window_ms : tuple of 2 float
    words : str
        What was found.
    """

    window_ms: Window
    words: str


@dataclass(frozen=True)
class GapSuggestion:
    """What the signal suggests.

    Parameters
    ----------
    window_ms : tuple of 2 float
        For all channels.
    words : str
        Why it ends there.
    ends : tuple of ChannelEnd
        Of all good EEG channels, those that end last first.
    exceptions : mapping of str to tuple of 2 float
        Channels that need a longer gap.
    ringing : str
        What lies before the onset, in words; empty for nothing.
    n_pulses : int
        Pulses looked at.
    recharges : tuple of RechargeOffer
        Further gaps.
    """

    window_ms: Window
    words: str
    ends: tuple[ChannelEnd, ...]
    exceptions: Mapping[str, Window]
    ringing: str
    n_pulses: int
    recharges: tuple[RechargeOffer, ...] = ()


NO_SUGGESTION = GapSuggestion((USUAL_START_MS, 0.0), "", (), {}, "", 0)


def suggested_gaps(recording: Recording, setup: Setup, estimates: Estimates) -> Work[GapSuggestion]:
    """Suggest gaps from the signal around the pulses.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    setup : Setup
        Plan and marks, bound; the gap need not be decided.
    estimates : Estimates
        Pulses.

    Yields
    ------
    Progress

    Returns
    -------
    GapSuggestion
        `NO_SUGGESTION` where fewer than five pulses stand alone; recharges are offered all the same.
    """
    seen = [pulse for pulse in estimates.pulses if pulse.state is not PulseState.MARKED_ONLY]
    found = yield from gap_evidence(recording, setup, [pulse.sample for pulse in seen])
    repeats = yield from repeats_of(recording, setup, estimates)
    held_ms = s_to_ms(max((pulse.held_s for pulse in seen), default=0.0))
    suggestion = NO_SUGGESTION if found is None else _suggestion(setup, found, held_ms)
    return replace(suggestion, recharges=tuple(map(_offer, repeats)))


def _suggestion(setup: Setup, found: GapEvidence, held_ms: float) -> GapSuggestion:
    names = [setup.channels[column].name for column in found.columns.tolist()]
    pairs = list(zip(names, found.ends, strict=True))
    ends = sorted((_channel_end(*pair) for pair in pairs), key=lambda one: -(one.end_ms or 0.0))
    known_ms = sorted(_end_ms(end) for end in found.ends)
    most_ms = known_ms[max(0, math.ceil(COVERED_SHARE * len(known_ms)) - 1)]
    covered = max(end_ms for end_ms in known_ms if end_ms <= most_ms + NEAR_MS)
    start_ms = USUAL_START_MS
    ringing = ""
    least_s = RISE_SAMPLES / setup.facts.rate_hz
    if found.ringing is not None and found.ringing.start_s > least_s * (1.0 + 1e-9):
        rings_ms = s_to_ms(found.ringing.start_s)
        start_ms = min(start_ms, -_rounded_up(rings_ms + MARGIN_MS))
        ringing = (
            f"the median pulse begins {rings_ms:.1f} ms before its onset in {found.ringing.n_channels} "
            f"channels, with up to {v_to_uv(found.ringing.size):.0f} uV"
        )
    if held_ms:
        start_ms = min(start_ms, -_rounded_up(held_ms + MARGIN_MS))
    last = next((one for one in ends if one.end_ms is not None and _rounded_up(one.end_ms) <= covered), None)
    words = "nothing beyond the pulse itself" if last is None else f"{last.channel}: {last.sign}"
    return GapSuggestion(
        window_ms=(start_ms, covered),
        words=words,
        ends=tuple(ends),
        exceptions={name: (start_ms, _end_ms(end)) for name, end in pairs if _end_ms(end) > covered},
        ringing=ringing,
        n_pulses=found.n_pulses,
    )


def _channel_end(name: str, end: GapEnd) -> ChannelEnd:
    if end.end_s is None or end.sign is None:
        return ChannelEnd(name, None)
    return ChannelEnd(name, s_to_ms(end.end_s), end.sign.value, end.goes_on)


def _end_ms(end: GapEnd) -> float:
    """End of a gap that covers a channel's artifact."""
    return _rounded_up(s_to_ms(SEARCH_S[0]) if end.end_s is None else s_to_ms(end.end_s))


def _rounded_up(ms: float) -> float:
    return math.ceil(ms / STEP_MS - 1e-6) * STEP_MS


def _offer(repeat: Repeat) -> RechargeOffer:
    first_ms = math.floor((s_to_ms(repeat.first_s) - REPEAT_MARGIN_MS) / STEP_MS) * STEP_MS
    last_ms = _rounded_up(s_to_ms(repeat.last_s) + REPEAT_MARGIN_MS)
    where = "after" if repeat.latency_s > 0 else "before"
    follows = ", its latency follows the pulse's amplitude" if repeat.follows_amplitude else ""
    words = (
        f"a deflection of {v_to_uv(repeat.size):.0f} uV {abs(s_to_ms(repeat.latency_s)):.1f} ms {where} "
        f"{repeat.n_seen} of {repeat.n_pulses} pulses{follows}"
    )
    return RechargeOffer((first_ms, last_ms), words)


def with_recharge(plan: Plan, offer: RechargeOffer) -> Plan:
    """Add an offered gap to a plan."""
    also = (*plan.pulses.also, OtherGap(offer.window_ms))
    ordered = tuple(sorted(also, key=lambda other: other.window_ms))
    return replace(plan, pulses=replace(plan.pulses, also=ordered))


def with_suggestion(plan: Plan, suggestion: GapSuggestion, channels: Sequence[str] = ()) -> Plan:
    """Take the suggested gap over into a plan.

    Parameters
    ----------
    plan : Plan
        As it is edited.
    suggestion : GapSuggestion
        From `suggested_gaps`.
    channels : sequence of str
        Take over the longer gaps of these channels, too.
    """
    own = {**plan.pulses.channels}
    own.update({name: suggestion.exceptions[name] for name in channels if name in suggestion.exceptions})
    return replace(plan, pulses=replace(plan.pulses, window_ms=suggestion.window_ms, channels=own))
