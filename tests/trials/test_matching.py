"""Slots matched to markers: by hand-made sequences whose trials are plain to see."""

from __future__ import annotations

import itertools
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsemend.errors import PlanError
from pulsemend.model.epochs import Trial, Trials
from pulsemend.model.marks import NO_MARKS, Marks, MovedPulse
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import StandIn
from pulsemend.trials.candidates import Geometry, candidates, stale_decisions
from pulsemend.trials.matching import ADDED, FOUND_IN_SIGNAL, match_trials

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


def match(text: str, plan: Plan = PLAN, marks: Marks | None = None, found: Sequence[int] = ()) -> Trials:
    """Markers written as ``code@seconds``."""
    markers = []
    for word in text.split():
        code, seconds = word.split("@")
        markers.append(Marker(round(float(seconds) * RATE_HZ), code))
    return match_trials(markers, plan, RATE_HZ, marks or NO_MARKS, found)


def seconds(trial: Trial) -> dict[str, float]:
    return {slot: marker.sample / RATE_HZ for slot, marker in trial.markers.items()}


WHOLE = "L@1 A@2.5 T@3.2 P@4.5 B@5.5 T@6.2"


def shifted(text: str, by_s: float) -> str:
    return " ".join(f"{word.split('@')[0]}@{float(word.split('@')[1]) + by_s:.3f}" for word in text.split())


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
    # cue2 counts from probe1, which is lost: the limits of both leave 2 to 4.5 s after cue1 for it.
    assert (first.missing, first.doubts) == (("probe1",), ())
    assert set(first.markers) == {"sample", "cue1", "pulse1", "cue2", "pulse2"}
    assert (second.number, second.missing) == (2, ())
    assert found.extra == ()


@pytest.mark.parametrize(
    ("cue_s", "found"), [(4.499, False), (4.5, True), (7.0, True), (7.001, False)], ids=str
)
def test_a_slot_whose_reference_is_lost_keeps_to_the_limits_of_both(cue_s: float, found: bool) -> None:
    trials = match(f"L@1 A@2.5 T@3.2 B@{cue_s} T@{cue_s + 0.7}").trials
    assert any({"cue1", "cue2"} <= set(trial.markers) for trial in trials) is found


def test_lost_markers_cost_their_own_trial_only() -> None:
    whole = [WHOLE, *(shifted(WHOLE, 10 * number) for number in range(1, 10))]
    for lost in range(len(WHOLE.split())):
        words = whole[3].split()
        del words[lost]
        found = match(" ".join([*whole[:3], " ".join(words), *whole[4:]]))
        assert [len(trial.missing) for trial in found.trials] == [
            int(number == 3 and lost != 2) for number in range(10)
        ]
        assert not any(trial.doubts for trial in found.trials)


def test_missing_slot_does_not_stop_slots_that_have_a_reference() -> None:
    found = match("L@1 A@2.5 P@4.5 B@5.5")
    assert found.trials[0].missing == ("pulse2",)
    assert set(found.trials[0].markers) == {"sample", "cue1", "probe1", "cue2"}


@pytest.mark.parametrize(
    ("cue_s", "matched"), [(1.999, False), (2.0, True), (3.0, True), (3.001, False)], ids=str
)
def test_limits_are_included(cue_s: float, matched: bool) -> None:
    (trial,) = match(f"L@1 A@{cue_s} P@4.5 B@5.5 T@6.2").trials
    assert (trial.missing == () and trial.doubts == ()) is matched


def test_limits_that_binary_fractions_miss_are_included() -> None:
    plan = PLAN
    for start in range(0, 5000, 7):
        markers = [Marker(start / 3, "L"), Marker(start / 3 + 1000.0, "A"), Marker(start / 3 + 2500.0, "P")]
        trial = match_trials(markers, plan, RATE_HZ).trials[0]
        assert {"cue1", "probe1"} <= set(trial.markers)


def test_two_markers_within_limits_are_a_doubt_and_the_one_outside_is_extra() -> None:
    found = match("L@1 A@1.5 B@2.2 A@2.5 P@4.5 B@5.5 T@6.2")
    (trial,) = found.trials
    assert trial.missing == ()
    (doubt,) = trial.doubts
    assert sorted(re.findall(r"[0-9.]+ s", doubt)) == ["2.200 s", "2.500 s"]
    assert doubt.startswith("cue1 at ")
    assert sorted(marker.sample for marker in (*found.extra, trial.markers["cue1"])) == [1500, 2200, 2500]


