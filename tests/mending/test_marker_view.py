"""What the Markers stage is told about a recording whose truth is known."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pulsemend.mending.marker_edits import Verdict, with_verdict
from pulsemend.mending.marker_intervals import (
    NO_INTERVALS,
    between_codes,
    limited_slots,
    since_reference,
)
from pulsemend.mending.marker_view import (
    ABSENT,
    BY_BITS,
    UNPLANNED,
    Survey,
    TrialState,
    code_evidence,
    code_rows,
    raw_key,
    survey,
    trial_spans,
    trial_state,
)
from pulsemend.model.epochs import Trial
from pulsemend.model.marks import NO_MARKS, MarkerKey, Marks
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan, read_plan
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Role
from pulsemend.progress import finish
from pulsemend.readers.opening import open_recording
from support.marker_study import (
    DOUBLED_TRIAL,
    DRIFT,
    LOST_TRIAL,
    N_TRIALS,
    OFFSET_S,
    PLAN,
    RATE_HZ,
    STRAY_S,
    UNLOGGED_TRIAL,
    MarkerStudy,
    write_marker_study,
)


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> MarkerStudy:
    return write_marker_study(tmp_path_factory.mktemp("markers"))


def look(study: MarkerStudy, marks: Marks = NO_MARKS, plan: Plan | None = None, **more: object) -> Survey:
    recording = open_recording(study.recording)
    try:
        return finish(survey(recording, plan or read_plan(study.plan).plan, marks, **more))  # type: ignore[arg-type]
    finally:
        recording.close()


def test_codes_of_recording_and_plan_stand_together(study: MarkerStudy) -> None:
    plan = parse_plan(f'{PLAN}[markers."S 0"]\nrole = "undecided"\n').plan
    rows = code_rows(look(study).evidence, plan)
    assert [(row.code, row.role.value, row.count, row.note) for row in rows] == [
        ("S 0", "undecided", 3 * N_TRIALS, ""),
        ("S 1", "sample", N_TRIALS, ""),
        ("S 12", "cue", 7, ""),
        ("S 31", "probe", N_TRIALS, ""),
        ("S 11", "cue", 6, ""),
        ("S 99", "other", 0, ABSENT),
    ]
    assert rows[-1].first_s is None
    assert rows[2].first_s == study.cues_s[0]
    assert rows[2].labels == {"item": "right"}
    unplanned = code_rows(look(study).evidence, parse_plan(PLAN).plan)[1]
    assert (unplanned.code, unplanned.role, unplanned.note) == ("S 0", Role.OTHER, UNPLANNED)


def test_without_a_plan_every_code_is_undecided(study: MarkerStudy) -> None:
    recording = open_recording(study.recording)
    found = finish(survey(recording, None, NO_MARKS))
    recording.close()
    assert {row.role for row in code_rows(found.evidence, None)} == {Role.UNDECIDED}
    assert found.trials.trials == ()
    assert [fault.key for fault in found.faults] == ["zero codes of S", "doubled marker S 12"]


def test_a_role_by_bits_is_told_apart_from_a_code_that_nobody_names() -> None:
    text = PLAN.replace(
        "[[trial]]", '[bits.kind]\nat = [3, 3]\nroles = { "1" = "ignore" }\n[[trial]]', 1
    ).replace('[markers."S 11"]\nrole = "cue"\nlabels = { item = "left" }\n', "")
    evidence = code_evidence([Marker(10, "S 11"), Marker(20, "S 3")], RATE_HZ)
    rows = {row.code: row for row in code_rows(evidence, parse_plan(text).plan)}
    assert (rows["S 11"].role, rows["S 11"].note) == (Role.IGNORE, BY_BITS)
    assert (rows["S 3"].role, rows["S 3"].note) == (Role.OTHER, UNPLANNED)


def test_trials_with_their_states(study: MarkerStudy) -> None:
    found = look(study)
    states = {trial.number: trial_state(trial) for trial in found.trials.trials}
    assert states.pop(DOUBLED_TRIAL) is TrialState.DOUBTFUL
    assert states.pop(LOST_TRIAL) is TrialState.INCOMPLETE
    assert set(states.values()) == {TrialState.COMPLETE}
    spans = trial_spans(found.trials.trials, found.rate_hz)
    assert spans.start_s[0] == found.trials.trials[0].first_sample / RATE_HZ
    whole = np.array([number not in (DOUBLED_TRIAL, LOST_TRIAL) for number in spans.numbers])
    to_cue_s = 1.0 + 0.02 * (np.array(spans.numbers) % 5)
    length_s = spans.stop_s - spans.start_s
    np.testing.assert_allclose(length_s[whole], to_cue_s[whole] + 1.3, atol=2.01 / RATE_HZ)
    np.testing.assert_allclose(length_s[LOST_TRIAL - 1], to_cue_s[LOST_TRIAL - 1], atol=2.01 / RATE_HZ)
    assert spans.states[LOST_TRIAL - 1] is TrialState.INCOMPLETE


def test_what_is_set_aside_is_not_doubtful() -> None:
    trial = Trial(1, {}, missing=("cue",), doubts=("two",), set_aside="practice")
    assert trial_state(trial) is TrialState.SET_ASIDE
    assert trial_state(replace(trial, set_aside="")) is TrialState.DOUBTFUL


def test_a_cure_changes_codes_and_trials_and_stays_listed(study: MarkerStudy) -> None:
    before = look(study)
    marks = with_verdict(NO_MARKS, "doubled marker S 12", Verdict.ACCEPTED)
    marks = with_verdict(marks, "zero codes of S", Verdict.ACCEPTED)
    after = look(study, marks, earlier=before)
    assert "S 0" not in {one.code for one in after.evidence}
    assert [fault.key for fault in after.faults] == [fault.key for fault in before.faults]
    assert trial_state(after.trials.trials[DOUBLED_TRIAL - 1]) is TrialState.COMPLETE
    assert len(after.trials.extra) == 1
    cue = next(one for one in after.evidence if one.code == "S 12")
    assert cue.after is not None
    assert cue.after[0] == "S 31"
    assert cue.after[1] == pytest.approx(1.3, abs=1 / RATE_HZ)


def test_what_did_not_change_is_taken_over(study: MarkerStudy) -> None:
    plan = read_plan(study.plan).plan
    before = look(study, plan=plan)
    after = look(study, replace(NO_MARKS, trials_excluded=(1,)), plan, earlier=before)
    assert after.faults is before.faults
    assert after.evidence is before.evidence
    other = look(study, plan=replace(plan, markers=plan.markers[:-1]), earlier=before)
    assert [fault.key for fault in other.faults] == ["zero codes of S", "doubled marker S 12"]


def test_limits_that_contradict_each_other_are_a_problem_in_words(study: MarkerStudy) -> None:
    text = PLAN.replace(
        'slot = "probe"\nrole = "probe"', 'slot = "probe"\nrole = "probe"\nafter = "sample"'
    ).replace("after_s = [1.0, 2.0]", "after_s = [0.1, 0.2]")
    found = look(study, plan=parse_plan(text).plan)
    assert "no times can meet the limits" in found.problem
    assert found.trials.trials == ()
    assert found.evidence


# The log


def test_the_log_lies_on_its_clock(study: MarkerStudy) -> None:
    log = look(study).log
    assert log.problem == ""
    assert log.clock is not None
    assert log.clock.drift == pytest.approx(DRIFT, abs=3 * log.clock.drift_se)
    assert log.clock.offset_s == pytest.approx(OFFSET_S + DRIFT * log.clock.centre_s, abs=1e-3)
    # Times in the log have five decimals.
    assert np.abs(log.residual_s).max() < 2e-5
    expected = [cue_s for number, cue_s in enumerate(study.cues_s, start=1) if number != UNLOGGED_TRIAL]
    # One of the two doubled markers was taken for the cue.
    np.testing.assert_allclose(log.time_s, expected, atol=2.5 / RATE_HZ)
    assert log.rows.tolist() == list(range(1, N_TRIALS))
    assert [(item.words, item.row) for item in log.rows_alone] == [("row 12", 12)]
    assert log.rows_alone[0].time_s == pytest.approx(77.0, abs=1e-3)
    assert [(item.words, item.time_s) for item in log.trials_alone] == [
        (f"trial {UNLOGGED_TRIAL}", study.cues_s[UNLOGGED_TRIAL - 1])
    ]


def test_rows_excluded_by_hand_are_listed_and_not_joined(study: MarkerStudy) -> None:
    log = look(study, replace(NO_MARKS, log_rows_excluded=(2, 12))).log
    assert [item.words for item in log.excluded] == ["row 2", "row 12"]
    assert log.rows_alone == ()
    assert 2 not in log.rows
    assert log.rows[1] == 3


def test_a_log_that_is_not_there_is_a_problem_in_words(study: MarkerStudy) -> None:
    log = look(study, replace(NO_MARKS, log_file="nobody.tsv")).log
    assert log.name == "nobody.tsv"
    assert log.problem
    assert log.join is None


def test_without_log_in_the_plan_there_is_none(study: MarkerStudy) -> None:
    text = PLAN.replace('[log]\nfile = "{stem}_log.tsv"\nslots = ["cue"]\ntime = "cue_s"\n', "")
    assert look(study, plan=parse_plan(text).plan).log.name == ""


# Intervals


def test_intervals_since_the_reference(study: MarkerStudy) -> None:
    found = look(study)
    assert [slot.slot for slot in limited_slots(found.plan)] == ["cue", "probe"]
    cue = since_reference(found, "cue")
    expected = [1.0 + 0.02 * (number % 5) for number in range(1, N_TRIALS + 1)]
    np.testing.assert_allclose(cue.length_s, expected, atol=2.5 / RATE_HZ)
    assert cue.limits_s == (0.8, 1.4)
    assert cue.words == "sample to cue"
    assert not cue.shorter.any()
    assert since_reference(found, "nobody") is NO_INTERVALS


def test_a_marker_kept_out_by_the_limits_is_outside(study: MarkerStudy) -> None:
    """The stray probe follows the last trial, whose own probe was found: it is nobody's interval."""
    found = look(study)
    assert since_reference(found, "probe").length_s.size == N_TRIALS - 1
    late = replace(
        found,
        trials=replace(
            found.trials,
            trials=(*found.trials.trials[:-1], _without(found.trials.trials[-1], "probe")),
        ),
    )
    probe = since_reference(late, "probe")
    assert probe.length_s[-1] == pytest.approx(STRAY_S - study.cues_s[-1])
    assert probe.longer.tolist() == [False] * (N_TRIALS - 2) + [True]


