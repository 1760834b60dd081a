"""The share of a test response that a decay's fit leaves, against the geometry of least squares."""

from __future__ import annotations

import numpy as np
import pytest

from pulsemend.signal.absorption import LATENCIES_S, Absorption, absorption, altered
from pulsemend.signal.decay import NOTHING_LATE, DecayFit, DecayShape, Late, fit_shape

TIMES = np.arange(400) / 5000.0
SINCE_S = 0.0142
LATE_S = np.array([0.275, 0.325, 0.375, 0.425, 0.475])


def _measured(tau_s: float, late: bool = True) -> tuple[Absorption, DecayShape]:
    shape = DecayShape("exponential", (2e-3, tau_s))
    points = Late(LATE_S, shape.at(LATE_S)) if late else NOTHING_LATE
    fit = fit_shape(TIMES, shape.at(TIMES), "exponential", points)
    return absorption(TIMES, shape.at(TIMES), points, fit, SINCE_S, seed=20), shape


def test_share_is_what_projection_says() -> None:
    """A response much smaller than the decay is absorbed by its projection on the curve's derivatives.

    Outside reference: weighted linear least squares on the hand-written derivatives of an exponential.
    """
    found, shape = _measured(0.02)
    a, tau = shape.values
    weights = np.r_[np.ones(400), np.full(5, 80.0)]
    both = np.r_[TIMES, LATE_S]
    slopes = np.stack([np.exp(-both / tau), a * both / tau**2 * np.exp(-both / tau), np.ones(405)], axis=1)
    long = np.arange(0.0, 0.4, 0.0002)
    curve = np.stack([np.exp(-long / tau), a * long / tau**2 * np.exp(-long / tau)], axis=1)
    for place, latency in enumerate(LATENCIES_S):
        shares = []
        for width in np.linspace(0.15, 0.30, 9) * latency:
            response = np.exp(-0.5 * ((both + SINCE_S - latency) / width) ** 2)
            moved = np.linalg.solve(slopes.T @ (weights[:, None] * slopes), slopes.T @ (weights * response))
            whole = np.exp(-0.5 * ((long + SINCE_S - latency) / width) ** 2)
            shares.append(1.0 - whole @ (curve @ moved[:2]) / (whole @ whole))
        assert min(shares) - 0.03 < found.median[place] < max(shares) + 0.03
        assert min(shares) - 0.05 < found.low[place] <= found.median[place] <= found.high[place]


def test_late_responses_are_spared_and_early_ones_are_not() -> None:
    found, _ = _measured(0.02)
    assert found.latencies_s.tolist() == list(LATENCIES_S)
    assert found.median[0] < 0.5
    assert (found.median[-4:] > 0.9).all()
    # A faster decay takes less of what comes after it.
    faster, _ = _measured(0.004)
    assert (faster.median[2:6] > found.median[2:6] + 0.1).all()


def test_the_same_seed_gives_the_same_numbers() -> None:
    first, second = _measured(0.01)[0], _measured(0.01)[0]
    np.testing.assert_array_equal(first.median, second.median)
    np.testing.assert_array_equal(first.low, second.low)


def test_latencies_within_the_gap_are_unknown() -> None:
    shape = DecayShape("exponential", (1e-3, 0.02))
    fit = fit_shape(TIMES, shape.at(TIMES), "exponential")
    found = absorption(TIMES, shape.at(TIMES), NOTHING_LATE, fit, 0.045, seed=1)
    assert np.isnan(found.median[:3]).all()
    assert np.isfinite(found.median[3:]).all()
    with pytest.raises(ValueError, match="without a shape"):
        absorption(TIMES, TIMES, NOTHING_LATE, DecayFit(None), 0.01, seed=1)


def test_altered_where_less_than_four_fifths_comes_back_or_as_much_too_much() -> None:
    latencies = np.array([0.02, 0.04, 0.06, 0.08])
    found = Absorption(latencies, np.array([np.nan, 0.6, 1.0, 1.4]), latencies, latencies)
    times = np.array([0.015, 0.04, 0.0495, 0.0505, 0.06, 0.0695, 0.0705, 0.3])
    assert altered(found, times).tolist() == [True, True, True, False, False, False, True, True]
    nothing = Absorption(latencies, np.full(4, np.nan), latencies, latencies)
    assert altered(nothing, times).all()
