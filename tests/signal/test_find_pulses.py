"""The onset of a pulse, and pulses that nobody marked."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import signal as ss

from pulsemend.signal.find import (
    PULSE_LIKE_FACTOR,
    align_onset,
    common_to_many,
    companions,
    events_of,
    local_steps,
    steep_samples,
    steepness,
    usual_steepness,
    usual_steps,
)

FloatArray = NDArray[np.float64]

N_CHANNELS = 31


def background(rate_hz: float, seconds: float, seed: int) -> FloatArray:
    """1/f noise of 10 uV, alpha of 5 to 15 uV, 0.3 uV of amplifier noise; (samples, channels), uV."""
    rng = np.random.default_rng(seed)
    n = int(seconds * rate_hz)
    f = np.fft.rfftfreq(n, 1 / rate_hz)
    amplitude = np.where(f > 0, 1 / np.sqrt(np.maximum(f, 0.5)), 0)[:, None]
    spectrum = amplitude * (
        rng.standard_normal((f.size, N_CHANNELS)) + 1j * rng.standard_normal((f.size, N_CHANNELS))
    )
    x = np.fft.irfft(spectrum, n, axis=0)
    x *= 10.0 / x.std()
    alpha = np.sin(2 * np.pi * 10 * np.arange(n) / rate_hz)[:, None] * rng.uniform(5, 15, N_CHANNELS)
    return np.asarray(x + alpha + 0.3 * rng.standard_normal(x.shape))


def with_pulse(x: FloatArray, onset: int, size_uv: float, rate_hz: float) -> FloatArray:
    """A biphasic pulse of 0.4 ms, with a decay of 10 ms, of either sign, sizes about the median given."""
    rng = np.random.default_rng(onset)
    t = np.arange(len(x) - onset) / rate_hz
    shape = np.where(t < 0.0002, 1.0, np.where(t < 0.0004, -0.8, 0.0)) + 0.1 * np.exp(-t / 0.010)
    y = x.copy()
    y[onset:] += (
        size_uv * shape[:, None] * rng.choice([-1, 1], N_CHANNELS) * rng.lognormal(0, 0.7, N_CHANNELS)
    )
    return y


def many(x: NDArray[Any], usual: float, spacing: int = 1) -> NDArray[np.intp]:
    """Events of steps that are common to half of the channels."""
    at, counts, strengths = steep_samples(x, PULSE_LIKE_FACTOR * usual)
    keep = common_to_many(counts, x.shape[1])
    return events_of(at[keep], strengths[keep], spacing)[0]


def test_steepness_is_the_median_step() -> None:
    x = np.array([[0.0, 0.0, 0.0], [1.0, -2.0, 9.0], [1.0, 2.0, 9.0]])
    np.testing.assert_array_equal(steepness(x), [2.0, 0.0])


@pytest.mark.parametrize("rate_hz", [1000.0, 5000.0, 25_000.0])
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_onset_is_the_first_sample_of_the_pulse(rate_hz: float, dtype: type) -> None:
    # design 4.2: within 10 ms of the marker, the first step of at least a quarter of the largest
    quiet = background(rate_hz, 2.0, 3)
    usual = usual_steepness([quiet])
    half = round(0.010 * rate_hz)
    middle = len(quiet) // 2
    for late in (-half, -3, 0, 1, half):
        x = with_pulse(quiet, middle + late, 800.0, rate_hz)
        searched: NDArray[Any] = x[middle - half - 1 : middle + half + 1].astype(dtype)
        assert align_onset(searched, usual) == half + late


def test_onset_counts_from_the_first_sample_searched() -> None:
    x = np.zeros((6, 3))
    x[1:] = 100.0
    assert align_onset(x, 1.0) == 0
    x[:3] = 30.0
    x[0] = 0.0
    assert align_onset(x, 1.0) == 0  # 30 is at least a quarter of the 70 that follow
    x[:3] = 10.0
    x[0] = 0.0
    assert align_onset(x, 1.0) == 2  # 10 is less than a quarter of 90


def test_no_pulse_at_the_marker() -> None:
    quiet = background(5000.0, 4.0, 5)
    usual = usual_steepness([quiet])
    assert all(align_onset(quiet[start : start + 102], usual) is None for start in range(0, 19_000, 500))
    x = np.zeros((20, 3))
    assert align_onset(x, 0.0) is None
    x[10:] = 5.0
    assert align_onset(x, 1.0) is None  # not above 5 times the usual
    x[10:] = 5.1
    assert align_onset(x, 1.0) == 9
    assert align_onset(x, 1.0, at_least=6.0) is None


def test_pulse_in_one_channel_is_no_pulse() -> None:
    quiet = background(5000.0, 1.0, 5)
    usual = usual_steepness([quiet])
    quiet[2500:, 4] += 3000.0
    assert align_onset(quiet[2400:2600], usual) is None


def test_usual_steepness_is_not_moved_by_a_stray_pulse() -> None:
    quiet = background(5000.0, 4.0, 6)
    usual = usual_steepness([quiet])
    assert usual_steepness([with_pulse(quiet, 9000, 5000.0, 5000.0)]) == pytest.approx(usual, rel=0.02)
    assert usual_steepness([quiet[:7000], quiet[7000:], quiet[:1]]) == pytest.approx(usual, rel=1e-3)
    with pytest.raises(ValueError, match="two samples"):
        usual_steepness([quiet[:1]])


def test_coarse_resolution_does_not_make_every_step_unusual() -> None:
    coarse = np.round(background(25_000.0, 1.0, 6) / 5.0) * 5.0
    usual = usual_steepness([coarse])
    assert usual >= 2.5
    assert many(coarse, usual).size == 0


@pytest.mark.parametrize("rate_hz", [1000.0, 5000.0, 25_000.0])
@pytest.mark.parametrize("size_uv", [300.0, 5000.0])
def test_unmarked_pulses_are_noticed(rate_hz: float, size_uv: float) -> None:
    x = background(rate_hz, 2.0, 7)
    usual = usual_steepness([x])
    onsets = [round(s * rate_hz) for s in (0.2, 0.9, 1.6)]
    for onset in onsets:
        x = with_pulse(x, onset, size_uv, rate_hz)
    found = many(x, usual, spacing=round(0.1 * rate_hz))
    np.testing.assert_array_equal(found, onsets)


def test_blocks_that_overlap_by_one_sample_find_the_same() -> None:
    x = background(1000.0, 4.0, 8)
    usual = usual_steepness([x])
    for onset in (500, 1000, 1999, 2000, 2001, 3500):
        x = with_pulse(x, onset, 2000.0, 1000.0)
    whole = many(x, usual)
    for block in (1000, 333, 7):
        cut = [
            max(0, start - 1) + n
            for start in range(0, len(x), block)
            for n in many(x[max(0, start - 1) : start + block], usual)
        ]
        np.testing.assert_array_equal(cut, whole)


@pytest.mark.parametrize("rate_hz", [1000.0, 5000.0])
def test_what_looks_wild_but_is_no_pulse(rate_hz: float) -> None:
    rng = np.random.default_rng(9)
    x = background(rate_hz, 19.0, 9)
    usual = usual_steepness([x])
    t = np.arange(len(x)) / rate_hz
    # Blinks: 400 uV at the front, 60 uV at the back, half a period of 4 Hz.
    for at in (1.0, 4.0, 9.0):
        blink = np.where((t > at) & (t < at + 0.25), np.sin(np.pi * (t - at) / 0.25) ** 2, 0.0)
        x += blink[:, None] * np.linspace(400.0, 60.0, N_CHANNELS)
    # Strong alpha in all channels.
    x += 80.0 * np.sin(2 * np.pi * 11 * t)[:, None] * ((t > 5) & (t < 7))[:, None]
    # Pops of single electrodes and of a pair.
    x[t > 8.0, 3] += 3000.0
    x[t > 8.5, 5:7] -= 8000.0
    # Muscle: 20 to 200 Hz, 100 uV at both temples (a third of the channels), 30 uV elsewhere.
    band = ss.butter(3, [20.0, 200.0], "band", fs=rate_hz, output="sos")
    muscle = np.asarray(ss.sosfilt(band, rng.standard_normal(x.shape), axis=0))
    muscle /= muscle.std(axis=0)
    for at in (11.0, 14.0):
        burst = ((t > at) & (t < at + 1.0))[:, None] * np.where(np.arange(N_CHANNELS) % 3 == 0, 100.0, 30.0)
        x += muscle * burst
    # A movement: all channels by 300 uV within 100 ms.
    x += 300.0 * np.clip((t - 17.0) / 0.1, 0, 1)[:, None]
    assert many(x, usual).size == 0


def test_at_least_three_channels_must_agree() -> None:
    x: NDArray[Any] = np.zeros((50, 2))
    x[20:] = 1000.0
    assert many(x, 1.0).size == 0
    assert many(np.repeat(x, 2, axis=1)[:, :3], 1.0).tolist() == [20]


def test_usual_steps_of_dead_and_loud_channels() -> None:
    x = background(5000.0, 1.0, 4)
    usual = usual_steepness([x])
    x[:, 0] = 7.0
    x[:, 1] *= 40.0
    steps = usual_steps([x[:2500], x[2500:]])
    assert steps[0] == pytest.approx(usual, rel=0.05)
    assert steps[1] > 20.0 * usual
    assert steps[2:] == pytest.approx(usual, rel=0.5)


def test_local_steps_ignore_a_train() -> None:
    quiet = background(5000.0, 0.1, 4)
    train = quiet.copy()
    for onset in (100, 200, 300, 400):
        train = with_pulse(train, onset, 3000.0, 5000.0)
    np.testing.assert_allclose(local_steps(train), local_steps(quiet), rtol=2.0)
    assert np.all(local_steps(2.0 * quiet) == 2.0 * local_steps(quiet))


def test_steps_near_each_other_are_one_event() -> None:
    at = np.array([10, 14, 18, 60, 69, 79])
    starts, strengths = events_of(at, np.array([1.0, 5.0, 2.0, 1.0, 2.0, 9.0]), 10)
    assert starts.tolist() == [10, 60, 79]
    assert strengths.tolist() == [5.0, 2.0, 9.0]
    assert events_of(at[:0], np.zeros(0), 10)[0].size == 0


def test_companions_are_weak_and_locked() -> None:
    rng = np.random.default_rng(1)
    pulses = np.cumsum(rng.integers(4000, 6000, 30))
    strengths = rng.uniform(80.0, 100.0, 30)
    recharge = pulses[2:] + 250 + rng.integers(-2, 3, 28)
    before = pulses[1:] - 100
    stray = pulses[:3] + np.array([700, 1300, 3000])
    events = np.concatenate([pulses, recharge, before, stray])
    all_strengths = np.concatenate([strengths, np.full(28 + 29 + 3, 10.0)])
    order = np.argsort(events)
    found = events[order][companions(events[order], all_strengths[order], 1000.0)]
    assert sorted(found) == sorted([*recharge, *before])


def test_pairs_are_no_companions() -> None:
    rng = np.random.default_rng(2)
    first = np.cumsum(rng.integers(4000, 6000, 30))
    events = np.sort(np.concatenate([first, first + 100]))
    strengths = np.tile([60.0, 100.0], 30)
    assert not companions(events, strengths, 1000.0).any()
    # Weaker pulses at latencies of their own are pulses, too.
    weak = np.sort(np.concatenate([first, first + rng.integers(500, 3500, 30)]))
    sizes = np.where(np.isin(weak, first), 100.0, 10.0)
    assert not companions(weak, sizes, 1000.0).any()
