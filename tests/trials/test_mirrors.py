"""Mirror gaps on hand-made epochs: who lends, at which latency, and what a further trial changes."""

from __future__ import annotations

import hashlib
from collections import Counter
from dataclasses import replace

import numpy as np
import pytest

from pulsemend.model.epochs import Candidate
from pulsemend.model.marks import EpochKey
from pulsemend.model.plan import EpochRule, Epochs, Plan
from pulsemend.model.vocabulary import Fate, PulseRule
from pulsemend.trials.candidates import GapSpan, Geometry
from pulsemend.trials.mirrors import MirrorGaps, mirror_gaps, mirror_warnings
from support import engine_cases

RECORDED_HZ, OUTPUT_HZ = 5000.0, 1000.0
SPACING = 10_000
"""Recorded samples from one epoch's anchor to the next."""

PLAN = replace(
    engine_cases.plan(),
    epochs=Epochs(
        1.0,
        (
            EpochRule("pulsed", "cue1", 0.0, pulse=PulseRule.ACCEPT_FILLED),
            EpochRule("plain", "cue1", 0.0, mirror_gaps=True),
            EpochRule("other", "cue1", 0.0),
        ),
    ),
)


def epoch(rule: str, trial: int, anchor: float, start_s: float = 0.0) -> Candidate:
    place = [one.name for one in PLAN.epochs.rule].index(rule)
    return Candidate(rule, place, trial, 1, "cue1", anchor, start_s, Fate.KEPT)


def gaps_of(onset: int) -> tuple[GapSpan, ...]:
    """A gap of 16 ms at the onset, and one of the recharge 250 ms later."""
    return GapSpan(onset - 10, onset + 71, onset), GapSpan(onset + 1250, onset + 1280, onset)


def geometry(onsets: list[int]) -> Geometry:
    return Geometry(RECORDED_HZ, OUTPUT_HZ, ((0, 10**7),), tuple(gap for at in onsets for gap in gaps_of(at)))


def study(n_pulsed: int, n_plain: int) -> tuple[list[Candidate], Geometry, dict[int, int]]:
    """Epochs with one pulse each at its own latency, then epochs with none; latencies by trial."""
    late = {trial: 500 + 37 * trial for trial in range(1, n_pulsed + 1)}
    kept = [epoch("pulsed", trial, float(trial * SPACING)) for trial in late]
    kept += [
        epoch("plain", trial, trial * SPACING + 0.4 * (trial % 3))
        for trial in range(n_pulsed + 1, n_pulsed + n_plain + 1)
    ]
    return kept, geometry([trial * SPACING + by for trial, by in late.items()]), late


def drawn(kept: list[Candidate], where: Geometry, plan: Plan = PLAN) -> dict[int, MirrorGaps]:
    found = mirror_gaps(kept, plan, where)
    assert len(found) == len(kept)
    return {one.trial: mirror for one, mirror in zip(kept, found, strict=True) if mirror}


def test_every_epoch_without_a_pulse_receives_the_latency_of_one_with() -> None:
    kept, where, late = study(8, 30)
    mirrors = drawn(kept, where)
    assert sorted(mirrors) == list(range(9, 39))
    for trial, mirror in mirrors.items():
        first = trial * SPACING + 0.4 * (trial % 3)
        (onset,), (latency_s,) = mirror.onsets, mirror.latencies_s
        assert abs(onset - (first + late[mirror.lender.trial])) <= 0.5
        assert latency_s == pytest.approx((onset - first) / RECORDED_HZ, abs=1e-12)


def test_the_draw_is_the_rule_that_is_written_down() -> None:
    """Computed here from the words of `SEED_RULE`, not with the program's functions."""
    kept, where, late = study(5, 12)
    for trial, mirror in drawn(kept, where).items():
        place = {
            hashlib.sha256(f"{trial} plain 1 < {lender} pulsed 1".encode()).hexdigest(): lender
            for lender in late
        }
        assert mirror.lender == EpochKey(place[max(place)], "pulsed", 1)


