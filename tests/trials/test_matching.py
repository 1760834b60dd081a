"""Slots matched to markers: by hand-made sequences whose trials are plain to see."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsemend.model.epochs import Trial, Trials
from pulsemend.model.marks import Marks, MovedPulse
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.trials.candidates import Geometry, candidates, stale_decisions
from pulsemend.trials.matching import match_trials

RATE_HZ = 1000.0

PLAN = parse_plan(
    """
pulsemend = 1
[markers.L]
role = "sample"
[markers.A]
role = "cue"
[markers.B]
role = "cue"
[markers.T]
role = "pulse"
[markers.P]
role = "probe"
[markers.F]
role = "fixation"
[markers.I]
role = "ignore"
[markers.O]
role = "other"
[[trial]]
slot = "sample"
role = "sample"
[[trial]]
slot = "cue1"
role = "cue"
after_s = [1.0, 2.0]
[[trial]]
slot = "pulse1"
role = "pulse"
after_s = [0.5, 1.0]
optional = true
[[trial]]
slot = "probe1"
role = "probe"
after_s = [1.5, 3.0]
[[trial]]
slot = "cue2"
role = "cue"
after_s = [0.5, 1.5]
[[trial]]
slot = "pulse2"
role = "pulse"
after = "cue2"
after_s = [0.5, 1.0]
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 1
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.5
"""
).plan


def match(text: str, plan: Plan = PLAN, marks: Marks | None = None) -> Trials:
    """Markers written as ``code@seconds``."""
    markers = []
    for word in text.split():
        code, seconds = word.split("@")
        markers.append(Marker(round(float(seconds) * RATE_HZ), code))
    return match_trials(markers, plan, RATE_HZ, *([marks] if marks else []))


def seconds(trial: Trial) -> dict[str, float]:
    return {slot: marker.sample / RATE_HZ for slot, marker in trial.markers.items()}


WHOLE = "L@1 A@2.5 T@3.2 P@4.5 B@5.5 T@6.2"


def test_whole_trial() -> None:
    found = match(WHOLE)
    assert [seconds(trial) for trial in found.trials] == [
        {"sample": 1, "cue1": 2.5, "pulse1": 3.2, "probe1": 4.5, "cue2": 5.5, "pulse2": 6.2}
    ]
    assert found.trials[0].missing == ()
    assert found.extra == ()


def test_optional_slot_may_be_missing_and_the_next_counts_from_the_required_one() -> None:
    found = match("L@1 A@2.5 P@4.5 B@5.5 T@6.2")
    assert found.trials[0].missing == ()
    assert "pulse1" not in found.trials[0].markers


def test_required_slot_missing_makes_the_trial_incomplete() -> None:
    # facts T-6.10: a trial that lacks a required marker is excluded with its reason; counts add up.
    found = match("L@1 A@2.5 T@3.2 B@5.5 T@6.2 L@10 A@11.5 P@13.5 B@14.5 T@15.2")
    first, second = found.trials
    # cue2 counts from probe1, pulse2 from cue2: without probe1 neither has a reference.
    assert first.missing == ("probe1", "cue2", "pulse2")
    assert set(first.markers) == {"sample", "cue1", "pulse1"}
    assert (second.number, second.missing) == (2, ())
    assert [marker.code for marker in found.extra] == ["B", "T"]


def test_missing_slot_does_not_stop_slots_that_have_a_reference() -> None:
    found = match("L@1 A@2.5 P@4.5 B@5.5")
    assert found.trials[0].missing == ("pulse2",)
    assert set(found.trials[0].markers) == {"sample", "cue1", "probe1", "cue2"}


@pytest.mark.parametrize(
    ("cue_s", "matched"), [(1.999, False), (2.0, True), (3.0, True), (3.001, False)], ids=str
)
def test_limits_are_included(cue_s: float, matched: bool) -> None:
    assert ("cue1" in match(f"L@1 A@{cue_s}").trials[0].markers) is matched


def test_limits_that_binary_fractions_miss_are_included() -> None:
    plan = PLAN
    for start in range(0, 5000, 7):
        markers = [Marker(start / 3, "L"), Marker(start / 3 + 1000.0, "A"), Marker(start / 3 + 2500.0, "P")]
        trial = match_trials(markers, plan, RATE_HZ).trials[0]
        assert {"cue1", "probe1"} <= set(trial.markers)


def test_earliest_marker_within_limits_is_taken() -> None:
    found = match("L@1 A@1.5 B@2.2 A@2.5 P@4.5")
    assert seconds(found.trials[0])["cue1"] == 2.2
    assert [marker.sample for marker in found.extra] == [1500, 2500]


def test_next_trial_start_ends_a_trial() -> None:
    found = match("L@1 L@2 A@3.0 P@5 B@6 T@6.7")
    first, second = found.trials
    assert set(first.markers) == {"sample"}
    assert second.missing == ()
    assert seconds(second)["sample"] == 2


def test_doubled_start_makes_its_own_incomplete_trial() -> None:
    found = match(WHOLE.replace("L@1", "L@1 L@1.02"))
    assert [bool(trial.missing) for trial in found.trials] == [True, False]


def test_markers_of_other_roles_belong_to_no_trial() -> None:
    found = match("F@0.5 I@0.6 O@0.7 X@0.8 X@0.9 T@0.95 " + WHOLE)
    assert [marker.code for marker in found.extra] == ["T"]
    assert found.unnamed == {"X": 2}


def test_codes_that_the_recording_lacks() -> None:
    assert match("L@1").absent == ("A", "B", "T", "P", "F", "I", "O")


def test_no_markers() -> None:
    found = match("")
    assert found.trials == ()
    assert len(found.absent) == 8


def test_order_of_markers_in_the_file_does_not_matter() -> None:
    markers = [Marker(sample, code) for sample, code in ((2500, "A"), (1000, "L"), (4500, "P"), (3200, "T"))]
    trial = match_trials(markers, PLAN, RATE_HZ).trials[0]
    assert set(trial.markers) == {"sample", "cue1", "pulse1", "probe1"}


def test_pulses_as_the_marks_have_them() -> None:
    removed = match(WHOLE, marks=Marks(pulses_removed=(3200, 6200), pulses_added=(6300,)))
    trial = removed.trials[0]
    assert "pulse1" not in trial.markers
    assert trial.markers["pulse2"].sample == 6300
    assert trial.missing == ()
    assert removed.unnamed == {}
    moved = match(WHOLE, marks=Marks(pulses_moved=(MovedPulse(3200, 3210),)))
    assert moved.trials[0].markers["pulse1"].sample == 3200


SAME_ROLE = parse_plan(
    """
