"""The autocovariance of each channel, estimated from signal without pulses."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft

# Segments of this many times the longest lag: the taper then takes 2 % off the longest lags.
_SEGMENT_PER_LAGS = 16
# Windows too short for that use halves of it, down to this many times the longest lag.
_LEAST_SEGMENT_PER_LAGS = 2
# Channels transformed at a time, so that the work stays within the processor's cache.
_CHANNELS_AT_A_TIME = 8


class AutocovarianceSum:
    """Collects the autocovariance of each channel from windows of signal, piece by piece.

    Every window is cut into segments. Of each the mean is removed and a sine taper applied, the
    taper that leaks least at small distances in frequency [1]_: an offset changes nothing, and a drift
    slower than a segment adds only a part that is smooth in the lag, which a conditional mean with
    unknown mean does not notice. The inverse transform of the power collected is a positive
    semidefinite function of the lag by construction; dividing by the number of products per lag
    would be free of the taper's bias of at most 2 % but could give impossible autocovariances.

    Parameters
    ----------
    n_channels : int
        Columns of the windows.
    n_lags : int
        Lags wanted, from 0 on.

    References
    ----------
    .. [1] Riedel KS, Sidorenko A (1995) Minimum bias multiple taper spectral estimation. IEEE Trans
       Signal Process 43:188-195. doi:10.1109/78.365298
    """

    def __init__(self, n_channels: int, n_lags: int) -> None:
        if n_channels < 1 or n_lags < 2:
            raise ValueError(f"needs a channel and two lags; received {n_channels} and {n_lags}")
        self._n_channels = n_channels
        self._n_lags = n_lags
        self._power: dict[int, NDArray[np.float64]] = {}  # by length of the transform
        self._weight = 0.0
        self._n_samples = 0

    @property
    def n_samples(self) -> int:
        """Samples per channel that were used so far, those of overlapping segments once each."""
        return self._n_samples

    def add(self, x: NDArray[Any]) -> None:
        """Take in one window of finite, pulse-free signal.

        A window shorter than twice the longest lag is passed over: too few of its samples have a
        partner at the longer lags.

        Parameters
        ----------
        x : array, shape (n_samples, n_channels)
            float32 or float64.
        """
        size = _SEGMENT_PER_LAGS * self._n_lags
        while size > len(x) and size > _LEAST_SEGMENT_PER_LAGS * self._n_lags:
            size //= 2
        if size > len(x):
            return
        self._n_samples += len(x)
        n_segments = -(-len(x) // size)
        taper = (np.sin(np.pi * (np.arange(size) + 0.5) / size) * np.sqrt(2.0 / size)).astype(np.float32)
        for start in np.linspace(0, len(x) - size, n_segments).astype(int):
            self._add_segment(x[start : start + size], taper)

    def _add_segment(self, segment: NDArray[Any], taper: NDArray[np.float32]) -> None:
        n_points = fft.next_fast_len(len(segment) + self._n_lags, real=True)
        if n_points not in self._power:
            self._power[n_points] = np.zeros((self._n_channels, n_points // 2 + 1))
        power = self._power[n_points]
        for first in range(0, self._n_channels, _CHANNELS_AT_A_TIME):
            rows = segment[:, first : first + _CHANNELS_AT_A_TIME].T.copy()
            # Once the mean is gone single precision is ample: its noise lies 140 dB below the signal.
            rows -= rows.mean(axis=1, keepdims=True, dtype=np.float64)
            spectrum = fft.rfft(rows.astype(np.float32, copy=False) * taper, n_points, axis=1)
            of_segment = spectrum.real**2
            of_segment += spectrum.imag**2
            of_segment *= len(segment)
            power[first : first + _CHANNELS_AT_A_TIME] += of_segment
        self._weight += len(segment)

    def result(self) -> NDArray[np.float64]:
        """Autocovariance of each channel, in squared units of the windows.

        Returns
        -------
        array, shape (n_channels, n_lags)
            From lag 0 on. Meant for differences between lags; the part of offset and drift in it is
            arbitrary.

        Raises
        ------
        ValueError
            If no window was long enough.
        """
        if not self._power:
            raise ValueError(f"no window had the {_LEAST_SEGMENT_PER_LAGS * self._n_lags} samples needed")
        total = np.zeros((self._n_channels, self._n_lags))
        for n_points, power in self._power.items():
            total += fft.irfft(power, n_points, axis=1)[:, : self._n_lags]
        return total / self._weight
