"""Reading the channels that are processed, as the file stores them."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.setup import Setup
from pulsemend.model.recording import Recording


def read_stored(
    recording: Recording,
    setup: Setup,
    start: int,
    stop: int,
    offset: NDArray[np.float64] | None = None,
    dtype: type[np.floating] | np.dtype[np.floating] = np.float64,
) -> NDArray[Any]:
    """Read the used channels of a stretch, in stored units minus `offset` (shape (n_used,)).

    Returns
    -------
    array, shape (stop - start, n_used), C-contiguous
    """
    n_channels = len(setup.facts.channels)
    x = np.empty((stop - start, n_channels), dtype)
    all_offsets = None
    if offset is not None:
        all_offsets = np.zeros(n_channels)
        all_offsets[setup.used] = offset
    recording.read(start, stop, x, all_offsets)
    return x if setup.used.size == n_channels else np.ascontiguousarray(x[:, setup.used])
