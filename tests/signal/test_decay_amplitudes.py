"""Amplitudes of decays on backgrounds whose covariance is known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import toeplitz

from pulsemend.signal.decay_amplitudes import (
    amplitude_weights,
    block_means,
    covariance_of,
    settled_amplitudes,
)

TIMES = np.arange(100) * 0.0008
SHAPE = 300.0 * np.exp(-TIMES / 0.02)
AUTOCOVARIANCE = 225.0 * np.exp(-np.arange(100) / 60.0)


def test_shape_and_offset_come_back_exactly() -> None:
    """Facts T-1.7: a step at the pulse is an offset of the side behind it and changes no amplitude."""
    for covariance in (None, covariance_of(AUTOCOVARIANCE)):
        weights, _ = amplitude_weights(SHAPE, covariance)
        stretches = np.array([1.0, 0.7, 2.0])[:, None] * SHAPE + np.array([0.0, 50.0, -4000.0])[:, None]
        np.testing.assert_allclose(stretches @ weights, [1.0, 0.7, 2.0], atol=1e-9)
        left = stretches - (stretches @ weights)[:, None] * SHAPE
        assert np.abs(left - left.mean(axis=1, keepdims=True)).max() < 1e-9


def test_white_weights_are_ordinary_least_squares() -> None:
    """Outside reference: numpy.linalg.lstsq."""
    x = np.random.default_rng(0).standard_normal((100, 5))
    design = np.stack([SHAPE, np.ones(100)], axis=1)
    weights, variance = amplitude_weights(SHAPE, None)
    np.testing.assert_allclose(weights @ x, np.linalg.lstsq(design, x, rcond=None)[0][0], rtol=1e-9)
    assert np.isnan(variance)


def test_variance_is_what_the_background_does_and_the_smallest_there_is() -> None:
    """Known truth: 4000 draws; Gauss-Markov: no unbiased linear weights do better."""
    factor = np.linalg.cholesky(toeplitz(AUTOCOVARIANCE))
    draws = np.random.default_rng(1).standard_normal((4000, 100)) @ factor.T
    weights, variance = amplitude_weights(SHAPE, covariance_of(AUTOCOVARIANCE))
    assert np.var(draws @ weights) == pytest.approx(variance, rel=0.08)
    ordinary, _ = amplitude_weights(SHAPE, None)
    assert np.var(draws @ ordinary) > 1.5 * variance


def test_covariance_is_positive_definite_whatever_is_measured() -> None:
    rng = np.random.default_rng(3)
    for autocovariance in (AUTOCOVARIANCE - 400.0, rng.standard_normal(100), np.zeros(100)):
        assert np.linalg.eigvalsh(covariance_of(autocovariance)).min() > 0.0
    # A constant in the autocovariance is the offset's, which every pulse has of its own.
    for a, b in ((AUTOCOVARIANCE, AUTOCOVARIANCE + 1000.0),):
        np.testing.assert_allclose(
            amplitude_weights(SHAPE, covariance_of(a))[0],
            amplitude_weights(SHAPE, covariance_of(b))[0],
            rtol=1e-6,
            atol=1e-12,
        )


def test_noise_is_not_taken_for_a_pulses_own_amplitude() -> None:
    rng = np.random.default_rng(5)
    noise_sd = 0.2
    for true_sd in (0.0, 0.2):
        true = 1.0 + true_sd * rng.standard_normal(2000)
        seen = true + noise_sd * rng.standard_normal(2000)
        settled, spread = settled_amplitudes(seen, np.full(2000, noise_sd**2))
        best = true_sd**2 * noise_sd**2 / max(true_sd**2 + noise_sd**2, 1e-12)
        assert np.mean((settled - true) ** 2) < 1.1 * best + 0.002
        # The noise's variance of 0.04 is known to 5 % from a robust estimate of 2000.
        assert abs(spread**2 - true_sd**2) < 0.006


def test_a_misfire_keeps_its_own_amplitude() -> None:
    rng = np.random.default_rng(6)
    seen = 1.0 + 0.05 * rng.standard_normal(100)
    seen[17] = 0.01
    settled, _ = settled_amplitudes(seen, np.full(100, 0.05**2))
    assert settled[17] == pytest.approx(0.01, abs=0.02)
    assert np.abs(np.delete(settled, 17) - 1.0).max() < 0.12


def test_pulses_that_tell_nothing_are_as_large_as_the_median() -> None:
    seen = np.array([1.2, np.nan, 0.8, 1.0, 5.0])
    settled, _ = settled_amplitudes(seen, np.array([1e-6, 1e-6, 1e-6, 1e-6, np.nan]))
    assert settled[1] == settled[4] == 1.0
    np.testing.assert_allclose(settled[[0, 2, 3]], [1.2, 0.8, 1.0], atol=1e-3)
    two, spread = settled_amplitudes(np.array([3.0, 0.1]), np.full(2, 1e-9))
    assert two.tolist() == [1.0, 1.0]
    assert spread == 0.0


def test_block_means_drop_what_is_left_over() -> None:
    np.testing.assert_array_equal(block_means(np.arange(11.0), 5), [2.0, 7.0])
    assert block_means(np.ones((7, 3)), 2).shape == (3, 3)
