"""The list of pulses, what a hand does to it, gaps of single channels, and what gaps do to epochs."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pulsemend.engine.leak import Leak
from pulsemend.mending.learned import learn
from pulsemend.mending.mend import cut_all, set_contents
from pulsemend.mending.prepare import prepare
from pulsemend.mending.pulse_effect import effect
from pulsemend.mending.pulse_gaps import (
    Source,
    exceptions,
    gap_of,
    marks_with_exceptions,
    plan_with_exceptions,
)
from pulsemend.mending.pulse_list import (
    NOT_YET,
    REMOVED,
    as_found,
    count_pulses,
    pulse_rows,
    refusal_to_add,
    with_added,
    with_moved,
    with_removed,
)
from pulsemend.model.epochs import Pulse
from pulsemend.model.marks import NO_MARKS, Marks, MovedPulse
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan, read_plan
from pulsemend.model.recording import Marker, RecordingFacts
from pulsemend.model.vocabulary import PulseState, PulseTimes
from pulsemend.progress import finish
from pulsemend.readers.opening import open_recording
from support.small_lantern import Study, changed, make_request

PLAN_TEXT = """\
pulsemend = 1
[markers.tick]
role = "pulse"
[markers.lamp]
role = "sample"
[[trial]]
slot = "sample"
role = "sample"
[pulses]
window_ms = [-2.0, 14.0]
[epochs]
length_s = 1.0
[[epochs.rule]]
name = "baseline"
anchor = "sample"
start_s = -1.0
"""

FACTS = RecordingFacts(
    stem="lt01",
    format="invented",
    rate_hz=1000.0,
    n_samples=60_000,
    channels=(),
    markers=(
        Marker(1000, "lamp"),
        Marker(2000, "tick"),
        Marker(4000.4, "tick"),
        Marker(6000, "tick"),
        Marker(8000, "tick"),
    ),
)

KNOWN = (
    Pulse(2001, 2000.0, PulseState.ALIGNED),
    Pulse(4003, 4000.4, PulseState.ALIGNED),
    Pulse(6000, 6000.0, PulseState.MARKED_ONLY),
    Pulse(8005, 8000.0, PulseState.ALIGNED),
)


def plan() -> Plan:
    return parse_plan(PLAN_TEXT).plan


def test_rows_are_the_pulse_markers_with_what_was_found() -> None:
    rows = pulse_rows(FACTS, plan(), NO_MARKS, KNOWN)
    assert [row.onset for row in rows] == [2001, 4003, 6000, 8005]
    assert [row.latency_ms(1000.0) for row in rows] == [1.0, pytest.approx(2.6), None, 5.0]
    assert rows[2].words == "marked, not in the signal"
    assert {row.words for row in pulse_rows(FACTS, plan(), NO_MARKS)} == {NOT_YET}


def test_counts_and_how_far_markers_lead() -> None:
    counts = count_pulses(pulse_rows(FACTS, plan(), NO_MARKS, KNOWN), 1000.0)
    assert (counts.known, counts.aligned, counts.marked_only) == (4, 3, 1)
    assert counts.lead_ms == pytest.approx(2.6)
    # Quartiles of 1, 2.6 and 5: halfway to the middle on either side.
    assert counts.spread_ms == pytest.approx(3.8 - 1.8)
    nothing = count_pulses((), 1000.0)
    assert (nothing.known, nothing.lead_ms, nothing.spread_ms) == (0, None, 0.0)


def test_plan_without_pulses_lists_none() -> None:
    without = plan()
    without = replace(without, pulses=replace(without.pulses, times=PulseTimes.NONE))
    assert pulse_rows(FACTS, without, Marks(pulses_added=(5,)), KNOWN) == ()


def test_added_pulse_can_be_moved_and_removed() -> None:
    marks = with_added(NO_MARKS, 3000)
    row = next(row for row in pulse_rows(FACTS, plan(), marks, KNOWN) if row.marked is None)
    assert (row.onset, row.state, row.latency_ms(1000.0)) == (3000, PulseState.ADDED, None)
    moved = with_moved(marks, row, 3100)
    assert moved.pulses_added == (3100,)
    assert with_removed(marks, row) == NO_MARKS


def test_marker_can_be_moved_removed_and_given_back() -> None:
    # A marker between samples is known by the nearest one.
    row = pulse_rows(FACTS, plan(), NO_MARKS, KNOWN)[1]
    moved = with_moved(NO_MARKS, row, 4010)
    assert moved.pulses_moved == (MovedPulse(4000, 4010),)
    again = pulse_rows(FACTS, plan(), moved, KNOWN)[1]
    assert (again.onset, again.state) == (4010, PulseState.MOVED)
    assert with_moved(moved, again, 4020).pulses_moved == (MovedPulse(4000, 4020),)
    removed = with_removed(moved, again)
    assert (removed.pulses_moved, removed.pulses_removed) == ((), (4000,))
    gone = pulse_rows(FACTS, plan(), removed, KNOWN)[1]
    assert gone.is_removed
    assert gone.words == REMOVED
    assert count_pulses(pulse_rows(FACTS, plan(), removed, KNOWN), 1000.0).known == 3
    assert with_moved(removed, gone, 4030) == Marks(pulses_moved=(MovedPulse(4000, 4030),))
    assert as_found(removed, gone) == NO_MARKS
    assert as_found(moved, again) == NO_MARKS


def test_pulse_moved_by_hand_is_not_taken_for_one_found() -> None:
    known = (Pulse(2050, 2000.0, PulseState.MOVED),)
    assert pulse_rows(FACTS, plan(), NO_MARKS, known)[0].words == NOT_YET


def test_gap_of_a_channel_is_that_of_the_marks_then_the_plan_then_all() -> None:
    of_plan = plan_with_exceptions(plan(), ["C3", "C5"], (-2.0, 25.0))
    marks = marks_with_exceptions(NO_MARKS, ["C3"], (-3.0, 30.0))
    assert gap_of(of_plan, marks, "C3") == ((-3.0, 30.0), Source.MARKS)
    assert gap_of(of_plan, marks, "C5") == ((-2.0, 25.0), Source.PLAN)
    assert gap_of(of_plan, marks, "Cz") == gap_of(of_plan, marks) == ((-2.0, 14.0), Source.ALL)
    assert [(one.channel, one.source) for one in exceptions(of_plan, marks)] == [
        ("C3", Source.PLAN),
        ("C5", Source.PLAN),
        ("C3", Source.MARKS),
    ]
    assert plan_with_exceptions(of_plan, ["C3", "C5"], None) == plan()
    assert marks_with_exceptions(marks, ["C3"], None) == NO_MARKS


def test_effect_counts_what_is_replaced(study: Study) -> None:
    recording = open_recording(study.recording)
    try:
        of = read_plan(study.plan).plan
        # Facts T-1.1: -2 to 15 ms at 5 kHz, both ends replaced, are 86 samples.
        of = replace(of, pulses=replace(of.pulses, window_ms=(-2.0, 15.0)))
        found = finish(learn(recording, of, NO_MARKS))
        done = finish(effect(recording, found))
    finally:
        recording.close()
    assert done.gap_samples == 86
    assert done.gap_ms == pytest.approx(17.2)
    # Each of the pulses has its own gap and a recharge.
    assert done.n_gaps == 2 * len(found.estimates.pulses)
    assert done.n_shortened == 0
    assert list(done.replaced) == ["after2", "delay1"]


@pytest.mark.parametrize("mirror", [False, True])
def test_effect_is_what_the_set_will_say(
    mirror: bool, study: Study, tmp_path_factory: pytest.TempPathFactory
) -> None:
    text = study.plan.read_text(encoding="utf-8")
    if mirror:
        text = changed(text, ("start_s = 0.5", "start_s = 0.5\nmirror_gaps = true"))
    request = make_request(study.recording, text, tmp_path_factory.mktemp("effect"))
    prepared = finish(prepare(request))
    try:
        cuts = cut_all(prepared)
        epochs = set_contents(prepared, cuts, Leak(np.zeros(len(cuts)), 0)).epochs
        found = finish(learn(prepared.recording, prepared.plan, NO_MARKS))
        done = finish(effect(prepared.recording, found))
    finally:
        prepared.recording.close()
    for rule, share in done.replaced.items():
        of_rule = [one.replaced_share for one in epochs if one.candidate.rule == rule]
        assert share == pytest.approx(sum(of_rule) / len(of_rule))
    assert (done.replaced["after2"] or 0.0) > 0.01
    assert ((done.replaced["delay1"] or 0.0) > 0.01) == mirror


def test_shortened_flanks_and_rules_without_epochs_are_told(study: Study) -> None:
    text = changed(
        study.plan.read_text(encoding="utf-8"), ('fill = "line"', 'fill = "line"\nflank_ms = 300.0')
    )
    text = changed(text, ("start_s = 0.5", "start_s = -900.0"))
    recording = open_recording(study.recording)
    try:
        done = finish(effect(recording, finish(learn(recording, parse_plan(text).plan, NO_MARKS))))
    finally:
        recording.close()
    # Between the gap and the recharge are 234 ms, so all of them are short of 300 ms.
    assert done.n_shortened == done.n_gaps > 0
    assert done.replaced["delay1"] is None


def test_a_pulse_is_added_two_milliseconds_from_every_other_and_no_nearer() -> None:
    rows = pulse_rows(FACTS, plan(), NO_MARKS)
    onset, rate_hz = rows[0].onset, FACTS.rate_hz
    near = round(0.002 * rate_hz)
    assert near > 1
    assert not refusal_to_add(onset + near, rows, rate_hz)
    assert not refusal_to_add(onset - near, rows, rate_hz)
    for sample in (onset, onset + near - 1, onset - near + 1):
        assert f"there is one at {onset / rate_hz:.4f} s already" in refusal_to_add(sample, rows, rate_hz)
    removed = pulse_rows(FACTS, plan(), with_removed(NO_MARKS, rows[0]))
    assert not refusal_to_add(onset, removed, rate_hz)
    assert not refusal_to_add(onset, (), rate_hz)
