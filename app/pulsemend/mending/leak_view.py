"""What pulses still contribute to the epochs of each rule, for either way of filtering across pulses."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from pulsemend.engine.chain import Chain
from pulsemend.engine.leak import measure_leak
from pulsemend.export.readiness import LEAK_LIMIT_UV
from pulsemend.mending.learned import Learned
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import AcrossPulses
from pulsemend.progress import Work
from pulsemend.units import uv_to_v


@dataclass(frozen=True)
class RuleLeak:
    """Leak into the kept epochs of one rule.

    Parameters
    ----------
    n_epochs : int
        Kept ones.
    n_above : int
        Those above `LEAK_LIMIT_UV`.
    largest_v : float
        Of the worst epoch.
    """

    n_epochs: int
    n_above: int
    largest_v: float


@dataclass(frozen=True)
class LeakView:
    """Leak into all rules' epochs.

    Parameters
    ----------
    across_pulses : AcrossPulses
        How filters treat gaps in it.
    rules : mapping of str to RuleLeak
        In the plan's order, those without kept epochs included.
    n_pulses : int
        Pulses that the median was made of; 0: nothing could be measured.
    """

    across_pulses: AcrossPulses
    rules: Mapping[str, RuleLeak]
    n_pulses: int

    @property
    def n_epochs(self) -> int:
        """Count the kept epochs."""
        return sum(rule.n_epochs for rule in self.rules.values())

    @property
    def n_above(self) -> int:
        """Count the kept epochs above the limit."""
        return sum(rule.n_above for rule in self.rules.values())


def leak_per_rule(
    recording: Recording, learned: Learned, across_pulses: AcrossPulses | None = None
) -> Work[LeakView]:
    """Measure the leak of every kept epoch and sum it up by rule.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    learned : Learned
        With the present settings. Nothing that was learned rests on how filters treat gaps.
    across_pulses : AcrossPulses or None
        How filters treat gaps; None: as planned.

    Yields
    ------
    Progress

    Returns
    -------
    LeakView
    """
    wanted = across_pulses or learned.setup.across_pulses
    setup = replace(learned.setup, across_pulses=wanted)
    chain = Chain(recording, setup, learned.estimates)
    n_times = round(learned.plan.epochs.length_s * setup.rate_hz)
    kept = [(c.rule, c.anchor_sample, c.start_s) for c in learned.decision.kept]
    cuts = [chain.cut(anchor, start_s, n_times) for _, anchor, start_s in kept if anchor is not None]
    rules = np.array([rule for rule, anchor, _ in kept if anchor is not None], dtype=object)
    leak = yield from measure_leak(chain, learned.estimates, cuts)
    found = {}
    for rule in learned.plan.epochs.rule:
        of_rule = leak.peaks_v[rules == rule.name] if rules.size else leak.peaks_v
        found[rule.name] = RuleLeak(
            n_epochs=of_rule.size,
            n_above=int((of_rule > uv_to_v(LEAK_LIMIT_UV)).sum()),
            largest_v=float(of_rule.max(initial=0.0)),
        )
    return LeakView(wanted, found, leak.n_pulses)
