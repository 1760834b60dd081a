"""Balance: equal numbers per condition, evenly spread or drawn, and nothing else touched."""

from __future__ import annotations

import random
from collections import Counter, defaultdict
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pulsemend.model.epochs import NOT_AVAILABLE, Candidate
from pulsemend.model.vocabulary import Choose, Fate
from pulsemend.trials.balance import ConditionCount, balanced, condition_counts


def epoch(
    trial: int,
    rule: str = "delay1",
    fate: Fate = Fate.KEPT,
    index: int = 0,
    piece: int = 1,
    **labels: str,
) -> Candidate:
    return Candidate(
        rule=rule,
        rule_index=index,
        trial=trial,
        piece=piece,
        anchor="cue1",
        anchor_sample=1000.0 * trial,
        start_s=0.5 + piece - 1,
        fate=fate,
        detail="" if fate is Fate.KEPT else "as before",
        labels={"cued": NOT_AVAILABLE, "order": NOT_AVAILABLE, **labels},
    )


def kept_trials(found: tuple[Candidate, ...], rule: str = "delay1", **labels: str) -> list[int]:
    return [
        one.trial
        for one in found
        if one.kept and one.rule == rule and all(one.labels[key] == value for key, value in labels.items())
    ]


LOPSIDED = tuple(epoch(trial, cued="left" if trial % 5 else "right") for trial in range(1, 26))
"""20 left, 5 right (trials 5, 10, ... 25)."""


@pytest.mark.parametrize("choose", Choose)
def test_every_condition_keeps_as_many_as_the_smallest(choose: Choose) -> None:
    result = balanced(LOPSIDED, ["cued"], choose, seed=1)
    assert result.warnings == ()
    assert kept_trials(result.candidates, cued="right") == [5, 10, 15, 20, 25]
    assert len(kept_trials(result.candidates, cued="left")) == 5
    left_out = [one for one in result.candidates if one.fate is Fate.BALANCE]
    assert {one.detail for one in left_out} == {"5 of 20 kept, cued = left"}
    assert len(left_out) == 15


def test_spread_takes_the_middle_of_every_part() -> None:
    # 20 left epochs in 5 parts of 4: of each part the rank nearest to its middle, halves towards the middle
    # of the whole: ranks 2, 6, 10, 13, 17 (counted by hand).
    left = [one.trial for one in LOPSIDED if one.labels["cued"] == "left"]
    result = balanced(LOPSIDED, ["cued"], Choose.SPREAD, seed=1)
    assert kept_trials(result.candidates, cued="left") == [left[rank] for rank in (2, 6, 10, 13, 17)]


@pytest.mark.parametrize("size", range(1, 41))
def test_spread_is_even_and_favours_neither_end(size: int) -> None:
    for count in range(1, size + 1):
        few = [epoch(1000 + number, cued="few") for number in range(count)]
        many = [epoch(1 + number, cued="many") for number in range(size)]
        result = balanced([*many, *few], ["cued"], Choose.SPREAD, seed=1)
        ranks = np.array(kept_trials(result.candidates, cued="many")) - 1
        assert len(ranks) == count
        middles = (np.arange(count) + 0.5) * size / count - 0.5
        assert np.abs(ranks - middles).max() <= 0.5 + 1e-9
        # Mirrored in time the same are kept; one in the very middle of an even number cannot be.
        mirrored = size - 1 - ranks[::-1]
        assert np.abs(mirrored - ranks).max() <= (1 if size % 2 == 0 and count % 2 else 0)


def test_drawn_depends_on_the_seed_and_on_nothing_else() -> None:
    other_rule = [epoch(trial, rule="delay2", index=1, cued="left") for trial in range(1, 9)]
    plain = balanced(LOPSIDED, ["cued"], Choose.DRAWN, seed=7)
    shuffled = random.Random(3).sample(LOPSIDED, len(LOPSIDED))
    mixed = balanced([*other_rule, *shuffled], ["cued"], Choose.DRAWN, seed=7)
    assert set(kept_trials(plain.candidates)) == set(kept_trials(mixed.candidates))
    draws = {
        tuple(kept_trials(balanced(LOPSIDED, ["cued"], Choose.DRAWN, seed).candidates)) for seed in range(20)
    }
    assert len(draws) == 20


