"""Blocks and set-aside trials: by sequences whose answer is plain to see."""

from __future__ import annotations

from dataclasses import replace

from pulsemend.model.epochs import Trial
from pulsemend.model.plan import Blocks, Log, Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.trials.blocks import with_blocks

RATE_HZ = 500.0

PLAN = parse_plan(
    """
pulsemend = 1
[markers.lamp]
role = "cue"
[[trial]]
slot = "cue"
role = "cue"
[pulses]
times = "none"
[epochs]
length_s = 1
[[epochs.rule]]
name = "after"
anchor = "cue"
start_s = 0
"""
).plan


def trials_at(*seconds: float) -> list[Trial]:
    return [
        Trial(number, {"cue": Marker(at * RATE_HZ, "lamp")}) for number, at in enumerate(seconds, start=1)
    ]


def with_rules(**rules: object) -> Plan:
    return replace(PLAN, blocks=Blocks(**rules))  # type: ignore[arg-type]


def test_without_blocks_trials_are_only_counted() -> None:
    found = with_blocks(trials_at(1, 5, 100), [], PLAN, RATE_HZ)
    assert [(t.block, t.place, t.set_aside) for t in found] == [(0, 1, ""), (0, 2, ""), (0, 3, "")]


def test_a_longer_pause_begins_a_block_and_an_equal_one_does_not() -> None:
    found = with_blocks(trials_at(1, 5, 15, 25.5), [], with_rules(pause_s=10.0), RATE_HZ)
    assert [(t.block, t.place_in_block) for t in found] == [(1, 1), (1, 2), (1, 3), (2, 1)]


def test_codes_begin_blocks_and_practice() -> None:
    markers = [Marker(2000.0, "go"), Marker(0.0, "warm up"), Marker(2000.5, "go"), Marker(6000.0, "go")]
    plan = with_rules(codes=("go",), practice_codes=("warm up",))
    found = with_blocks(trials_at(1, 3, 5, 7, 13), markers, plan, RATE_HZ)
    assert [t.block for t in found] == [1, 1, 2, 2, 3]
    assert [t.set_aside for t in found] == ["practice, in a block begun by warm up"] * 2 + [""] * 3


def test_trials_before_the_first_code_are_a_block_of_their_own() -> None:
    found = with_blocks(trials_at(1, 3), [Marker(1000.0, "go")], with_rules(codes=("go",)), RATE_HZ)
    assert [(t.block, t.place_in_block) for t in found] == [(1, 1), (2, 1)]


def test_first_trials_of_the_recording_and_of_each_block_are_set_aside() -> None:
    plan = with_rules(practice_first=1, pause_s=10.0, after_pause=2)
    found = with_blocks(trials_at(1, 3, 5, 40, 42, 44), [], plan, RATE_HZ)
    assert [t.set_aside for t in found] == [
        "practice, one of the first 1",
        "one of the first 2 in its block",
        "",
        "one of the first 2 in its block",
        "one of the first 2 in its block",
        "",
    ]


def test_the_log_tells_practice_by_row_of_trial_and_by_row_of_slot() -> None:
    plan = replace(
        with_rules(practice_column="phase", practice_values=("train", "demo")), log=Log("x.tsv", ("cue",))
    )
    rows = [{"phase": "train"}, {"phase": "main"}, {"cue.phase": "demo"}, {}]
    trials = [replace(t, log=row) for t, row in zip(trials_at(1, 2, 3, 4), rows, strict=True)]
    found = with_blocks(trials, [], plan, RATE_HZ)
    assert [bool(t.set_aside) for t in found] == [True, False, True, False]
    assert found[0].set_aside == "practice, by the log"
