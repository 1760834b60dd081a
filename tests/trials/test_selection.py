"""Differences between kept and left-out epochs: known selections, outside references, chance alone."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping

import numpy as np
import pytest
from scipy import stats

from pulsemend.model.epochs import NOT_AVAILABLE, Candidate, Trial, Trials
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fate
from pulsemend.trials.candidates import GapSpan, Geometry, candidates
from pulsemend.trials.selection import (
    TIME_ON_TASK,
    NumberDifference,
    NumberGroup,
    SelectionDifference,
    ShareDifference,
    overview,
    selection_differences,
    share_interval,
    standardised_difference,
    welch_interval,
    words,
)

RATE_HZ = 1000.0


def epoch(
    trial: int,
    fate: Fate = Fate.KEPT,
    rule: str = "delay1",
    piece: int = 1,
    anchor: float | None = None,
    labels: Mapping[str, str] | None = None,
) -> Candidate:
    return Candidate(
        rule=rule,
        rule_index=0,
        trial=trial,
        piece=piece,
        anchor="cue1",
        anchor_sample=anchor,
        start_s=0.5 + piece - 1,
        fate=fate,
        labels=labels or {},
    )


def fates(kept: Iterable[bool]) -> list[Candidate]:
    return [epoch(number, Fate.KEPT if one else Fate.TOUCHES_GAP) for number, one in enumerate(kept, start=1)]


def by_trial(values: Iterable[float | str | None]) -> dict[int, float | str | None]:
    return dict(enumerate(values, start=1))


def only(found: tuple[SelectionDifference, ...], variable: str) -> SelectionDifference:
    (one,) = (difference for difference in found if difference.variable == variable)
    return one


def number(found: tuple[SelectionDifference, ...], variable: str) -> NumberDifference:
    one = only(found, variable)
    assert isinstance(one, NumberDifference)
    return one


def share(found: tuple[SelectionDifference, ...], variable: str) -> ShareDifference:
    one = only(found, variable)
    assert isinstance(one, ShareDifference)
    return one


def with_moments(n: int, mean: float, sd: float) -> list[float]:
    """n numbers with exactly this mean and spread."""
    raw = np.random.default_rng(5).standard_normal(n)
    return [mean + sd * float(one) for one in (raw - raw.mean()) / raw.std(ddof=1)]


def test_welch_agrees_with_scipy() -> None:
    rng = np.random.default_rng(1)
    for n_kept, n_left_out in ((2, 2), (2, 40), (17, 5), (100, 300)):
        kept, left_out = rng.normal(1.0, 0.5, n_kept), rng.normal(1.3, 2.0, n_left_out)
        # Outside reference: scipy's comparison of several means with unequal spreads (Games and Howell)
        # which for two groups is Welch's interval, reached through the studentised range instead of t.
        both = stats.tukey_hsd(kept, left_out, equal_var=False).confidence_interval(0.95)
        low, high = welch_interval(kept.tolist(), left_out.tolist())
        assert (low, high) == pytest.approx(
            (np.asarray(both.low)[0, 1], np.asarray(both.high)[0, 1]), rel=1e-6
        )


def test_means_against_a_handbook() -> None:
    # NIST/SEMATECH e-Handbook of Statistical Methods, section 1.3.5.3 "Two-sample t-test for equal means"
    # (miles per gallon, AUTO83B.DAT), values from memory: n 249 and 79, means 20.14458 and 30.48101, spreads
    # 6.41470 and 6.10771; pooled spread 6.34260; unequal variances: T = -12.94627 with
    # 136.8750 degrees of freedom.
    first, second = with_moments(249, 20.14458, 6.41470), with_moments(79, 30.48101, 6.10771)
    difference = 20.14458 - 30.48101
    reach = abs(difference / -12.94627) * stats.t.ppf(0.975, 136.8750)
    low, high = welch_interval(first, second)
    assert (low, high) == pytest.approx((difference - reach, difference + reach), abs=2e-5)
    uncorrected = difference / 6.34260
    assert standardised_difference(first, second) == pytest.approx(
        uncorrected * (1 - 3 / (4 * 326 - 1)), abs=2e-5
    )


def test_small_groups_are_corrected() -> None:
    # The exact factor by gamma functions (Hedges 1981, equation 6e): the usual
    # formula stays within 0.7 per cent of it from 3 degrees of freedom on.
    for n in (3, 4, 10, 50):
        kept, left_out = with_moments(n, 1.0, 1.0), with_moments(n, 0.0, 1.0)
        freedom = 2 * n - 2
        exact = math.exp(math.lgamma(freedom / 2) - math.lgamma((freedom - 1) / 2)) / math.sqrt(freedom / 2)
        assert standardised_difference(kept, left_out) == pytest.approx(exact, rel=0.007)


@pytest.mark.parametrize(
    ("first", "second", "expected"),
    [
        # Newcombe (1998) Statistics in Medicine 17:873-890, table II, method 10; values from memory.
        ((56, 70), (48, 80), (0.0524, 0.3339)),
        ((9, 10), (3, 10), (0.1705, 0.8090)),
        ((6, 7), (2, 7), (0.0582, 0.8062)),
        ((5, 56), (0, 29), (-0.0381, 0.1926)),
        ((0, 10), (0, 20), (-0.1611, 0.2775)),
        ((10, 10), (0, 20), (0.6791, 1.0000)),
    ],
)
def test_shares_against_the_paper(
    first: tuple[int, int], second: tuple[int, int], expected: tuple[float, float]
) -> None:
    assert share_interval(first, second) == pytest.approx(expected, abs=6e-5)


def test_share_interval_of_one_group_is_wilsons() -> None:
    # Outside reference: scipy's score interval; against an endless group of share 0
    # the difference is the share.
    for count, n in ((3, 10), (0, 7), (40, 41)):
        wilson = stats.binomtest(count, n).proportion_ci(0.95, "wilson")
        low, high = share_interval((count, n), (0, 10**12))
        assert (low, high) == pytest.approx((wilson.low, wilson.high), abs=1e-9)


PLAN = parse_plan(
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
after_s = [0.5, 3.0]
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 1
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.5
stop_before = "pulse1"
"""
).plan


