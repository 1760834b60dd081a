"""Measures of a repair's error: tones and distributions whose answers are known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from pulsemend.signal.repair_error import (
    BANDS,
    Band,
    Interval,
    amplitude_error,
    draw_counts,
    earliest_below,
    phase_error,
    quantiles,
    ratio_of_sums,
    rhythm_weights,
)

TIMES_S = np.arange(-300, 500) / 1000.0


@pytest.mark.parametrize("band", BANDS)
def test_a_tone_gives_its_amplitude_and_its_phase_at_the_latency(band: Band) -> None:
    frequency_hz = band.frequency_hz
    for latency_s in (0.0, 0.1, 0.2):
        tone = 7.0 * np.cos(2 * np.pi * frequency_hz * (TIMES_S - latency_s) + 0.6) + 1000.0
        found = tone @ rhythm_weights(TIMES_S, frequency_hz, latency_s)
        # The window's own spectrum at the negative frequency and at zero is below 2 % with three radians.
        assert abs(found) == pytest.approx(7.0, rel=0.03)
        assert np.angle(found) == pytest.approx(0.6, abs=0.03)


def test_rhythms_are_told_apart() -> None:
    for band in BANDS:
        for other in BANDS:
            tone = np.cos(2 * np.pi * other.frequency_hz * TIMES_S)
            size = abs(tone @ rhythm_weights(TIMES_S, band.frequency_hz, 0.1))
            # Closed form: a Gaussian of f / 3 hertz around the band's frequency.
            distance = 3.0 * (other.frequency_hz - band.frequency_hz) / band.frequency_hz
            assert size == pytest.approx(np.exp(-0.5 * distance**2), abs=0.03)


def test_errors_of_amplitude_and_phase() -> None:
    true = np.array([[1.0], [2.0], [3.0], [0.5]], np.complex64)
    repaired = true * np.array([[1.5], [1j], [-1.0], [4.0]])
    np.testing.assert_allclose(amplitude_error(true, repaired)[:, 0], [1 / 3, 0.0, 0.0, 1.0], rtol=1e-6)
    # The last one is a third of the median: too small to have a phase.
    np.testing.assert_allclose(phase_error(true, repaired)[:, 0], [0.0, np.pi / 2, np.pi, np.nan], rtol=1e-6)
    silent = np.zeros((3, 1), np.complex64)
    assert np.isnan(amplitude_error(silent, silent)).all()
    assert np.isnan(phase_error(silent, silent)).all()


def test_quantiles_are_those_of_numpy_and_their_intervals_cover_the_truth() -> None:
    rng = np.random.default_rng(1)
    hits = np.zeros(2)
    for trial in range(100):
        values = rng.standard_normal((120, 2))
        found = quantiles(values, (0.5, 0.95), draw_counts(120, 200, trial))
        for place, (one, share) in enumerate(zip(found, (0.5, 0.95), strict=True)):
            assert one.value == np.quantile(values, share)
            hits[place] += one.low <= stats.norm.ppf(share) <= one.high
    # 95 % each, with room for 100 trials and for what a bootstrap of quantiles is known to miss.
    assert (hits >= 85).all()
    assert (hits <= 100).all()


def test_channels_of_a_gap_are_drawn_together() -> None:
    rng = np.random.default_rng(2)
    alone = rng.standard_normal((100, 1))
    counts = draw_counts(100, 400, 3)
    one = quantiles(alone, (0.5,), counts)[0]
    # The same values in ten channels tell nothing more.
    ten = quantiles(np.repeat(alone, 10, axis=1), (0.5,), counts)[0]
    assert ten.high - ten.low == pytest.approx(one.high - one.low, rel=0.1)
    # Different values do.
    other = quantiles(rng.standard_normal((100, 10)), (0.5,), counts)[0]
    assert other.high - other.low < 0.6 * (one.high - one.low)


def test_what_is_not_known_is_left_out() -> None:
    counts = draw_counts(4, 50, 0)
    values = np.array([[1.0, np.nan], [2.0, np.nan], [3.0, np.nan], [np.nan, np.nan]])
    assert quantiles(values, (0.5,), counts)[0].value == 2.0
    assert np.isnan(quantiles(np.full((4, 2), np.nan), (0.5,), counts)[0].value)


def test_ratios_of_sums() -> None:
    counts = draw_counts(50, 300, 5)
    above = np.arange(50.0)
    found = ratio_of_sums(above, np.full(50, 2.0), counts)
    assert found.value == pytest.approx(24.5 / 2)
    # Standard error of a mean, halved.
    assert (found.high - found.low) / 2 == pytest.approx(1.96 * above.std() / np.sqrt(50) / 2, rel=0.15)
    assert np.isnan(ratio_of_sums(above, np.zeros(50), counts).value)


def test_draws_keep_the_number_of_gaps_and_rest_on_the_seed() -> None:
    counts = draw_counts(30, 20, 1)
    assert (counts.sum(axis=1) == 30).all()
    np.testing.assert_array_equal(counts, draw_counts(30, 20, 1))
    assert (counts != draw_counts(30, 20, 2)).any()


def test_the_earliest_place_below_a_limit_is_that_of_staying_there() -> None:
    assert earliest_below(np.array([3.0, 0.5, 2.0, 0.5, 0.4]), 1.0) == 3
    assert earliest_below(np.array([0.5, 0.4]), 1.0) == 0
    assert earliest_below(np.array([0.5, 1.0]), 1.0) is None
    assert earliest_below(np.array([0.5, np.nan]), 1.0) is None
    assert earliest_below(np.array([]), 1.0) is None


def test_intervals_overlap_or_do_not() -> None:
    one, two, three = Interval(1, 0, 2), Interval(3, 2, 4), Interval(6, 5, 7)
    assert one.overlaps(two)
    assert two.overlaps(one)
    assert not one.overlaps(three)
    assert not three.overlaps(one)
