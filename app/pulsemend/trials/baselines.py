"""Epochs that others are compared with, and pulses in them."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

from pulsemend.model.epochs import Candidate, Trials
from pulsemend.model.plan import Plan
from pulsemend.model.vocabulary import PulseRule
from pulsemend.trials.candidates import Geometry
from pulsemend.trials.mirrors import pulses_touching

BASELINE = "baseline"
"""A rule with this in its name is one; so is an epoch that ends before its trial's first marker."""


def baseline_warnings(
    kept: Sequence[Candidate], trials: Trials, plan: Plan, geometry: Geometry
) -> tuple[str, ...]:
    """Say of which rules epochs that are baselines hold filled gaps, one sentence each.

    Parameters
    ----------
    kept : sequence of Candidate
        The epochs of the set.
    trials : Trials
        The recording's trials.
    plan : Plan
        Its rules; with ``pulse = "refuse"`` no epoch holds a gap.
    geometry : Geometry
        Gaps of the pulses.
    """
    accepting = {rule.name for rule in plan.epochs.rule if rule.pulse is PulseRule.ACCEPT_FILLED}
    begins = {trial.number: trial.first_sample for trial in trials.trials}
    length = round(plan.epochs.length_s * geometry.output_hz) * geometry.step
    baselines = []
    for one in kept:
        first = geometry.first_sample(one.anchor_sample or 0.0, one.start_s)
        # An anchor between two samples moves to the nearer one.
        is_before = first + length <= begins[one.trial] + 0.5
        if one.rule in accepting and (is_before or BASELINE in one.rule.lower()):
            baselines.append((one.rule, first))
    touching = pulses_touching([first for _, first in baselines], plan, geometry)
    counts = Counter(rule for rule, _ in baselines)
    held = Counter(rule for (rule, _), pulses in zip(baselines, touching, strict=True) if pulses)
    return tuple(
        f"{count} of {counts[rule]} epochs of {rule}, which are a baseline, hold a pulse's filled gap: "
        "what is compared with them rests on the fill, too"
        for rule, count in held.items()
    )
