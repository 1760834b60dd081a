"""Conditional mean of a gap given its flanks, when the mean of the signal is unknown.

References
----------
Matheron G (1963) Principles of geostatistics. Econ Geol 58:1246-1266.
doi:10.2113/gsecongeo.58.8.1246
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

# Added to every knot's own variance, as a share of the largest difference within the autocovariance.
# It stands for what the estimate cannot know, about 0.05 uV. Without it the weights for a signal that was
# low-passed far below half its rate reach thousands and amplify every rounding.
_NUGGET_SHARE = 1e-5


def thinned_distances(flank: int, at_most: int) -> NDArray[np.intp]:
    """Distances from the gap's edge at which a flank is used.

    All samples if there are few enough; else every sample of the nearer half of the distances, and
    then steps that grow in proportion to the distance.

    Parameters
    ----------
    flank : int
        Number of flank samples; the nearest has distance 1.
    at_most : int
        Largest number of distances, at least 1 if there is a flank.

    Returns
    -------
    array of int, shape (n_distances,)
        Increasing.
    """
    if flank <= at_most:
        return np.arange(1, flank + 1)
    dense = (at_most + 1) // 2
    growing = np.geomspace(dense, flank, at_most - dense + 1)[1:] if at_most > dense else np.empty(0)
    return np.unique(np.concatenate([np.arange(1, dense + 1), np.rint(growing).astype(np.intp)]))


def flank_knots(size: int, left: int, right: int, at_most: int) -> NDArray[np.intp]:
    """Positions of the flank samples used for a gap, counted from the gap's first sample.

    Parameters
    ----------
    size : int
        Samples in the gap.
    left, right : int
        Good samples before and after it; not both zero.
    at_most : int
        Largest number of knots on both sides together.

    Returns
    -------
    array of int, shape (n_knots,)
        Increasing: negative ones before the gap, those from ``size`` on after it.
    """
    side = at_most // 2 if left and right else at_most
    before = -thinned_distances(left, side)[::-1] if left else np.empty(0, np.intp)
    after = size - 1 + thinned_distances(right, side) if right else np.empty(0, np.intp)
    return np.concatenate([before, after])


def kriging_weights(
    autocovariance: NDArray[np.float64], knots: NDArray[np.intp], size: int
) -> NDArray[np.float64]:
    """Weights of the knots for each sample of a gap; the weights of a sample sum to one.

    Because of that sum a constant added to the autocovariance changes nothing: only its differences
    (the variogram) matter.

    Parameters
    ----------
    autocovariance : array, shape (n_lags,)
        Of one channel, from lag 0. One that is constant or not finite gives the weights of a
        random walk, which is the straight line between the nearest samples.
    knots : array of int, shape (n_knots,)
        Positions counted from the gap's first sample; no lag may reach ``n_lags``.
    size : int
        Samples in the gap.

    Returns
    -------
    array, shape (size, n_knots)
    """
    spread = float(np.ptp(autocovariance))
    if not np.isfinite(spread) or spread <= 0.0:
        autocovariance = np.arange(len(autocovariance), 0.0, -1.0)
        spread = float(np.ptp(autocovariance))
    among = autocovariance[np.abs(knots[:, None] - knots[None, :])]
    among[np.diag_indices_from(among)] += _NUGGET_SHARE * spread
    towards = autocovariance[np.abs(knots[:, None] - np.arange(size)[None, :])]
    solved = np.linalg.solve(among, np.column_stack([towards, np.ones(len(knots))]))
    known_mean, ones = solved[:, :-1], solved[:, -1:]
    missing = 1.0 - known_mean.sum(axis=0, keepdims=True)
    return np.ascontiguousarray((known_mean + ones * (missing / ones.sum())).T)
