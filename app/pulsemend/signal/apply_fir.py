"""Running FIR filters over blocks: banded matrix products for short ones and rate changes, FFT for long ones.

Both work on a fixed grid of output samples, counted from the start of the recording, and always with the
same shapes. So a sample's value, to the last bit, does not depend on the stretch it was asked for in.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import scipy.fft as sf
from numpy.lib.stride_tricks import as_strided
from numpy.typing import DTypeLike, NDArray

from pulsemend.signal.design import Taps


def rate_ratio(rate_in_hz: float, rate_out_hz: float) -> Fraction | None:
    """Output over input rate as a fraction with terms up to 1000, or None if it is none exactly."""
    ratio = Fraction(rate_out_hz / rate_in_hz).limit_denominator(1000)
    exact = abs(float(ratio) * rate_in_hz - rate_out_hz) <= 1e-12 * rate_out_hz
    return ratio if exact and ratio.numerator <= 1000 else None


@dataclass(frozen=True)
class BandedFilter:
    """A filter with a change of rate by ``up / down``, as a banded matrix on blocks of samples.

    Output sample k stands at input position ``k x down / up``.

    Parameters
    ----------
    matrix : array, shape (block, reach)
        Makes one block of output samples from `reach` input samples.
    up, down : int
    margin : int
        Input samples needed before the first and after the last output sample's position.
    """

    matrix: NDArray[np.float32] | NDArray[np.float64]
    up: int
    down: int
    margin: int

    @property
    def block(self) -> int:
        """Output samples per block: the grid that requests are rounded to."""
        return int(self.matrix.shape[0])

    @property
    def advance(self) -> int:
        """Input samples between the starts of two blocks."""
        return self.block // self.up * self.down

    def span(self, first_block: int, n_blocks: int) -> tuple[int, int]:
        """Input samples [start, stop) that `n_blocks` blocks from `first_block` on rest on."""
        start = first_block * self.advance - self.margin
        return start, start + (n_blocks - 1) * self.advance + int(self.matrix.shape[1])

    def run(self, x: NDArray[np.floating], n_blocks: int) -> NDArray[np.floating]:
        """Filter the input samples of `span`.

        Parameters
        ----------
        x : array, shape (n_samples, n_channels), C-contiguous
            Starts where `span` starts.
        n_blocks : int
            How many blocks to make.

        Returns
        -------
        array, shape (n_blocks x block, n_channels)
        """
        block, reach = self.matrix.shape
        n_channels = x.shape[1]
        view = as_strided(
            x, (n_blocks, reach, n_channels), (self.advance * x.strides[0], *x.strides), writeable=False
        )
        y: NDArray[np.floating] = np.matmul(self.matrix, view)
        return y.reshape(n_blocks * block, n_channels)


def banded(taps: Taps, ratio: Fraction, dtype: DTypeLike, *, least_block: int = 12) -> BandedFilter:
    """Lay centred taps out as a banded matrix.

    Parameters
    ----------
    taps : array, shape (2 x half + 1,)
        At input rate x the ratio's numerator; a low-pass, whose gain at 0 Hz becomes 1.
    ratio : Fraction
        Output over input rate.
    dtype : dtype
        Of the samples to come.
    least_block : int
        Output samples per block at least; rounded up to a multiple of the numerator.
    """
    up, down = ratio.numerator, ratio.denominator
    half = taps.size // 2
    margin = -(-half // up)
    block = -(-least_block // up) * up
    reach = (block - 1) * down // up + 2 * margin + 1
    k = np.arange(block)[:, None]
    at = half + k * down - (np.arange(reach)[None, :] - margin) * up
    inside = (at >= 0) & (at < taps.size)
    matrix = np.where(inside, taps[np.clip(at, 0, taps.size - 1)], 0.0)
    # Each of the `up` phases sees its own taps; all must pass a constant unchanged.
    matrix /= matrix.sum(axis=1, keepdims=True)
    return BandedFilter(np.ascontiguousarray(matrix, dtype=dtype), up, down, margin)


class FftFilter:
    """A long symmetric filter by overlap-save FFT on a fixed grid of blocks.

    Parameters
    ----------
    taps : array, shape (2 x half + 1,)
        Symmetric, centred.
    dtype : dtype
        Of the samples to come.

    Attributes
    ----------
    margin : int
        Samples needed before and after a block.
    block : int
        Output samples per block.
    """

    GROUP = 8
    """Channels transformed together: the working set stays in the cache."""

    def __init__(self, taps: Taps, dtype: DTypeLike) -> None:
        self.margin = taps.size // 2
        # Measured: six times the taps cost least; more leave the cache, fewer repeat too much of the margins.
        self._size = int(sf.next_fast_len(max(4096, 6 * taps.size), real=True))
        self.block = self._size - 2 * self.margin
        kernel = np.zeros(self._size)
        kernel[: self.margin + 1] = taps[self.margin :]
        if self.margin:
            kernel[-self.margin :] = taps[: self.margin]
        self._response = sf.rfft(kernel).real.astype(dtype)

    def run(self, x: NDArray[np.floating]) -> NDArray[np.floating]:
        """Filter one block.

        Parameters
        ----------
        x : array, shape (n_channels, block + 2 x margin)
            The block with its margins.

        Returns
        -------
        array, shape (n_channels, block)
        """
        y = np.empty((x.shape[0], self.block), x.dtype)
        for c in range(0, x.shape[0], self.GROUP):
            spectrum = sf.rfft(x[c : c + self.GROUP], axis=1)
            spectrum *= self._response
            y[c : c + self.GROUP] = sf.irfft(spectrum, self._size, axis=1, overwrite_x=True)[
                :, self.margin : self.margin + self.block
            ]
        return y
