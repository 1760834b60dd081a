"""Weights of the conditional mean with unknown mean."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.signal.kriging import flank_knots, kriging_weights, thinned_distances

LAGS = np.arange(400.0)
RHYTHM = 100.0 * np.exp(-LAGS / 60.0) + 40.0 * np.exp(-LAGS / 300.0) * np.cos(LAGS / 20.0)
RHYTHM[0] += 0.1


def bordered_system(
    autocovariance: NDArray[np.float64], knots: NDArray[np.intp], size: int
) -> NDArray[np.float64]:
    """Compute the same weights by the textbook's system, bordered by the constraint."""
    n = len(knots)
    system = np.ones((n + 1, n + 1))
    system[:n, :n] = autocovariance[np.abs(knots[:, None] - knots)]
    system[-1, -1] = 0.0
    right = np.ones((n + 1, size))
    right[:n] = autocovariance[np.abs(knots[:, None] - np.arange(size))]
    return np.asarray(np.linalg.solve(system, right)[:n].T)


@pytest.mark.parametrize(("left", "right"), [(30, 30), (30, 5), (0, 30), (30, 0), (1, 1)])
def test_weights_solve_the_textbook_system(left: int, right: int) -> None:
    knots = flank_knots(20, left, right, 400)
    weights = kriging_weights(RHYTHM, knots, 20)
    np.testing.assert_allclose(weights.sum(axis=1), 1.0, rtol=0, atol=1e-12)
    np.testing.assert_allclose(weights, bordered_system(RHYTHM, knots, 20), rtol=0, atol=0.02)
    # The nugget of 1e-5 is all that differs.
    noisier = RHYTHM.copy()
    noisier[0] += 1e-5 * np.ptp(RHYTHM)
    np.testing.assert_allclose(weights, bordered_system(noisier, knots, 20), rtol=0, atol=1e-9)


def test_only_differences_of_the_autocovariance_matter() -> None:
    knots = flank_knots(20, 40, 40, 400)
    plain = kriging_weights(RHYTHM, knots, 20)
    np.testing.assert_allclose(kriging_weights(RHYTHM + 1e6, knots, 20), plain, rtol=0, atol=1e-6)
    np.testing.assert_allclose(kriging_weights(RHYTHM * 1e-12, knots, 20), plain, rtol=0, atol=1e-9)


def test_random_walk_is_bridged_by_a_line() -> None:
    # Known truth: given both ends of a Brownian bridge, its mean is the straight line between them.
    knots = flank_knots(20, 30, 30, 400)
    weights = kriging_weights(np.asarray(1000.0 - LAGS), knots, 20)
    line = np.zeros_like(weights)
    line[:, 30] = (np.arange(20) + 1) / 21.0
    line[:, 29] = 1.0 - line[:, 30]
    np.testing.assert_allclose(weights, line, rtol=0, atol=0.01)


@pytest.mark.parametrize("useless", [np.zeros(400), np.full(400, 7.0), np.full(400, np.nan)])
def test_channel_without_usable_autocovariance_is_bridged_by_a_line(useless: NDArray[np.float64]) -> None:
    knots = flank_knots(20, 30, 30, 400)
    np.testing.assert_array_equal(
        kriging_weights(useless, knots, 20), kriging_weights(400.0 - LAGS, knots, 20)
    )


def test_few_flank_samples_are_all_used() -> None:
    np.testing.assert_array_equal(thinned_distances(7, 100), np.arange(1, 8))
    np.testing.assert_array_equal(flank_knots(5, 2, 3, 400), [-2, -1, 5, 6, 7])
    np.testing.assert_array_equal(flank_knots(5, 0, 3, 400), [5, 6, 7])


@pytest.mark.parametrize("flank", [150, 250, 1250, 10_000])
@pytest.mark.parametrize("at_most", [1, 2, 3, 10, 100, 149])
def test_distances_are_dense_near_the_gap_and_thin_out(flank: int, at_most: int) -> None:
    distances = thinned_distances(flank, at_most)
    steps = np.diff(distances)
    assert 0.7 * at_most <= len(distances) <= at_most
    assert distances[0] == 1
    assert at_most == 1 or distances[-1] == flank
    assert (steps > 0).all()
    dense = (at_most + 1) // 2
    assert (steps[: dense - 1] == 1).all()
    # Rounding to whole samples may shorten a step by one against the step before.
    assert (np.diff(steps) >= -1).all()
