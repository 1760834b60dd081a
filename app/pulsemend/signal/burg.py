"""Autoregressive models by Burg's method, and prediction from them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

# Below this share of the signal's power what is left is rounding error, and no more is learned from it.
_LEAST_POWER_LEFT = 1e-14


def burg(x: NDArray[np.float64], order: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Fit an autoregressive model to each channel.

    All reflection coefficients are at most one in size, so the model never explodes.

    Parameters
    ----------
    x : array, shape (n_samples, n_channels)
        Signals; a mean is not removed.
    order : int
        Order of the model, below ``n_samples``.

    Returns
    -------
    coefficients : array, shape (order + 1, n_channels)
        The first row is one: ``sum(coefficients[j] * x[n - j])`` is the prediction error.
    power : array, shape (n_channels,)
        Power of the prediction error.

    Raises
    ------
    ValueError
        If there are not more samples than the order.

    References
    ----------
    Burg JP (1975) Maximum entropy spectral analysis. PhD thesis, Stanford University.
    """
    n_samples, n_channels = x.shape
    if not 0 <= order < n_samples:
        raise ValueError(f"order must be from 0 to {n_samples - 1}; received {order}")
    # Channels in rows: each is then one contiguous run.
    forward = np.array(x.T, order="C")
    backward = forward.copy()
    coefficients = np.zeros((order + 1, n_channels))
    coefficients[0] = 1.0
    power = np.einsum("cn,cn->c", forward, forward) / n_samples
    least = _LEAST_POWER_LEFT * power
    for step in range(1, order + 1):
        f, b = forward[:, step:], backward[:, step - 1 : -1]
        both = np.einsum("cn,cn->c", f, f) + np.einsum("cn,cn->c", b, b)
        learns = (power > least) & (both > 0.0)
        reflection = np.where(learns, -2.0 * np.einsum("cn,cn->c", f, b) / np.where(learns, both, 1.0), 0.0)
        reflection = np.clip(reflection, -1.0, 1.0)  # rounding only
        coefficients[: step + 1] += reflection * coefficients[step::-1]
        power = power * (1.0 - reflection * reflection)
        new_forward = f + reflection[:, None] * b
        backward[:, step:] = b + reflection[:, None] * f
        forward[:, step:] = new_forward
    return coefficients, power


def predict(coefficients: NDArray[np.float64], x: NDArray[np.float64], n_ahead: int) -> NDArray[np.float64]:
    """Continue each channel by its own autoregressive model, without noise.

    Parameters
    ----------
    coefficients : array, shape (order + 1, n_channels)
        As `burg` returns them.
    x : array, shape (n_samples, n_channels)
        Signals to continue; at least ``order`` samples.
    n_ahead : int
        Number of samples to predict.

    Returns
    -------
    array, shape (n_ahead, n_channels)
    """
    order = len(coefficients) - 1
    ahead = np.zeros((order + n_ahead, x.shape[1]))
    ahead[:order] = x[len(x) - order :]
    # Row j of the window meets the coefficient of lag order - j.
    by_age = coefficients[:0:-1]
    for n in range(n_ahead):
        ahead[order + n] = -np.einsum("jc,jc->c", by_age, ahead[n : n + order])
    return ahead[order:]
