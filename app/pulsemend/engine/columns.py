"""Pixel columns of a view and the pooling of samples or bins into them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

FIRST_BIN = 16
"""Samples in the finest bins of a pyramid."""
STEP = 4
"""Bins that one bin of the next level holds."""

Extremes = NDArray[Any]
"""Lowest and highest values of bins, shape (n_bins, 2, n_channels)."""


@dataclass(frozen=True)
class Grid:
    """Pixel columns, counted from the recording's first sample: they stay the same when a view moves.

    Parameters
    ----------
    first : int
        Number of the first column; column 0 starts at sample 0.
    count : int
        How many.
    per_column : float
        Samples per column.
    """

    first: int
    count: int
    per_column: float

    @property
    def level(self) -> int | None:
        """Level whose bins make up the columns; None where the samples themselves do."""
        if self.per_column < FIRST_BIN:
            return None
        return int(math.log(self.per_column / FIRST_BIN * (1 + 1e-12), STEP))

    def edges(self, n_samples: int, most_levels: int | None = None) -> NDArray[np.int64]:
        """Give the first samples of all columns that hold samples, and the end of the last.

        From 16 samples per column on they are whole bins: those whose middle lies in the column, which moves
        an edge by half a column at most.

        Parameters
        ----------
        n_samples : int
            Length of the recording.
        most_levels : int or None
            Levels there are; None for as many as needed.

        Returns
        -------
        int array, shape (n_columns + 1,)
            Rising strictly, within [0, n_samples]; empty where no column holds samples.
        """
        level = self.level
        if level is not None and most_levels is not None:
            level = min(level, most_levels - 1)
        size = 1 if level is None else bin_samples(level)
        middle = 0.0 if level is None else 0.5
        last_bin = -(-n_samples // size)
        number = np.arange(self.first, self.first + self.count + 1, dtype=np.float64)
        bins = np.ceil(number * (self.per_column / size) - middle).astype(np.int64)
        edges = np.unique(np.clip(bins, 0, last_bin)) * size
        edges = np.minimum(edges, n_samples)
        return edges if edges.size > 1 else edges[:0]


def bin_samples(level: int) -> int:
    """Count the samples in a bin of a level."""
    return int(FIRST_BIN * STEP**level)


def extremes(
    low: NDArray[Any], high: NDArray[Any], edges: NDArray[np.int64]
) -> tuple[NDArray[Any], NDArray[Any]]:
    """Pool the rows between neighbouring edges.

    Parameters
    ----------
    low, high : arrays, shape (n, n_channels)
        Lowest and highest values of what lies between the first edge and the last; samples twice.
    edges : int array, shape (n_columns + 1,)
        Rising strictly, from any origin.

    Returns
    -------
    lowest, highest : arrays, shape (n_columns, n_channels)
    """
    # A row of every column at a time: columns are short and many, numpy's reduceat takes 6 times as long.
    first = (edges - edges[0])[:-1]
    last = (edges - edges[0])[1:] - 1
    lowest = low.take(first, axis=0)
    highest = lowest.copy() if high is low else high.take(first, axis=0)
    for step in range(1, int((last - first).max()) + 1):
        row = np.minimum(first + step, last)
        more = low.take(row, axis=0)
        np.minimum(lowest, more, out=lowest)
        np.maximum(highest, more if high is low else high.take(row, axis=0), out=highest)
    return lowest, highest


def pooled(low: NDArray[Any], high: NDArray[Any] | None, size: int) -> Extremes:
    """Pool every ``size`` rows, the last bin from what is left; ``high`` None for samples."""
    n_whole = len(low) // size
    n_bins = -(-len(low) // size)
    pooled = np.empty((n_bins, 2, low.shape[1]), low.dtype)
    both = ((0, low, np.minimum.reduce), (1, low if high is None else high, np.maximum.reduce))
    for place, rows, reduce in both:
        whole = rows[: n_whole * size].reshape(n_whole, size, rows.shape[1])
        reduce(whole, axis=1, out=pooled[:n_whole, place])
        if n_bins > n_whole:
            reduce(rows[n_whole * size :], axis=0, out=pooled[n_whole, place])
    return pooled
