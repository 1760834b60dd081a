"""How large the decay of each pulse is, beside the background's activity that looks like it."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

OUTLYING = 3.5
"""A pulse so many standard deviations from the others is one of its own, such as a misfire."""

Floats = NDArray[np.float64]


def amplitude_weights(shape: Floats, covariance: Floats | None) -> tuple[Floats, float]:
    """Weigh the samples of a stretch for the amplitude of a shape in it, beside an offset of its own.

    With the background's covariance this is the best linear unbiased estimate (generalised least squares):
    slow background activity looks like a decay, and ordinary least squares would take it for one.

    Parameters
    ----------
    shape : array, shape (n_times,)
        The decay of the median pulse.
    covariance : array, shape (n_times, n_times), or None
        Of the background, positive definite; None counts it as white.

    Returns
    -------
    weights : array, shape (n_times,)
        Their products with a stretch add up to its amplitude, relative to `shape`.
    variance : float
        Of that amplitude, from the background alone; NaN if that is not known.
    """
    from scipy.linalg import cho_factor, cho_solve

    design = np.stack([shape / np.abs(shape).max(), np.ones_like(shape)], axis=1)
    weighted = design if covariance is None else cho_solve(cho_factor(covariance), design)
    weights = np.linalg.solve(design.T @ weighted, weighted.T)[0] / np.abs(shape).max()
    return weights, np.nan if covariance is None else float(weights @ covariance @ weights)


def covariance_of(autocovariance: Floats) -> Floats:
    """Turn an autocovariance into a covariance matrix that is positive definite.

    Parameters
    ----------
    autocovariance : array, shape (n_lags,)
        Up to a constant, as `pulsemend.signal.autocovariance` gives it.

    Returns
    -------
    array, shape (n_lags, n_lags)
        Of signal whose offset is unknown.
    """
    from scipy.linalg import toeplitz

    n = len(autocovariance)
    centre = np.eye(n) - 1.0 / n
    strengths, directions = np.linalg.eigh(centre @ toeplitz(autocovariance) @ centre)
    # The offset's direction is as strong as any; estimates of the weakest ones may even be negative.
    least = 1e-7 * strengths[-1] if strengths[-1] > 0.0 else 1.0
    positive = (directions * np.maximum(strengths, least)) @ directions.T
    return np.asarray(positive + strengths[-1] / n)


def settled_amplitudes(
    amplitudes: Floats, variances: Floats, fitted: NDArray[np.bool_] | None = None
) -> tuple[Floats, float]:
    """Draw noisy amplitudes towards their median, as far as their noise explains their spread.

    The shape was fitted to a median pulse, so the median amplitude of the pulses it was taken over is 1. What
    a pulse differs from the median of all counts by the share of its variance that is the pulses' own (the
    best linear estimate [1]_); a pulse far outside keeps its own amplitude.

    Parameters
    ----------
    amplitudes : array, shape (n_pulses,)
        As estimated; NaN where it cannot be.
    variances : array, shape (n_pulses,)
        Of the estimates, from the background; NaN where it is not known.
    fitted : bool array, shape (n_pulses,), or None
        The pulses that the median pulse was taken over; None: all.

    Returns
    -------
    amplitudes : array, shape (n_pulses,)
        Finite, relative to the median pulse.
    spread : float
        Standard deviation of the true amplitudes.

    References
    ----------
    .. [1] Efron B, Morris C (1973) Stein's estimation rule and its competitors - an empirical Bayes approach.
       J Am Stat Assoc 68:117-130. doi:10.1080/01621459.1973.10481350
    """
    known = np.isfinite(amplitudes) & np.isfinite(variances)
    settled = np.ones_like(amplitudes)
    if np.count_nonzero(known) < 3:
        return settled, 0.0
    among = known if fitted is None or not (known & fitted).any() else known & fitted
    middle = float(np.median(amplitudes[known]))
    departure = amplitudes[known] - middle
    settled += middle - float(np.median(amplitudes[among]))
    noise = variances[known]
    spread = float(1.4826 * np.median(np.abs(departure)))
    own = max(0.0, spread**2 - float(np.median(noise)))
    share = np.where(own + noise > 0.0, own / np.maximum(own + noise, 1e-300), 0.0)
    share[np.abs(departure) > OUTLYING * np.sqrt(own + noise)] = 1.0
    settled[known] += share * departure
    return settled, float(np.sqrt(own))


def block_means(x: NDArray[Any], size: int) -> NDArray[Any]:
    """Mean of every `size` samples along the first axis; what is left over at the end is dropped."""
    n = len(x) // size
    return np.asarray(x[: n * size].reshape(n, size, *x.shape[1:]).mean(axis=1))
