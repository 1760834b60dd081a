"""States of the stages, from invented sessions."""

from __future__ import annotations

from dataclasses import replace

import pytest

from pulsemend.model.marks import Marks
from pulsemend.model.plan_file import parse_plan
from pulsemend.session.found import Found, FoundMarkers, Stage, WrittenSet
from pulsemend.session.session import Session
from pulsemend.session.stages import NOT_YET, StageState, State, stage_states
from support.session_desk import FACTS, PLAN, Desk


def state_of(session: Session, stage: Stage) -> StageState:
    return {one.stage: one for one in stage_states(session)}[stage]


def with_plan(desk: Desk, text: str) -> Session:
    session = Session()
    session.open_recording(desk.folder / "lt01.vhdr", FACTS)
    session.open_plan(parse_plan(text), None)
    return session


def test_every_stage_has_a_state_in_the_order_of_the_rail() -> None:
    states = stage_states(Session())
    assert [one.stage for one in states] == list(Stage)
    assert {one.state for one in states} == {State.UNTOUCHED}
    assert all(one.words.endswith(".") and one.label == "untouched" for one in states)


@pytest.mark.parametrize("stage", [Stage.REVIEW, Stage.ROSTER])
def test_stages_of_later_versions_say_what_will_be_there(desk: Desk, stage: Stage) -> None:
    for session in (Session(), with_plan(desk, PLAN)):
        words = state_of(session, stage).words
        assert NOT_YET[stage] in words
        assert "Until then" in words


def test_recording(desk: Desk) -> None:
    session = with_plan(desk, PLAN)
    assert state_of(session, Stage.RECORDING) == StageState(
        Stage.RECORDING, State.DONE, "lt01: 4 channels, 60 s at 1000 Hz."
    )
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    assert state_of(session, Stage.RECORDING).words.endswith("1 marked bad by hand.")
    session.set_found(Found(problems=("Channel Oz is not in the recording.", "The rate is too low.")))
    state = state_of(session, Stage.RECORDING)
    assert (state.state, state.count, state.label) == (State.ATTENTION, 2, "2 need attention")


def test_markers_without_role_or_recorded_code_need_attention(desk: Desk) -> None:
    assert state_of(with_plan(desk, PLAN), Stage.MARKERS).state is State.DONE
    text = PLAN.replace("[[trial]]", '[markers.tick2]\nrole = "undecided"\n[[trial]]', 1)
    state = state_of(with_plan(desk, text), Stage.MARKERS)
    assert (state.state, state.count) == (State.ATTENTION, 2)
    assert (
        state.words == "Code 'tick2' has no role yet. Code 'tick2' is in the plan, but not in the recording."
    )


def test_cures_doubtful_trials_and_the_log_need_attention(desk: Desk) -> None:
    session = with_plan(desk, PLAN)
    found = FoundMarkers(curable=("burst", "zero codes"), n_doubtful=3, log_problem="log.tsv: no times")
    session.set_found(Found(markers=found))
    state = state_of(session, Stage.MARKERS)
    assert state.count == 6
    assert state.words == (
        "A cure is open: burst. A cure is open: zero codes. 3 trials have more than one explanation. "
        "The log was not joined."
    )
    session.edit_marks("decided", Marks(cures_accepted=("burst",), cures_refused=("zero codes",)))
    assert state_of(session, Stage.MARKERS).count == 4


def test_codes_that_a_cure_brings_are_there(desk: Desk) -> None:
    text = PLAN.replace("[markers.lamp]", '[markers.lamp2]\nrole = "sample"\n[markers.lamp]')
    session = with_plan(desk, text)
    assert "'lamp2' is in the plan, but not" in state_of(session, Stage.MARKERS).words
    session.set_found(Found(markers=FoundMarkers(codes=frozenset({"lamp", "lamp2", "tick"}))))
    assert state_of(session, Stage.MARKERS).state is State.DONE


def test_codes_that_the_plan_does_not_name_are_told(desk: Desk) -> None:
    text = PLAN.replace('[markers.tick]\nrole = "pulse"', "").replace("[pulses]", '[pulses]\ntimes = "none"')
    assert (
        "Not in the plan, and so of role other: tick." in state_of(with_plan(desk, text), Stage.MARKERS).words
    )


def test_pulses(desk: Desk) -> None:
    session = with_plan(desk, PLAN)
    assert state_of(session, Stage.PULSES).state is State.UNTOUCHED
    session.set_found(Found(n_pulses=0))
    state = state_of(session, Stage.PULSES)
    assert (state.state, state.label) == (State.ATTENTION, "1 needs attention")
    session.set_found(Found(n_pulses=7, n_not_in_signal=2))
    state = state_of(session, Stage.PULSES)
    assert (state.state, state.count) == (State.ATTENTION, 2)
    assert state.words == "2 of 7 pulses: marked, but not in the signal."
    session.set_found(Found(n_pulses=7))
    assert state_of(session, Stage.PULSES) == StageState(
        Stage.PULSES, State.DONE, "7 pulses, gap from -2 to 14 ms."
    )
    none = with_plan(desk, PLAN.replace("[pulses]", '[pulses]\ntimes = "none"'))
    assert state_of(none, Stage.PULSES).state is State.DONE


def test_what_is_undecided_is_told_once(desk: Desk) -> None:
    open_gap = with_plan(
        desk, PLAN.replace("window_ms = [-2, 14]", "").replace("window_ms = [-2.0, 14.0]", "")
    )
    open_gap.set_found(Found(problems=("pulses.window_ms: is missing",)))
    assert state_of(open_gap, Stage.PULSES).count == 1
    assert state_of(open_gap, Stage.RECORDING).state is State.DONE


def test_plan_without_slots_and_rules_is_told_where_it_belongs(desk: Desk) -> None:
    bare = with_plan(desk, 'pulsemend = 1\n[pulses]\ntimes = "none"\n[epochs]\nlength_s = 1.0\n')
    bare.set_found(Found(problems=("trial: has no slot",)))
    assert state_of(bare, Stage.RECORDING).state is State.DONE
    for stage, words in ((Stage.MARKERS, "has no slot yet"), (Stage.EPOCHS, "has no epoch rule yet")):
        state = state_of(bare, stage)
        assert (state.state, state.count) == (State.ATTENTION, 1)
        assert words in state.words


def test_rules_without_epochs_need_attention(desk: Desk) -> None:
    session = with_plan(desk, PLAN)
    assert state_of(session, Stage.EPOCHS).state is State.UNTOUCHED
    session.set_found(Found(kept=(("baseline", 0), ("delay", 12))))
    state = state_of(session, Stage.EPOCHS)
    assert (state.count, state.words) == (1, "Rule 'baseline' keeps no epoch.")
    session.set_found(Found(kept=(("baseline", 11), ("delay", 12))))
    assert state_of(session, Stage.EPOCHS).words == "Epochs kept: baseline 11, delay 12."


def test_a_set_older_than_the_last_change_needs_attention(desk: Desk) -> None:
    session = with_plan(desk, PLAN)
    written = WrittenSet(desk.folder, session.revision)
    session.set_found(Found(written=written))
    assert state_of(session, Stage.EXPORT).state is State.DONE
    session.set_found(Found(written=replace(written, problems=("Condition left has 3 epochs.",))))
    assert state_of(session, Stage.EXPORT).words == "Condition left has 3 epochs."
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    assert state_of(session, Stage.EXPORT).count == 2
