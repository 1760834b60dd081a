"""Candidate epochs: fates on hand-made trials, and the pulse guard against counting sample by sample."""

from __future__ import annotations

import itertools
from collections import Counter
from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pulsemend.model.epochs import FIXED_COLUMNS, Candidate, Trial, Trials, nearest_sample
from pulsemend.model.marks import BadStretch, EpochKey
from pulsemend.model.plan import EpochRule, Epochs, Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fate, PulseRule
from pulsemend.trials.candidates import GapSpan, Geometry, candidates, set_order, stale_decisions

PLAN = parse_plan(
    """
pulsemend = 1
[markers.L]
role = "sample"
labels = { colour = "green" }
[markers.A]
role = "cue"
labels = { item = "left" }
[markers.B]
role = "cue"
labels = { item = "right", extra = "yes" }
[markers.T]
role = "pulse"
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
[[trial]]
slot = "cue2"
role = "cue"
after_s = [2.0, 4.0]
optional = true
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 1
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.5
labels = { cued = "cue1.item" }
[[epochs.rule]]
name = "after"
anchor = "pulse1"
start_s = 0.0
pulse = "accept filled"
labels = { second = "cue2.extra" }
"""
).plan

MARKERS = {"sample": Marker(1000, "L"), "cue1": Marker(2000, "A"), "pulse1": Marker(3000, "T")}
WHOLE = Trials((Trial(1, MARKERS),))
GEOMETRY = Geometry(recorded_hz=1000.0, output_hz=1000.0, segments=((0, 20000),))


def rules(*changed: EpochRule, length_s: float = 1.0) -> Plan:
    return replace(PLAN, epochs=Epochs(length_s, changed))


DELAY = PLAN.epochs.rule[0]


def fates(plan: Plan, geometry: Geometry, trials: Trials = WHOLE) -> list[tuple[Fate, str]]:
    return [(one.fate, one.detail) for one in candidates(trials, plan, geometry)]


def test_kept_with_its_place_and_labels() -> None:
    one = candidates(WHOLE, PLAN, GEOMETRY)[0]
    assert one == Candidate(
        rule="delay1",
        rule_index=0,
        trial=1,
        piece=1,
        anchor="cue1",
        anchor_sample=2000.0,
        start_s=0.5,
        fate=Fate.KEPT,
        labels={
            "sample.colour": "green",
            "cue1.item": "left",
            "cue1.extra": "n/a",
            "cue2.item": "n/a",
            "cue2.extra": "n/a",
            "cued": "left",
            "second": "n/a",
        },
    )


def test_columns_are_the_same_for_every_candidate_and_never_a_fixed_one() -> None:
    trials = Trials((Trial(1, MARKERS), Trial(2, {"sample": Marker(9000, "L")}, ("cue1",))))
    columns = {tuple(one.labels) for one in candidates(trials, PLAN, GEOMETRY)}
    assert len(columns) == 1
    assert not set(columns.pop()) & set(FIXED_COLUMNS)


def test_pieces_follow_each_other() -> None:
    found = candidates(WHOLE, rules(replace(DELAY, count=3, start_s=-0.3), length_s=0.1), GEOMETRY)
    assert [(one.piece, one.start_s) for one in found] == [(1, -0.3), (2, -0.2), (3, -0.1)]


def test_pulse_as_anchor_means_its_aligned_onset() -> None:
    geometry = replace(GEOMETRY, onsets={3000.0: 3007})
    assert [one.anchor_sample for one in candidates(WHOLE, PLAN, geometry)] == [2000.0, 3007.0]
    # A marker of another role at the same sample stays where it is.
    same = Trials((Trial(1, {**MARKERS, "cue1": Marker(3000, "A")}),))
    assert candidates(same, PLAN, geometry)[0].anchor_sample == 3000.0


def test_missing_optional_anchor() -> None:
    trials = Trials((Trial(1, {key: MARKERS[key] for key in ("sample", "cue1")}),))
    assert fates(PLAN, GEOMETRY, trials) == [
        (Fate.KEPT, ""),
        (Fate.NO_ANCHOR, "no pulse1 in this trial"),
    ]


def test_incomplete_trial_leaves_out_every_candidate() -> None:
    trials = Trials((Trial(1, {"sample": MARKERS["sample"]}, ("cue1",)),))
    assert fates(PLAN, GEOMETRY, trials) == [(Fate.TRIAL_INCOMPLETE, "no cue1")] * 2