def test_lenders_are_drawn_equally_often() -> None:
    """Chi-square of 12 lenders: above 31.3 once in a thousand (table of the distribution, 11 degrees)."""
    kept, where, _ = study(12, 1200)
    counts = Counter(mirror.lender.trial for mirror in drawn(kept, where).values())
    assert sum((counts[trial] - 100) ** 2 / 100 for trial in range(1, 13)) < 31.3


def test_a_further_trial_changes_no_draw_but_those_it_wins() -> None:
    kept, where, late = study(12, 240)
    before = drawn(kept, where)
    without_pulse = drawn([*kept, epoch("plain", 900, 900.0 * SPACING)], where)
    assert {trial: without_pulse[trial] for trial in before} == before
    onsets = [trial * SPACING + by for trial, by in late.items()]
    more = drawn([*kept, epoch("pulsed", 900, 900.0 * SPACING)], geometry([*onsets, 900 * SPACING + 777]))
    changed = {trial for trial in before if more[trial] != before[trial]}
    assert changed == {trial for trial, mirror in more.items() if mirror.lender.trial == 900}
    assert 5 <= len(changed) <= 40  # 240 / 13 = 18.5 expected


def test_epochs_of_other_rules_and_epochs_with_any_gap_stay_as_they_are() -> None:
    kept, where, late = study(4, 0)
    onset = SPACING + late[1]
    tail = epoch("plain", 50, onset + 60.0)  # 10 samples of the first gap, then the recharge
    recharge = epoch("plain", 51, onset + 1279.0)
    clear = epoch("plain", 52, onset + 1285.0)
    other = epoch("other", 53, 60.0 * SPACING)
    assert set(drawn([*kept, tail, recharge, clear, other], where)) == {52}


def test_all_pulses_of_the_lender_come_along_also_one_of_which_only_the_recharge_is_inside() -> None:
    lender = epoch("pulsed", 1, float(SPACING))
    onsets = [SPACING - 1000, SPACING + 2000, SPACING + 2600]
    mirrors = drawn([lender, epoch("plain", 2, 5.0 * SPACING, start_s=0.1)], geometry(onsets))
    assert mirrors[2].onsets == tuple(5 * SPACING + 500 + by for by in (-1000, 2000, 2600))
    assert mirrors[2].latencies_s == pytest.approx((-0.2, 0.4, 0.52), abs=1e-12)


def test_one_rule_may_hold_epochs_that_lend_and_epochs_that_receive() -> None:
    both = EpochRule("both", "cue1", 0.0, pulse=PulseRule.ACCEPT_FILLED, mirror_gaps=True)
    plan = replace(PLAN, epochs=Epochs(1.0, (both,)))
    kept, where, _ = study(3, 6)
    kept = [replace(one, rule="both", rule_index=0) for one in kept]
    assert set(drawn(kept, where, plan)) == set(range(4, 10))


def test_without_the_wish_nothing_is_drawn() -> None:
    kept, where, _ = study(3, 3)
    rules = tuple(replace(rule, mirror_gaps=False) for rule in PLAN.epochs.rule)
    plan = replace(PLAN, epochs=Epochs(1.0, rules))
    assert mirror_gaps(kept, plan, where) == (None,) * 6
    assert mirror_warnings(kept, plan, where) == ()


def test_a_wish_that_nobody_can_grant_is_told_in_one_sentence() -> None:
    kept, where, _ = study(3, 4)
    assert mirror_warnings(kept, PLAN, where) == ()
    alone = kept[3:]
    assert mirror_gaps(alone, PLAN, where) == (None,) * 4
    (words,) = mirror_warnings(alone, PLAN, where)
    assert words.startswith("mirror_gaps: 4 epochs of plain receive none")
    assert 'pulse = "accept filled"' in words


def test_latencies_are_those_of_the_pulses() -> None:
    """Mean and spread of the drawn latencies against the lenders' own, within five standard errors."""
    n = 4000
    kept, where, late = study(40, n)
    taken = np.array([mirror.latencies_s[0] for mirror in drawn(kept, where).values()]) * RECORDED_HZ
    own = np.array(list(late.values()), float)
    assert abs(taken.mean() - own.mean()) < 5 * own.std() / n**0.5
    assert taken.std() == pytest.approx(own.std(), rel=5 / (2 * n) ** 0.5)