def test_of_two_markers_the_one_that_lets_later_slots_be_found_is_taken_without_doubt() -> None:
    # The earliest that fits, 2.2, would leave the probe 3.1 s behind, beyond its limits.
    (trial,) = match("L@1 B@2.2 A@2.5 P@5.3 B@6.1 T@6.8").trials
    assert (seconds(trial)["cue1"], trial.missing, trial.doubts) == (2.5, (), ())


def test_a_lone_start_is_an_extra_marker_and_no_trial() -> None:
    found = match("L@0.4 " + shifted(WHOLE, 4))
    assert [trial.number for trial in found.trials] == [1]
    assert (found.trials[0].missing, found.trials[0].doubts) == ((), ())
    assert [marker.sample for marker in found.extra] == [400]


def test_doubled_start_is_a_doubt() -> None:
    found = match(WHOLE.replace("L@1", "L@1 L@1.02"))
    (trial,) = found.trials
    assert trial.missing == ()
    assert trial.doubts[0].startswith("sample at ")
    assert len(found.extra) == 1


def test_a_doubled_last_marker_is_no_doubt_of_the_trial_after_it() -> None:
    """Both stand before the second trial begins: only the first can end with either."""
    found = match(
        f"{WHOLE.replace('T@6.2', 'T@6.2 T@6.21')} {shifted(WHOLE, 20).replace('A@22.5', 'A@22.5 A@22.51')}"
    )
    first, second = found.trials
    (doubt,) = first.doubts
    assert doubt.startswith("pulse2 at ")
    assert sorted(re.findall(r"[0-9.]+ s", doubt)) == ["6.200 s", "6.210 s"]
    (doubt,) = second.doubts
    assert doubt.startswith("cue1 at ")
    assert sorted(re.findall(r"[0-9.]+ s", doubt)) == ["22.500 s", "22.510 s"]


def test_the_times_in_a_doubt_tell_samples_apart() -> None:
    at = {"L": 5000, "A": 12500, "T": 16000, "P": 22500}
    markers = [Marker(sample, code) for code, sample in at.items()] + [Marker(12502, "A")]
    found = match_trials(sorted(markers, key=lambda one: one.sample), PLAN, 5000.0)
    (doubt,) = found.trials[0].doubts
    assert sorted(re.findall(r"[0-9.]+ s", doubt)) == ["2.5000 s", "2.5004 s"]


def test_a_trial_broken_off_is_an_incomplete_trial() -> None:
    found = match(f"L@1 A@2.5 {shifted(WHOLE, 10)} L@21 {shifted(WHOLE, 30)} L@41 A@42.5 T@43.2")
    assert [set(trial.markers) for trial in found.trials] == [
        {"sample", "cue1"},
        set(seconds(match(WHOLE).trials[0])),
        set(seconds(match(WHOLE).trials[0])),
        {"sample", "cue1", "pulse1"},
    ]
    assert found.trials[0].missing == ("probe1", "cue2", "pulse2")
    assert [trial.number for trial in found.trials] == [1, 2, 3, 4]
    assert [marker.sample for marker in found.extra] == [21000]


def test_a_trial_broken_off_is_not_seen_inside_another_one() -> None:
    found = match("L@1 A@2.5 T@3.2 L@3.3 A@4.4 P@4.5 B@5.5 T@6.2")
    assert len(found.trials) == 1


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
    assert [trial.number for trial in found.trials] == list(range(1, len(found.trials) + 1))
    spans = [(trial.first_sample, max(m.sample for m in trial.markers.values())) for trial in found.trials]
    assert all(end <= start for (_, end), (start, _) in itertools.pairwise(spans))
    required = {slot.slot for slot in PLAN.trial if not slot.optional}
    for trial in found.trials:
        assert set(trial.missing) == required - set(trial.markers)
        times = [trial.markers[slot.slot].sample for slot in PLAN.trial if slot.slot in trial.markers]
        assert times == sorted(times)
        assert len(trial.markers) >= 2


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