def test_edges_of_the_recording() -> None:
    # The epoch covers samples 2500 to 3499.
    plan = rules(replace(DELAY, pulse=PulseRule.ACCEPT_FILLED))
    assert fates(plan, replace(GEOMETRY, segments=((0, 3500),))) == [(Fate.KEPT, "")]
    assert fates(plan, replace(GEOMETRY, segments=((0, 3499),))) == [
        (Fate.OUTSIDE, "ends 0.001 s after the recording")
    ]
    early = rules(replace(DELAY, start_s=-2.0))
    assert fates(early, GEOMETRY)[0][0] is Fate.KEPT
    early = rules(replace(DELAY, start_s=-2.001))
    assert fates(early, GEOMETRY) == [(Fate.OUTSIDE, "starts 0.001 s before the recording")]


def test_breaks() -> None:
    for edge, fate in (
        (2500, Fate.KEPT),
        (2501, Fate.ACROSS_BREAK),
        (3499, Fate.ACROSS_BREAK),
        (3500, Fate.KEPT),
    ):
        geometry = replace(GEOMETRY, segments=((0, edge), (edge, 20000)))
        assert fates(rules(DELAY), geometry)[0][0] is fate
    assert fates(rules(DELAY), geometry)[0][1] == ""
    inner = replace(GEOMETRY, segments=((0, 100), (100, 3000), (3000, 20000)))
    assert fates(rules(DELAY), inner) == [(Fate.ACROSS_BREAK, "break at 3.000 s")]


def test_gap_touches_by_a_single_sample() -> None:
    for start, stop, fate in (
        (2490, 2500, Fate.KEPT),
        (2490, 2501, Fate.TOUCHES_GAP),
        (3499, 3520, Fate.TOUCHES_GAP),
        (3500, 3520, Fate.KEPT),
        (0, 20000, Fate.TOUCHES_GAP),
    ):
        geometry = replace(GEOMETRY, gaps=(GapSpan(start, stop, start + 2),))
        assert fates(rules(DELAY), geometry)[0][0] is fate
        assert fates(rules(replace(DELAY, pulse=PulseRule.ACCEPT_FILLED)), geometry)[0][0] is Fate.KEPT


def test_clear_is_kept_free_before_and_after() -> None:
    clear = rules(replace(DELAY, clear_ms=(10.0, 20.0)))
    # After a gap ending at 2479, the 20 samples 2480..2499 stay free.
    for start, stop, fate in (
        (2470, 2480, Fate.KEPT),
        (2470, 2481, Fate.TOUCHES_GAP),
        (3509, 3520, Fate.TOUCHES_GAP),
        (3510, 3520, Fate.KEPT),
    ):
        assert fates(clear, replace(GEOMETRY, gaps=(GapSpan(start, stop, start),)))[0][0] is fate


def test_detail_names_the_pulse() -> None:
    geometry = replace(
        GEOMETRY, onsets={3000.0: 3004}, gaps=(GapSpan(3002, 3018, 3004), GapSpan(8000, 8010, 8000))
    )
    assert fates(rules(DELAY), geometry) == [(Fate.TOUCHES_GAP, "pulse1 at 3.004 s")]
    later = rules(replace(DELAY, start_s=5.5))
    assert fates(later, geometry) == [(Fate.TOUCHES_GAP, "pulse at 8.000 s")]


def test_stop_before_a_gap_or_an_instant() -> None:
    stop = replace(DELAY, stop_before="pulse1", pulse=PulseRule.ACCEPT_FILLED, start_s=-0.5)  # 1500..2499
    gap = (GapSpan(2500, 2516, 2502), GapSpan(2750, 2760, 2502))
    pulse = Trials((Trial(1, {**MARKERS, "pulse1": Marker(2502, "T")}),))
    assert fates(rules(stop), replace(GEOMETRY, gaps=gap), pulse) == [(Fate.KEPT, "")]
    early = (replace(gap[0], start=2499), gap[1])
    assert fates(rules(stop), replace(GEOMETRY, gaps=early), pulse) == [
        (Fate.NOT_BEFORE_STOP, "gap of pulse1 at 2.502 s")
    ]
    # Without a gap the instant counts.
    assert fates(rules(stop), GEOMETRY, Trials((Trial(1, {**MARKERS, "pulse1": Marker(2500, "T")}),))) == [
        (Fate.KEPT, "")
    ]
    assert fates(rules(stop), GEOMETRY, Trials((Trial(1, {**MARKERS, "pulse1": Marker(2499, "T")}),))) == [
        (Fate.NOT_BEFORE_STOP, "pulse1 at 2.499 s")
    ]
    clear = replace(stop, clear_ms=(2.0, 0.0))
    for sample, fate in ((2501, Fate.NOT_BEFORE_STOP), (2502, Fate.KEPT)):
        trials = Trials((Trial(1, {**MARKERS, "pulse1": Marker(sample, "T")}),))
        assert fates(rules(clear), GEOMETRY, trials)[0][0] is fate
    # An optional slot that is not there stops nothing.
    none = Trials((Trial(1, {key: MARKERS[key] for key in ("sample", "cue1")}),))
    assert fates(rules(stop), GEOMETRY, none) == [(Fate.KEPT, "")]