pulsemend = 1
[markers.A]
role = "cue"
[markers.T]
role = "pulse"
[[trial]]
slot = "cue1"
role = "cue"
[[trial]]
slot = "pulse1"
role = "pulse"
after_s = [0.5, 1.0]
[[trial]]
slot = "cue2"
role = "cue"
after_s = [1.0, 2.0]
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 1
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.5
"""
).plan


def test_later_slot_of_the_first_slots_role() -> None:
    found = match("A@1 T@1.7 A@3 A@6 T@6.7 A@8", SAME_ROLE)
    assert [seconds(trial) for trial in found.trials] == [
        {"cue1": 1, "pulse1": 1.7, "cue2": 3},
        {"cue1": 6, "pulse1": 6.7, "cue2": 8},
    ]
    assert found.extra == ()


codes = st.sampled_from("LABTPFIOX")


@given(st.lists(st.tuples(codes, st.integers(0, 20000)), max_size=40))
def test_every_marker_of_a_trial_role_is_used_once_or_left_over(words: list[tuple[str, int]]) -> None:
    markers = [Marker(float(sample), code) for code, sample in words]
    found = match_trials(markers, PLAN, RATE_HZ)
    used = [marker for trial in found.trials for marker in trial.markers.values()]
    assert sorted((m.sample, m.code) for m in (*used, *found.extra)) == sorted(
        (m.sample, m.code) for m in markers if m.code in "LABTP"
    )
    assert len(found.trials) == sum(code == "L" for code, _ in words)
    required = {slot.slot for slot in PLAN.trial if not slot.optional}
    for trial in found.trials:
        assert set(trial.missing) == required - set(trial.markers)
        times = [trial.markers[slot.slot].sample for slot in PLAN.trial if slot.slot in trial.markers]
        assert times == sorted(times)


def test_without_slots_there_are_no_trials_and_nothing_is_left_over() -> None:
    plan = replace(PLAN, trial=(), epochs=replace(PLAN.epochs, rule=()))
    markers = [Marker(1000.0, "L"), Marker(2500.0, "A"), Marker(3000.0, "new")]
    found = match_trials(markers, plan, RATE_HZ, Marks(pulses_added=(500,)))
    assert found.trials == ()
    assert found.extra == ()
    assert found.unnamed == {"new": 1}
    geometry = Geometry(RATE_HZ, RATE_HZ, ((0, 5000),))
    assert candidates(found, plan, geometry) == ()
    assert stale_decisions(found, plan, geometry) == ()
