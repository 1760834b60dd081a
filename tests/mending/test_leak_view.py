"""Leak by rule, for both ways to filter: against recordings that hold nothing but pulses."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pulsemend.mending.leak_view import leak_per_rule
from pulsemend.mending.learned import Learned, learn
from pulsemend.model.epochs import Candidate
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import (
    About,
    Channels,
    EpochRule,
    Epochs,
    Export,
    Filter,
    MarkerPlan,
    Plan,
    Pulses,
    Slot,
)
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import AcrossPulses, Fill, Role
from pulsemend.progress import finish
from support.engine_cases import STEP_V, ArrayRecording

RATE_HZ = 2000.0
ONSETS = [8000, 18001, 28002, 38003, 48004, 58000]
N_SAMPLES = 68000
PLAN = Plan(
    about=About("leak", 0.0),
    markers=(MarkerPlan("pulse", Role.PULSE),),
    trial=(Slot("pulse1", Role.PULSE),),
    pulses=Pulses(window_ms=(-2.0, 14.0), fill=Fill.LINE),
    filter=Filter(highpass_hz=1.0, lowpass_hz=100.0, rate_hz=500.0),
    channels=Channels(reference="as recorded"),
    epochs=Epochs(
        0.5,
        (
            EpochRule("before", "pulse1", -0.512),
            EpochRule("after", "pulse1", 0.5),
            EpochRule("far", "pulse1", 2.0),
            EpochRule("nowhere", "pulse1", 100.0),
        ),
    ),
    export=Export(),
)


@pytest.fixture(scope="module")
def recording() -> ArrayRecording:
    """A spike and 1 mV that decays within 15 ms, at every onset; else silence."""
    x = np.zeros(N_SAMPLES)
    t = np.arange(round(0.4 * RATE_HZ)) / RATE_HZ
    for onset in ONSETS:
        x[onset : onset + t.size] += 1e-3 / STEP_V * np.exp(-t / 0.015)
        x[onset] += 5e4
    markers = tuple(Marker(float(onset), "pulse") for onset in ONSETS)
    return ArrayRecording(np.rint(x[None]), RATE_HZ, markers)


@pytest.fixture(scope="module")
def learned(recording: ArrayRecording) -> Learned:
    return finish(learn(recording, PLAN, NO_MARKS))


def _largest_v(recording: ArrayRecording, learned: Learned, rule: str) -> tuple[list[Candidate], float]:
    """Kept epochs of a rule and their largest sample: there is nothing in them but the leak."""
    chain = learned.chain(recording)
    kept = [one for one in learned.decision.kept if one.rule == rule]
    n_times = round(0.5 * learned.setup.rate_hz)
    cuts = [chain.cut(one.anchor_sample or 0.0, one.start_s, n_times) for one in kept]
    return kept, max(float(np.abs(chain.samples(cut)).max()) for cut in cuts)


@pytest.mark.parametrize("rule", ["before", "after", "far"])
def test_leak_of_a_rule_is_what_its_epochs_hold(
    recording: ArrayRecording, learned: Learned, rule: str
) -> None:
    found = finish(leak_per_rule(recording, learned))
    assert found.across_pulses is AcrossPulses.FILLED
    assert found.n_pulses == len(ONSETS)
    kept, truth_v = _largest_v(recording, learned, rule)
    assert found.rules[rule].n_epochs == len(kept) == len(ONSETS)
    assert found.rules[rule].largest_v == pytest.approx(truth_v, rel=0.02, abs=2e-8)


def test_epochs_above_the_limit_are_counted(recording: ArrayRecording, learned: Learned) -> None:
    found = finish(leak_per_rule(recording, learned))
    # Before the pulse it is 2 fc times the area of what is left, 6 uV s: far above. Filters end before 2 s.
    assert found.rules["before"].largest_v > 5e-6
    assert found.rules["before"].n_above == len(ONSETS)
    assert found.rules["far"].n_above == 0
    assert found.n_above == len(ONSETS) + found.rules["after"].n_above
    assert found.n_epochs == 3 * len(ONSETS)


def test_rules_stand_in_the_plans_order_even_without_epochs(
    recording: ArrayRecording, learned: Learned
) -> None:
    found = finish(leak_per_rule(recording, learned))
    assert list(found.rules) == ["before", "after", "far", "nowhere"]
    assert found.rules["nowhere"].n_epochs == 0
    assert found.rules["nowhere"].largest_v == 0.0


def test_the_other_way_is_that_of_a_plan_that_has_it(recording: ArrayRecording, learned: Learned) -> None:
    asked = finish(leak_per_rule(recording, learned, AcrossPulses.SPLIT))
    assert asked.across_pulses is AcrossPulses.SPLIT
    split = Filter(highpass_hz=1.0, lowpass_hz=100.0, rate_hz=500.0, across_pulses=AcrossPulses.SPLIT)
    own = finish(learn(recording, replace(PLAN, filter=split), NO_MARKS))
    assert finish(leak_per_rule(recording, own)) == asked
    # Nothing of a pulse is carried back across its gap.
    assert asked.rules["before"].largest_v < 1e-7
    assert finish(leak_per_rule(recording, own, AcrossPulses.FILLED)).rules["before"].n_above == len(ONSETS)


def test_without_pulses_nothing_is_measured() -> None:
    quiet = ArrayRecording(np.zeros((1, N_SAMPLES)), RATE_HZ, (Marker(20000.0, "cue"),))
    cue = replace(PLAN, markers=(MarkerPlan("cue", Role.CUE),), trial=(Slot("pulse1", Role.CUE),))
    found = finish(leak_per_rule(quiet, finish(learn(quiet, cue, NO_MARKS))))
    assert found.n_pulses == 0
    assert found.rules["before"].n_epochs == 1
    assert found.n_above == 0