def test_a_guard_that_keeps_late_pulses_is_seen() -> None:
    # Pulses come 1 to 3 s after the cue; only epochs that end (at 1.5 s) before the gap are kept.
    rng = np.random.default_rng(11)
    n = 120
    latencies_s = np.round(rng.uniform(1.0, 3.0, n), 3)
    cues = 5000 + 8000 * np.arange(n)
    trials, gaps = [], []
    for index, (cue, latency_s) in enumerate(zip(cues.tolist(), latencies_s.tolist(), strict=True)):
        pulse = cue + round(latency_s * RATE_HZ)
        trials.append(Trial(index + 1, {"cue1": Marker(cue, "A"), "pulse1": Marker(pulse, "T")}))
        gaps.append(GapSpan(pulse - 2, pulse + 15, pulse))
    geometry = Geometry(RATE_HZ, RATE_HZ, ((0, 5000 + 8000 * n),), tuple(gaps))
    found = candidates(Trials(tuple(trials)), PLAN, geometry)
    kept = np.array([one.kept for one in found])
    assert 20 < kept.sum() < 100

    variables: Mapping[str, Mapping[int, float | str | None]] = {
        "pulse1 latency [s]": by_trial(latencies_s.tolist()),
        "log.reaction_s": by_trial(rng.normal(0.6, 0.1, n).tolist()),
        "log.answer": by_trial(rng.choice(["left", "right"], n).tolist()),
    }
    differences = selection_differences(found, variables, RATE_HZ)
    latency = number(differences, "pulse1 latency [s]")
    assert latency.difference == pytest.approx(latencies_s[kept].mean() - latencies_s[~kept].mean())
    # Uniform from 1.5 to 3 s against 1 to 1.5 s: the means are 2.25 and 1.25 s.
    assert latency.interval is not None
    assert latency.interval[0] < 1.0 < latency.interval[1]
    assert latency.notable
    assert latency.kept.n == kept.sum()
    assert latency.left_out.n == (~kept).sum()
    on_task = number(differences, TIME_ON_TASK)
    assert on_task.kept.mean == pytest.approx(cues[kept].mean() / RATE_HZ)
    assert [one.variable for one in differences if one.notable] == ["pulse1 latency [s]"]


def test_chance_alone_is_notable_in_one_of_twenty() -> None:
    rng = np.random.default_rng(23)
    n_draws = 1000
    names = ["number", "two", "four"]
    notable = dict.fromkeys(names, 0)
    for _ in range(n_draws):
        n = 90
        found = fates(rng.random(n) < 0.6)
        variables: Mapping[str, Mapping[int, float | str | None]] = {
            "number": by_trial(rng.normal(2.0, 0.4, n).tolist()),
            "two": by_trial(rng.choice(["left", "right"], n).tolist()),
            "four": by_trial(rng.choice(["a", "b", "c", "d"], n, p=[0.4, 0.3, 0.2, 0.1]).tolist()),
        }
        for one in selection_differences(found, variables, RATE_HZ):
            notable[one.variable] += one.notable
    # Binomial spread of 5 % over 1000 draws: 0.7 %; three of it either way.
    assert 0.029 < notable["number"] / n_draws < 0.071
    assert 0.029 < notable["two"] / n_draws < 0.071
    # Bonferroni over four values that add up to one may stay below, never above.
    assert 0.015 < notable["four"] / n_draws < 0.071