def test_stop_before_at_a_reduced_rate_counts_half_an_output_period() -> None:
    # Output samples 12500, 12505, ... 17495, each for 2 samples around.
    stop = rules(replace(DELAY, stop_before="pulse1", pulse=PulseRule.ACCEPT_FILLED))
    for start, fate in ((17497, Fate.NOT_BEFORE_STOP), (17498, Fate.KEPT)):
        trials = Trials((Trial(1, {**MARKERS, "cue1": Marker(10000, "A"), "pulse1": Marker(17600, "T")}),))
        geometry = Geometry(5000.0, 1000.0, ((0, 50000),), (GapSpan(start, 17700, 17600),))
        assert fates(stop, geometry, trials)[0][0] is fate
    for instant, fate in ((17497, Fate.NOT_BEFORE_STOP), (17500, Fate.KEPT)):
        trials = Trials((Trial(1, {**MARKERS, "cue1": Marker(10000, "A"), "pulse1": Marker(instant, "T")}),))
        assert fates(stop, Geometry(5000.0, 1000.0, ((0, 50000),)), trials)[0][0] is fate


def test_bad_stretch_and_hand() -> None:
    bad = replace(GEOMETRY, bad_stretches=(BadStretch(3499, 3600, "moved"),))
    assert fates(rules(DELAY), bad) == [(Fate.BAD_STRETCH, "moved, 3.499 s to 3.600 s")]
    assert fates(rules(DELAY), replace(GEOMETRY, bad_stretches=(BadStretch(3500, 3600),)))[0][0] is Fate.KEPT
    hand = replace(GEOMETRY, epochs_left_out=(EpochKey(1, "delay1", 1),))
    assert fates(PLAN, hand) == [(Fate.BY_HAND, ""), (Fate.KEPT, "")]
    assert fates(PLAN, replace(GEOMETRY, trials_excluded=(1,))) == [(Fate.TRIAL_EXCLUDED, "")] * 2


def test_first_reason_wins_in_the_order_of_the_list() -> None:
    everything = Geometry(
        recorded_hz=1000.0,
        output_hz=1000.0,
        segments=((0, 2600), (2600, 3000)),
        gaps=(GapSpan(2598, 2610, 2600),),
        bad_stretches=(BadStretch(2500, 2700),),
        trials_excluded=(1,),
        epochs_left_out=(EpochKey(1, "delay1", 1),),
    )
    plan = rules(replace(DELAY, stop_before="pulse1"))
    markers = {"sample": Marker(1000, "L"), "cue1": Marker(2000, "A"), "pulse1": Marker(2600, "T")}
    broken = Trials((Trial(1, {"sample": markers["sample"]}, ("cue1",)),))
    whole = Trials((Trial(1, markers),))
    seen = [fates(plan, everything, broken)[0][0]]
    everything = replace(everything, trials_excluded=())
    seen.append(fates(plan, everything, broken)[0][0])
    seen.append(fates(plan, everything, whole)[0][0])
    everything = replace(everything, segments=((0, 2600), (2600, 20000)))
    seen.append(fates(plan, everything, whole)[0][0])
    everything = replace(everything, segments=((0, 20000),))
    seen.append(fates(plan, everything, whole)[0][0])
    plan = rules(DELAY)
    seen.append(fates(plan, everything, whole)[0][0])
    everything = replace(everything, gaps=())
    seen.append(fates(plan, everything, whole)[0][0])
    everything = replace(everything, bad_stretches=())
    seen.append(fates(plan, everything, whole)[0][0])
    assert seen == [
        Fate.TRIAL_EXCLUDED,
        Fate.TRIAL_INCOMPLETE,
        Fate.OUTSIDE,
        Fate.ACROSS_BREAK,
        Fate.NOT_BEFORE_STOP,
        Fate.TOUCHES_GAP,
        Fate.BAD_STRETCH,
        Fate.BY_HAND,
    ]


