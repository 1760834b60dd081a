"""Spectra against known truth and against scipy's own Welch estimate."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.signal

from pulsemend.signal.spectrum import WelchSum, choose_size, segment_starts


def spectrum_of(x: np.ndarray, size: int, rate_hz: float, highest_hz: float = np.inf) -> WelchSum:
    total = WelchSum(size, rate_hz, highest_hz)
    for start in segment_starts(0, len(x), size):
        total.add(x[start : start + size])
    return total


@pytest.mark.parametrize(("size", "rate_hz"), [(500, 250.0), (501, 1000.0), (2048, 5000.0)])
def test_agrees_with_scipy(size: int, rate_hz: float) -> None:
    """scipy.signal.welch with its usual raised cosine and half overlap."""
    x = np.random.default_rng(3).standard_normal((20 * size + 77, 11)) + np.arange(11) * 1e3
    ours = spectrum_of(x, size, rate_hz)
    frequency_hz, theirs = scipy.signal.welch(x, rate_hz, nperseg=size, noverlap=size // 2, axis=0)
    np.testing.assert_allclose(ours.frequency_hz, frequency_hz, rtol=1e-13)
    np.testing.assert_allclose(ours.density(), theirs.T, rtol=1e-9, atol=1e-18)


def test_white_noise_has_the_density_of_its_variance() -> None:
    """Variance s^2 spread over 0 to half the rate: s^2 / (rate / 2). 600 segments: 2 % is 5 deviations."""
    rate_hz, spread = 400.0, 3.0
    x = spread * np.random.default_rng(5).standard_normal((300 * 800, 2))
    total = spectrum_of(x, 800, rate_hz)
    middle = total.density()[:, 5:-5].mean(axis=1)
    np.testing.assert_allclose(middle, spread**2 / (rate_hz / 2), rtol=0.02)


def test_a_sine_keeps_its_power_and_its_frequency() -> None:
    rate_hz, size = 1000.0, 2000
    t = np.arange(20_000) / rate_hz
    total = spectrum_of((2.0 * np.sin(2 * np.pi * 10 * t))[:, None], size, rate_hz)
    density = total.density()[0]
    assert total.frequency_hz[np.argmax(density)] == 10.0
    # A sine of amplitude 2 has power 2; integrated over frequency nothing of it is lost.
    assert density.sum() * rate_hz / size == pytest.approx(2.0, rel=1e-9)


def test_frequencies_above_the_highest_are_left_out() -> None:
    x = np.random.default_rng(1).standard_normal((4000, 3))
    whole, part = spectrum_of(x, 1000, 1000.0), spectrum_of(x, 1000, 1000.0, 120.0)
    assert part.frequency_hz[-1] == 120.0
    np.testing.assert_array_equal(part.density(), whole.density()[:, :121])


def test_an_offset_changes_nothing() -> None:
    x = np.random.default_rng(2).standard_normal((1000, 1))
    assert spectrum_of(x + 1e6, 500, 500.0).density() == pytest.approx(
        spectrum_of(x, 500, 500.0).density(), rel=1e-6
    )


def test_refuses_what_is_no_segment() -> None:
    with pytest.raises(ValueError, match="two samples"):
        WelchSum(1, 100.0)
    total = WelchSum(10, 100.0)
    with pytest.raises(ValueError, match="no segment"):
        total.density()
    with pytest.raises(ValueError, match="received 9"):
        total.add(np.zeros((9, 2)))


@pytest.mark.parametrize(
    ("lengths", "expected"),
    [
        ([10_000], 2000),
        ([3000], 1000),
        ([2000], 1000),
        ([1900] * 5, 1000),
        ([2400] * 5, 2000),
        ([600], 250),
        ([300], 250),
        ([249, 100], None),
        ([], None),
        ([2000] * 3 + [900] * 20, 500),
    ],
)
def test_the_finest_size_that_uses_most_of_the_signal(lengths: list[int], expected: int | None) -> None:
    assert choose_size(lengths, (2000, 1000, 500, 250)) == expected


def test_segments_overlap_by_half_and_stay_inside() -> None:
    assert list(segment_starts(100, 200, 40)) == [100, 120, 140, 160]
    assert list(segment_starts(0, 12, 5)) == [0, 3, 6]
    assert list(segment_starts(0, 39, 40)) == []
