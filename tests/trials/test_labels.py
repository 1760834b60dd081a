"""Labels of trials and rules: against tables written by hand, and what comes later than the epoch."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pulsemend.model.epochs import Trial, Trials
from pulsemend.model.label_columns import known_columns, rule_columns, slot_columns
from pulsemend.model.plan import DerivedLabel, EpochRule, Epochs, Plan, StimulationFacts
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.trials.candidates import GapSpan, Geometry, candidates
from pulsemend.trials.labels import TrialLabels
from pulsemend.trials.later import last_sample, later_by_rule, later_columns
from pulsemend.trials.matching import ADDED, FOUND_IN_SIGNAL, match_trials

PLAN = parse_plan(
    """
pulsemend = 1
[markers.up]
role = "sample"
[markers."arrow left"]
role = "cue"
labels = { item = "left" }
[markers."arrow right"]
role = "cue"
labels = { item = "right" }
[markers.T]
role = "pulse"
[markers.yes]
role = "response"
labels = { said = "yes" }
[markers.no]
role = "response"
labels = { said = "no" }
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
after_s = [0.5, 3.0]
optional = true
stand_in = "fixed"
stand_in_s = 1.0
[[trial]]
slot = "answer1"
role = "response"
after_s = [0.5, 4.0]
[[trial]]
slot = "cue2"
role = "cue"
after_s = [0.5, 4.0]
[[trial]]
slot = "answer2"
role = "response"
after_s = [0.5, 4.0]
[log]
file = "{stem}.tsv"
slots = ["sample"]
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 0.5
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.1
labels = { cued = "cue1.item", uncued = "other(cue1.item)", order = "first" }
[[epochs.rule]]
name = "delay2"
anchor = "cue2"
start_s = 0.1
labels = { cued = "cue2.item", uncued = "other(cue2.item)", order = "second" }
[[epochs.rule]]
name = "baseline"
anchor = "sample"
start_s = -0.6
"""
).plan
DELAY1, DELAY2, BASELINE = PLAN.epochs.rule

ARROWS = {"left": "arrow left", "right": "arrow right"}


def a_trial(
    number: int = 1, cue1: str = "left", cue2: str = "right", *, log: Mapping[str, str] | None = None
) -> Trial:
    """Samples 1000, 2000, ...: sample, cue1, answer1, cue2, answer2; the next trial 10000 later."""
    codes = {"sample": "up", "cue1": ARROWS[cue1], "answer1": "yes", "cue2": ARROWS[cue2], "answer2": "no"}
    start = 10000 * (number - 1)
    markers = {
        slot: Marker(start + 1000 * place, code) for place, (slot, code) in enumerate(codes.items(), start=1)
    }
    return Trial(number, markers, place=number, log=log or {})


def without(trial: Trial, *slots: str) -> Trial:
    return replace(trial, markers={slot: one for slot, one in trial.markers.items() if slot not in slots})


def with_labels(*labels: DerivedLabel, plan: Plan = PLAN) -> Plan:
    return replace(plan, labels=labels)


def column(plan: Plan, trials: Sequence[Trial], name: str, rule: EpochRule = DELAY1) -> list[str]:
    labels = TrialLabels(plan, trials)
    return [labels.of(trial, rule)[name] for trial in trials]


def logged(plan: Plan, values: Sequence[str], name: str) -> list[str]:
    """A column over trials whose log holds some values under ``x``; "" stands for a trial without a row."""
    trials = [
        a_trial(number, log={"x": value} if value else {}) for number, value in enumerate(values, start=1)
    ]
    return column(plan, trials, name)


# --- labels of rules -------------------------------------------------------------------------------

# cue1.item, cue2.item, rule: cued, uncued, order, turn (compared)
BY_HAND = {
    ("left", "left", "delay1"): ("left", "right", "first", "stay"),
    ("left", "left", "delay2"): ("left", "right", "second", "stay"),
    ("left", "right", "delay1"): ("left", "right", "first", "switch"),
    ("left", "right", "delay2"): ("right", "left", "second", "switch"),
    ("right", "left", "delay1"): ("right", "left", "first", "switch"),
    ("right", "left", "delay2"): ("left", "right", "second", "switch"),
    ("right", "right", "delay1"): ("right", "left", "first", "stay"),
    ("right", "right", "delay2"): ("right", "left", "second", "stay"),
}


def test_all_items_and_orders_of_two_cues_pool_into_one_column() -> None:
    plan = with_labels(
        DerivedLabel("turn", compare=("cue1.item", "cue2.item"), same="stay", different="switch")
    )
    pairs = list(itertools.product(("left", "right"), repeat=2))
    trials = [a_trial(number, *pair) for number, pair in enumerate(pairs, start=1)]
    labels = TrialLabels(plan, trials)
    found = {}
    for (cue1, cue2), trial in zip(pairs, trials, strict=True):
        for rule in (DELAY1, DELAY2):
            of = labels.of(trial, rule)
            assert (of["cue1.item"], of["cue2.item"]) == (cue1, cue2)
            found[cue1, cue2, rule.name] = (of["cued"], of["uncued"], of["order"], of["turn"])
    assert found == BY_HAND


def test_candidates_carry_these_labels() -> None:
    pairs = list(itertools.product(("left", "right"), repeat=2))
    trials = Trials(tuple(a_trial(number, *pair) for number, pair in enumerate(pairs, start=1)))
    found = candidates(replace(trials, run="2"), PLAN, Geometry(1000.0, 1000.0, ((0, 50000),)))
    rows = {
        (*pairs[one.trial - 1], one.rule): tuple(one.labels[name] for name in ("cued", "uncued", "order"))
        for one in found
        if one.rule != "baseline"
    }
    assert rows == {key: row[:3] for key, row in BY_HAND.items()}
    assert {one.labels["run"] for one in found} == {"2"}
    assert {tuple(one.labels) for one in found} == {TrialLabels(PLAN, trials.trials, "2").columns}


def test_a_rule_without_a_column_has_nothing_there() -> None:
    of = TrialLabels(PLAN, [a_trial()]).of(a_trial(), BASELINE)
    assert [of[name] for name in ("cued", "uncued", "order", "cue1.item")] == ["n/a", "n/a", "n/a", "left"]


@pytest.mark.parametrize(
    ("source", "expected"),
    [
        ("cue1.item", "left"),
        ("other(cue1.item)", "right"),
        ("other( cue1.item )", "right"),
        ("log.x", "3"),
        # What is a column of every epoch anyway is plain text here: "second" may be a column and a word.
        ("turn", "turn"),
        ("run", "run"),
        ("0.5", "0.5"),
        ("first", "first"),
        ("left or right", "left or right"),
        ("log.nothing", "n/a"),
        ("other(log.nothing)", "n/a"),
        ("other(turn)", "n/a"),
    ],
)
def test_sources_of_rule_labels(source: str, expected: str) -> None:
    plan = with_labels(DerivedLabel("turn", map="cue1.item", values={"left": "turned"}))
    trial = a_trial(log={"x": "3"})
    rule = replace(DELAY1, labels={"cued": source})
    assert TrialLabels(plan, [trial], run="morning").of(trial, rule)["cued"] == expected


@pytest.mark.parametrize(
    ("values", "expected"),
    [
        (["red", "blue", "red"], ["blue", "red", "blue"]),
        (["red", "", "blue"], ["blue", "n/a", "red"]),
        (["red", "n/a", "blue"], ["blue", "n/a", "red"]),
        (["red", "red", "red"], ["n/a", "n/a", "n/a"]),
        (["red", "blue", "green"], ["n/a", "n/a", "n/a"]),
    ],
)
def test_the_other_of_two_values_of_the_log(values: list[str], expected: list[str]) -> None:
    rule = replace(DELAY1, labels={"uncued": "other(log.x)"})
    trials = [
        a_trial(number, log={"x": value} if value else {}) for number, value in enumerate(values, start=1)
    ]
    assert column(PLAN, trials, "uncued", rule) == expected


def test_the_other_of_three_values_of_codes_is_unknown() -> None:
    three = replace(
        PLAN,
        markers=(*PLAN.markers, replace(PLAN.markers[1], code="arrow up", labels={"item": "up"})),
    )
    assert column(three, [a_trial()], "uncued") == ["n/a"]


# --- labels of trials ------------------------------------------------------------------------------


def test_what_filled_a_slot() -> None:
    trials = [
        replace(a_trial(number), markers={**a_trial(number).markers, "pulse1": Marker(2500, code)})
        for number, code in enumerate(("T", ADDED, FOUND_IN_SIGNAL), start=1)
    ]
    trials += [replace(a_trial(4), stand_ins={"pulse1": 33000.0}), a_trial(5)]
    assert column(PLAN, trials, "pulse1.source") == [
        "marker",
        "added by hand",
        "found in the signal",
        "stand-in",
        "n/a",
    ]


def test_a_label_called_source_stays_where_the_program_gives_none() -> None:
    plan = replace(
        PLAN, markers=tuple(replace(one, labels={**one.labels, "source": "screen"}) for one in PLAN.markers)
    )
    of = TrialLabels(plan, [a_trial()]).of(a_trial(), DELAY1)
    assert (of["cue1.source"], of["pulse1.source"]) == ("screen", "n/a")


def test_lost_markers_and_empty_cells_are_not_available() -> None:
    trial = without(a_trial(log={"x": "", "y": "2"}), "cue1")
    of = TrialLabels(PLAN, [trial]).of(trial, DELAY1)
    assert [of[name] for name in ("cue1.item", "cued", "uncued", "log.x", "log.y")] == ["n/a"] * 4 + ["2"]


KINDS = parse_plan(
    """