def test_drawn_is_the_same_on_every_machine() -> None:
    # Written down from the first run: a plan must mean the same next year, so this may not change.
    result = balanced(LOPSIDED, ["cued"], Choose.DRAWN, seed=1)
    assert kept_trials(result.candidates, cued="left") == [1, 8, 9, 19, 22]


def test_drawn_does_not_follow_the_order_of_the_columns() -> None:
    found = tuple(
        epoch(trial, cued="left" if trial % 3 else "right", order="first" if trial % 2 else "second")
        for trial in range(1, 61)
    )
    one = balanced(found, ["cued", "order"], Choose.DRAWN, seed=1)
    other = balanced(found, ["order", "cued"], Choose.DRAWN, seed=1)
    assert kept_trials(one.candidates) == kept_trials(other.candidates)


def test_drawn_gives_every_epoch_the_same_chance() -> None:
    n_seeds = 800
    often = Counter(
        trial
        for seed in range(n_seeds)
        for trial in kept_trials(balanced(LOPSIDED, ["cued"], Choose.DRAWN, seed).candidates, cued="left")
    )
    # 5 of 20 each time: 200 expected; binomial spread 12.2, four of it.
    assert len(often) == 20
    assert max(abs(count - n_seeds / 4) for count in often.values()) < 50


def test_two_columns_make_four_conditions() -> None:
    sizes = {("left", "first"): 6, ("left", "second"): 3, ("right", "first"): 4, ("right", "second"): 9}
    trials = iter(range(1, 100))
    found = tuple(
        epoch(next(trials), cued=cued, order=order)
        for (cued, order), size in sizes.items()
        for _ in range(size)
    )
    result = balanced(found, ["cued", "order"], Choose.SPREAD, seed=1)
    for cued, order in sizes:
        assert len(kept_trials(result.candidates, cued=cued, order=order)) == 3
    details = {one.detail for one in result.candidates if one.fate is Fate.BALANCE}
    assert "3 of 9 kept, cued = right, order = second" in details


def test_rules_are_matched_each_for_itself() -> None:
    second = [
        epoch(trial, rule="delay2", index=1, cued="left" if trial % 2 else "right") for trial in range(1, 13)
    ]
    result = balanced([*LOPSIDED, *second], ["cued"], Choose.SPREAD, seed=1)
    assert len(kept_trials(result.candidates)) == 10
    assert len(kept_trials(result.candidates, "delay2")) == 12


def test_an_epoch_without_the_label_is_left_out() -> None:
    found = (*LOPSIDED, epoch(26), epoch(27, order="first"))
    result = balanced(found, ["cued", "order"], Choose.SPREAD, seed=1)
    # Nobody has both labels: nothing to match, all stay.
    assert result.candidates == found
    assert result.warnings == ("balance: no epoch of delay1 has cued and order; all of them stay",)
    result = balanced(found, ["cued"], Choose.SPREAD, seed=1)
    assert [(one.fate, one.detail) for one in result.candidates[-2:]] == [(Fate.BALANCE, "no cued")] * 2
    assert len(kept_trials(result.candidates)) == 10


def test_a_rule_without_the_label_stays_whole() -> None:
    baseline = [epoch(trial, rule="baseline", index=1) for trial in range(1, 26)]
    result = balanced([*LOPSIDED, *baseline], ["cued"], Choose.SPREAD, seed=1)
    assert len(kept_trials(result.candidates, "baseline")) == 25
    assert result.warnings == ("balance: no epoch of baseline has cued; all of them stay",)


def test_an_empty_condition_is_named_and_does_not_empty_the_rule() -> None:
    found = (
        *(epoch(trial, cued="left") for trial in range(1, 5)),
        *(epoch(trial, cued="right") for trial in range(5, 8)),
        *(epoch(trial, cued="up", fate=Fate.TOUCHES_GAP) for trial in range(8, 12)),
        *(epoch(trial, rule="delay2", index=1, cued="down") for trial in range(1, 4)),
        *(epoch(trial, rule="delay3", index=2, cued="up", fate=Fate.TOUCHES_GAP) for trial in range(1, 4)),
    )
    result = balanced(found, ["cued"], Choose.SPREAD, seed=1)
    assert result.warnings == (
        "balance: delay1 keeps no epoch of cued = down; nor of cued = up; "
        "the other conditions are matched without it",
        "balance: delay2 keeps no epoch of cued = left; nor of cued = right; nor of cued = up; "
        "cued = down is its only condition left",
    )
    assert len(kept_trials(result.candidates, cued="left")) == 3
    assert len(kept_trials(result.candidates, cued="right")) == 3
    assert len(kept_trials(result.candidates, "delay2")) == 3


