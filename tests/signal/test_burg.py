"""Autoregressive models: facts section 2.10."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import lfilter

from pulsemend.signal.burg import burg, predict

ONE_TO_FIVE = [1.0, 2.0, 3.0, 4.0, 5.0]
SIX = [4.684, 7.247, 8.423, 8.650, 8.640, 8.392]


@pytest.mark.parametrize(
    ("x", "coefficients", "power"),
    [
        # facts T-2.23, exact fractions
        (ONE_TO_FIVE, [1, -20 / 21], 451 / 441),
        (ONE_TO_FIVE, [1, -315 / 169, 647 / 676], 39237 / 456976),
        # facts T-2.24: Orfanidis, Optimum Signal Processing (sample set a value from memory)
        (SIX, [1, -1.756860472467, 0.779344992821], 0.600312514273),
        (SIX, [1, -2.126517996210, 1.612655911345, -0.474318212279], None),
    ],
)
def test_worked_examples(x: list[float], coefficients: list[float], power: float | None) -> None:
    # A second channel must not disturb the first.
    two = np.column_stack([x, np.cos(np.arange(len(x)))])
    fitted, left = burg(two, len(coefficients) - 1)
    np.testing.assert_allclose(fitted[:, 0], coefficients, rtol=0, atol=1e-10)
    if power is not None:
        assert left[0] == pytest.approx(power, abs=1e-10)


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 10_000), n_samples=st.integers(3, 80), power=st.integers(-9, 3))
def test_reflections_stay_within_one(seed: int, n_samples: int, power: int) -> None:
    # facts T-2.25, seen from outside: the last coefficient of each order is its reflection, no root leaves
    # the unit circle and the power never rises.
    rng = np.random.default_rng(seed)
    x = np.cumsum(rng.standard_normal((n_samples, 1)), axis=0) * 10.0**power
    before = np.inf
    for order in range(min(n_samples, 12)):
        coefficients, left = burg(x, order)
        assert np.isfinite(coefficients).all()
        assert order == 0 or abs(coefficients[order, 0]) <= 1.0
        assert 0.0 <= left[0] <= before
        before = left[0]
        assert order == 0 or np.abs(np.roots(coefficients[:, 0])).max() <= 1.0 + 1e-6


def test_process_is_recovered() -> None:
    # facts T-2.26
    rng = np.random.default_rng(5)
    x = lfilter([1.0], [1.0, -1.7, 0.72], rng.standard_normal(20_000))[1000:, None]
    coefficients, power = burg(x, 2)
    np.testing.assert_allclose(coefficients[:, 0], [1.0, -1.7, 0.72], rtol=0, atol=0.02)
    assert power[0] == pytest.approx(1.0, abs=0.03)


@pytest.mark.parametrize(("order", "within"), [(20, 0.03), (100, 0.01)])
def test_two_sines_are_continued(order: int, within: float) -> None:
    # facts T-1.4
    assert _error_20_ms_ahead(order) < within


def test_too_low_an_order_fails_on_two_sines() -> None:
    # facts T-1.4, the negative control
    assert _error_20_ms_ahead(4) > 0.1


def test_silence_and_constants_give_no_numbers_that_are_none() -> None:
    x = np.column_stack([np.zeros(50), np.full(50, 1e-300), np.full(50, 3.0)])
    coefficients, power = burg(x, 10)
    assert np.isfinite(coefficients).all()
    assert np.isfinite(power).all()
    np.testing.assert_array_equal(predict(coefficients, x, 30)[:, 0], np.zeros(30))


def test_order_beyond_the_samples_is_refused() -> None:
    with pytest.raises(ValueError, match="order"):
        burg(np.ones((5, 1)), 5)


def _error_20_ms_ahead(order: int) -> float:
    rng = np.random.default_rng(2)
    t = np.arange(1020) / 1000.0
    clean = np.sin(2 * np.pi * 10 * t) + 0.5 * np.sin(2 * np.pi * 23 * t + 1.0)
    known = (clean + 1e-3 * rng.standard_normal(t.size))[:1000, None]
    coefficients, _ = burg(known, order)
    return float(np.abs(predict(coefficients, known, 20)[:, 0] - clean[1000:]).max())
