"""Piecewise cubic interpolation that never leaves the range of its knots."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray


def monotone_slopes(knots: NDArray[np.float64], values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Slopes at the knots that keep a piecewise cubic monotone wherever the values are.

    Inside: the weighted harmonic mean of the two neighbouring secants, zero where they differ in
    sign [1]_. At both ends: the three-point formula, limited so that it keeps the shape.

    Parameters
    ----------
    knots : array, shape (n_knots,)
        Increasing positions; at least two.
    values : array, shape (n_knots, n_channels)
        Values at the knots.

    Returns
    -------
    array, shape (n_knots, n_channels)
        Slopes, in units of the values per unit of the positions.

    References
    ----------
    .. [1] Fritsch FN, Butland J (1984) A method for constructing local monotone piecewise cubic
       interpolants. SIAM J Sci Stat Comput 5:300-304. doi:10.1137/0905021
    """
    widths = np.diff(knots)[:, None]
    secants = np.diff(values, axis=0) / widths
    if len(knots) == 2:
        return np.repeat(secants, 2, axis=0)
    slopes = np.empty_like(values)
    before, after = widths[:-1], widths[1:]
    same_sign = secants[:-1] * secants[1:] > 0.0
    # Where the product is not positive the slope is zero; a one in its place avoids dividing by zero.
    lower = np.where(same_sign, secants[:-1], 1.0)
    upper = np.where(same_sign, secants[1:], 1.0)
    mean = 3.0 * (before + after) / ((2.0 * after + before) / lower + (after + 2.0 * before) / upper)
    slopes[1:-1] = np.where(same_sign, mean, 0.0)
    slopes[0] = _end_slope(widths[0], widths[1], secants[0], secants[1])
    slopes[-1] = _end_slope(widths[-1], widths[-2], secants[-1], secants[-2])
    return slopes


def monotone_interpolation(
    knots: NDArray[np.float64], values: NDArray[np.float64], at: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Monotone piecewise cubic through knots.

    Parameters
    ----------
    knots : array, shape (n_knots,)
        Increasing positions; at least two.
    values : array, shape (n_knots, n_channels)
        Values at the knots.
    at : array, shape (n_points,)
        Positions from the first to the last knot.

    Returns
    -------
    array, shape (n_points, n_channels)
    """
    slopes = monotone_slopes(knots, values)
    piece = np.clip(np.searchsorted(knots, at, side="right") - 1, 0, len(knots) - 2)
    width = np.diff(knots)[piece][:, None]
    t = (at - knots[piece])[:, None] / width
    rise = values[piece + 1] - values[piece]
    # Written as a departure from the left value, so that equal values are reproduced exactly.
    return np.asarray(
        values[piece]
        + rise * (t * t * (3.0 - 2.0 * t))
        + width * t * (1.0 - t) * (slopes[piece] * (1.0 - t) - slopes[piece + 1] * t)
    )


def _end_slope(
    near_width: NDArray[np.float64],
    far_width: NDArray[np.float64],
    near: NDArray[np.float64],
    far: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Three-point slope at an end knot from its two nearest secants, limited to keep the shape."""
    slope = ((2.0 * near_width + far_width) * near - near_width * far) / (near_width + far_width)
    slope = np.where(slope * near > 0.0, slope, 0.0)
    return np.where((near * far < 0.0) & (np.abs(slope) > 3.0 * np.abs(near)), 3.0 * near, slope)
