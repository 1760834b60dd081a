"""What the pulses tell: drift, trains, amplitudes that stand out, strays; and sets by the signal alone."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pulsemend.engine.estimates import Estimates
from pulsemend.engine.setup import bind
from pulsemend.mending.pulse_findings import (
    amplitude_change,
    latency_drift,
    pulse_warnings,
    trains,
    unusual_amplitudes,
)
from pulsemend.model.epochs import Pulse
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.vocabulary import PulseState
from support import engine_cases
from support.lantern_log import (
    N_TRIALS,
    PLAN,
    RATE_HZ,
    UNMARKED,
    adds_up,
    dry,
    made,
    markers_of,
    moment,
    write,
)
from support.small_lantern import SetOnDisk, changed, run_mend

OF_LANTERN = changed(PLAN, ("[pulses]\n", '[pulses]\ntimes = "markers"\n'))


def pulses_with_drift(ppm: float, seed: int = 1) -> list[Pulse]:
    """Artifacts 3 ms after their markers and later by so much per second, jittered by half a sample."""
    rng = np.random.default_rng(seed)
    marked = np.sort(rng.uniform(0, 3600, 200)) * 5000.0
    late = 0.003 * 5000.0 + ppm * 1e-6 * marked + rng.uniform(-0.5, 0.5, 200)
    return [Pulse(round(at + by), float(at), PulseState.ALIGNED) for at, by in zip(marked, late, strict=True)]


def test_clock_drift_is_recovered() -> None:
    """Facts T-6.9: a drift of 50 ppm is recovered within 5 ppm."""
    drift = latency_drift(pulses_with_drift(50.0), 5000.0)
    assert drift is not None
    assert drift.slope_ppm == pytest.approx(50.0, abs=5.0)
    assert abs(drift.slope_ppm - 50.0) < 4.0 * drift.error_ppm
    assert drift.is_large
    none = latency_drift(pulses_with_drift(0.0), 5000.0)
    assert none is not None
    assert not none.is_large
    assert latency_drift(pulses_with_drift(50.0)[:4], 5000.0) is None


def test_pairs_and_trains_follow_from_the_intervals() -> None:
    singles = [0, 5000, 12_000]
    assert trains(singles, 1000.0).words == ""
    pairs = sorted([*singles, *(at + 100 for at in singles)])
    assert trains(pairs, 1000.0).words == "3 pairs, 100 ms apart"
    train = [20_000 + 50 * place for place in range(10)]
    mixed = trains([*singles, *train], 1000.0)
    assert (mixed.n_single, mixed.sizes, mixed.interval_s) == (3, {10: 1}, 0.05)
    assert mixed.words == "a train of 10, 50 ms apart, 3 alone"


def test_clipping_and_holding_beyond_the_gap_are_told() -> None:
    """A gap of -2 to 14 ms: 12 ms of clipping lie inside it, 20 ms beyond; likewise a hold of 3 ms."""
    plan = engine_cases.plan()
    recording = engine_cases.ArrayRecording(np.zeros((2, 100)), 5000.0)
    setup = bind(recording.facts, plan, NO_MARKS)

    def told(*shapes: tuple[float, float]) -> str:
        pulses = tuple(
            Pulse(10_000 * place, None, PulseState.ADDED, clipped_s=clipped_s, held_s=held_s)
            for place, (clipped_s, held_s) in enumerate(shapes)
        )
        return "; ".join(pulse_warnings(setup, Estimates(np.zeros(2), pulses, 0.0)))

    assert told((0.012, 0.001), (0.0, 0.0)) == ""
    assert "clipped beyond the gap after 1 pulse, up to 20.0 ms after the onset" in told(
        (0.020, 0.0), (0.0, 0.0)
    )
    assert "holds its output from 3.0 ms before the onset" in told((0.0, 0.003))


def test_a_misfire_and_a_moved_coil_stand_out() -> None:
    rng = np.random.default_rng(3)
    usual = (1e-3 * rng.normal(1.0, 0.03, 60)).tolist()
    assert not any(unusual_amplitudes(usual))
    assert amplitude_change(usual) is None
    misfired = [*usual[:20], 2e-4, None, *usual[20:]]
    assert [place for place, odd in enumerate(unusual_amplitudes(misfired)) if odd] == [20]
    moved = [*usual[:30], *(0.6 * one for one in usual[30:])]
    change = amplitude_change(moved)
    assert change is not None
    assert change[1] / change[0] == pytest.approx(0.6, abs=0.05)
    assert not any(unusual_amplitudes([1e-3, 5e-3]))


@pytest.mark.parametrize("times", ["signal", "both"])
def test_trials_are_whole_without_any_pulse_marker(tmp_path: Path, times: str) -> None:
    """Slots of pulses take pulses from the signal; nothing else in the plan has to say so."""
    markers = [one for one in markers_of() if one.code != "pulse"]
    recording = write(tmp_path / "in", markers)
    plan = changed(OF_LANTERN, ('times = "markers"', f'times = "{times}"'))
    written = SetOnDisk(run_mend(recording, plan, tmp_path / "study").folder)
    pulses = written.table("pulses.tsv")
    true = [round(one.time_s * RATE_HZ) for one in made().lantern.schedule.pulses if one.happened]
    found = np.array([int(sample) for sample in pulses["sample"]])
    assert found.shape == (len(true),) == (2 * N_TRIALS,)
    assert np.all((found - true >= 0) & (found - true <= 2))
    assert set(pulses["state"]) == {"found in the signal, no marker"}
    assert set(pulses["kind"]) <= {"spike", "clipped spike"}
    assert all(float(one) > 100.0 for one in pulses["amplitude_uv"])
    epochs = written.table("epochs.tsv")
    assert Counter(epochs["name"]) == {"delay1": N_TRIALS, "delay2": N_TRIALS}
    assert set(epochs["pulse1.source"]) == {"found in the signal"}


def test_markers_without_a_pulse_count_for_nothing_by_the_signal(tmp_path: Path) -> None:
    first = next(one for one in markers_of() if one.code == "pulse")
    ghost = replace(first, sample=first.sample - RATE_HZ)
    recording = write(tmp_path / "in", [*markers_of(UNMARKED), ghost], faults=(UNMARKED,))
    plan = changed(OF_LANTERN, ('times = "markers"', 'times = "signal"'))
    prepared = dry(recording, plan, tmp_path / "study")
    adds_up(prepared)
    states = Counter(pulse.state for pulse in prepared.estimates.pulses)
    assert states == {PulseState.ALIGNED: 2 * N_TRIALS - 1, PulseState.FOUND: 1}
    lost = next(pulse for pulse in prepared.estimates.pulses if pulse.state is PulseState.FOUND)
    assert abs(lost.sample / RATE_HZ - moment(5, "pulse2", UNMARKED).time_s) < 0.002
    text = " ".join(prepared.warnings)
    assert "1 pulse marker without a pulse in the signal counts for nothing" in text
    assert "1 pulse in the signal has no marker and is repaired" in text
    assert not any(trial.doubts or trial.missing for trial in prepared.trials.trials)
    filled = [trial.markers["pulse2"].code for trial in prepared.trials.trials]
    assert filled.count("found in the signal") == 1
