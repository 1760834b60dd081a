"""The lanes that are shown, as arrays by row: what is in sight is found by halving, not by looking at all."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pulsemend.mending.epoch_lanes import FATES, Lanes
from pulsemend.model.vocabulary import Fate

_KEPT = FATES.index(Fate.KEPT)


class LaneRows:
    """Some lanes, one per row.

    Parameters
    ----------
    lanes : Lanes
        All lanes.
    chosen : array of int
        Which are shown, in order.

    Attributes
    ----------
    boxes, markers : array of int
        Numbers of boxes and markers of the rows, in order of the rows.
    """

    def __init__(self, lanes: Lanes, chosen: NDArray[np.int32]) -> None:
        self.lanes = lanes
        self.chosen = chosen
        row_of = np.full(len(lanes.lanes), -1, np.int32)
        row_of[chosen] = np.arange(len(chosen), dtype=np.int32)
        self._row_of = row_of
        self.boxes, self._box_rows = _of_rows(row_of, lanes.box_lane)
        self.markers, self._marker_rows = _of_rows(row_of, lanes.marker_lane)
        self.low_s, self.high_s = lanes.span_s
        zero_of_box = lanes.zero_s[lanes.box_lane]
        self.box_start_s = lanes.box_start_s - zero_of_box
        self.box_stop_s = lanes.box_stop_s - zero_of_box
        self.marker_s = lanes.marker_s - lanes.zero_s[lanes.marker_lane]
        self.box_kept = lanes.box_fate == _KEPT

    def __len__(self) -> int:
        return len(self.chosen)

    def row_of_lane(self, lane: int) -> int:
        """Row of a lane; -1 if it is not shown."""
        return int(self._row_of[lane]) if 0 <= lane < len(self._row_of) else -1

    def row_of_trial(self, trial: int) -> int:
        """Row of a trial; -1 if it is not shown."""
        lanes = self.lanes.lanes
        # Trials are numbered from 1 in order.
        place = trial - 1
        if not (0 <= place < len(lanes) and lanes[place].trial == trial):
            place = next((i for i, lane in enumerate(lanes) if lane.trial == trial), -1)
        return self.row_of_lane(place)

    def boxes_of(self, first: int, stop: int) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
        """Boxes of some rows, and the row of each."""
        low, high = np.searchsorted(self._box_rows, (first, stop))
        return self.boxes[low:high], self._box_rows[low:high]

    def markers_of(self, first: int, stop: int) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
        """Markers of some rows, and the row of each."""
        low, high = np.searchsorted(self._marker_rows, (first, stop))
        return self.markers[low:high], self._marker_rows[low:high]

    def gaps_of(
        self, first: int, stop: int
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.int64]]:
        """Give starts and ends of the gaps in some rows, since the zero of each, and the row of each."""
        lanes, chosen = self.lanes, self.chosen[first:stop]
        begins = lanes.gap_first[chosen].astype(np.int64)
        counts = np.maximum(lanes.gap_stop[chosen] - begins, 0)
        of_rows = np.repeat(np.arange(first, stop), counts)
        # Numbers of each lane's gaps one after the other.
        numbers = np.arange(counts.sum()) + np.repeat(begins - np.cumsum(counts) + counts, counts)
        zeros_s = np.repeat(lanes.zero_s[chosen], counts)
        return lanes.gap_start_s[numbers] - zeros_s, lanes.gap_stop_s[numbers] - zeros_s, of_rows


def _of_rows(
    row_of: NDArray[np.int32], lane: NDArray[np.int32]
) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
    rows = row_of[lane]
    found = np.flatnonzero(rows >= 0).astype(np.int32)
    order = np.argsort(rows[found], kind="stable")
    return found[order], rows[found][order]
