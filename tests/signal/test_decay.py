"""The shape of a decay on signals whose decay is known, and against the library's own least squares."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy.optimize import curve_fit

from pulsemend.signal.decay import DECAY_KINDS, DecayFit, DecayShape, Late, fit_again, fit_shape

MS = np.arange(2, 200) / 1000.0
STRETCH = np.arange(400) / 5000.0
POWER = 1000.0 * (1.0 + MS / 0.003) ** -2


def found(fit: DecayFit) -> DecayShape:
    assert fit.shape is not None, fit.reason
    return fit.shape


def test_power_law_comes_back() -> None:
    """Facts T-1.6, Freche 2018: 1000 (1 + t / 3 ms)^-2, 2 to 199 ms; a straight log-log slope is too flat."""
    fit = fit_shape(MS, POWER, "power")
    assert found(fit).values == pytest.approx((1000.0, 0.003, 2.0), rel=1e-6)
    assert np.abs(found(fit).at(MS) + fit.level - POWER).max() < 1e-10
    late = MS >= 0.0595
    slope = np.polyfit(np.log(MS[late]), np.log(POWER[late]), 1)[0]
    assert slope == pytest.approx(-1.948, abs=0.001)


def test_two_exponentials_leave_what_the_facts_say_of_a_power_law() -> None:
    """Facts T-1.6: RMS 1.10 and 4.9 at most remain; a power law is none of their sums."""
    fit = fit_shape(MS, POWER, "two exponentials", level=False)
    left = found(fit).at(MS) - POWER
    assert np.sqrt(np.mean(left**2)) == pytest.approx(1.10, abs=0.005)
    assert np.abs(left).max() == pytest.approx(4.9, abs=0.05)
    assert fit.level == 0.0


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("level", [0.0, 50.0, -3000.0])
def test_exponentials_come_back(sign: float, level: float) -> None:
    """Facts T-1.6: tau = 20 ms within 0.1 %; T-1.7: a step of the whole side changes nothing, to 1e-9."""
    y = sign * 1000.0 * np.exp(-MS / 0.020) + level
    fit = fit_shape(MS, y, "exponential")
    assert found(fit).values == pytest.approx((sign * 1000.0, 0.020), rel=1e-6)
    assert np.abs(found(fit).at(MS) + fit.level - y).max() < 1e-9
    y = sign * (600.0 * np.exp(-MS / 0.004) + 200.0 * np.exp(-MS / 0.030)) + level
    fit = fit_shape(MS, y, "two exponentials")
    assert np.abs(found(fit).at(MS) + fit.level - y).max() < 1e-6
    assert found(fit).values == pytest.approx((sign * 600.0, 0.004, sign * 200.0, 0.030), rel=1e-4)


def _scipy_models() -> dict[str, Any]:
    return {
        "exponential": (
            lambda t, a, tau, c: a * np.exp(-t / tau) + c,
            ([0.0, 0.0005, -1e4], [1e5, 0.15, 1e4]),
            [[300.0, 0.02, 0.0], [100.0, 0.005, 0.0]],
        ),
        "two exponentials": (
            lambda t, a, tau, b, up, c: a * np.exp(-t / tau) + b * np.exp(-t / up) + c,
            ([0.0, 0.0005, 0.0, 0.0005, -1e4], [1e5, 0.15, 1e5, 0.15, 1e4]),
            [[200.0, 0.004, 100.0, 0.03, 0.0], [100.0, 0.01, 100.0, 0.06, 0.0]],
        ),
        "power": (
            lambda t, a, t0, p, c: a * (1.0 + t / t0) ** -p + c,
            ([0.0, 0.0005, 1.0, -1e4], [1e5, 0.6, 4.0, 1e4]),
            [[300.0, 0.02, 2.0, 0.0], [300.0, 0.06, 3.0, 0.0], [300.0, 0.01, 1.2, 0.0]],
        ),
    }


@pytest.mark.parametrize("kind", DECAY_KINDS)
def test_no_worse_than_the_librarys_least_squares(kind: str) -> None:
    """Outside reference: scipy.optimize.curve_fit on the same stretches and bounds, several starts."""
    model, bounds, starts = _scipy_models()[kind]
    rng = np.random.default_rng(4)
    for _ in range(6):
        tau = rng.uniform(0.005, 0.03)
        truth = 300.0 * ((1.0 + STRETCH / tau) ** -2 if kind == "power" else np.exp(-STRETCH / tau))
        y = truth + np.cumsum(rng.standard_normal(400)) * 0.1 + 4.0 * np.sin(STRETCH * 60.0)
        fit = fit_shape(STRETCH, y, kind)
        own = float(np.sum((found(fit).at(STRETCH) + fit.level - y) ** 2))
        theirs = np.inf
        for start in starts:
            values, _ = curve_fit(model, STRETCH, y, start, bounds=bounds, xtol=1e-12, ftol=1e-12)
            theirs = min(theirs, float(np.sum((model(STRETCH, *values) - y) ** 2)))
        assert own <= theirs * (1.0 + 1e-4)
        if kind == "exponential":
            # Two that agree, not one that happens to be lower by other bounds.
            assert own == pytest.approx(theirs, rel=1e-6)


@pytest.mark.parametrize("kind", DECAY_KINDS)
@pytest.mark.parametrize(
    ("y", "reason"),
    [
        (np.zeros(400), "constant"),
        (np.full(400, np.nan), "constant"),
        (-1000.0 * STRETCH, "does not level off"),
        (100.0 * np.exp(STRETCH / 0.02), "shape|does not level off"),
        (50.0 * np.sin(2 * np.pi * STRETCH / 0.04), "not this shape"),
        (100.0 * np.exp(-STRETCH / 0.0002), "over within a millisecond|not this shape"),
    ],
)
def test_what_is_no_decay_is_refused_with_a_reason(kind: str, y: np.ndarray, reason: str) -> None:
    fit = fit_shape(STRETCH, y, kind)
    assert fit.shape is None
    assert any(word in fit.reason for word in reason.split("|")), fit.reason


def test_too_short_a_stretch_and_unknown_kinds_are_refused() -> None:
    assert "too short" in fit_shape(STRETCH[:7], np.exp(-STRETCH[:7]), "exponential").reason
    with pytest.raises(ValueError, match="kind must be one of"):
        fit_shape(STRETCH, STRETCH, "spline")


def test_late_points_tell_a_slow_tail_from_another_level() -> None:
    """A power law with a step and one without are alike for 80 ms; the level 0.3 s later tells them apart."""
    response = 5.0 * np.sin(2 * np.pi * STRETCH / 0.12) * np.exp(-(((STRETCH - 0.06) / 0.05) ** 2))
    shape = DecayShape("power", (170.0, 0.024, 2.0))
    late_s = np.array([0.275, 0.325, 0.375, 0.425, 0.475])
    for level in (0.0, 50.0):
        y = shape.at(STRETCH) + level + response
        fit = fit_shape(STRETCH, y, "power", Late(late_s, shape.at(late_s) + level))
        tail = np.abs(found(fit).at(late_s) - shape.at(late_s)).max()
        blind = fit_shape(STRETCH, y, "power")
        assert tail < 2.0
        assert abs(fit.level - level) < 2.0
        assert np.abs(found(blind).at(late_s) - shape.at(late_s)).max() > 5.0


@pytest.mark.parametrize("kind", DECAY_KINDS)
def test_many_fits_at_once_are_the_single_ones(kind: str) -> None:
    rng = np.random.default_rng(2)
    y = 200.0 * np.exp(-STRETCH / 0.015) + np.cumsum(rng.standard_normal(400)) * 0.1
    before = fit_shape(STRETCH, y, kind)
    ys = y + 5.0 * np.exp(-0.5 * ((STRETCH - rng.uniform(0.02, 0.07, (5, 1))) / 0.008) ** 2)
    shapes = 0
    for one, fit in zip(ys, fit_again(STRETCH, ys, before), strict=True):
        alone = fit_shape(STRETCH, one, kind)
        if fit.shape is not None and alone.shape is not None:
            shapes += 1
            # Two exponentials have flat valleys: how well both fit is what must agree.
            costs = [
                float(np.sum((f.at(STRETCH) + c - one) ** 2))
                for f, c in ((fit.shape, fit.level), (alone.shape, alone.level))
            ]
            assert costs[0] == pytest.approx(costs[1], rel=1e-4)
            if kind != "two exponentials":
                np.testing.assert_allclose(fit.shape.at(STRETCH), alone.shape.at(STRETCH), atol=2e-3)
    assert shapes >= 3
    with pytest.raises(ValueError, match="cannot be repeated"):
        fit_again(STRETCH, ys, DecayFit(None))