def test_reduced_rate_reaches_half_an_output_period() -> None:
    # 5000 to 1000 Hz, anchor 10003: output samples 12503, 12508, ... 17498; each stands for 2 samples around.
    trials = Trials((Trial(1, {**MARKERS, "cue1": Marker(10003, "A")}),))
    for start, stop, fate in (
        (12400, 12501, Fate.KEPT),
        (12400, 12502, Fate.TOUCHES_GAP),
        (17500, 17600, Fate.TOUCHES_GAP),
        (17501, 17600, Fate.KEPT),
    ):
        geometry = Geometry(5000.0, 1000.0, ((0, 50000),), (GapSpan(start, stop, start),))
        assert fates(rules(DELAY), geometry, trials)[0][0] is fate


def test_anchor_between_samples() -> None:
    trials = Trials((Trial(1, {**MARKERS, "cue1": Marker(2000.5, "A")}),))
    # At the recorded rate the nearest sample counts (2001; halves go up), the anchor keeps its remainder.
    one = candidates(trials, rules(DELAY), replace(GEOMETRY, segments=((0, 3501),)))[0]
    assert (one.anchor_sample, one.fate) == (2000.5, Fate.KEPT)
    assert fates(rules(DELAY), replace(GEOMETRY, segments=((0, 3500),)), trials)[0][0] is Fate.OUTSIDE
    # At a reduced rate its true instant counts: 2250.5, 2255.5, ... 2745.5.
    reduced = Geometry(500.0, 100.0, ((0, 2747),))
    assert fates(rules(DELAY), reduced, trials)[0][0] is Fate.KEPT
    assert fates(rules(DELAY), replace(reduced, segments=((0, 2746),)), trials)[0][0] is Fate.OUTSIDE


def test_nearest_sample() -> None:
    assert [nearest_sample(value) for value in (0.0, 0.49, 0.5, 1.5, 2.5, -0.5)] == [0, 0, 1, 2, 3, 0]


def test_set_order_is_first_sample_then_rule() -> None:
    both = rules(
        replace(DELAY, name="b", anchor="cue1", start_s=0.0),
        replace(DELAY, name="a", anchor="pulse1", start_s=-1.0),
        replace(DELAY, name="c", anchor="sample", start_s=0.3, count=2),
    )
    found = candidates(WHOLE, both, GEOMETRY)
    assert [(one.rule, one.piece) for one in set_order(found, GEOMETRY)] == [
        ("c", 1),
        ("b", 1),
        ("a", 1),
        ("c", 2),
    ]
    left_out = candidates(WHOLE, both, replace(GEOMETRY, epochs_left_out=(EpochKey(1, "a"),)))
    assert [one.rule for one in set_order(left_out, GEOMETRY)] == ["c", "b", "c"]


def test_decisions_that_name_nothing() -> None:
    geometry = replace(
        GEOMETRY,
        trials_excluded=(1, 7),
        epochs_left_out=(
            EpochKey(1, "delay1"),
            EpochKey(1, "delay1", 2),
            EpochKey(1, "gone"),
            EpochKey(9, "after"),
        ),
    )
    warnings = stale_decisions(WHOLE, PLAN, geometry)
    assert len(warnings) == 4
    assert "trial 7" in warnings[0]
    assert "piece 2 of delay1 in trial 1" in warnings[1]


# --- against counting sample by sample -------------------------------------------------------------

spans = st.tuples(st.integers(0, 600), st.integers(1, 12)).map(lambda pair: (pair[0], pair[0] + pair[1]))
starts = st.integers(-20, 20)


@st.composite
def worlds(draw: st.DrawFn) -> tuple[Trials, Plan, Geometry]:
    """Small recordings at 200, 250 or 300 Hz with output at 100 or the recorded rate."""
    recorded = draw(st.sampled_from([200.0, 250.0, 300.0]))
    output = draw(st.sampled_from([100.0, recorded]))
    n_samples = 600
    cuts = sorted(draw(st.sets(st.integers(1, n_samples - 1), max_size=2)))
    edges = [0, *cuts, n_samples]
    gaps = tuple(GapSpan(start, stop, start) for start, stop in draw(st.lists(spans, max_size=4)))
    places = st.floats(0, 600).map(lambda value: round(value, draw(st.integers(0, 3))))
    trials = []
    for number in range(1, draw(st.integers(0, 3)) + 1):
        markers = {
            slot: Marker(draw(places), code)
            for slot, code in (("sample", "L"), ("cue1", "A"), ("pulse1", "T"))
            if slot == "sample" or draw(st.booleans())
        }
        trials.append(Trial(number, markers, () if "cue1" in markers else ("cue1",)))
    chosen = tuple(
        EpochRule(
            f"r{index}",
            draw(st.sampled_from(["sample", "cue1", "pulse1"])),
            draw(starts) / 100 if output == 100.0 else draw(starts) / output,
            count=draw(st.integers(1, 3)),
            pulse=draw(st.sampled_from(PulseRule)),
            clear_ms=(draw(st.sampled_from([0.0, 5.0, 33.3])), draw(st.sampled_from([0.0, 5.0, 33.3]))),
            stop_before=draw(st.sampled_from(["", "pulse1"])),
        )
        for index in range(draw(st.integers(1, 3)))
    )
    plan = replace(PLAN, epochs=Epochs(draw(st.integers(1, 30)) / output, chosen))
    geometry = Geometry(
        recorded,
        output,
        tuple(itertools.pairwise(edges)),
        gaps,
        bad_stretches=tuple(BadStretch(*span) for span in draw(st.lists(spans, max_size=1))),
        trials_excluded=tuple(draw(st.sets(st.integers(1, 4), max_size=1))),
        epochs_left_out=tuple(EpochKey(1, "r0", piece) for piece in draw(st.sets(st.integers(1, 3)))),
    )
    return Trials(tuple(trials)), plan, geometry


