"""The line between two clocks against lines that were drawn."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from pulsemend.trials.clock import fit_clock


def test_fifty_ppm_are_recovered_within_five() -> None:
    """facts T-6.9: a drift line of 50 ppm, here over 100 trials in 10 minutes with 0.5 ms of jitter."""
    rng = np.random.default_rng(69)
    recorded_s = np.sort(rng.uniform(0.0, 600.0, 100))
    log_s = recorded_s / (1.0 + 50e-6) + 4711.25 + rng.normal(0.0, 0.0005, 100)
    clock = fit_clock(log_s, recorded_s)
    assert clock.drift == pytest.approx(50e-6, abs=5e-6)
    assert clock.drift == pytest.approx(50e-6, abs=3 * clock.drift_se)


@pytest.mark.parametrize("n", [12, 100])
def test_standard_errors_are_honest(n: int) -> None:
    """300 draws: errors over standard errors are Student's t with n - 2 degrees of freedom."""
    drift_t, offset_t = [], []
    for seed in range(300):
        rng = np.random.default_rng([6, n, seed])
        drift, offset_s = rng.uniform(-200e-6, 200e-6), rng.uniform(-1e5, 1e5)
        log_s = offset_s + np.cumsum(rng.uniform(4.0, 6.0, n))
        recorded_s = (log_s - offset_s) * (1.0 + drift) + rng.normal(0.0, 0.001, n)
        clock = fit_clock(log_s, recorded_s)
        drift_t.append((clock.drift - drift) / clock.drift_se)
        true_offset_s = -offset_s + drift * (clock.centre_s - offset_s)
        offset_t.append((clock.offset_s - true_offset_s) / clock.offset_se_s)
    beyond_three = 2 * stats.t.sf(3.0, n - 2)
    # No more beyond three standard errors than a binomial count exceeds once in 1000 such tests.
    most = stats.binom.isf(0.001, 300, beyond_three)
    for found in (drift_t, offset_t):
        assert np.sum(np.abs(found) > 3.0) <= most
        assert stats.kstest(found, "t", args=(n - 2,)).pvalue > 0.001


def test_the_fit_equals_ordinary_regression_where_nothing_is_an_outlier() -> None:
    rng = np.random.default_rng(1)
    log_s = np.cumsum(rng.uniform(4.0, 6.0, 40))
    recorded_s = 3.0 + log_s * 1.0001 + rng.normal(0.0, 0.001, 40)
    clock = fit_clock(log_s, recorded_s)
    outside = stats.linregress(log_s - log_s.mean(), recorded_s)
    assert clock.n == 40
    assert clock.drift == pytest.approx(outside.slope - 1.0, abs=1e-12)
    assert clock.drift_se == pytest.approx(outside.stderr, rel=1e-6)
    assert clock.offset_s == pytest.approx(outside.intercept - log_s.mean(), abs=1e-9)
    assert clock.offset_se_s == pytest.approx(outside.intercept_stderr, rel=1e-6)


def test_outliers_do_not_move_the_line() -> None:
    rng = np.random.default_rng(2)
    log_s = np.cumsum(rng.uniform(4.0, 6.0, 60))
    recorded_s = log_s + rng.normal(0.0, 0.001, 60)
    recorded_s[::6] += rng.uniform(0.05, 3.0, 10)
    clock = fit_clock(log_s, recorded_s)
    assert clock.n == 50
    assert abs(clock.drift) < 3 * clock.drift_se
    assert clock.residual_sd_s == pytest.approx(0.001, rel=0.35)


def test_large_clock_readings_lose_no_digits() -> None:
    """Seconds since 1970 and an exact line: a float holds them to 0.2 microseconds."""
    recorded_s = np.arange(0.0, 500.0, 5.0)
    clock = fit_clock(1.7e9 + recorded_s / (1.0 + 20e-6), recorded_s)
    assert clock.drift == pytest.approx(20e-6, abs=1e-9)
    assert clock.residual_sd_s < 1e-6
    there_s = clock.recorded_s(1.7e9 + 100.0 / (1.0 + 20e-6))
    assert there_s == pytest.approx(100.0, abs=1e-6)


def test_a_clock_needs_three_different_times() -> None:
    with pytest.raises(ValueError, match="three pairs"):
        fit_clock(np.array([1.0, 1.0, 2.0]), np.array([0.0, 0.0, 1.0]))
