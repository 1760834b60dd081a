"""The straight line between two clocks that saw the same events."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.log import ClockFit

LEAST_TOLERANCE_S = 0.002
"""No pair this near to the line is an outlier: clocks are written with about this much rounding."""
TOLERANCE_SPREADS = 5.0
"""Normal errors stay within so many spreads but for one in two million."""

_SPREAD_OF_NORMAL = 1.4826  # standard deviation over median absolute deviation
_MOST_ROUNDS = 20

FloatArray = NDArray[np.float64]


def fit_clock(log_s: FloatArray, recorded_s: FloatArray) -> ClockFit:
    """Fit the recording's clock to the log's.

    A line through medians (slopes between pairs half the list apart) comes first; pairs beyond five robust
    spreads of the line, and beyond 2 ms, are set aside, and least squares fit the rest until nothing changes.

    Parameters
    ----------
    log_s, recorded_s : array, shape (n_pairs,)
        Time of each event on either clock; at least three different log times.

    Returns
    -------
    ClockFit
        Offset at the mean log time, drift, their standard errors, spread of the residuals.

    Raises
    ------
    ValueError
        Fewer than three pairs, or all at fewer than three log times.
    """
    if log_s.shape != recorded_s.shape or np.unique(log_s).size < 3:
        raise ValueError("a clock needs at least three pairs at different times")
    # The difference is small where both clocks count seconds, so no digits are lost in products.
    middle_s = float(np.median(log_s))
    x, y = log_s - middle_s, recorded_s - log_s
    slope, height = _through_medians(x, y)
    kept = np.zeros(0, dtype=bool)
    for _ in range(_MOST_ROUNDS):
        residual = y - height - slope * x
        near = np.abs(residual) <= tolerance_s(spread_s(residual))
        if np.array_equal(near, kept) or np.unique(x[near]).size < 3:
            break
        kept = near
        slope, height = _least_squares(x[kept], y[kept])
    if not kept.any():
        kept = np.ones(x.size, dtype=bool)
        slope, height = _least_squares(x, y)
    return _described(x[kept], y[kept], slope, height, middle_s)


def spread_s(residual_s: FloatArray) -> float:
    """Spread of residuals, blind to outliers."""
    return float(_SPREAD_OF_NORMAL * np.median(np.abs(residual_s - np.median(residual_s))))


def tolerance_s(residual_spread_s: float) -> float:
    """How far from the line an event may be and still belong to it."""
    return max(TOLERANCE_SPREADS * residual_spread_s, LEAST_TOLERANCE_S)


def _through_medians(x: FloatArray, y: FloatArray) -> tuple[float, float]:
    order = np.argsort(x, kind="stable")
    half = x.size // 2
    run = x[order][half:] - x[order][: x.size - half]
    rise = y[order][half:] - y[order][: x.size - half]
    slope = float(np.median(rise[run > 0] / run[run > 0])) if (run > 0).any() else 0.0
    return slope, float(np.median(y - slope * x))


def _least_squares(x: FloatArray, y: FloatArray) -> tuple[float, float]:
    centred = x - x.mean()
    slope = float(centred @ (y - y.mean()) / (centred @ centred))
    return slope, float(y.mean() - slope * x.mean())


def _described(x: FloatArray, y: FloatArray, slope: float, height: float, middle_s: float) -> ClockFit:
    residual = y - height - slope * x
    centred = x - x.mean()
    sd_s = float(np.sqrt(residual @ residual / (x.size - 2)))
    return ClockFit(
        centre_s=middle_s + float(x.mean()),
        offset_s=height + slope * float(x.mean()),
        drift=slope,
        offset_se_s=sd_s / float(np.sqrt(x.size)),
        drift_se=sd_s / float(np.sqrt(centred @ centred)),
        residual_sd_s=sd_s,
        n=int(x.size),
    )