def test_conditions_are_compared_by_their_shares() -> None:
    kept = [epoch(n, labels={"cued": "left" if n <= 9 else "right", "site": "Kiel"}) for n in range(1, 11)]
    left_out = [
        epoch(n, Fate.TOUCHES_GAP, labels={"cued": "left" if n <= 13 else "right", "site": "Kiel"})
        for n in range(11, 21)
    ]
    found = [
        *kept,
        *left_out,
        epoch(21, Fate.TRIAL_INCOMPLETE, labels={"cued": NOT_AVAILABLE, "site": "Kiel"}),
    ]
    differences = selection_differences(found, {}, RATE_HZ)
    # One site only: it cannot differ. No anchors: no time on task.
    assert [one.variable for one in differences] == ["cued"]
    cued = share(differences, "cued")
    assert cued.counts == {"left": (9, 3), "right": (1, 7)}
    assert (cued.value, cued.n_kept, cued.n_left_out) == ("left", 10, 10)
    assert cued.difference == pytest.approx(0.6)
    assert cued.interval == pytest.approx((0.1705, 0.8090), abs=6e-5)  # the paper's second example
    assert cued.notable


def test_the_interval_is_wider_where_the_largest_of_several_is_picked() -> None:
    values = ["a"] * 9 + ["b"] + ["a"] * 3 + ["b"] * 6 + ["c"]
    found = fates([True] * 10 + [False] * 10)
    three = share(selection_differences(found, {"item": by_trial(values)}, RATE_HZ), "item")
    assert three.value == "a"
    assert three.interval == share_interval((9, 10), (3, 10), at_once=3)
    low, high = share_interval((9, 10), (3, 10))
    assert three.interval is not None
    assert three.interval[0] < low
    assert three.interval[1] > high


def test_two_numbers_are_a_condition() -> None:
    found = fates([True] * 6 + [False] * 6)
    correct = share(
        selection_differences(found, {"correct": by_trial([1] * 6 + [0.0] * 6)}, RATE_HZ), "correct"
    )
    # All kept are right, all left out wrong: a comparison of means would have no spread to work with.
    assert correct.counts == {"0": (0, 6), "1": (6, 0)}
    assert (correct.value, correct.difference, correct.notable) == ("1", 1.0, True)


def test_too_few_to_compare_is_said() -> None:
    found = fates([True, True, True, False])
    latency = number(
        selection_differences(found, {"x [s]": by_trial([1.0, 2.0, 3.0, 9.0])}, RATE_HZ), "x [s]"
    )
    assert latency.kept == NumberGroup(3, 2.0, 1.0)
    assert latency.left_out == NumberGroup(1, 9.0, None)
    assert (latency.difference, latency.standardised, latency.interval) == (None, None, None)
    assert not latency.notable
    assert words(latency) == (
        "delay1, x: kept mean 2 s (SD 1 s, n = 3); left out mean 9 s (n = 1); too few to compare"
    )
    nobody = selection_differences(found, {"x": by_trial([1.0, 2.0, 3.0, None])}, RATE_HZ)[0]
    assert words(nobody).endswith("left out none known (n = 0); too few to compare")
    item = share(selection_differences(found, {"item": by_trial(["a", "b", "a", None])}, RATE_HZ), "item")
    assert (item.difference, item.interval, item.notable) == (None, None, False)
    assert words(item) == "delay1, item: a in 2 of 3 kept (67 %) and in 0 of 0 left out; too few to compare"


def test_unknown_values_are_not_counted() -> None:
    found = fates([True] * 5 + [False] * 5)
    values = [1.0, None, math.nan, 2.0, math.inf, 3.0, 4.0, NOT_AVAILABLE, ""]
    latency = number(selection_differences(found, {"x": by_trial(values)}, RATE_HZ), "x")
    assert (latency.kept.n, latency.left_out.n) == (2, 2)
    assert latency.difference == pytest.approx(-2.0)


