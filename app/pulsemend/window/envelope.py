"""How strong the signal is along the whole recording: one number per column. No Qt."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.columns import FIRST_BIN, STEP, Grid
from pulsemend.engine.pyramid import Pyramid
from pulsemend.window.traces.sampler import Sampler

_PIECES = 4
"""Pieces of a column, at least: their median passes over pulses, which all columns of a wide view hold."""
_MOST_CHANNELS = 16
_TALL = 95
"""Percentile of the columns that fills the height."""


def chosen(candidates: NDArray[np.intp]) -> NDArray[np.intp]:
    """Choose channels, evenly among the candidates, that stand for all: the median of 16 is that of 64."""
    places = np.linspace(0, candidates.size - 1, min(candidates.size, _MOST_CHANNELS)).round()
    return candidates[places.astype(np.intp)]


def exact(
    pyramid: Pyramid, n_columns: int, channels: NDArray[np.intp], uv_per_unit: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Range of the signal along the recording, from all of its samples.

    Parameters
    ----------
    pyramid : Pyramid
        Of the recording.
    n_columns : int
        Columns that the recording is divided into.
    channels : int array, shape (n,)
        Channels that count.
    uv_per_unit : array, shape (n_channels,)
        Of all channels.

    Returns
    -------
    array, shape (n_columns,)
        Microvolts: each column's pieces, the middle channel's range in each, and of these the middle one.
    """
    piece = pyramid.n_samples / max(1, n_columns) / _PIECES
    level = math.floor(math.log(max(piece / FIRST_BIN, 1.0), STEP) + 1e-9)
    level = min(level, pyramid.n_levels - 1)
    n_bins = -(-pyramid.n_samples // (FIRST_BIN * STEP**level))
    bins = pyramid.bins(level, 0, n_bins)[:, :, channels].astype(np.float32)
    ranges = np.median((bins[:, 1] - bins[:, 0]) * np.abs(uv_per_unit[channels]), axis=1)
    edges = np.minimum(np.arange(n_columns + 1) * n_bins // n_columns, n_bins - 1)
    first, last = edges[:-1], np.maximum(edges[1:] - 1, edges[:-1])
    in_column = np.minimum(first[:, None] + np.arange(int((last - first).max()) + 1), last[:, None])
    middle: NDArray[np.float64] = np.median(ranges[in_column], axis=1)
    return middle


def coarse(
    sampler: Sampler,
    grid: Grid,
    channels: NDArray[np.intp],
    uv_per_unit: NDArray[np.float64],
    budget_s: float,
) -> tuple[NDArray[np.float64], bool]:
    """Range of short probes along the recording, and whether all of them have been read."""
    lowest, highest, complete = sampler.columns(grid, budget_s)
    ranges = (highest[channels] - lowest[channels]) * np.abs(uv_per_unit[channels])[:, None]
    return np.median(ranges, axis=0), complete


def heights(ranges_uv: NDArray[np.float64]) -> NDArray[np.float64]:
    """Share of the height that each column takes, 0 to 1; usual columns take half of it."""
    if not ranges_uv.size:
        return ranges_uv
    full = max(float(np.percentile(ranges_uv, _TALL)), 2.0 * float(np.median(ranges_uv)))
    return np.clip(ranges_uv / full, 0.0, 1.0) if full > 0 else np.zeros_like(ranges_uv)