def changed(plan: Plan, name: str, **changes: object) -> Plan:
    slots = [replace(slot, **changes) if slot.slot == name else slot for slot in plan.trial]  # type: ignore[arg-type]
    return replace(plan, trial=tuple(slots))


def test_slots_that_cannot_be_met_are_refused_in_one_line() -> None:
    for changes in (
        {"after": "sample", "after_s": (0.1, 0.5)},  # before cue1 can be
        {"after": "cue1", "after_s": (9.0, 10.0)},  # behind probe1, which stands later
    ):
        with pytest.raises(PlanError, match="no times can meet the limits of slot") as caught:
            match(WHOLE, changed(PLAN, "pulse1", **changes))
        assert "\n" not in str(caught.value)
        assert 'slot "pulse1"' in str(caught.value)


def test_a_pulse_found_in_the_signal_stands_in_for_a_lost_marker_where_allowed() -> None:
    lost = WHOLE.replace("T@6.2", "")
    assert match(lost, found=[6190]).trials[0].missing == ("pulse2",)
    allowed = match(lost, changed(PLAN, "pulse2", from_signal=True), found=[6190, 9000])
    (trial,) = allowed.trials
    assert (trial.missing, trial.doubts) == ((), ())
    assert (trial.markers["pulse2"].sample, trial.markers["pulse2"].code) == (6190, FOUND_IN_SIGNAL)
    assert allowed.extra == ()  # a pulse found elsewhere is no marker left over


def test_a_marker_goes_before_a_pulse_found_in_the_signal() -> None:
    plan = changed(changed(PLAN, "pulse1", from_signal=True), "pulse2", from_signal=True)
    (trial,) = match(WHOLE, plan, found=[3100, 3300, 6100, 6300]).trials
    assert seconds(trial) == seconds(match(WHOLE).trials[0])
    assert trial.doubts == ()


def test_a_pulse_added_by_hand_is_named_so() -> None:
    (trial,) = match(WHOLE.replace("T@6.2", ""), marks=Marks(pulses_added=(6190,))).trials
    assert trial.markers["pulse2"].code == ADDED


KINDS = parse_plan(
    """
pulsemend = 1
[markers.A]
role = "cue"
[markers.T]
role = "pulse"
[markers.P]
role = "probe"
[markers.R]
role = "response"
[group.question]
times = [1, 3]
between_s = [1.0, 2.0]
[[trial]]
slot = "cue"
role = "cue"
[[trial]]
slot = "pulse"
role = "pulse"
after_s = [0.5, 1.0]
kinds = ["stimulated"]
[[trial]]
slot = "probe"
role = "probe"
after = "cue"
after_s = [2.0, 3.0]
group = "question"
kinds = ["stimulated", "plain"]
[[trial]]
slot = "answer"
role = "response"
after_s = [0.2, 0.8]
group = "question"
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 1
[[epochs.rule]]
name = "delay"
anchor = "cue"
start_s = 0.5
"""
).plan


def test_kinds_and_repeated_groups() -> None:
    found = match(
        "A@1 T@1.7 P@3.5 R@4 P@5.5 R@6 A@10 P@12.5 R@13 A@20 P@22.5 R@23 P@24.5 R@25 P@26.5 R@27", KINDS
    )
    assert [(trial.kind, len(trial.markers), trial.missing, trial.doubts) for trial in found.trials] == [
        ("stimulated", 6, (), ()),
        ("plain", 3, (), ()),
        ("plain", 7, (), ()),
    ]
    assert seconds(found.trials[2])["answer3"] == 27


def test_a_lost_marker_inside_a_repeat() -> None:
    (trial,) = match("A@1 T@1.7 P@3.5 R@4 P@5.5 R@6 R@8", KINDS).trials
    assert (trial.kind, trial.missing, trial.doubts) == ("stimulated", ("probe3",), ())
    assert seconds(trial)["answer3"] == 8


