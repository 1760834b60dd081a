"""Rows of candidates and their counts, against a recording whose faults are known."""

from __future__ import annotations

from dataclasses import replace

import pytest

from pulsemend.mending.epoch_rows import (
    epoch_rows,
    kept_of_all,
    kept_under,
    left_out_by_reason,
    why_no_trial,
)
from pulsemend.mending.learned import Learned, learn
from pulsemend.model.marks import NO_MARKS, EpochKey
from pulsemend.model.plan import MarkerPlan
from pulsemend.model.plan_file import read_plan
from pulsemend.model.recording import RecordingFacts
from pulsemend.model.vocabulary import Fate, PulseRule, Role
from pulsemend.progress import finish
from pulsemend.readers.opening import open_recording
from support.small_lantern import Study


@pytest.fixture(scope="module")
def learned(study: Study) -> Learned:
    return learn_with(study, left_out=())


def learn_with(study: Study, left_out: tuple[EpochKey, ...]) -> Learned:
    recording = open_recording(study.recording)
    try:
        marks = replace(NO_MARKS, epochs_left_out=left_out)
        return finish(learn(recording, read_plan(study.plan).plan, marks))
    finally:
        recording.close()


def test_every_candidate_is_a_row_in_order_of_time(learned: Learned) -> None:
    rows = epoch_rows(learned.decision, learned.plan)
    assert len(rows) == len(learned.decision.ledger) == 6
    assert [row.near_s for row in rows] == sorted(row.near_s for row in rows)
    assert {row.key for row in rows} == {
        EpochKey(trial, rule) for trial in (1, 2, 3) for rule in ("after2", "delay1")
    }


def test_a_missing_anchor_is_said_and_still_has_a_place(learned: Learned) -> None:
    # The second trial's second pulse has no marker.
    rows = epoch_rows(learned.decision, learned.plan)
    (missing,) = [row for row in rows if row.anchor_s is None]
    assert (missing.trial, missing.rule, missing.fate) == (2, "after2", Fate.NO_ANCHOR)
    assert missing.span is None
    begins = min(marker.sample for marker in learned.decision.trials.trials[1].markers.values())
    assert missing.near_s == begins / 5000.0


def test_spans_are_recorded_samples_from_the_first_one_on(learned: Learned) -> None:
    row = next(row for row in epoch_rows(learned.decision, learned.plan) if row.rule == "delay1")
    assert row.span is not None
    assert row.anchor_s is not None
    assert row.span[0] == pytest.approx((row.anchor_s + 0.5) * 5000.0, abs=1)
    assert row.span[1] - row.span[0] == 5000


def test_counts_are_those_of_the_rows(study: Study) -> None:
    learned = learn_with(study, (EpochKey(1, "after2"),))
    rows = epoch_rows(learned.decision, learned.plan)
    for count in kept_of_all(learned.decision, learned.plan):
        own = [row for row in rows if row.rule == count.rule]
        assert (count.kept, count.total) == (sum(row.fate is Fate.KEPT for row in own), 3)
    reasons = dict(left_out_by_reason(learned.decision.ledger))
    assert reasons[Fate.NO_ANCHOR] == 1
    assert reasons[Fate.BY_HAND] == 1
    assert Fate.KEPT not in reasons
    assert sum(reasons.values()) == sum(row.fate is not Fate.KEPT for row in rows)


def test_each_choice_about_gaps_is_counted(learned: Learned) -> None:
    # after2 begins before its own pulse: refused wherever there is one.
    kept = finish(kept_under(learned, 0))
    assert kept == {PulseRule.REFUSE: 0, PulseRule.ACCEPT_FILLED: 2}


def test_why_there_is_no_trial(learned: Learned) -> None:
    plan, facts = learned.plan, learned.setup.facts
    other = replace(plan, markers=(MarkerPlan("lamp", Role.SAMPLE), *plan.markers[1:]))
    assert "none of its codes (lamp)" in why_no_trial(other, facts)
    assert "lanterns up (3)" in why_no_trial(other, facts)
    assert "no code has it" in why_no_trial(replace(plan, markers=plan.markers[1:]), facts)
    silent: RecordingFacts = replace(facts, markers=())
    assert "no markers at all" in why_no_trial(plan, silent)
    assert "has no slot" in why_no_trial(replace(plan, trial=()), facts)
