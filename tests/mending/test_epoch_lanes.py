"""Lanes of trials against trials made by hand, and counts while dragging against deciding about all."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pulsemend.mending.condition_view import (
    condition_columns,
    condition_view,
    rule_differences,
    usual_columns,
)
from pulsemend.mending.epoch_lanes import (
    FATES,
    Lanes,
    LanesShown,
    LaneState,
    conflict_words,
    epoch_lanes,
    shown_lanes,
    with_zero,
)
from pulsemend.mending.epoch_rows import recounted
from pulsemend.mending.prepare import Decision
from pulsemend.model.epochs import Trial
from pulsemend.model.plan import Balance, EpochRule, Plan
from pulsemend.model.vocabulary import Fate, PulseRule, Role
from pulsemend.progress import finish
from support.lane_cases import PLAN, TRIALS, decided, trial


@pytest.fixture(scope="module")
def decision() -> Decision:
    return decided(TRIALS, excluded=(7,))


@pytest.fixture(scope="module")
def lanes(decision: Decision) -> Lanes:
    return finish(epoch_lanes(decision, PLAN))


def boxes_of(lanes: Lanes, lane: int) -> dict[tuple[str, int], tuple[float, float, Fate]]:
    """Boxes of a lane since its zero, by rule and piece."""
    return {
        (lanes.rules[lanes.box_rule[box]], int(lanes.box_piece[box])): (
            round(float(lanes.box_start_s[box] - lanes.zero_s[lane]), 9),
            round(float(lanes.box_stop_s[box] - lanes.zero_s[lane]), 9),
            FATES[lanes.box_fate[box]],
        )
        for box in np.flatnonzero(lanes.box_lane == lane).tolist()
    }


# Times by hand: the sample at 0, the cue at 1.5 s, the pulse 2.503 s (its onset) or 3.503 s after the sample


def test_boxes_stand_where_the_rules_say(lanes: Lanes) -> None:
    assert boxes_of(lanes, 0) == {
        ("baseline", 1): (-1.0, 0.0, Fate.KEPT),
        ("delay1", 1): (2.0, 3.0, Fate.TOUCHES_GAP),
        ("after1", 1): (2.503, 3.503, Fate.KEPT),
        ("after1", 2): (3.503, 4.503, Fate.KEPT),
    }
    assert boxes_of(lanes, 1)["delay1", 1] == (2.0, 3.0, Fate.KEPT)
    # Without a pulse there is no box to draw, but it is named.
    assert set(boxes_of(lanes, 2)) == {("baseline", 1), ("delay1", 1)}
    assert lanes.lanes[2].conflicts == (
        "after1 piece 1: no pulse1 in this trial",
        "after1 piece 2: no pulse1 in this trial",
    )


def test_markers_have_their_slot_role_and_onset(lanes: Lanes) -> None:
    own = np.flatnonzero(lanes.marker_lane == 0)
    found = {lanes.slots[lanes.marker_slot[one]]: float(lanes.marker_s[one]) for one in own}
    assert found == {"sample": 5.0, "cue1": 6.5, "pulse1": 7.503}
    assert lanes.roles == (Role.SAMPLE, Role.CUE, Role.PULSE)
    assert not lanes.marker_stands_in.any()


def test_a_stand_in_is_told_from_a_marker() -> None:
    one = replace(trial(1, 5_000, pulse_after=None), stand_ins={"pulse1": 7_400.0})
    lanes = finish(epoch_lanes(decided([one]), PLAN))
    (place,) = np.flatnonzero(lanes.marker_stands_in)
    assert (lanes.slots[lanes.marker_slot[place]], float(lanes.marker_s[place])) == ("pulse1", 7.4)
    assert ("after1", 1) in boxes_of(lanes, 0)


def test_gaps_are_merged_and_belong_to_the_lane_they_lie_in(lanes: Lanes) -> None:
    assert len(lanes.gap_start_s) == 2 * 6  # six pulses, each with a gap and a recharge
    own = slice(lanes.gap_first[0], lanes.gap_stop[0])
    assert lanes.gap_start_s[own].tolist() == [7.501, 7.751]
    assert lanes.gap_stop_s[own].tolist() == [7.528, 7.757]
    assert lanes.gap_first[2] == lanes.gap_stop[2]


def test_states_in_words(lanes: Lanes) -> None:
    assert [(lane.state, lane.why) for lane in lanes.lanes[2:]] == [
        (LaneState.COMPLETE, ""),
        (LaneState.INCOMPLETE, "no cue2"),
        (LaneState.DOUBTFUL, "cue1 at 12.304 s or 12.391 s"),
        (LaneState.SET_ASIDE, "practice"),
        (LaneState.EXCLUDED, ""),
    ]
    assert lanes.lanes[0].words == "delay1 touches gap of pulse1 at 7.503 s"
    assert lanes.lanes[1].words == ""
    assert lanes.lanes[3].words == "incomplete: no cue2"
    assert lanes.lanes[6].words == "excluded by hand"


@pytest.mark.parametrize("fate", [fate for fate in Fate if fate is not Fate.KEPT])
def test_every_fate_is_named_with_its_rule_and_detail(fate: Fate) -> None:
    said = conflict_words("delay1", fate, "pulse1 at 12.304 s")
    assert said.startswith("delay1")
    assert said.endswith("pulse1 at 12.304 s")
    assert conflict_words("delay1", fate, "") == f"delay1 {fate}"


def test_another_zero_moves_lanes_against_each_other(lanes: Lanes) -> None:
    moved = with_zero(lanes, "pulse1")
    assert moved.zero == "pulse1"
    assert moved.zero_s[:2].tolist() == [7.503, 18.503]
    # The third has none: as far from its sample as is usual. The distances are 2.503 five times, and 3.503.
    assert not moved.has_zero[2]
    assert moved.zero_s[2] == pytest.approx(25.0 + 2.503)
    assert with_zero(moved, "").zero_s.tolist() == lanes.zero_s.tolist()
    assert with_zero(lanes, "nowhere").zero == "sample"
    low_s, high_s = lanes.span_s
    assert (low_s, round(high_s, 9)) == (-1.0, 5.503)


def test_filters(lanes: Lanes) -> None:
    def trials(*which: object) -> list[int]:
        return [lanes.lanes[lane].trial for lane in shown_lanes(lanes, *which)]  # type: ignore[arg-type]

    assert trials(LanesShown.ALL) == [1, 2, 3, 4, 5, 6, 7]
    assert trials(LanesShown.CONFLICTS) == [1, 5]
    assert trials(LanesShown.LEFT_OUT) == [1, 3, 4, 5, 6, 7]
    assert trials(LanesShown.ALL, "", ("cue1.item", "right")) == [2, 5]
    assert trials(LanesShown.LEFT_OUT, "", ("asked", "right")) == [5]
    assert trials(LanesShown.ALL, "", ("asked", "up")) == []
    assert trials(LanesShown.ALL, "other kind") == []
    assert lanes.kinds == ()


def test_no_trials_and_trials_without_markers() -> None:
    none = finish(epoch_lanes(decided([]), PLAN))
    assert none.lanes == ()
    assert none.span_s == (0.0, 1.0)
    assert shown_lanes(none, LanesShown.ALL).size == 0
    bare = finish(epoch_lanes(decided([Trial(1, {}, missing=("sample", "cue1"))]), PLAN))
    assert bare.zero_s.tolist() == [0.0]
    assert bare.left_out.tolist() == [True]
    assert bare.box_lane.size == 0


# While something is dragged


def changes(plan: Plan) -> list[Plan]:
    def with_rules(*rules: EpochRule, length_s: float = 1.0) -> Plan:
        return replace(plan, epochs=replace(plan.epochs, rule=rules, length_s=length_s))

    base, delay, after = plan.epochs.rule
    return [
        plan,
        with_rules(base, replace(delay, start_s=-0.5), after),
        with_rules(base, replace(delay, clear_ms=(100.0, 0.0), stop_before="pulse1"), after),
        with_rules(base, delay, replace(after, pulse=PulseRule.REFUSE)),
        with_rules(base, delay, replace(after, count=1)),
        with_rules(base, delay),
        with_rules(after, replace(delay, labels={"order": "first"}), base),
        with_rules(base, replace(delay, anchor="sample"), after),
        with_rules(base, delay, after, length_s=0.5),
        replace(plan, balance=Balance(("cue1.item",))),
        replace(with_rules(base, replace(delay, start_s=-0.5), after), balance=Balance(("cue1.item",))),
    ]


@pytest.mark.parametrize("balance", [Balance(), Balance(("asked",))], ids=["free", "balanced"])
@pytest.mark.parametrize("place", range(11))
def test_counting_anew_is_deciding_about_everything(place: int, balance: Balance) -> None:
    before = replace(PLAN, balance=balance)
    plan = changes(before)[place]
    new = finish(recounted(decided(TRIALS, before, (7,)), before, plan))
    whole = decided(TRIALS, plan, (7,))
    assert new.ledger == whole.ledger
    assert new.kept == whole.kept


# Conditions


def test_conditions_and_what_a_balance_would_leave_out(decision: Decision) -> None:
    view = finish(condition_view(decision, PLAN))
    assert view.columns == ("cue1.item", "asked")
    assert view.picked == ("asked",)
    counts = {(one.rule, one.values): (one.kept, one.total) for one in view.counts}
    assert counts["delay1", ("left",)] == (1, 5)
    assert counts["delay1", ("right",)] == (1, 2)
    # Baselines carry no such label; of delay1 there is one of each already.
    assert (view.left_out, view.would) == (0, 0)
    by_item = finish(condition_view(decision, PLAN, ("cue1.item", "gone")))
    assert by_item.picked == ("cue1.item",)
    # Kept baselines: 1 and 3 left, 2 right. Kept first and second pieces after the pulse: 1 left, 2 right.
    assert by_item.would == 1
    nothing = finish(condition_view(decision, PLAN, ()))
    assert nothing.picked == ()
    assert nothing.would == 0
    assert {one.values for one in nothing.counts} == {()}


def test_a_balance_in_force_does_not_hide_what_another_would_do() -> None:
    plan = replace(PLAN, balance=Balance(("cue1.item",)))
    view = finish(condition_view(decided(TRIALS, plan, (7,)), plan))
    assert view.picked == ("cue1.item",)
    assert (view.left_out, view.would) == (1, 1)


def test_usual_columns() -> None:
    assert usual_columns(PLAN, ()) == ()
    assert usual_columns(replace(PLAN, balance=Balance(("cue1.item", "gone"))), ("cue1.item", "asked")) == (
        "cue1.item",
    )
    assert condition_columns(()) == ()


def test_differences_are_those_of_one_rule(decision: Decision) -> None:
    for place, rule in enumerate(PLAN.epochs.rule):
        found = finish(rule_differences(decision, PLAN, place))
        assert {one.rule for one in found} <= {rule.name}
    delay = finish(rule_differences(decision, PLAN, 1))
    assert "pulse1 latency since cue1 [s]" in [one.variable for one in delay]
