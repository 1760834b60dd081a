"""Pulses in epochs that others are compared with (facts T-6.11)."""

from __future__ import annotations

from dataclasses import replace

import pytest

from pulsemend.model.epochs import Candidate, Trial, Trials
from pulsemend.model.plan import EpochRule, Epochs
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fate, PulseRule
from pulsemend.trials.baselines import baseline_warnings
from pulsemend.trials.candidates import GapSpan, Geometry
from support import engine_cases

LENGTH_S = 1.0
BEGINS = (10_000, 30_000, 50_000)
"""First marker of each trial, at 5000 Hz; probes come 2 s later."""

TRIALS = Trials(
    tuple(
        Trial(number + 1, {"cue1": Marker(float(at), "cue"), "probe1": Marker(at + 10_000.0, "probe")})
        for number, at in enumerate(BEGINS)
    )
)


def warnings(
    name: str, anchor: str, start_s: float, late: float, accepts: bool = True
) -> tuple[tuple[str, ...], int]:
    """Epochs of one rule in all trials; in two of them a pulse so many seconds after their first sample."""
    rule = EpochRule(name, anchor, start_s, pulse=PulseRule.ACCEPT_FILLED if accepts else PulseRule.REFUSE)
    plan = replace(engine_cases.plan(), epochs=Epochs(LENGTH_S, (rule,)))
    kept = [
        Candidate(name, 0, trial.number, 1, anchor, trial.markers[anchor].sample, start_s, Fate.KEPT)
        for trial in TRIALS.trials
    ]
    onsets = [round((one.anchor_sample or 0.0) + (start_s + late) * 5000.0) for one in kept[:2]]
    geometry = Geometry(
        5000.0, 1000.0, ((0, 100_000),), tuple(GapSpan(at - 10, at + 71, at) for at in onsets)
    )
    return baseline_warnings(kept, TRIALS, plan, geometry), len(kept)


@pytest.mark.parametrize(
    ("name", "anchor", "start_s"),
    [("rest", "cue1", -1.0), ("early", "cue1", -1.5), ("Baseline", "probe1", 0.0)],
)
def test_rule_and_count_are_named(name: str, anchor: str, start_s: float) -> None:
    (line,), n_epochs = warnings(name, anchor, start_s, 0.3)
    assert line.startswith(
        f"2 of {n_epochs} epochs of {name}, which are a baseline, hold a pulse's filled gap"
    )


@pytest.mark.parametrize(
    ("name", "anchor", "start_s", "late", "accepts"),
    [
        ("rest", "cue1", -1.0, 1.2, True),  # the pulse comes later
        ("delay", "probe1", -1.0, 0.3, True),  # before its anchor, but within the trial
        ("rest", "cue1", -0.5, 0.3, True),  # reaches beyond the first marker
        ("rest", "cue1", -1.0, 0.3, False),
    ],
)
def test_nothing_is_said_of_other_epochs(
    name: str, anchor: str, start_s: float, late: float, accepts: bool
) -> None:
    assert warnings(name, anchor, start_s, late, accepts)[0] == ()
