"""Power spectral density from short segments of signal, where the signal may have holes."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft

_LEAST_SEGMENTS = 3
"""Fewer segments say little about a spectrum: then shorter ones are taken, if that helps."""

# Channels transformed at a time, so that the work stays within the processor's cache.
_CHANNELS_AT_A_TIME = 8


class WelchSum:
    """Averages the periodograms of segments, one by one [1]_.

    Each segment has its mean removed and is tapered by a raised cosine that would start again right behind
    its end. Whoever adds the segments lets them overlap by half, which with this taper uses the signal
    almost evenly.

    Parameters
    ----------
    size : int
        Samples in every segment.
    rate_hz : float
        Sampling rate.
    highest_hz : float
        Frequencies above are left out.

    Raises
    ------
    ValueError
        Segments of fewer than two samples.

    References
    ----------
    .. [1] Welch PD (1967) The use of fast Fourier transform for the estimation of power spectra: a method
       based on time averaging over short, modified periodograms. IEEE Trans Audio Electroacoust 15:70-73.
       doi:10.1109/TAU.1967.1161901
    """

    def __init__(self, size: int, rate_hz: float, highest_hz: float = math.inf) -> None:
        if size < 2:
            raise ValueError(f"a segment needs two samples; received {size}")
        self._taper = 0.5 - 0.5 * np.cos(2.0 * np.pi * np.arange(size) / size)
        frequency = np.arange(size // 2 + 1, dtype=np.float64) * (rate_hz / size)
        self._frequency_hz: NDArray[np.float64] = frequency[frequency <= highest_hz]
        # One side stands for both, but for zero and for half the rate, which have no partner.
        self._sides = np.full(frequency.size, 2.0)
        self._sides[0] = 1.0
        if size % 2 == 0:
            self._sides[-1] = 1.0
        self._sides /= rate_hz * float(np.sum(self._taper**2))
        self._sum: NDArray[np.float64] | None = None
        self._n_segments = 0

    @property
    def frequency_hz(self) -> NDArray[np.float64]:
        """Frequencies of the result, shape (n_frequencies,)."""
        return self._frequency_hz

    @property
    def n_segments(self) -> int:
        """Segments taken in so far."""
        return self._n_segments

    def add(self, x: NDArray[Any]) -> None:
        """Take in one segment of finite signal.

        Parameters
        ----------
        x : array, shape (size, n_channels)
            In any one unit.

        Raises
        ------
        ValueError
            It has another length.
        """
        if len(x) != self._taper.size:
            raise ValueError(f"segments have {self._taper.size} samples; received {len(x)}")
        kept = self._frequency_hz.size
        power = np.empty((x.shape[1], kept))
        for first in range(0, x.shape[1], _CHANNELS_AT_A_TIME):
            # Always a copy: a single column would otherwise be the caller's own.
            rows = np.array(x[:, first : first + _CHANNELS_AT_A_TIME].T, dtype=np.float64, order="C")
            rows -= rows.mean(axis=1, keepdims=True)
            rows *= self._taper
            lines = fft.rfft(rows, axis=1)[:, :kept]
            power[first : first + len(rows)] = lines.real**2 + lines.imag**2
        self._sum = power if self._sum is None else self._sum + power
        self._n_segments += 1

    def density(self) -> NDArray[np.float64]:
        """One-sided power spectral density.

        Returns
        -------
        array, shape (n_channels, n_frequencies)
            Squared unit of the signal per hertz.

        Raises
        ------
        ValueError
            No segment was taken in.
        """
        if self._sum is None:
            raise ValueError("no segment was taken in")
        density: NDArray[np.float64] = self._sum * self._sides[: self._frequency_hz.size] / self._n_segments
        return density


def choose_size(lengths: Sequence[int], sizes: Sequence[int]) -> int | None:
    """Choose how long segments are, for stretches of signal of these lengths.

    Parameters
    ----------
    lengths : sequence of int
        Samples of each stretch without a hole.
    sizes : sequence of int
        Lengths to choose from, the longest and so the finest in frequency first.

    Returns
    -------
    int or None
        The first whose segments are several and reach half of the signal; else the last, and None if not
        even that fits anywhere.
    """
    total = sum(lengths)
    for size in sizes:
        counts = [len(segment_starts(0, length, size)) for length in lengths]
        covered = sum(size + (count - 1) * _step(size) for count in counts if count)
        if sum(counts) >= _LEAST_SEGMENTS and 2 * covered >= total:
            return size
    return sizes[-1] if any(length >= sizes[-1] for length in lengths) else None


def segment_starts(start: int, stop: int, size: int) -> range:
    """First samples of segments that overlap by half and lie within [start, stop)."""
    return range(start, stop - size + 1, _step(size))


def _step(size: int) -> int:
    return max(1, size - size // 2)
