"""What gaps and fill do to a recording and its epochs, in numbers."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from pulsemend.mending.learned import Learned
from pulsemend.mending.pulse_view import StepLeft, ground_of, step_left
from pulsemend.model.recording import Recording
from pulsemend.progress import Progress, Work
from pulsemend.signal.gaps import shortened, window_to_samples
from pulsemend.trials.mirrors import mirror_gaps
from pulsemend.units import s_to_ms


@dataclass(frozen=True)
class Effect:
    """What is replaced.

    Parameters
    ----------
    gap_samples : int
        Length of the gap around each pulse, in most channels.
    gap_ms : float
        The same in time: samples times the sampling interval.
    n_gaps : int
        Gaps in a channel, other gaps included; overlapping ones count once.
    n_shortened : int
        Gaps of these with less good signal beside them than the fill wants.
    left : StepLeft or None
        What the gap leaves at its end in the worst channel.
    replaced : mapping of str to float or None
        By rule, in the plan's order: share of its kept epochs' samples that rest on replaced ones, in mirror
        gaps too; None without kept epochs.
    """

    gap_samples: int
    gap_ms: float
    n_gaps: int
    n_shortened: int
    left: StepLeft | None
    replaced: Mapping[str, float | None]


def effect(recording: Recording, learned: Learned) -> Work[Effect]:
    """Count gaps and replaced samples, and measure what is left beside the gaps.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    learned : Learned
        With the present settings.

    Yields
    ------
    Progress

    Returns
    -------
    Effect
    """
    setup, plan = learned.setup, learned.plan
    kept = learned.decision.kept
    size = n_gaps = n_shortened = 0
    if setup.groups:
        usual = max(setup.groups, key=lambda group: group.columns.size)
        start, stop = window_to_samples(0, usual.windows_s[0], setup.facts.rate_hz)
        size = stop - start
        onsets = learned.estimates.onsets
        gaps = [gap for segment in setup.facts.segments for gap in setup.lay(usual, onsets, segment)]
        n_gaps, n_shortened = len(gaps), sum(shortened(gap, setup.flank) for gap in gaps)
    left = yield from step_left(recording, ground_of(learned))
    chain = learned.chain(recording)
    n_times = round(plan.epochs.length_s * setup.rate_hz)
    shares: dict[str, list[float]] = {rule.name: [] for rule in plan.epochs.rule}
    mirrors = mirror_gaps(kept, plan, learned.decision.geometry)
    for done, (candidate, mirror) in enumerate(zip(kept, mirrors, strict=True)):
        yield Progress("counting replaced samples", done, len(kept))
        if candidate.anchor_sample is not None:
            cut = chain.cut(candidate.anchor_sample, candidate.start_s, n_times)
            of_epoch = chain.with_gaps_at(mirror.onsets) if mirror else chain
            shares[candidate.rule].append(of_epoch.replaced_share(cut))
    return Effect(
        gap_samples=size,
        gap_ms=s_to_ms(size / setup.facts.rate_hz),
        n_gaps=n_gaps,
        n_shortened=n_shortened,
        left=left,
        replaced={name: sum(of) / len(of) if of else None for name, of in shares.items()},
    )