def test_free_text_is_no_condition() -> None:
    n = 26
    found = [
        epoch(
            i, Fate.KEPT if i % 2 else Fate.TOUCHES_GAP, labels={"word": f"w{i // 2}", "item": f"i{i % 12}"}
        )
        for i in range(n)
    ]
    assert [one.variable for one in selection_differences(found, {}, RATE_HZ)] == ["item"]
    notes = {"notes": {i: f"note {i}" for i in range(n)}}
    assert [one.variable for one in selection_differences(found, notes, RATE_HZ)] == ["item"]


def test_a_variable_replaces_the_label_column_of_its_name() -> None:
    found = [
        epoch(i, Fate.KEPT if i % 2 else Fate.BAD_STRETCH, labels={"log.reaction_s": f"{i % 3}"})
        for i in range(12)
    ]
    differences = selection_differences(found, {"log.reaction_s": {i: i / 10 for i in range(12)}}, RATE_HZ)
    assert number(differences, "log.reaction_s").kept.n == 6
    assert len(differences) == 1


def test_balance_counts_as_kept_and_practice_not_at_all() -> None:
    found = [
        *(epoch(i, Fate.SET_ASIDE, anchor=1000.0 * i) for i in (1, 2)),
        *(epoch(i, anchor=1000.0 * i) for i in (3, 5)),
        *(epoch(i, Fate.BALANCE, anchor=1000.0 * i) for i in (4, 6)),
        *(epoch(i, Fate.TOUCHES_GAP, anchor=1000.0 * i) for i in (7, 8)),
    ]
    on_task = number(selection_differences(found, {}, RATE_HZ), TIME_ON_TASK)
    assert (on_task.kept.n, on_task.kept.mean) == (4, 4.5)
    assert (on_task.left_out.n, on_task.left_out.mean) == (2, 7.5)


def test_pieces_are_compared_each_for_itself() -> None:
    found = [
        epoch(i, Fate.KEPT if piece == 1 or i > 4 else Fate.TOUCHES_GAP, piece=piece)
        for i in range(1, 9)
        for piece in (1, 2)
    ]
    # All first pieces are kept: only the second differ, and every trial counts once.
    (latency,) = selection_differences(found, {"x": {i: float(i) for i in range(1, 9)}}, RATE_HZ)
    assert isinstance(latency, NumberDifference)
    assert (latency.piece, latency.kept.n, latency.left_out.n) == (2, 4, 4)
    assert words(latency).startswith("delay1 piece 2, x: ")


def test_rules_with_one_group_only_are_not_compared() -> None:
    assert selection_differences(fates([True] * 4), {"x": by_trial([1.0, 2.0, 3.0, 4.0])}, RATE_HZ) == ()
    assert selection_differences(fates([False] * 4), {"x": by_trial([1.0, 2.0, 3.0, 4.0])}, RATE_HZ) == ()


def test_words_give_units_and_no_verdict() -> None:
    found = fates([True] * 3 + [False] * 3)
    variables: Mapping[str, Mapping[int, float | str | None]] = {
        "pulse1 latency [s]": by_trial([2.0, 2.1, 2.2, 1.0, 1.1, 1.2]),
        "log.reaction_ms": by_trial([500.0, 600.0, 700.0, 1500.0, 1600.0, 1700.0]),
        "log.confidence": by_trial([1.0, 2.0, 3.0, 1.0, 2.0, 3.0]),
        "cued": by_trial(["left", "left", "left", "right", "right", "left"]),
    }
    differences = selection_differences(found, variables, RATE_HZ)
    lines = [words(one) for one in differences]
    # Means 1 s apart, both spreads 0.1 s: t(0.975, 4) = 2.776 times 0.08165 s is 0.227 s;
    # 10 pooled SD times 0.8 is 8.
    assert lines[0] == (
        "delay1, pulse1 latency: kept mean 2.1 s (SD 0.1 s, n = 3); left out mean 1.1 s (SD 0.1 s, n = 3); "
        "difference 1 s, 95 % interval 0.773 to 1.23 s, 8 pooled SD"
    )
    assert lines[1] == (
        "delay1, log.reaction_ms: kept mean 600 ms (SD 100 ms, n = 3); left out mean 1600 ms (SD 100 ms, "
        "n = 3); difference -1000 ms, 95 % interval -1227 to -773 ms, -8 pooled SD"
    )
    assert "difference 0, " in lines[2]
    assert lines[3].startswith(
        "delay1, cued: left in 3 of 3 kept (100 %) and in 1 of 3 left out (33 %); "
        "difference 67 percentage points, 95 % interval "
    )
    assert overview(differences) == (
        "4 comparisons of kept with left-out epochs; in 2 the 95 % interval leaves out 0. "
        "If nothing differed, about 0.2 would by chance."
    )
