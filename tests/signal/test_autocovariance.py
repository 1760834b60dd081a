"""The autocovariance estimated from pulse-free windows."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import signal as ss

from pulsemend.signal.autocovariance import AutocovarianceSum

FloatArray = NDArray[np.float64]

N_LAGS = 120
LAGS = np.arange(N_LAGS)


def two_processes(n_samples: int, seed: int = 1) -> FloatArray:
    """A first-order process and a rhythm in noise: the exact autocovariances are in `exact`."""
    rng = np.random.default_rng(seed)
    slow = ss.lfilter([np.sqrt(1 - 0.98**2)], [1.0, -0.98], rng.standard_normal(n_samples + 2000))[2000:]
    rhythm = np.sqrt(2) * np.cos(2 * np.pi * np.arange(n_samples) / 40.0 + 0.3)
    return np.column_stack([slow, rhythm + 0.1 * rng.standard_normal(n_samples)])


def exact() -> FloatArray:
    rows = np.array([0.98**LAGS, np.cos(2 * np.pi * LAGS / 40.0)])
    rows[1, 0] += 0.01
    return rows


def variogram(rows: FloatArray) -> FloatArray:
    return rows[:, :1] - rows


def estimate(*windows: NDArray[np.float64] | NDArray[np.float32]) -> FloatArray:
    collected = AutocovarianceSum(2, N_LAGS)
    for window in windows:
        collected.add(window)
    return collected.result()


def test_known_processes_are_recovered() -> None:
    # The first process has about 3000 independent stretches in this much signal: 4 % of its variance is two
    # standard errors. The rhythm is the same throughout.
    found = estimate(two_processes(300_000))
    np.testing.assert_allclose(variogram(found)[0], variogram(exact())[0], rtol=0, atol=0.04)
    np.testing.assert_allclose(found[1], exact()[1], rtol=0, atol=0.005)


def test_estimate_is_unbiased_over_the_lags() -> None:
    # Mean over many short recordings: what is left of the error is bias. 4 standard errors, and 1 %.
    found = np.array([variogram(estimate(two_processes(10_000, seed)))[0] for seed in range(60)])
    error = found.mean(axis=0) - variogram(exact())[0]
    bound = 4 * found.std(axis=0) / np.sqrt(60) + 0.01 * variogram(exact())[0]
    assert (np.abs(error) <= bound).all(), error / bound


def test_every_estimate_is_a_possible_autocovariance() -> None:
    # No combination of samples may get a negative variance: all eigenvalues of its matrix are positive.
    rows = estimate(two_processes(5_000), two_processes(700, 2))
    for row in rows:
        eigenvalues = np.linalg.eigvalsh(row[np.abs(LAGS[:, None] - LAGS)])
        assert eigenvalues.min() > -1e-6 * eigenvalues.max()


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_offset_of_1_mv_changes_nothing(dtype: type) -> None:
    x = two_processes(40_000) * 10e-6
    plain, shifted = estimate(x.astype(dtype)), estimate((x + 1e-3).astype(dtype))
    np.testing.assert_allclose(shifted, plain, rtol=0, atol=1e-4 * plain[0, 0])


def test_slow_drift_of_100_uv_hardly_shows() -> None:
    # 10 uV of signal at 1 kHz, 100 uV of drift with a period of 20 s: over 10 ms the drift moves by 0.3 uV.
    x = two_processes(120_000) * 10.0
    drift = 100.0 * np.sin(2 * np.pi * np.arange(120_000) / 20_000)[:, None]
    plain, drifting = variogram(estimate(x)), variogram(estimate(x + drift))
    np.testing.assert_allclose(drifting[0, 1:11], plain[0, 1:11], rtol=0.01)
    true_part = 100.0**2 / 2 * (1 - np.cos(2 * np.pi * LAGS / 20_000))
    assert (np.abs(drifting - plain)[0] <= 10 * true_part + 0.01 * plain[0]).all()


def test_single_precision_is_enough() -> None:
    x = two_processes(40_000) * 10e-6
    double = estimate(x)
    np.testing.assert_allclose(estimate(x.astype(np.float32)), double, rtol=0, atol=1e-5 * double[0, 0])


def test_windows_add_up_and_short_ones_are_passed_over() -> None:
    x, y = two_processes(2_500), two_processes(2_000, 2)
    together = estimate(x, y, x[: 2 * N_LAGS - 1])
    assert np.isfinite(together).all()
    only_short = AutocovarianceSum(2, N_LAGS)
    only_short.add(x[: 2 * N_LAGS - 1])
    assert only_short.n_samples == 0
    with pytest.raises(ValueError, match="no window"):
        only_short.result()
    reversed_order = estimate(y, x)
    np.testing.assert_allclose(reversed_order, together, rtol=0, atol=1e-12)


def test_many_channels_are_kept_apart() -> None:
    x = two_processes(5_000)
    many = AutocovarianceSum(20, N_LAGS)
    many.add(np.tile(x, 10))
    np.testing.assert_allclose(many.result(), np.tile(estimate(x), (10, 1)), rtol=0, atol=1e-7)
