"""Each stretch between pulses filtered alone: against known truth, and against itself without pulses."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.engine.chain import Chain
from pulsemend.engine.fit import fit
from pulsemend.engine.leak import measure_leak
from pulsemend.engine.setup import bind
from pulsemend.engine.splits import Stretch, overlapping, stretches
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import Filter, Pulses
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import AcrossPulses, Decay, Fill
from pulsemend.progress import finish
from support.engine_cases import STEP_V, ArrayRecording, coloured, make_chain, plan, with_pulses

RATE_HZ = 2000.0
SPLIT = Filter(rate_hz=500.0, across_pulses=AcrossPulses.SPLIT)
FILLED = replace(SPLIT, across_pulses=AcrossPulses.FILLED)
ONSETS = [9000, 17001, 26002, 34003, 43004]
N_SAMPLES = 52000


def test_stretches_and_gaps_cover_a_segment() -> None:
    found = stretches([(996, 1029), (5000, 5030)], (0, 2000), Fraction(1, 4), 500.0)
    assert found == [
        Stretch(0, 249, 0, 258),
        Stretch(258, 1250, 249, 1258),
        Stretch(1258, 2000, 1250, 2000),
    ]
    weights = np.zeros(2000)
    for part in found:
        weights += part.weights(0, 2000)
    np.testing.assert_allclose(weights, 1.0, rtol=1e-12)
    assert [place for place, _ in overlapping(found, 100, 249)] == [0]
    assert [place for place, _ in overlapping(found, 250, 258)] == [0, 1]
    assert [place for place, _ in overlapping(found, 258, 1250)] == [1]


def test_gaps_near_each_other_or_an_end_make_no_stretch() -> None:
    # 20 ms between two gaps, and 50 ms from the start: nothing to filter alone.
    found = stretches([(100, 130), (5000, 5030), (5070, 5100)], (0, 2000), Fraction(1, 4), 500.0)
    assert [(part.start, part.stop) for part in found] == [(0, 1250), (1275, 2000)]


def test_without_pulses_nothing_is_different() -> None:
    found = ArrayRecording(coloured(3, 12000, RATE_HZ, seed=2), RATE_HZ)
    split, filled = (make_chain(found, plan(filter=one)) for one in (SPLIT, FILLED))
    np.testing.assert_array_equal(split.stretch(0, 0, 3000), filled.stretch(0, 0, 3000))


def test_any_stretch_at_any_time_is_the_same_to_the_last_bit() -> None:
    found = with_pulses(coloured(4, N_SAMPLES, RATE_HZ, seed=7), RATE_HZ, ONSETS)
    setup = bind(found.facts, plan(filter=SPLIT), NO_MARKS)
    estimates = finish(fit(found, setup))
    whole = Chain(found, setup, estimates).stretch(0, 0, N_SAMPLES // 4)
    rng = np.random.default_rng(3)
    pieces = Chain(found, setup, estimates)
    for _ in range(12):
        start = int(rng.integers(0, N_SAMPLES // 4 - 10))
        stop = start + int(rng.integers(1, 1200))
        stop = min(stop, N_SAMPLES // 4)
        np.testing.assert_array_equal(pieces.stretch(0, start, stop), whole[:, start:stop])


def test_far_from_pulses_split_and_filled_agree() -> None:
    found = with_pulses(coloured(4, N_SAMPLES, RATE_HZ, seed=8), RATE_HZ, [26000])
    split, filled = (make_chain(found, plan(filter=one)) for one in (SPLIT, FILLED))
    reach = round(split.setup.replaced_reach_s * 500.0) + 10
    before = slice(0, 6500 - reach)
    np.testing.assert_allclose(
        split.stretch(0, 0, 13000)[:, before], filled.stretch(0, 0, 13000)[:, before], atol=2e-8
    )


def steps_and_decays(tau_s: float) -> NDArray[np.float64]:
    """Two channels: a decay of 1 mV and a step of 50 uV that stays, at every pulse."""
    x = np.zeros((2, N_SAMPLES))
    t = np.arange(N_SAMPLES) / RATE_HZ
    for number, onset in enumerate(ONSETS):
        after = t[: N_SAMPLES - onset]
        x[:, onset:] += (50e-6 * (-1) ** number) / STEP_V
        x[:, onset:] += np.array([[1e-3], [0.4e-3]]) / STEP_V * np.exp(-after / tau_s)
        x[:, onset] += 5e4
    return np.rint(x)


@pytest.mark.parametrize("fill", [Fill.LINE, Fill.COVARIANCE])
def test_with_decay_and_step_removed_hardly_anything_leaks_backwards(fill: Fill) -> None:
    # Issue 5, item 5: below 0.5 uV in epochs that end 10 ms before the pulse.
    rng = np.random.default_rng(11)
    noise = 1e-6 * rng.standard_normal((2, N_SAMPLES)) / STEP_V
    found = ArrayRecording(
        np.rint(steps_and_decays(0.020) + noise), RATE_HZ, tuple(Marker(float(at), "pulse") for at in ONSETS)
    )
    pulses = Pulses(window_ms=(-2.0, 14.0), fill=fill, decay=Decay.EXPONENTIAL)
    worst = {}
    for name, way in (("split", SPLIT), ("filled", FILLED)):
        chain = make_chain(found, plan(pulses=pulses, filter=way, reference="as recorded"))
        estimates = finish(fit(found, chain.setup))
        cuts = [chain.cut(float(onset), -0.51, 251) for onset in ONSETS[1:]]
        leak = finish(measure_leak(chain, estimates, cuts))
        worst[name] = leak.peaks_v.max()
        # The epochs themselves: what is left of the slow steps of earlier pulses, and the noise.
        means = [np.abs(np.median(chain.samples(cut)[:, -50:], axis=1)).max() for cut in cuts]
        worst[f"{name} epochs"] = max(means)
    assert worst["split"] < 0.5e-6
    assert worst["split epochs"] < 0.5e-6
    assert worst["filled epochs"] > 5e-6