pulsemend = 1
[markers.S]
role = "sample"
labels = { colour = "green" }
[markers.1]
role = "cue"
labels = { item = "left" }
[markers.2]
role = "cue"
labels = { item = "right" }
[markers.P]
role = "probe"
labels = { match = "yes" }
[bits.side]
at = [0, 0]
names = { "1" = "odd" }
[[trial]]
slot = "sample"
role = "sample"
[[trial]]
slot = "cue"
role = "cue"
after_s = [0.5, 1.5]
group = "question"
[[trial]]
slot = "probe"
role = "probe"
after_s = [0.5, 1.5]
kinds = ["probed"]
[[trial]]
slot = "end"
role = "sample"
after_s = [2.0, 6.0]
kinds = ["quiet"]
[group.question]
times = [1, 2]
between_s = [0.5, 1.5]
[blocks]
pause_s = 60
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 0.1
[[epochs.rule]]
name = "first"
anchor = "cue1"
start_s = 0.1
labels = { cued = "cue1.item", part = "kind" }
[[epochs.rule]]
name = "second"
anchor = "cue2"
start_s = 0.1
labels = { cued = "cue2.item", uncued = "other(cue2.item)", part = "block" }
"""
).plan


def test_kinds_blocks_repeated_groups_and_fields_of_bits() -> None:
    markers = [Marker(1000 * place, code) for place, code in enumerate(("S", "1", "2", "P"))]
    markers += [Marker(20000, "S"), Marker(21000, "2"), Marker(24500, "S")]
    trials = [replace(one, block=2) for one in match_trials(markers, KINDS, 1000.0).trials]
    assert [one.kind for one in trials] == ["probed", "quiet"]
    labels = TrialLabels(KINDS, trials)
    columns = (
        "sample.colour",
        "sample.side",
        "cue1.item",
        "cue1.side",
        "cue2.item",
        "cue2.side",
        "probe.match",
        "end.colour",
        "kind",
        "block",
    )
    probed = labels.of(trials[0], KINDS.epochs.rule[1])
    assert [probed[name] for name in columns] == [
        "green",
        "n/a",
        "left",
        "odd",
        "right",
        "0",
        "yes",
        "n/a",
        "probed",
        "2",
    ]
    assert (probed["cued"], probed["uncued"], probed["part"]) == ("right", "left", "block")
    quiet = labels.of(trials[1], KINDS.epochs.rule[0])
    assert [quiet[name] for name in columns] == [
        "green",
        "n/a",
        "right",
        "0",
        "n/a",
        "n/a",
        "n/a",
        "green",
        "quiet",
        "2",
    ]
    assert (quiet["cued"], quiet["uncued"], quiet["part"]) == ("right", "n/a", "kind")


def test_stimulation_facts_from_plan_and_log() -> None:
    facts = StimulationFacts(
        intensity=65.0,
        unit="% of output",
        recharge_delay_ms=250.5,
        columns={"condition": "log.cond", "coil": "c"},
    )
    trials = [a_trial(1, log={"cond": "sham", "c": ""}), a_trial(2)]
    labels = TrialLabels(replace(PLAN, stimulation=replace(facts, coil="round")), trials)
    first, second = (labels.of(trial, DELAY1) for trial in trials)
    names = ("intensity", "unit", "recharge_delay_ms", "condition", "coil")
    # A fact told by the log is never taken from the plan where a row is missing.
    assert [first[f"stimulation.{name}"] for name in names] == ["65", "% of output", "250.5", "sham", "n/a"]
    assert [second[f"stimulation.{name}"] for name in names] == ["65", "% of output", "250.5", "n/a", "n/a"]
    assert "stimulation.target" not in first


# --- derived labels --------------------------------------------------------------------------------


def test_compare_needs_all_its_columns() -> None:
    plan = with_labels(
        DerivedLabel("two", compare=("cue1.item", "cue2.item")),
        DerivedLabel("three", compare=("cue1.item", "cue2.item", "log.x"), same="all", different="not all"),
    )
    trials = [
        a_trial(1, "left", "left", log={"x": "left"}),
        a_trial(2, "left", "left", log={"x": "right"}),
        a_trial(3, "left", "right", log={"x": "right"}),
        a_trial(4, "left", "left"),
        without(a_trial(5, "left", "left", log={"x": "left"}), "cue2"),
    ]
    assert column(plan, trials, "two") == ["same", "same", "different", "same", "n/a"]
    assert column(plan, trials, "three") == ["all", "not all", "not all", "n/a", "n/a"]


def test_copy_and_map() -> None:
    values = {"1": "right answer", "0": "wrong answer"}
    plan = with_labels(
        DerivedLabel("same", copy="log.x"),
        DerivedLabel("open", map="log.x", values=values),
        DerivedLabel("closed", map="log.x", values=values, otherwise="no answer"),
        DerivedLabel("named", map="log.x", values={"n/a": "nobody knows"}, otherwise="known"),
    )
    cells = ["1", "0", "9", ""]
    assert logged(plan, cells, "same") == ["1", "0", "9", "n/a"]
    assert logged(plan, cells, "open") == ["right answer", "wrong answer", "9", "n/a"]
    assert logged(plan, cells, "closed") == ["right answer", "wrong answer", "no answer", "n/a"]
    assert logged(plan, cells, "named") == ["known", "known", "known", "nobody knows"]


def test_bins_and_their_edges() -> None:
    cells = [
        "-3",
        "0.49999",
        "0.5",
        "0.99",
        "1",
        "1.0",
        "1e0",
        "+7",
        " 0.7 ",
        "0,7",
        "fast",
        "nan",
        "1_0",
        "",
    ]
    plain = ["below 0.5"] * 2 + ["0.5 to 1"] * 2 + ["1 and above"] * 4 + ["0.5 to 1"] + ["n/a"] * 5
    plan = with_labels(DerivedLabel("speed", bin="log.x", edges=(0.5, 1.0)))
    assert logged(plan, cells, "speed") == plain
    names = {"below 0.5": "fast", "0.5 to 1": "usual", "1 and above": "slow", "n/a": "n/a"}
    plan = with_labels(DerivedLabel("speed", bin="log.x", edges=(0.5, 1.0), names=("fast", "usual", "slow")))
    assert logged(plan, cells, "speed") == [names[one] for one in plain]


def test_names_of_bins_hold_no_powers_of_ten() -> None:
    plan = with_labels(DerivedLabel("speed", bin="log.x", edges=(-1e-5, 0.0, 1e20)))
    assert logged(plan, ["-1", "-0.000001", "5", "1e21"], "speed") == [
        "below -0.00001",
        "-0.00001 to 0",
        "0 to 100000000000000000000",
        "100000000000000000000 and above",
    ]


def in_blocks(*blocks: int) -> list[Trial]:
    """Trials with the place in their block, their item alternating: left, right, left, ..."""
    return [
        replace(
            a_trial(number, ("right", "left")[number % 2]),
            block=block,
            place_in_block=blocks[: number - 1].count(block) + 1,
        )
        for number, block in enumerate(blocks, start=1)
    ]


def test_positions() -> None:
    plan = with_labels(DerivedLabel("p", position="block"), DerivedLabel("q", position="recording"))
    trials = in_blocks(1, 1, 2, 2, 2)
    assert column(plan, trials, "p") == ["1", "2", "1", "2", "3"]
    assert column(plan, trials, "q") == ["1", "2", "3", "4", "5"]
    unknown = [replace(trial, place_in_block=0, place=0) for trial in trials]
    assert column(plan, unknown, "p") == column(plan, unknown, "q") == ["n/a"] * 5


def test_previous_stays_in_its_block() -> None:
    plan = with_labels(DerivedLabel("before", previous="cue1.item"))
    assert column(plan, in_blocks(1, 1, 1, 2, 2), "before") == ["n/a", "left", "right", "n/a", "right"]
    assert column(plan, in_blocks(0, 0, 0), "before") == ["n/a", "left", "right"]


def test_the_trial_before_counts_whatever_became_of_it() -> None:
    plan = with_labels(DerivedLabel("before", previous="cue1.item"))
    first, second, third, fourth = in_blocks(0, 0, 0, 0)
    trials = [
        replace(first, set_aside="practice"),
        replace(without(second, "cue1"), missing=("cue1",)),
        replace(third, missing=("cue2",)),
        fourth,
    ]
    assert column(plan, trials, "before") == ["n/a", "left", "n/a", "left"]
    # A doubtful one may have had another code.
    trials[2] = replace(third, doubts=("cue1 at 1.000 s or 1.100 s",))
    assert column(plan, trials, "before") == ["n/a", "left", "n/a", "n/a"]


def test_chains_are_made_in_the_order_they_need() -> None:
    plan = with_labels(
        DerivedLabel("e", map="d", values={"kept": "held", "changed": "shifted"}),
        DerivedLabel("d", compare=("c", "b"), same="kept", different="changed"),
        DerivedLabel("c", previous="b"),
        DerivedLabel("b", copy="a"),
        DerivedLabel("a", map="cue1.item", values={"left": "L", "right": "R"}),
        DerivedLabel("two before", previous="c"),
    )
    items = ("left", "left", "right", "right", "left")
    trials = [a_trial(number, item) for number, item in enumerate(items, start=1)]
    assert column(plan, trials, "b") == ["L", "L", "R", "R", "L"]
    assert column(plan, trials, "c") == ["n/a", "L", "L", "R", "R"]
    assert column(plan, trials, "d") == ["n/a", "kept", "changed", "kept", "changed"]
    assert column(plan, trials, "e") == ["n/a", "held", "shifted", "held", "shifted"]
    assert column(plan, trials, "two before") == ["n/a", "n/a", "L", "L", "R"]
    columns = TrialLabels(plan, trials).columns
    assert [one for one in columns if one in "abcde"] == ["e", "d", "c", "b", "a"]


# --- columns ---------------------------------------------------------------------------------------


def test_columns_in_their_order() -> None:
    plan = replace(
        with_labels(DerivedLabel("z", copy="cue1.item"), DerivedLabel("y", position="block"), plan=KINDS),
        stimulation=StimulationFacts(target="left"),
    )
    trials = [
        Trial(1, {}, kind="quiet", log={"b": "1"}),
        Trial(2, {}, kind="quiet", log={"c": "1", "b": "2"}),
    ]
    assert TrialLabels(plan, trials, run="2").columns == (
        *slot_columns(KINDS),
        "kind",
        "block",
        "run",
        "log.b",
        "log.c",
        "stimulation.target",
        "z",
        "y",
        "cued",
        "part",
        "uncued",
    )
    assert TrialLabels(PLAN, []).columns == (*slot_columns(PLAN), *rule_columns(PLAN))


@st.composite
def derived_labels(draw: st.DrawFn) -> tuple[DerivedLabel, ...]:
    """Labels of all ways, each made from anything known and the labels before it, in any order."""
    known = [*known_columns(KINDS), "log.x", "run"]
    found: list[DerivedLabel] = []
    for place in range(draw(st.integers(0, 5))):
        name = f"made{place}"
        source, other = draw(st.sampled_from(known)), draw(st.sampled_from(known))
        ways = [
            DerivedLabel(name, compare=(source, other)),
            DerivedLabel(name, copy=source),
            DerivedLabel(name, map=source, values={"1": "one"}),
            DerivedLabel(name, bin=source, edges=(0.5,)),
            DerivedLabel(name, previous=source),
            DerivedLabel(name, position=draw(st.sampled_from(["block", "recording"]))),
        ]
        found.append(draw(st.sampled_from(ways)))
        known.append(name)
    return tuple(draw(st.permutations(found)))


@st.composite
def trials_of_kinds(draw: st.DrawFn) -> tuple[Trial, ...]:
    codes = {"sample": "S", "cue1": "1", "cue2": "2", "probe": "P", "end": "S"}
    found = []
    for number in range(1, draw(st.integers(1, 4)) + 1):
        slots = draw(st.sets(st.sampled_from(list(codes))))
        found.append(
            Trial(
                number,
                {slot: Marker(draw(st.integers(0, 4000)), codes[slot]) for slot in codes if slot in slots},
                kind=draw(st.sampled_from(["probed", "quiet"])),
                block=draw(st.integers(0, 1)),
                place=number,
                doubts=draw(st.sampled_from([(), ("doubt",)])),
                log=draw(
                    st.dictionaries(st.sampled_from(["x", "y"]), st.sampled_from(["", "1", "n/a", "b"]))
                ),
            )
        )
    return tuple(found)


@settings(deadline=None, max_examples=150)
@given(trials_of_kinds(), derived_labels(), st.sampled_from(["", "2"]))
def test_every_candidate_has_exactly_the_columns(
    trials: tuple[Trial, ...], made: tuple[DerivedLabel, ...], run: str
) -> None:
    plan = with_labels(*made, plan=replace(KINDS, log=replace(KINDS.log, file="x.tsv")))
    geometry = Geometry(1000.0, 1000.0, ((0, 4000),))
    columns = TrialLabels(plan, trials, run).columns
    assert len(set(columns)) == len(columns)
    found = candidates(Trials(trials, run=run), plan, geometry)
    assert all(tuple(one.labels) == columns and all(one.labels.values()) for one in found)
    later = later_by_rule(found, trials, plan, geometry)
    assert set(later) <= set(columns)
    assert all(set(names) <= {"first", "second"} and names for names in later.values())


# --- later -----------------------------------------------------------------------------------------

LATER_PLAN = replace(
    with_labels(
        DerivedLabel("turn", compare=("cue1.item", "cue2.item")),
        DerivedLabel("turned", copy="turn"),
        DerivedLabel("before", previous="cue2.item"),
        DerivedLabel("place", position="recording"),
        DerivedLabel("fast", bin="log.x", edges=(1.0,)),
    ),
    stimulation=StimulationFacts(target="left", columns={"condition": "x"}),
)
WITH_LOG = a_trial(log={"x": "2"})


def later(rule: EpochRule, end: int, trial: Trial = WITH_LOG, plan: Plan = LATER_PLAN) -> set[str]:
    columns = TrialLabels(plan, [trial]).columns
    return set(later_columns(plan, rule, trial, end, columns))


def test_what_is_later_than_epochs_all_along_a_trial() -> None:
    # Markers at 1000 sample, 2000 cue1, 3000 answer1, 4000 cue2, 5000 answer2.
    ends = {"log.x", "fast", "answer2.said"}
    second = {*ends, "cue2.item", "turn", "turned"}
    first = {*second, "answer1.said"}
    assert later(DELAY1, 900) == {*first, "cue1.item", "cued", "uncued"}
    assert later(DELAY1, 1999) == {*first, "cue1.item", "cued", "uncued"}
    assert later(DELAY1, 2000) == later(DELAY1, 2999) == first
    assert later(DELAY1, 3999) == second
    assert later(DELAY1, 4000) == ends
    assert later(DELAY1, 5000) == set()
    assert later(DELAY2, 3500) == {*second, "cued", "uncued"}
    assert later(BASELINE, 900) == {*first, "cue1.item"}


def test_what_a_trial_does_not_have_is_not_later() -> None:
    trial = without(a_trial(), "answer2", "cue2")
    assert later(DELAY1, 2500, trial) == {"answer1.said"}
    # Compared labels are later by what is there.
    assert later(BASELINE, 900, trial) == {"answer1.said", "cue1.item", "turn", "turned"}


def test_stand_ins_are_later_like_markers() -> None:
    trial = replace(a_trial(), stand_ins={"pulse1": 2800.0})
    assert "pulse1.source" in later(DELAY1, 2700, trial)
    assert "pulse1.source" not in later(DELAY1, 2800, trial)


@pytest.mark.parametrize(
    ("source", "is_later"),
    [
        ("turned", False),
        ("other(turned)", True),
        ("other(cue2.item)", True),
        ("log.x", True),
        ("other(log.x)", True),
        ("cue1.item", False),
        ("before", False),
        ("place", False),
        ("stimulation.condition", False),
        ("cue2", False),
    ],
)
def test_rule_labels_are_later_by_what_they_are_made_from(source: str, is_later: bool) -> None:
    rule = replace(DELAY1, labels={"cued": source})
    assert ("cued" in later(rule, 2600)) is is_later


def test_rows_of_slots_are_known_before_the_next_such_slot() -> None:
    plan = replace(LATER_PLAN, log=replace(PLAN.log, slots=("cue1", "cue2")), stimulation=StimulationFacts())
    trial = a_trial(log={"cue1.x": "1", "cue2.x": "2", "x": "3"})
    # The row of cue1 is written by answer1 at 3000, that of cue2 by answer2 at 5000.
    assert {name for name in later(DELAY1, 2999, trial, plan) if name.startswith("log.")} == {
        "log.cue1.x",
        "log.cue2.x",
        "log.x",
    }
    assert "log.cue1.x" not in later(DELAY1, 3000, trial, plan)
    assert {"log.cue2.x", "log.x"} <= later(DELAY1, 4999, trial, plan)
    assert later(DELAY1, 5000, trial, plan) == set()


def test_a_log_column_named_like_a_slot_is_of_the_whole_trial_unless_rows_belong_to_slots() -> None:
    plan = replace(LATER_PLAN, log=replace(PLAN.log, slots=("cue2",)), stimulation=StimulationFacts())
    trial = a_trial(log={"cue1.x": "1"})
    assert "log.cue1.x" in later(DELAY1, 4999, trial, plan)
    assert "log.cue1.x" not in later(DELAY1, 5000, trial, plan)


def test_later_columns_of_a_set_by_rule() -> None:
    trials = Trials((a_trial(1, log={"x": "1"}), a_trial(2)))
    geometry = Geometry(1000.0, 500.0, ((0, 20000),))
    found = candidates(trials, LATER_PLAN, geometry)
    assert all(one.kept for one in found)
    everywhere, before = ("delay1", "delay2", "baseline"), ("delay1", "baseline")
    assert later_by_rule(found, trials.trials, LATER_PLAN, geometry) == {
        "answer1.said": before,
        "answer2.said": everywhere,
        "cue1.item": ("baseline",),
        "cue2.item": before,
        "log.x": everywhere,
        "turn": before,
        "turned": before,
        "fast": everywhere,
    }


def test_left_out_epochs_make_nothing_later() -> None:
    trials = Trials((a_trial(),))
    geometry = Geometry(1000.0, 1000.0, ((0, 20000),), (GapSpan(2100, 2110, 2102),))
    found = candidates(trials, PLAN, geometry)
    assert {
        rule for names in later_by_rule(found, trials.trials, PLAN, geometry).values() for rule in names
    } == {
        "delay2",
        "baseline",
    }
    assert later_by_rule((), trials.trials, PLAN, geometry) == {}


def test_the_last_output_sample_decides() -> None:
    # At 100 of 1000 Hz the 50 output samples of delay1 are 2100, 2110, ... 2590.
    geometry = Geometry(1000.0, 100.0, ((0, 20000),))
    for sample, is_later in ((2590, False), (2591, True)):
        trial = replace(a_trial(), markers={**a_trial().markers, "answer1": Marker(sample, "yes")})
        found = candidates(Trials((trial,)), PLAN, geometry)
        named = later_by_rule(found, (trial,), PLAN, geometry)["answer1.said"]
        assert ("delay1" in named) is is_later


def test_a_marker_at_the_last_sample_is_not_later_through_rounding() -> None:
    # 900 of 5000 Hz: the last of 4 samples is 99 steps of 50 / 9 samples after cue1, 2549.9999999999995.
    geometry = Geometry(5000.0, 900.0, ((0, 20000),))
    plan = replace(PLAN, epochs=Epochs(4 / 900, (replace(DELAY1, start_s=96 / 900),)))
    trial = replace(a_trial(), markers={**a_trial().markers, "answer1": Marker(2550, "yes")})
    found = candidates(Trials((trial,)), plan, geometry)
    assert found[0].kept
    assert last_sample(found[0], plan, geometry) < 2550
    assert "answer1.said" not in later_by_rule(found, (trial,), plan, geometry)