def test_without_trials_all_markers_of_the_roles_count(study: MarkerStudy) -> None:
    found = look(study)
    bare = replace(found, trials=replace(found.trials, trials=(), extra=()))
    assert since_reference(bare, "cue").length_s.size == N_TRIALS
    empty = replace(bare, evidence=())
    assert since_reference(empty, "cue").length_s.size == 0


def test_intervals_between_codes(study: MarkerStudy) -> None:
    found = look(study)
    pairs = between_codes(found, "S 12", "S 31")
    assert pairs.limits_s == (1.0, 2.0)
    # Of the doubled marker the last one before the probe counts, and one trial has no probe.
    np.testing.assert_allclose(pairs.length_s[:2], [1.3, 1.3 - 2 / RATE_HZ], atol=1.01 / RATE_HZ)
    assert between_codes(found, "S 12", "S 1").limits_s is None
    same = between_codes(found, "S 1", "S 1")
    assert same.length_s.size == N_TRIALS - 1
    assert between_codes(found, "S 1", "S 99").length_s.size == 0
    assert between_codes(found, "", "").length_s.size == 0


def _without(trial: Trial, slot: str) -> Trial:
    markers = {name: marker for name, marker in trial.markers.items() if name != slot}
    return replace(trial, markers=markers, missing=(slot,))


# Names of markers


def test_a_marker_is_named_as_the_recording_has_it() -> None:
    raw = (Marker(10.0, "129"), Marker(10.0, "key"), Marker(500.4, "130"))
    assert raw_key(Marker(10.0, "key"), raw, RATE_HZ) == MarkerKey(10, "key")
    # A cure made it another code; an onset moved it.
    assert raw_key(Marker(500.4, "2"), raw, RATE_HZ) == MarkerKey(500, "130")
    assert raw_key(Marker(515.0, "130"), raw, RATE_HZ) == MarkerKey(500, "130")
    assert raw_key(Marker(900.0, "130"), raw, RATE_HZ) is None
