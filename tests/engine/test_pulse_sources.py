"""Pulses by markers, by the signal, or by both: what is repaired and what is only compared."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import fit
from pulsemend.engine.setup import bind
from pulsemend.model.epochs import Pulse
from pulsemend.model.marks import Marks, MovedPulse
from pulsemend.model.plan import OtherGap, Pulses
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fill, PulseKind, PulseState, PulseTimes
from pulsemend.progress import finish
from pulsemend.signal.find import align_onset, usual_steepness
from support.engine_cases import ArrayRecording, coloured, plan
from support.pulse_streams import PulseStream, pulse_stream

RATE_HZ = 5000.0
WINDOW = Pulses(window_ms=(-2.0, 14.0), fill=Fill.LINE)
KINDS = {
    "spike": PulseKind.SPIKE,
    "clipped": PulseKind.CLIPPED,
    "slow": PulseKind.SLOW,
    "held": PulseKind.HELD,
}


@pytest.fixture(scope="module")
def stream() -> PulseStream:
    return pulse_stream(RATE_HZ, 30.0, 31)


def learned(
    stream: PulseStream, at: list[float], times: PulseTimes, marks: Marks | None = None, **pulses: object
) -> tuple[Pulse, ...]:
    """Learn with pulse markers at given samples."""
    recording = ArrayRecording(stream.stored.T, stream.rate_hz, tuple(Marker(one, "pulse") for one in at))
    the_plan = plan(pulses=replace(WINDOW, times=times, **pulses))  # type: ignore[arg-type]
    return finish(fit(recording, bind(recording.facts, the_plan, marks or Marks()))).pulses


def test_onsets_and_kinds_of_pulses_that_nobody_marked(stream: PulseStream) -> None:
    """Issue 5.1: within one sample for spikes, two for clipped and held ones; kinds as they were made."""
    pulses = learned(stream, [], PulseTimes.SIGNAL)
    assert [pulse.state for pulse in pulses] == [PulseState.FOUND] * len(stream.onsets)
    assert [pulse.kind for pulse in pulses] == [KINDS[kind] for kind in stream.kinds]
    for pulse, onset, kind in zip(pulses, stream.onsets, stream.kinds, strict=True):
        assert abs(pulse.sample - onset) <= (1 if kind == "spike" else 2)
        assert pulse.marked is None
        assert pulse.amplitude_v is not None
        assert pulse.amplitude_v > 2e-5


@pytest.mark.parametrize("rate_hz", [1000.0, 25_000.0])
def test_onsets_at_other_rates(rate_hz: float) -> None:
    stream = pulse_stream(rate_hz, 7.0, 32)
    pulses = learned(stream, [], PulseTimes.BOTH)
    late = [abs(pulse.sample - onset) for pulse, onset in zip(pulses, stream.onsets, strict=True)]
    assert max(late) <= 1


def markers_of(stream: PulseStream) -> list[float]:
    """Lead the pulses by 3 ms; the third pulse has no marker, and one marker no pulse."""
    at = [onset - 15.0 for place, onset in enumerate(stream.onsets) if place != 2]
    return sorted([*at, (stream.onsets[4] + stream.onsets[5]) / 2])


def test_signal_repairs_what_is_seen_and_compares_markers(stream: PulseStream) -> None:
    at = markers_of(stream)
    pulses = learned(stream, at, PulseTimes.SIGNAL)
    assert len(pulses) == len(stream.onsets)
    assert [pulse.marked for pulse in pulses if pulse.state is PulseState.ALIGNED] == [
        onset - 15.0 for place, onset in enumerate(stream.onsets) if place != 2
    ]
    assert [place for place, pulse in enumerate(pulses) if pulse.state is PulseState.FOUND] == [2]


def test_both_repairs_the_union(stream: PulseStream) -> None:
    at = markers_of(stream)
    states = [pulse.state for pulse in learned(stream, at, PulseTimes.BOTH)]
    assert states.count(PulseState.ALIGNED) == len(stream.onsets) - 1
    assert states.count(PulseState.FOUND) == 1
    assert states.count(PulseState.MARKED_ONLY) == 1
    # Markers alone, on the other hand, know nothing of the third pulse.
    assert len(learned(stream, at, PulseTimes.MARKERS)) == len(stream.onsets)


def test_by_hand_wins_over_the_signal(stream: PulseStream) -> None:
    first, second = stream.onsets[:2]
    marks = Marks(pulses_added=(first + 40,), pulses_moved=(MovedPulse(second - 15, second + 7),))
    pulses = learned(stream, markers_of(stream), PulseTimes.SIGNAL, marks)
    assert [(pulse.sample, pulse.state) for pulse in pulses[:2]] == [
        (first + 40, PulseState.ADDED),
        (second + 7, PulseState.MOVED),
    ]
    assert len(pulses) == len(stream.onsets)


def test_other_gaps_hold_no_pulses_of_their_own() -> None:
    """A recharge as strong as a pulse is none once the plan names its gap."""
    stored = coloured(8, 60_000, RATE_HZ, 5)
    pulses, recharges = [8000, 20_000, 33_000, 47_000], []
    for onset in pulses:
        for at in (onset, onset + 1250):
            stored[:, at : at + 3] += np.array([3e4, -2e4, 1e4])
        recharges.append(onset + 1250)
    stream = PulseStream(stored.T, RATE_HZ, tuple(pulses), ())
    assert [one.sample for one in learned(stream, [], PulseTimes.SIGNAL)] == sorted([*pulses, *recharges])
    also = (OtherGap((248.0, 254.0)),)
    assert [one.sample for one in learned(stream, [], PulseTimes.SIGNAL, also=also)] == pulses
    before = (OtherGap((-2500.0 + 248.0, -2500.0 + 254.0)),)
    assert len(learned(stream, [], PulseTimes.SIGNAL, also=before)) == 8


def test_a_train_is_found_pulse_by_pulse() -> None:
    stored = coloured(8, 50_000, RATE_HZ, 6)
    onsets = [10_000 + 1000 * train * 10 + 100 * place for train in range(3) for place in range(10)]
    for onset in onsets:
        stored[:, onset : onset + 3] += np.array([3e4, -2e4, 1e4])
    stream = PulseStream(stored.T, RATE_HZ, tuple(onsets), ())
    found = learned(stream, [], PulseTimes.SIGNAL, min_spacing_ms=5.0, window_ms=(-1.0, 5.0))
    assert [one.sample for one in found] == onsets


def test_onset_rule_of_a_found_pulse_is_that_of_a_marked_one(stream: PulseStream) -> None:
    """Design 4.2: first step of at least a quarter of the largest, median over the channels."""
    found = learned(stream, [], PulseTimes.SIGNAL)
    marked = learned(stream, [float(onset) for onset in stream.onsets], PulseTimes.MARKERS)
    same = [one.sample == other.sample for one, other in zip(found, marked, strict=True)]
    assert sum(same) >= len(same) - 1
    usual = usual_steepness([stream.stored[:5000]])
    at = found[0].sample
    assert align_onset(stream.stored[at - 26 : at + 26], usual) == 25


def test_estimates_keep_what_was_seen(tmp_path: Path, stream: PulseStream) -> None:
    pulses = learned(stream, markers_of(stream), PulseTimes.BOTH)
    estimates = Estimates(np.zeros(31), pulses, 1e-7)
    estimates.save(tmp_path / "estimates.h5")
    assert Estimates.load(tmp_path / "estimates.h5").pulses == pulses