def covered(one: Candidate, plan: Plan, geometry: Geometry) -> list[float]:
    """Instants of all output samples of an epoch, written without the code under test."""
    step = geometry.recorded_hz / geometry.output_hz
    anchor = one.anchor_sample or 0.0
    if step == 1.0:
        anchor = float(int(anchor + 0.5))
    first = anchor + one.start_s * geometry.recorded_hz
    return [first + k * step for k in range(round(plan.epochs.length_s * geometry.output_hz))]


def distance(instants: list[float], low: float, high: float) -> float:
    """Least distance of an epoch's samples to a closed span."""
    return min(max(low - instant, instant - high, 0.0) for instant in instants)


@settings(deadline=None, max_examples=300)
@given(worlds())
def test_kept_and_left_out_are_all_candidates_and_no_gap_touches_a_refusing_epoch(
    world: tuple[Trials, Plan, Geometry],
) -> None:
    trials, plan, geometry = world
    found = candidates(trials, plan, geometry)
    asked = Counter(
        (trial.number, index, piece)
        for trial in trials.trials
        for index, rule in enumerate(plan.epochs.rule)
        for piece in range(1, rule.count + 1)
    )
    assert Counter((one.trial, one.rule_index, one.piece) for one in found) == asked
    kept = set_order(found, geometry)
    assert len(kept) + sum(not one.kept for one in found) == len(found)
    assert all(
        bool(one.detail) is (one.fate not in (Fate.KEPT, Fate.BY_HAND, Fate.TRIAL_EXCLUDED)) for one in found
    )

    step = geometry.recorded_hz / geometry.output_hz
    for one in found:
        rule = plan.epochs.rule[one.rule_index]
        if one.anchor_sample is None:
            assert one.fate in (Fate.NO_ANCHOR, Fate.TRIAL_INCOMPLETE, Fate.TRIAL_EXCLUDED)
            continue
        instants = covered(one, plan, geometry)
        before, after = (clear / 1000 * geometry.recorded_hz for clear in rule.clear_ms)

        touching = min(
            (distance(instants, gap.start - before, gap.stop - 1 + after) for gap in geometry.gaps),
            default=1e9,
        )
        if one.kept:
            assert any(
                start - 1e-5 <= instants[0] and instants[-1] <= stop - 1 + 1e-5
                for start, stop in geometry.segments
            )
            assert all(
                distance(instants, bad.start, bad.stop - 1) > step / 2 for bad in geometry.bad_stretches
            )
            assert rule.pulse is PulseRule.ACCEPT_FILLED or touching > step / 2
        if one.fate is Fate.TOUCHES_GAP:
            assert touching <= step / 2 + 1e-5
        if one.fate is Fate.OUTSIDE:
            assert instants[0] < 0 or instants[-1] > 599


def test_a_gap_between_two_output_samples_touches() -> None:
    # One replaced sample between two output samples is within half a period of one of them.
    geometry = Geometry(5000.0, 1000.0, ((0, 50000),), (GapSpan(13002, 13003, 13002),))
    trials = Trials((Trial(1, {**MARKERS, "cue1": Marker(10000, "A")}),))
    assert fates(rules(DELAY), geometry, trials)[0][0] is Fate.TOUCHES_GAP


@pytest.mark.parametrize("output_hz", [100.0, 1000.0])
def test_times_none_has_no_gaps(output_hz: float) -> None:
    geometry = Geometry(1000.0, output_hz, ((0, 20000),))
    for rule in PulseRule:
        assert fates(rules(replace(DELAY, pulse=rule)), geometry)[0][0] is Fate.KEPT
