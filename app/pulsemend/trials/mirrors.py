"""Mirror gaps: epochs without a pulse receive the gaps that epochs with one have, so that a repair cancels.

Which epoch lends its gaps is drawn without a generator: each lender's place in the draw is a hash of the
names of both epochs. So a further trial changes no draw but those that its own epochs win.
"""

from __future__ import annotations

import hashlib
from bisect import bisect_left, bisect_right
from collections.abc import Sequence
from dataclasses import dataclass

from pulsemend.model.epochs import Candidate, nearest_sample
from pulsemend.model.marks import EpochKey
from pulsemend.model.plan import Plan
from pulsemend.model.vocabulary import PulseRule
from pulsemend.trials.candidates import Geometry

SEED_RULE = (
    "of all kept epochs that a pulse's gap touches, of rules that accept filled gaps, the one with the "
    "largest SHA-256 of the text 'TRIAL RULE PIECE < TRIAL RULE PIECE': mirrored epoch, then lending epoch"
)
"""How a lender is drawn, in words."""

_ROUNDING = 1e-6


@dataclass(frozen=True)
class MirrorGaps:
    """Gaps that one epoch without a pulse receives.

    Parameters
    ----------
    lender : EpochKey
        The epoch with pulses whose latencies these are.
    onsets : tuple of int
        Recorded samples that count as onsets of pulses, in order of time.
    latencies_s : tuple of float
        The same since the epoch's first sample.
    """

    lender: EpochKey
    onsets: tuple[int, ...]
    latencies_s: tuple[float, ...]


def mirror_gaps(kept: Sequence[Candidate], plan: Plan, geometry: Geometry) -> tuple[MirrorGaps | None, ...]:
    """Draw the gaps of epochs whose rule wants mirror gaps and that no pulse's gap touches.

    Parameters
    ----------
    kept : sequence of Candidate
        The epochs of the set, all of them: they lend and receive.
    plan : Plan
        Its rules and the length of epochs.
    geometry : Geometry
        Gaps of the pulses.

    Returns
    -------
    tuple of MirrorGaps or None
        One for each of `kept`; None where nothing is mirrored.
    """
    sides = _Sides(kept, plan, geometry)
    mirrored: list[MirrorGaps | None] = [None] * len(kept)
    if not sides.lending:
        return tuple(mirrored)
    for place in sides.receiving:
        first = sides.firsts[place]
        drawn = max((_draw(kept[place], kept[other]), other) for other in sides.lending)[1]
        onsets = tuple(nearest_sample(first + (pulse - sides.firsts[drawn])) for pulse in sides.pulses[drawn])
        latencies_s = tuple((onset - first) / geometry.recorded_hz for onset in onsets)
        lender = kept[drawn]
        mirrored[place] = MirrorGaps(EpochKey(lender.trial, lender.rule, lender.piece), onsets, latencies_s)
    return tuple(mirrored)


def mirror_warnings(kept: Sequence[Candidate], plan: Plan, geometry: Geometry) -> tuple[str, ...]:
    """Say where mirror gaps are wanted and no epoch can lend any.

    Parameters
    ----------
    kept : sequence of Candidate
        The epochs of the set.
    plan : Plan
        Its rules.
    geometry : Geometry
        Gaps of the pulses.
    """
    sides = _Sides(kept, plan, geometry)
    if sides.lending or not sides.receiving:
        return ()
    rules = ", ".join(dict.fromkeys(kept[place].rule for place in sides.receiving))
    return (
        f"mirror_gaps: {len(sides.receiving)} epochs of {rules} receive none, because no kept epoch of a "
        'rule with pulse = "accept filled" has a pulse\'s gap to take as the pattern',
    )


class _Sides:
    """Which of the kept epochs receive gaps, which can lend theirs, and where all of these are."""

    def __init__(self, kept: Sequence[Candidate], plan: Plan, geometry: Geometry) -> None:
        wanting = {rule.name for rule in plan.epochs.rule if rule.mirror_gaps}
        accepting = {rule.name for rule in plan.epochs.rule if rule.pulse is PulseRule.ACCEPT_FILLED}
        self.firsts = [geometry.first_sample(one.anchor_sample or 0.0, one.start_s) for one in kept]
        self.pulses = pulses_touching(self.firsts, plan, geometry) if wanting else [()] * len(kept)
        both = [(place, one.rule, bool(self.pulses[place])) for place, one in enumerate(kept)]
        self.receiving = [place for place, rule, has_gap in both if rule in wanting and not has_gap]
        self.lending = [place for place, rule, has_gap in both if rule in accepting and has_gap]


def _draw(mirrored: Candidate, lender: Candidate) -> str:
    names = (f"{one.trial} {one.rule} {one.piece}" for one in (mirrored, lender))
    return hashlib.sha256(" < ".join(names).encode()).hexdigest()


def pulses_touching(firsts: Sequence[float], plan: Plan, geometry: Geometry) -> list[tuple[int, ...]]:
    """Find the onsets of the pulses of which a gap touches each epoch, by the reach of `replaced` marks.

    Parameters
    ----------
    firsts : sequence of float
        Recorded samples of the epochs' first output samples, from `Geometry.first_sample`.
    plan : Plan
        The length of epochs.
    geometry : Geometry
        Gaps of the pulses.
    """
    gaps = sorted(geometry.gaps)
    starts = [gap.start for gap in gaps]
    longest = max((gap.stop - gap.start for gap in gaps), default=0)
    reach = geometry.step / 2 + _ROUNDING
    length = (round(plan.epochs.length_s * geometry.output_hz) - 1) * geometry.step
    found = []
    for first in firsts:
        low, high = first - reach, first + length + reach
        near = gaps[bisect_left(starts, low - longest) : bisect_right(starts, high)]
        found.append(tuple(sorted({gap.pulse for gap in near if gap.stop - 1 >= low})))
    return found
