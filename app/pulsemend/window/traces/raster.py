"""Vertical spans into one picture: fractional coverage by a difference image and running sums. No Qt.

The cost depends on the number of pixels and spans, not on how far a trace swings, how many samples a column
holds or how wide the line is.
"""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray

FULL = 63
"""Coverage of a pixel that is wholly covered."""
INKS = 4
"""Inks that one picture can hold; a pixel is its ink times (FULL + 1) plus its coverage."""
_UNIT = FULL + 1
_ROWS = 48
_LEAST = 8
"""Coverage from which a later ink shows over an earlier one."""

Spans = NDArray[np.float32]
"""Upper or lower ends of spans in pixels from the top, shape (n_traces, n_columns)."""


class Raster:
    """A picture that spans are drawn into.

    Parameters
    ----------
    width, height : int
        In pixels.
    """

    def __init__(self, width: int, height: int) -> None:
        self.pixels = np.zeros((height, width), dtype=np.uint8)
        # 512 traces may lie over each other in one pixel; two rows more take what ends at the lower edge.
        self._steps = np.zeros((height + 2, width), dtype=np.int16)
        self._rows = list(self._steps)
        self._coverage = np.empty((height, width), dtype=np.uint8)
        self._empty = True

    def clear(self) -> None:
        """Make all pixels empty."""
        self.pixels.fill(0)
        self._empty = True

    def draw(self, top: Spans, bottom: Spans, ink: int, column: int = 0, line: float = 1.0) -> None:
        """Draw traces, each a span per column; they may lie over each other.

        Parameters
        ----------
        top, bottom : arrays, shape (n_traces, n_columns)
            Ends of the spans, top <= bottom; beyond the picture they are cut.
        ink : int
            0 to INKS - 1. A higher one hides a lower one wherever it covers an eighth of the pixel.
        column : int
            Where the first span stands.
        line : float
            Shortest a span may be; it is widened evenly to both sides.
        """
        if not top.size:
            return
        height = len(self.pixels)
        widen = np.maximum(np.float32(line) - (bottom - top), 0.0)
        widen *= np.float32(0.5)
        upper, lower = _in_units(top - widen, height), _in_units(bottom + widen, height)
        first = int(upper.min()) // _UNIT
        last = min(int(lower.max()) // _UNIT + 1, height)
        if last <= first:
            return
        self._scatter(upper, lower, column)
        self._sum(first, last)
        self._merge(first, last, ink)

    def _scatter(self, upper: NDArray[np.int32], lower: NDArray[np.int32], column: int) -> None:
        """Add to every span's first row and take from the row behind its last, each split by the fraction."""
        width = self.pixels.shape[1]
        flat = self._steps.reshape(-1)
        columns = np.arange(column, column + upper.shape[1], dtype=np.int32)
        for ends, put in ((upper, np.add.at), (lower, np.subtract.at)):
            part = (ends & FULL).astype(np.int16).ravel()
            ends >>= 6
            ends *= np.int32(width)
            ends += columns
            place = ends.ravel().astype(np.intp)
            put(flat, place, _UNIT - part)
            place += width
            put(flat, place, part)

    def _sum(self, first: int, last: int) -> None:
        """Turn steps into coverage, some rows at a time so that they stay in the processor's cache."""
        for start in range(first, last, _ROWS):
            stop = min(start + _ROWS, last)
            # Row by row: numpy's cumsum along this axis takes 15 times as long.
            for above, row in itertools.pairwise(self._rows[max(first, start - 1) : stop]):
                np.add(row, above, out=row)
            np.minimum(self._steps[start:stop], FULL, out=self._coverage[start:stop], casting="unsafe")
            self._steps[max(first, start - 1) : stop - 1] = 0
        self._steps[last - 1 : last + 2] = 0

    def _merge(self, first: int, last: int, ink: int) -> None:
        pixels, coverage = self.pixels[first:last], self._coverage[first:last]
        if self._empty:
            self._empty = False
            np.add(coverage, np.uint8(ink * _UNIT), out=pixels)
            return
        # The ink's number only where enough is covered: adding carries into the bit above the coverage.
        flags = coverage + np.uint8(_UNIT - _LEAST)
        flags &= np.uint8(_UNIT)
        flags *= np.uint8(ink)
        flags |= coverage
        np.maximum(pixels, flags, out=pixels)


def joined(top: Spans, bottom: Spans) -> tuple[Spans, Spans]:
    """Let neighbouring spans that do not touch meet half way between them."""
    joined_top, joined_bottom = top.copy(), bottom.copy()
    for left, right in ((bottom, top), (top, bottom)):
        middle = left[:, :-1] + right[:, 1:]
        middle *= np.float32(0.5)
        # Where the two overlap, the middle lies within both and changes nothing.
        after, before = (joined_top, joined_bottom) if right is top else (joined_bottom, joined_top)
        extend_after, extend_before = (np.minimum, np.maximum) if right is top else (np.maximum, np.minimum)
        extend_after(after[:, 1:], middle, out=after[:, 1:])
        extend_before(before[:, :-1], middle, out=before[:, :-1])
    return joined_top, joined_bottom


def _in_units(y: Spans, height: int) -> NDArray[np.int32]:
    y = np.clip(y, 0.0, float(height))
    y *= np.float32(_UNIT)
    return y.astype(np.int32)
