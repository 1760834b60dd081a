"""Signals continued beyond their ends, so that a filter meets no edge there."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pulsemend.signal.burg import burg

LEARN_S = 2.0
"""The continuation is learned from so much signal next to the end."""

ORDER = 40
"""Order of the autoregressive model, at most; and at most a third of the samples it is learned from."""


def extended(x: NDArray[np.floating], n_ahead: int, rate_hz: float) -> NDArray[np.float64]:
    """Continue each channel autoregressively beyond its last sample.

    The mean of what is learned from is kept: what is continued returns to it, as fast as the channel's own
    past says.

    Parameters
    ----------
    x : array, shape (n_channels, n_samples)
        Signals; only the last `LEARN_S` count.
    n_ahead : int
        Samples to add.
    rate_hz : float
        Sampling rate.

    Returns
    -------
    array, shape (n_channels, n_ahead)

    References
    ----------
    Burg JP (1975) Maximum entropy spectral analysis. PhD thesis, Stanford University. Padding the ends of
    a stretch autoregressively before filtering it apart from what lies across a pulse is described in
    DOI 10.64898/2026.05.13.725016 (a preprint; its order and length were not seen).
    """
    # Loading it takes long, and few plans split at pulses: the first traces must not wait for it.
    from scipy.signal import lfilter, lfiltic

    near = np.asarray(x[:, -max(1, round(LEARN_S * rate_hz)) :], dtype=np.float64)
    mean = near.mean(axis=1, keepdims=True)
    order = min(ORDER, near.shape[1] // 3)
    if order < 1:
        return np.repeat(mean, n_ahead, axis=1)
    centred = near - mean
    coefficients, _ = burg(np.ascontiguousarray(centred.T), order)
    silence = np.zeros(n_ahead)
    ahead = np.empty((len(near), n_ahead))
    for channel, past in enumerate(centred):
        a = coefficients[:, channel]
        state = lfiltic([1.0], a, past[: -order - 1 : -1])
        ahead[channel], _ = lfilter([1.0], a, silence, zi=state)
    ahead += mean
    return ahead