def test_of_kinds_that_begin_alike_a_trial_broken_off_names_both() -> None:
    plan = replace(
        KINDS, trial=(*KINDS.trial[:1], replace(KINDS.trial[2], slot="probe0", group=""), *KINDS.trial[1:])
    )
    plan = changed(changed(plan, "pulse", after="probe0"), "probe", after="probe0")
    (trial,) = match("A@1 P@3.5", replace(plan, groups=(replace(plan.groups[0], times=(3, 3)),))).trials
    assert trial.kind == "stimulated"
    assert trial.doubts == ("a trial of kind plain as well",)


STANDING_IN = changed(PLAN, "pulse1", stand_in=StandIn.FIXED, stand_in_s=0.75)
DRAWN = changed(PLAN, "pulse1", stand_in=StandIn.DRAWN)
ALL = [shifted(WHOLE.replace("T@3.2", f"T@{3.01 + 0.01 * number:.3f}"), 10 * number) for number in range(40)]
WITHOUT = [" ".join(word for word in text.split() if word != text.split()[2]) for text in ALL]


def stand_in_s(texts: Sequence[str], plan: Plan) -> dict[float, float]:
    """Time of the anchor since the cue, by the trial's first sample."""
    found = match(" ".join(texts), plan)
    return {
        trial.first_sample: (trial.stand_ins["pulse1"] - trial.markers["cue1"].sample) / RATE_HZ
        for trial in found.trials
        if trial.stand_ins
    }


def test_trials_without_a_pulse_get_a_fixed_anchor() -> None:
    assert stand_in_s(ALL, STANDING_IN) == {}
    assert stand_in_s([*ALL[:3], WITHOUT[3]], STANDING_IN) == {31000.0: pytest.approx(0.75)}


def test_a_stand_in_needs_its_reference() -> None:
    (trial,) = match("L@1 P@4.5 B@5.5 T@6.2", STANDING_IN).trials
    assert (trial.missing, trial.stand_ins) == (("cue1",), {})


def test_without_any_pulse_nothing_is_drawn() -> None:
    assert stand_in_s(WITHOUT, DRAWN) == {}


def test_drawn_anchors_are_latencies_of_this_recording_and_the_seed_draws_them() -> None:
    texts = [*ALL[:20], *WITHOUT[20:]]
    drawn = stand_in_s(texts, DRAWN)
    assert len(drawn) == 20
    latencies = [0.51 + 0.01 * number for number in range(20)]
    assert all(min(abs(one - other) for other in latencies) < 1e-9 for one in drawn.values())
    assert len({round(one, 3) for one in drawn.values()}) > 5
    assert stand_in_s(texts, DRAWN) == drawn
    assert stand_in_s(texts, changed(DRAWN, "pulse1", stand_in_seed=2)) != drawn


def test_drawn_anchors_are_spread_like_the_latencies() -> None:
    texts = [*ALL[:4], *(shifted(WITHOUT[0], 10 * number) for number in range(4, 404))]
    counts = Counter(round(one, 2) for one in stand_in_s(texts, DRAWN).values())
    # 400 draws from 4 latencies: the standard deviation of a count is 8.7.
    assert sorted(counts) == [0.51, 0.52, 0.53, 0.54]
    assert all(abs(count - 100) < 4 * 8.7 for count in counts.values())


def test_what_happens_to_other_trials_changes_no_draw_that_is_not_theirs() -> None:
    texts = [*ALL[:20], *WITHOUT[20:]]
    drawn = stand_in_s(texts, DRAWN)
    # A trial without a pulse less: the others keep theirs.
    fewer = stand_in_s([*texts[:25], *texts[26:]], DRAWN)
    assert fewer == {start: one for start, one in drawn.items() if start != 251000.0}
    # A latency less: only draws of that latency change.
    for lost in range(20):
        after = stand_in_s([*texts[:lost], *texts[lost + 1 :]], DRAWN)
        own = 0.51 + 0.01 * lost
        for start, one in drawn.items():
            assert (after[start] != one) is (abs(one - own) < 1e-9)


def test_doubtful_trials_lend_no_latency() -> None:
    doubled = ALL[0].replace("L@1.000", "L@1.000 L@1.010")
    drawn = stand_in_s([doubled, *ALL[1:3], *WITHOUT[3:]], DRAWN)
    assert {round(one, 3) for one in drawn.values()} == {0.52, 0.53}
