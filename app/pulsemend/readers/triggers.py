"""Markers from trigger channels: arrays in, events out."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import numpy as np
from numpy.typing import NDArray

LOW_16_BITS = 0xFFFF


def trigger_events(blocks: Iterable[NDArray[np.int64]]) -> Iterator[tuple[int, int]]:
    """Find the events in the levels of one trigger channel.

    A level held for many samples is one event at its first sample; zero is none; a change from one level to
    another is a new event. Where the channel is cut into blocks makes no difference.

    Parameters
    ----------
    blocks : iterable of array, shape (n_samples,)
        The channel from its first sample on, in pieces of any length.

    Yields
    ------
    sample, level : int
        Samples count from the start of the first block.
    """
    before = 0
    first = 0
    for block in blocks:
        if not block.size:
            continue
        changed = np.flatnonzero(np.diff(block, prepend=before))
        for index in changed[block[changed] != 0]:
            yield first + int(index), int(block[index])
        before = int(block[-1])
        first += len(block)
