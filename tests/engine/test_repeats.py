"""A stimulator's recharge is listed, wherever it is, and is no part of the pulse."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pulsemend.engine.fit import fit
from pulsemend.engine.repeats import repeats_of
from pulsemend.engine.setup import bind
from pulsemend.model.marks import Marks
from pulsemend.model.plan import OtherGap, Pulses
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fill
from pulsemend.progress import finish
from pulsemend.signal.repeats import Repeat
from support.engine_cases import ArrayRecording, plan
from support.pulse_streams import STEP_UV, wild_background

RATE_HZ = 2000.0
WINDOW = Pulses(window_ms=(-2.0, 14.0), fill=Fill.LINE)
N_PULSES = 40


def onsets_of(interval_s: tuple[float, float], seed: int = 1) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return (RATE_HZ * (1.0 + np.cumsum(rng.uniform(*interval_s, N_PULSES)))).round().astype(int)


def repeats(
    onsets: np.ndarray, latencies_s: np.ndarray, sizes: np.ndarray, also: tuple[OtherGap, ...] = ()
) -> tuple[Repeat, ...]:
    """Look for what comes again after pulses of given sizes (mV) with a weak second spike."""
    stored = wild_background(RATE_HZ, float(onsets[-1] / RATE_HZ + 2.0), 7) / STEP_UV
    second = onsets + np.round(latencies_s * RATE_HZ).astype(int)
    for onset, size in zip(onsets, sizes, strict=True):
        stored[onset : onset + 3] += size * np.array([1e4, -8e3, 2e3])[:, None]
    for at in second:
        stored[at : at + 3] += np.array([800.0, 1200.0, 500.0])[:, None]
    markers = tuple(Marker(float(onset), "pulse") for onset in onsets)
    recording = ArrayRecording(np.round(stored).T, RATE_HZ, markers)
    the_plan = plan(pulses=replace(WINDOW, also=also))
    setup = bind(recording.facts, the_plan, Marks())
    return finish(repeats_of(recording, setup, finish(fit(recording, setup))))


def test_a_second_spike_is_listed_and_not_absorbed() -> None:
    """Facts T-1.9: a second spike at +250 ms, within one sample."""
    onsets, sizes = onsets_of((1.3, 2.0)), np.ones(N_PULSES)
    (found,) = repeats(onsets, np.full(N_PULSES, 0.250), sizes)
    assert found.latency_s == pytest.approx(0.250, abs=1 / RATE_HZ)
    assert found.first_s > 0.014
    assert found.last_s - found.first_s < 0.003
    # A burst of muscle activity may hide one of them.
    assert 0.9 * N_PULSES <= found.n_seen <= found.n_pulses == N_PULSES
    assert found.size == pytest.approx(1.2e-4, rel=0.6)
    assert not found.follows_amplitude
    assert repeats(onsets, np.full(N_PULSES, 0.250), sizes, (OtherGap((248.0, 254.0)),)) == ()


def test_a_latency_that_follows_the_amplitude() -> None:
    sizes = np.random.default_rng(2).uniform(0.5, 1.5, N_PULSES)
    (found,) = repeats(onsets_of((1.3, 2.0)), 0.150 + 0.02 * sizes, sizes)
    assert found.follows_amplitude
    assert found.first_s == pytest.approx(0.160, abs=0.002)
    assert found.last_s == pytest.approx(0.181, abs=0.003)


def test_just_before_the_next_pulse() -> None:
    (found,) = repeats(onsets_of((1.3, 2.0)), np.full(N_PULSES, -0.080), np.ones(N_PULSES))
    assert found.latency_s == pytest.approx(-0.080, abs=1 / RATE_HZ)


def test_constant_intervals_list_it_once() -> None:
    onsets = 3000 + 3000 * np.arange(N_PULSES)
    (found,) = repeats(onsets, np.full(N_PULSES, 0.250), np.ones(N_PULSES))
    assert found.latency_s == pytest.approx(0.250, abs=1 / RATE_HZ)


def test_nothing_repeats_at_random() -> None:
    latencies_s = np.random.default_rng(3).uniform(0.05, 0.9, N_PULSES)
    assert repeats(onsets_of((1.3, 2.0)), latencies_s, np.ones(N_PULSES)) == ()
