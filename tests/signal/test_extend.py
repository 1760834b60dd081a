"""Continued signals: known processes, the program's own prediction, and ends that are constant."""

from __future__ import annotations

import numpy as np
import pytest

from pulsemend.signal.burg import burg, predict
from pulsemend.signal.extend import LEARN_S, ORDER, extended

RATE_HZ = 1000.0


def test_a_sine_goes_on() -> None:
    t = np.arange(3000) / RATE_HZ
    ahead = extended(np.sin(2 * np.pi * 10 * t)[None], 50, RATE_HZ)
    expected = np.sin(2 * np.pi * 10 * (3.0 + np.arange(50) / RATE_HZ))
    np.testing.assert_allclose(ahead[0], expected, atol=0.02)


@pytest.mark.parametrize("level", [0.0, 50e-6, -3.0])
def test_a_constant_stays(level: float) -> None:
    np.testing.assert_allclose(extended(np.full((2, 500), level), 1700, RATE_HZ), level, rtol=1e-12)


def test_it_is_the_prediction_of_the_model_and_returns_to_the_mean() -> None:
    rng = np.random.default_rng(4)
    x = np.zeros((2, 4000))
    for n in range(2, 4000):  # two known processes of second order
        x[:, n] = [1.7, 0.5] * x[:, n - 1] + [-0.72, 0.2] * x[:, n - 2] + rng.standard_normal(2)
    x += [[10.0], [-4.0]]
    near = x[:, -round(LEARN_S * RATE_HZ) :]
    mean = near.mean(axis=1)
    model, _ = burg((near - mean[:, None]).T.copy(), ORDER)
    expected = predict(model, (near - mean[:, None]).T, 400).T + mean[:, None]
    ahead = extended(x, 400, RATE_HZ)
    np.testing.assert_allclose(ahead, expected, atol=1e-9)
    np.testing.assert_allclose(ahead[:, -1], mean, atol=0.5)


@pytest.mark.parametrize("n_samples", [1, 2, 3, 7])
def test_short_stretches_are_continued_by_what_there_is(n_samples: int) -> None:
    ahead = extended(np.arange(n_samples, dtype=float)[None], 5, RATE_HZ)
    assert ahead.shape == (1, 5)
    assert np.isfinite(ahead).all()
