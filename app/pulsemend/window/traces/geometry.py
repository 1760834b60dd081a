"""Where rows and times lie in the traces' widget, in its own pixels. No Qt."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.columns import Grid
from pulsemend.session.view import View

HEADER = 24
"""Height of the strip of event shapes above the traces."""
AXIS = 20
"""Height of the strip of times below them."""
LEAST_ROW = 6.0
"""Rows are never lower; what does not fit is scrolled."""


@dataclass(frozen=True)
class TimeScale:
    """Times and horizontal places.

    Parameters
    ----------
    grid : Grid
        One column per pixel of the screen.
    rate_hz : float
        Recorded rate.
    ratio : float
        Pixels of the screen per pixel of the widget.
    """

    grid: Grid
    rate_hz: float
    ratio: float = 1.0

    @classmethod
    def of(cls, view: View, width: int, rate_hz: float, ratio: float = 1.0) -> TimeScale:
        """Scale of a view, its left edge moved to the nearest whole column: panning does not shimmer."""
        count = max(1, round(width * ratio))
        per_column = max(view.width_s * rate_hz / count, 1e-6)
        return cls(Grid(round(view.start_s * rate_hz / per_column), count, per_column), rate_hz, ratio)

    @property
    def column_s(self) -> float:
        """Seconds per column."""
        return self.grid.per_column / self.rate_hz

    @property
    def start_s(self) -> float:
        """Time of the left edge."""
        return self.grid.first * self.column_s

    @property
    def stop_s(self) -> float:
        """Time of the right edge."""
        return (self.grid.first + self.grid.count) * self.column_s

    def x_of(self, time_s: float) -> float:
        """Place of a time."""
        return (time_s / self.column_s - self.grid.first) / self.ratio

    def xs_of(self, times_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Places of many times."""
        places: NDArray[np.float64] = (times_s / self.column_s - self.grid.first) / self.ratio
        return places

    def time_at(self, x: float) -> float:
        """Time at a place."""
        return (x * self.ratio + self.grid.first) * self.column_s

    def sample_at(self, x: float, n_samples: int) -> int:
        """Find the recorded sample nearest to a place."""
        return int(np.clip(round(self.time_at(x) * self.rate_hz), 0, n_samples - 1))


@dataclass(frozen=True)
class Rows:
    """Rows of traces, one below the other.

    Parameters
    ----------
    n_rows : int
    height : int
        Of the widget.
    scroll : int
        How far the rows are scrolled up.
    """

    n_rows: int
    height: int
    scroll: int = 0

    @property
    def top(self) -> int:
        """Upper edge of the traces."""
        return HEADER

    @property
    def area(self) -> int:
        """Height of the traces' part of the widget."""
        return max(1, self.height - HEADER - AXIS)

    @property
    def row_height(self) -> float:
        """Height of one row."""
        return max(LEAST_ROW, self.area / max(1, self.n_rows))

    @property
    def scroll_range(self) -> int:
        """How far the rows can be scrolled; 0 where all fit."""
        return max(0, math.ceil(self.n_rows * self.row_height - self.area - 1e-6))

    @property
    def visible(self) -> range:
        """Rows of which something is in view."""
        first = int(self.scroll / self.row_height)
        last = math.ceil((self.scroll + self.area) / self.row_height - 1e-9)
        return range(min(first, self.n_rows), min(last, self.n_rows))

    def middle(self, row: int) -> float:
        """Vertical place of a row's middle."""
        return self.top + (row + 0.5) * self.row_height - self.scroll

    def row_at(self, y: float) -> int | None:
        """Row at a vertical place; None outside the traces."""
        if not self.top <= y < self.top + self.area:
            return None
        row = int((y - self.top + self.scroll) / self.row_height)
        return row if row < self.n_rows else None

    def nearest_row(self, y: float) -> int | None:
        """Row nearest to a vertical place; None only without rows."""
        if not self.n_rows:
            return None
        return int(np.clip((y - self.top + self.scroll) / self.row_height, 0, self.n_rows - 1))

    def scrolled_to(self, row: int) -> int:
        """Scroll position nearest to the present one that has a row in full view."""
        low = math.ceil((row + 1) * self.row_height - self.area)
        high = math.floor(row * self.row_height)
        return int(np.clip(np.clip(self.scroll, low, high), 0, self.scroll_range))
