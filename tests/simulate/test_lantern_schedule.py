"""What happens in a Lantern recording, and what its markers and its log say."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest

from pulsemend.simulate.lantern import LanternSpec, make_lantern
from pulsemend.simulate.schedule import LANTERN_FAULTS, Fault, FaultKind, Schedule, make_schedule
from pulsemend.simulate.truth import LOG_DRIFT, LOG_ZERO_S, log_text

RATE_HZ = 5000.0


def schedule_of(
    trials: int, seed: int = 3, duration_s: float = 0.0, faults: tuple[Fault, ...] = ()
) -> Schedule:
    return make_schedule(np.random.default_rng(seed), trials, RATE_HZ, duration_s, faults)


@pytest.mark.parametrize("trials", [2, 10, 75])
def test_conditions_are_balanced(trials: int) -> None:
    questions = schedule_of(trials).questions
    for number in (1, 2):
        asked = Counter(q.asked for q in questions if q.number == number)
        probes = Counter(q.probe for q in questions if q.number == number)
        assert abs(asked["left"] - asked["right"]) <= 1
        assert abs(probes["same"] - probes["other"]) <= 1


def test_trials_are_balanced_between_stay_and_switch() -> None:
    questions = schedule_of(12).questions
    first, second = questions[::2], questions[1::2]
    assert sum(a.asked == b.asked for a, b in zip(first, second, strict=True)) == 6


def test_a_trial_leaves_room_for_its_epochs() -> None:
    schedule = schedule_of(20)
    by_slot = {(m.trial, m.slot): m.time_s for m in schedule.moments}
    for trial in range(1, 21):
        assert by_slot[trial, "sample"] - by_slot[trial, "dot"] > 1.0
        for j in (1, 2):
            cue, pulse = by_slot[trial, f"cue{j}"], by_slot[trial, f"pulse{j}"]
            # a second from half a second after the arrow, and 0.1 s to spare before the gap
            assert pulse - 0.002 - (cue + 1.5) > 0.1
            assert by_slot[trial, f"probe{j}"] - pulse > 1.0
    times = [m.time_s for m in schedule.moments]
    assert times == sorted(times)
    assert times[0] >= 1.0
    assert times[-1] + 1.0 < schedule.n_samples / RATE_HZ


def test_pulse_markers_lead_by_three_samples_give_or_take_one() -> None:
    pulses = schedule_of(75).pulses
    lead = np.array([p.time_s * RATE_HZ - p.marked for p in pulses if p.marked is not None])
    assert len(lead) == 150
    assert lead.min() >= 1.5 - 1e-6
    assert lead.max() <= 4.5 + 1e-6
    assert lead.mean() == pytest.approx(3.0, abs=0.2)


def test_other_markers_stand_at_the_nearest_sample() -> None:
    for moment in schedule_of(5).moments:
        if not moment.slot.startswith("pulse"):
            assert moment.marked == round(moment.time_s * RATE_HZ)


def test_faults_change_nothing_but_what_they_name() -> None:
    sound, broken = schedule_of(6).moments, schedule_of(6, faults=LANTERN_FAULTS).moments
    changed = {(a.trial, a.slot): b for a, b in zip(sound, broken, strict=True) if a != b}
    assert set(changed) == {(2, "pulse2"), (4, "pulse1"), (5, "probe1")}
    assert changed[2, "pulse2"].marked is None
    assert changed[2, "pulse2"].happened
    assert changed[4, "pulse1"].marked is not None
    assert not changed[4, "pulse1"].happened
    assert changed[5, "probe1"].marked is None
    assert len(schedule_of(6, faults=LANTERN_FAULTS).markers) == len(sound) - 2


def test_pauses_stretch_to_the_wanted_length() -> None:
    assert schedule_of(75, duration_s=1200.0).n_samples == pytest.approx(6_000_000, abs=1)


def test_fault_beyond_the_last_trial_is_refused() -> None:
    with pytest.raises(ValueError, match="faults beyond"):
        make_lantern(LanternSpec(trials=1, faults=(Fault(FaultKind.UNMARKED, 2, "pulse1"),)))


def test_channel_that_is_not_on_the_cap_is_refused() -> None:
    with pytest.raises(ValueError, match="not on the cap"):
        make_lantern(LanternSpec(trials=1, faults=(), channels=("Cz", "FCz")))


def test_log_runs_on_its_own_clock() -> None:
    questions = schedule_of(75, duration_s=1200.0).questions
    names, *rows = [line.split("\t") for line in log_text(questions).splitlines()]
    assert len(rows) == 150
    column = {name: [row[i] for row in rows] for i, name in enumerate(names)}
    slope, zero = np.polyfit([q.probe_s for q in questions], np.array(column["probe_s"], float), 1)
    assert slope - 1.0 == pytest.approx(LOG_DRIFT, abs=1e-7)
    assert zero == pytest.approx(LOG_ZERO_S, abs=1e-4)
    for row, q in zip(rows, questions, strict=True):
        assert row[:6] == [
            *(str(q.trial), str(q.number), q.asked, q.probe, q.answer),
            "yes" if q.answer == q.probe else "no",
        ]
        assert float(column["reaction_s"][rows.index(row)]) == pytest.approx(q.answer_s - q.probe_s, abs=2e-4)