def test_a_single_condition_is_said() -> None:
    found = tuple(epoch(trial, cued="left") for trial in range(1, 5))
    result = balanced(found, ["cued"], Choose.SPREAD, seed=1)
    assert result.candidates == found
    assert result.warnings == ("balance: nothing to match in delay1: cued = left is its only condition",)


def test_without_columns_nothing_is_balanced() -> None:
    assert balanced(LOPSIDED, [], Choose.SPREAD, seed=1).candidates == LOPSIDED
    assert balanced((), ["cued"], Choose.DRAWN, seed=1).candidates == ()


@st.composite
def ledgers(draw: st.DrawFn) -> list[Candidate]:
    fates = st.sampled_from([Fate.KEPT, Fate.KEPT, Fate.KEPT, Fate.TOUCHES_GAP, Fate.BY_HAND])
    values = st.sampled_from(["left", "right", "up", NOT_AVAILABLE])
    found = [
        epoch(trial, rule, draw(fates), index, piece, cued=draw(values), order=draw(values))
        for trial in range(1, draw(st.integers(1, 8)) + 1)
        for index, rule in enumerate(("delay1", "delay2"))
        for piece in (1, 2)
    ]
    return draw(st.permutations(found))


@given(ledgers(), st.sampled_from(Choose), st.integers(0, 1000))
@settings(max_examples=150, deadline=None)
def test_only_kept_epochs_change_and_only_their_fate(
    found: list[Candidate], choose: Choose, seed: int
) -> None:
    by = ("cued", "order")
    result = balanced(found, by, choose, seed).candidates
    assert len(result) == len(found)
    for before, after in zip(found, result, strict=True):
        if before != after:
            assert before.kept
            assert after.fate is Fate.BALANCE
            assert after.detail
            assert replace(after, fate=before.fate, detail=before.detail) == before
    for rule in ("delay1", "delay2"):
        groups: defaultdict[tuple[str, ...], list[Candidate]] = defaultdict(list)
        for one in found:
            values = tuple(one.labels[column] for column in by)
            if one.kept and one.rule == rule and NOT_AVAILABLE not in values:
                groups[values].append(one)
        after_counts = Counter(
            tuple(one.labels[c] for c in by) for one in result if one.kept and one.rule == rule
        )
        if groups:
            smallest = min(len(group) for group in groups.values())
            assert after_counts == dict.fromkeys(groups, smallest)
    # Once equal, always equal: a second time changes nothing.
    assert balanced(result, by, choose, seed).candidates == result


def test_counts_name_every_rule_and_condition() -> None:
    found = (
        epoch(3, rule="delay2", index=1, cued="10", order="first"),
        epoch(1, cued="right"),
        epoch(1, cued="left"),
        epoch(2, cued="left", fate=Fate.TOUCHES_GAP),
        epoch(2),
        epoch(3, rule="delay2", index=1, cued="9", order="first", fate=Fate.BALANCE),
    )
    assert condition_counts(found, ["cued"]) == (
        ConditionCount("delay1", ("left",), kept=1, total=2),
        ConditionCount("delay1", ("right",), kept=1, total=1),
        ConditionCount("delay1", (NOT_AVAILABLE,), kept=1, total=1),
        ConditionCount("delay2", ("9",), kept=0, total=1),
        ConditionCount("delay2", ("10",), kept=1, total=1),
    )
    assert condition_counts(found, []) == (
        ConditionCount("delay1", (), kept=3, total=4),
        ConditionCount("delay2", (), kept=1, total=2),
    )
    assert condition_counts(found, ["order", "cued"])[-1] == ConditionCount("delay2", ("first", "10"), 1, 1)


def test_counts_sort_numbers_before_words() -> None:
    found = [epoch(1, cued=value) for value in ("nan", "x", "n/a", "2", "-1.5", "inf", "10")]
    values = [row.values[0] for row in condition_counts(found, ["cued"])]
    assert values == ["-1.5", "2", "10", "inf", "nan", "x", "n/a"]
