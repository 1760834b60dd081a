"""The leak of pulses: against recordings in which nothing but the leak is left of them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.engine.fit import fit
from pulsemend.engine.leak import Leak, measure_leak
from pulsemend.model.plan import Filter, Pulses
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fill
from pulsemend.progress import finish
from support.engine_cases import STEP_V, ArrayRecording, coloured, make_chain, plan

RATE_HZ = 2000.0
ONSETS = [8000, 18001, 28002, 38003, 48004, 58000]
N_SAMPLES = 68000
PULSES = Pulses(window_ms=(-2.0, 14.0), fill=Fill.LINE)
PLAN = plan(
    pulses=PULSES, filter=Filter(highpass_hz=1.0, lowpass_hz=100.0, rate_hz=500.0), reference="as recorded"
)


def decaying(height_uv: float, tau_s: float, onsets: list[int]) -> NDArray[np.float64]:
    """A spike and a decay at every onset, from which 14 ms are then cut; stored numbers of one channel."""
    x = np.zeros(N_SAMPLES)
    t = np.arange(round(0.4 * RATE_HZ)) / RATE_HZ
    for onset in onsets:
        x[onset : onset + t.size] += height_uv * 1e-6 / STEP_V * np.exp(-t / tau_s)
        x[onset] += 5e4
    return x


def recording(*channels: NDArray[np.float64]) -> ArrayRecording:
    markers = tuple(Marker(float(onset), "pulse") for onset in ONSETS)
    return ArrayRecording(np.rint(np.vstack(channels)), RATE_HZ, markers)


def leak_of(
    found: ArrayRecording, anchors: list[float], start_s: float, n_times: int
) -> tuple[Leak, list[float]]:
    """Leak as measured, and the largest true sample of each epoch, in volts."""
    chain = make_chain(found, PLAN)
    cuts = [chain.cut(anchor, start_s, n_times) for anchor in anchors]
    estimates = finish(fit(found, chain.setup))
    return finish(measure_leak(chain, estimates, cuts)), [
        float(np.abs(chain.samples(cut)).max()) for cut in cuts
    ]


def test_where_nothing_but_pulses_is_recorded_the_leak_is_what_the_epochs_hold() -> None:
    # 15 ms: gone within the 100 ms that count as the pulse's own, so nothing of it is cut away.
    found = recording(decaying(1000.0, 0.015, ONSETS), decaying(300.0, 0.010, ONSETS))
    anchors = [float(onset) for onset in ONSETS[1:-1]] + [20000.3]
    leak, truth = leak_of(found, anchors, -0.66, 325)
    assert leak.n_pulses == len(ONSETS)
    # Epochs end 12 ms before the onset; the last one lies between two pulses, at a part of a sample.
    np.testing.assert_allclose(leak.peaks_v[:4], truth[:4], rtol=0.01, atol=2e-8)
    assert leak.peaks_v[4] == pytest.approx(truth[4], rel=0.05, abs=3e-8)


def test_a_decay_leaks_backwards_by_its_area() -> None:
    # Closed form: near zero a high-pass is a spike minus 2 fc, so before the pulse the leak is 2 fc times
    # the area of what the repair left: a ramp across the gap (line fill), and the decay behind it.
    height_v, tau_s, gap_s = 1e-3, 0.020, 0.014
    behind_v = height_v * np.exp(-gap_s / tau_s)
    area = behind_v * (gap_s + 0.002) / 2 + behind_v * tau_s * (1 - np.exp(-(0.1 - gap_s) / tau_s))
    leak, _ = leak_of(recording(decaying(1000.0, tau_s, ONSETS)), [float(ONSETS[2])], -0.03, 9)
    assert leak.peaks_v[0] == pytest.approx(2 * 1.0 * area, rel=0.08)


def test_an_epoch_far_from_pulses_has_none() -> None:
    found = recording(decaying(1000.0, 0.020, ONSETS))
    chain = make_chain(found, PLAN)
    reach = chain.setup.replaced_reach_s
    assert reach < 2.0
    far = ONSETS[0] + round((ONSETS[1] - ONSETS[0]) / 2)
    leak, _ = leak_of(found, [float(far)], 0.0, 10)
    near, _ = leak_of(found, [float(ONSETS[1])], -0.1, 40)
    assert leak.peaks_v[0] < 0.02 * near.peaks_v[0]


def test_background_alone_leaks_little() -> None:
    noise = coloured(4, N_SAMPLES, RATE_HZ, seed=5, sd_uv=15.0)
    leak, _ = leak_of(recording(*noise), [float(onset) for onset in ONSETS[1:]], -0.51, 250)
    # The median of six pulses holds background of several microvolts; what of it is carried out of its own
    # stretch is below the noise of any average.
    assert leak.peaks_v.max() < 2e-6


def test_a_pulses_own_stretch_does_not_count_for_it() -> None:
    found = recording(decaying(1000.0, 0.015, ONSETS))
    own, truth = leak_of(found, [float(ONSETS[2])], 0.020, 30)
    assert truth[0] > 50e-6
    assert own.peaks_v[0] == 0.0


def test_bad_channels_and_other_types_do_not_count() -> None:
    found = recording(decaying(1000.0, 0.015, ONSETS), np.zeros(N_SAMPLES))
    bad = replace(PLAN, channels=replace(PLAN.channels, bad=("E1",)))
    chain = make_chain(found, bad)
    cuts = [chain.cut(float(ONSETS[2]), -0.51, 250)]
    leak = finish(measure_leak(chain, finish(fit(found, chain.setup)), cuts))
    assert leak.peaks_v[0] == 0.0


def test_without_pulses_nothing_is_measured() -> None:
    found = ArrayRecording(coloured(2, N_SAMPLES, RATE_HZ, seed=1), RATE_HZ)
    chain = make_chain(found, PLAN)
    leak = finish(measure_leak(chain, finish(fit(found, chain.setup)), [chain.cut(20000.0, 0.0, 100)]))
    assert leak.n_pulses == 0
    assert leak.peaks_v.tolist() == [0.0]


def test_pulses_whose_stretch_another_one_cuts_are_left_out_of_the_median() -> None:
    markers = tuple(Marker(float(onset), "pulse") for onset in (8000, 8100, 30000))
    x = np.zeros(N_SAMPLES)
    for marker in markers:
        x[int(marker.sample)] = 5e4
    found = ArrayRecording(x[None], RATE_HZ, markers)
    chain = make_chain(found, PLAN)
    leak = finish(measure_leak(chain, finish(fit(found, chain.setup)), []))
    assert leak.n_pulses == 2


def test_a_gap_that_begins_after_the_onset_is_measured_from_the_onset() -> None:
    late = replace(PLAN, pulses=replace(PULSES, window_ms=(1.0, 14.0)))
    found = recording(decaying(1000.0, 0.015, ONSETS))
    chain = make_chain(found, late)
    leak = finish(
        measure_leak(chain, finish(fit(found, chain.setup)), [chain.cut(float(ONSETS[2]), -0.51, 250)])
    )
    assert leak.n_pulses == len(ONSETS)
    # The spike at the onset stays in the signal, and what it contributes is told.
    assert leak.peaks_v[0] > 1e-6
