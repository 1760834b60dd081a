"""The autocovariance of each channel, estimated from signal without pulses."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft

# Long windows are cut into segments of this many times the longest lag, or a little more.
_SEGMENT_PER_LAGS = 16
# Windows shorter than this many times the longest lag are passed over.
_LEAST_SEGMENT_PER_LAGS = 2
# Channels transformed at a time, so that the work stays within the processor's cache.
_CHANNELS_AT_A_TIME = 8


class AutocovarianceSum:
    """Collects the autocovariance of each channel from windows of signal, piece by piece.

    Windows are cut into segments. Each has its mean removed and is tapered by a half sine, the taper
    that leaks least at small distances in frequency [1]_. So an offset changes nothing, and a drift
    slower than a segment adds only a part that is smooth in the lag, which a conditional mean with
    unknown mean hardly notices. The products at each lag are divided by those of the taper alone,
    so that no lag is damped.

    Parameters
    ----------
    n_channels : int
        Columns of the windows.
    n_lags : int
        Lags wanted, from 0 on.

    Raises
    ------
    ValueError
        If there is no channel or only one lag.

    References
    ----------
    .. [1] Riedel KS, Sidorenko A (1995) Minimum bias multiple taper spectral estimation. IEEE Trans
       Signal Process 43:188-195. doi:10.1109/78.365298
    """

    def __init__(self, n_channels: int, n_lags: int) -> None:
        if n_channels < 1 or n_lags < 2:
            raise ValueError(f"needs a channel and two lags; received {n_channels} and {n_lags}")
        self._n_lags = n_lags
        self._n_samples = 0
        self._products = np.zeros((n_channels, n_lags))
        self._weights = np.zeros(n_lags)
        # Power of the segments of one size, until another size comes: most windows are equally long.
        self._size = 0
        self._power = np.zeros((n_channels, 0))
        self._taper_power = np.zeros(0)

    @property
    def n_samples(self) -> int:
        """Samples per channel that were used so far."""
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
        if len(x) < _LEAST_SEGMENT_PER_LAGS * self._n_lags:
            return
        n_segments = max(1, len(x) // (_SEGMENT_PER_LAGS * self._n_lags))
        size = len(x) // n_segments
        if size != self._size:
            self._settle()
            self._size = size
            n_points = self._n_points()
            self._power = np.zeros((len(self._products), n_points // 2 + 1))
            self._taper_power = np.zeros(n_points // 2 + 1)
        for start in range(0, n_segments * size, size):
            self._add_segment(x[start : start + size])
        self._n_samples += n_segments * size

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
        if not self._n_samples:
            raise ValueError(f"no window had the {_LEAST_SEGMENT_PER_LAGS * self._n_lags} samples needed")
        self._settle()
        return self._products / self._weights

    def _n_points(self) -> int:
        # Zeros after a segment keep its end from meeting its start.
        return int(fft.next_fast_len(self._size + self._n_lags, real=True))

    def _add_segment(self, segment: NDArray[Any]) -> None:
        taper = np.sin(np.pi * (np.arange(self._size) + 0.5) / self._size)
        self._taper_power += np.abs(fft.rfft(taper, self._n_points())) ** 2
        single = taper.astype(np.float32)
        for first in range(0, len(self._products), _CHANNELS_AT_A_TIME):
            channels = slice(first, first + _CHANNELS_AT_A_TIME)
            rows = segment[:, channels].T.copy()
            rows -= rows.mean(axis=1, keepdims=True, dtype=np.float64)
            # Single precision is ample for the spectrum, whose noise then lies 140 dB below the signal. The
            # way back is in double: neighbouring lags of a smooth signal differ by less than that.
            spectrum = fft.rfft(rows.astype(np.float32, copy=False) * single, self._n_points(), axis=1)
            self._power[channels] += spectrum.real**2
            self._power[channels] += spectrum.imag**2

    def _settle(self) -> None:
        """Turn the power collected into products per lag."""
        if self._size:
            self._products += fft.irfft(self._power, self._n_points(), axis=1)[:, : self._n_lags]
            self._weights += fft.irfft(self._taper_power, self._n_points())[: self._n_lags]
            self._size = 0
