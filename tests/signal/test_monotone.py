"""Monotone piecewise cubic: facts section 2.9."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import CubicSpline, PchipInterpolator

from pulsemend.signal.monotone import monotone_interpolation, monotone_slopes

# RPN14 data: facts 2.9, Fritsch & Carlson 1980 (data a value from memory, slopes and values computed twice).
KNOTS = np.array([7.99, 8.09, 8.19, 8.7, 9.2, 10, 12, 15, 20])
VALUES = np.array([0, 2.76429e-5, 4.37498e-2, 0.169183, 0.469428, 0.943740, 0.998636, 0.999919, 0.999994])
SLOPES = [
    0.0,
    5.525086818681e-4,
    0.3358768346084,
    0.3494491676860,
    0.5969582389268,
    0.06032184552297,
    9.003953827693e-4,
    3.142468363044e-5,
    0.0,
]
AT = np.array([8.0, 8.14, 8.45, 9.0, 9.6, 11, 13.5, 17.5])
THERE = [
    2.767433863e-7,
    0.01769716737592,
    0.1065895377610,
    0.3375343268462,
    0.7602476393404,
    0.9860433625351,
    0.9996033640122,
    0.9999761404273,
]


def test_table_of_slopes_and_values() -> None:
    # facts T-2.22
    np.testing.assert_allclose(monotone_slopes(KNOTS, VALUES[:, None])[:, 0], SLOPES, rtol=0, atol=1e-10)
    np.testing.assert_allclose(
        monotone_interpolation(KNOTS, VALUES[:, None], AT)[:, 0], THERE, rtol=0, atol=1e-10
    )


def test_curve_never_turns_back_where_an_ordinary_spline_does() -> None:
    # facts T-2.22 and its negative control
    at = np.linspace(KNOTS[0], KNOTS[-1], 200_000)
    curve = monotone_interpolation(KNOTS, VALUES[:, None], at)[:, 0]
    assert np.diff(curve).min() > -1e-15
    assert curve.min() >= 0.0
    assert curve.max() <= 0.999994
    ordinary = CubicSpline(KNOTS, VALUES)(at)
    assert ordinary.max() == pytest.approx(1.1690, abs=1e-4)
    assert ordinary.min() == pytest.approx(-0.00945, abs=1e-5)


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 10_000), n_knots=st.integers(2, 8), flat=st.booleans())
def test_equals_the_general_library(seed: int, n_knots: int, flat: bool) -> None:
    # outside reference: scipy.interpolate.PchipInterpolator
    rng = np.random.default_rng(seed)
    knots = np.cumsum(rng.uniform(0.5, 20.0, n_knots))
    values = rng.standard_normal((n_knots, 5))
    if flat:
        values[: n_knots // 2 + 1, :2] = values[0, :2]
    at = np.linspace(knots[0], knots[-1], 101)
    np.testing.assert_allclose(
        monotone_interpolation(knots, values, at), PchipInterpolator(knots, values)(at), rtol=0, atol=1e-12
    )
