"""The fills: how the samples of a gap are estimated from its flanks.

========================  ==================================================================
``line``                  straight line between the means of both flanks, at their mean times
``cubic``                 least-squares cubic in time through both flanks
``monotone``              monotone piecewise cubic through two knots per flank
``autoregressive``        prediction from either side, cross-faded
``covariance``            conditional mean under the channel's own autocovariance
========================  ==================================================================

With one flank only (by choice, or because the other has no good sample), ``line`` holds the mean of
that flank, ``cubic`` and ``monotone`` hold its nearest sample because a polynomial would run away,
``autoregressive`` is the prediction from that side alone and ``covariance`` the conditional mean
given that side alone. With no flank at all the gap becomes zero. A fill is an estimate, never a
measurement.
"""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import DTypeLike, NDArray

from pulsemend.signal.burg import burg, predict
from pulsemend.signal.gaps import Gap
from pulsemend.signal.kriging import flank_knots, kriging_weights
from pulsemend.signal.monotone import monotone_interpolation

FILL_KINDS = ("line", "cubic", "monotone", "autoregressive", "covariance")
SIDES = ("both", "before", "after")

AUTOREGRESSIVE_ORDER = 20
# Of 50 ms flanks at 5 kHz (500 samples) these do within 0.3 % as well as all of them.
MOST_KNOTS = 200
WEIGHT_BYTES = 64_000_000

_DEFAULT_FLANK_S = {
    "line": 0.0,
    "cubic": 0.010,
    "monotone": 0.005,
    "autoregressive": 0.200,
    "covariance": 0.050,
}

Samples = NDArray[Any]  # float32 or float64, shape (n_samples, n_channels)


def default_flank_s(kind: str) -> float:
    """Flank length of a fill in seconds where the plan names none; 0.0 means one sample.

    Raises
    ------
    ValueError
        If there is no such fill.
    """
    if kind not in _DEFAULT_FLANK_S:
        raise ValueError(f"kind must be one of {FILL_KINDS}; received {kind!r}")
    return _DEFAULT_FLANK_S[kind]


def flank_samples(flank_s: float, rate_hz: float) -> int:
    """Flank length in samples, at least one."""
    return max(1, round(flank_s * rate_hz))


def lags_needed(size: int, flank: int) -> int:
    """Count the autocovariance lags with which ``covariance`` can use both whole flanks of a gap."""
    return size + 2 * flank


@dataclass(frozen=True, eq=False)
class FillConfig:
    """What a fill needs to know besides the signal.

    Attributes
    ----------
    kind : str
        One of `FILL_KINDS`.
    side : str
        Which flanks may be used: "both", "before" or "after".
    flank : int
        Number of samples used on either side at most; at least one.
    rate_hz : float
        Sampling rate in hertz.
    autocovariance : array, shape (n_channels, n_lags), or None
        For "covariance" only, one row for each column that is filled; see
        `pulsemend.signal.autocovariance`. Where its lags do not span a gap and both flanks, the
        flanks are used less far.
    """

    kind: str
    side: str
    flank: int
    rate_hz: float
    autocovariance: NDArray[np.float64] | None = None

    def __post_init__(self) -> None:
        if self.kind not in FILL_KINDS:
            raise ValueError(f"kind must be one of {FILL_KINDS}; received {self.kind!r}")
        if self.side not in SIDES:
            raise ValueError(f"side must be one of {SIDES}; received {self.side!r}")
        if self.flank < 1:
            raise ValueError(f"flank must be at least 1 sample; received {self.flank}")
        if self.kind == "covariance" and self.autocovariance is None:
            raise ValueError("the fill 'covariance' needs an autocovariance")


class Filler:
    """Fills gaps in place, always in the same way for the same flanks.

    Its only state is a bounded store of weights, so the result does not depend on what was filled
    before nor on how much signal around a gap is at hand.

    Parameters
    ----------
    config : FillConfig
        What to do.
    n_channels : int
        Number of columns of the arrays to come.
    dtype : dtype
        Their type, float32 or float64. Weights are computed in float64 and kept in this type.
    columns : array of int or None
        The columns that are filled; all if None. The rows of the autocovariance belong to them.

    Raises
    ------
    ValueError
        If the autocovariance has not one row for each column filled.
    """

    def __init__(
        self,
        config: FillConfig,
        n_channels: int,
        dtype: DTypeLike,
        columns: NDArray[np.intp] | None = None,
    ) -> None:
        self._config = config
        self._dtype = np.dtype(dtype)
        self._columns: slice | NDArray[np.intp] = slice(None) if columns is None else np.asarray(columns)
        self._n_filled = n_channels if columns is None else len(columns)
        self._held = _HeldWeights()
        rows = config.autocovariance
        if config.kind == "covariance" and (rows is None or len(rows) != self._n_filled):
            raise ValueError(f"autocovariance must have {self._n_filled} rows, one per column filled")

    @property
    def held_bytes(self) -> int:
        """Memory taken by the weights held, at most `WEIGHT_BYTES`."""
        return self._held.n_bytes

    def fill(self, x: Samples, origin: int, gap: Gap) -> None:
        """Replace the samples of one gap in all columns filled.

        Parameters
        ----------
        x : array, shape (n_samples, n_channels)
            Signal in any unit, changed in place. Only flank samples of the gap are read.
        origin : int
            Recorded sample number of ``x[0]``.
        gap : Gap
            In recorded sample numbers; the gap and the flanks that are used must lie within ``x``.

        Raises
        ------
        ValueError
            If the gap or its flanks reach beyond ``x``.
        """
        config = self._config
        left = min(gap.left, config.flank) if config.side != "after" else 0
        right = min(gap.right, config.flank) if config.side != "before" else 0
        start, stop = gap.start - origin, gap.stop - origin
        if start - left < 0 or stop + right > len(x):
            raise ValueError(f"{gap} with its flanks is not within samples {origin} to {origin + len(x)}")
        if not left and not right:
            x[start:stop, self._columns] = 0.0
            return
        nearest = x[start - 1 if left else stop, self._columns].copy()
        # Fresh arrays: the arithmetic then never depends on where the flanks lie in memory. And all
        # fills work on the departure from one good sample: a constant comes back exactly, and float32
        # keeps its resolution whatever the offset.
        before = x[start - left : start, self._columns] - nearest
        after = x[stop : stop + right, self._columns] - nearest
        x[start:stop, self._columns] = self._estimate(before, after, gap.size) + nearest

    def _estimate(self, before: Samples, after: Samples, size: int) -> Samples:
        """Estimate the gap from its flanks: shape (size, n_filled), in the type of the signal."""
        kind = self._config.kind
        if kind == "covariance":
            return self._conditional_mean(before, after, size)
        if kind == "monotone" and len(before) and len(after):
            return _monotone(before, after, size).astype(self._dtype)
        if kind == "autoregressive":
            return _autoregressive(before, after, size).astype(self._dtype)
        # A monotone curve with one flank only is left to the cubic's rule: the nearest sample is held.
        weights = self._held.get((size, len(before), len(after)))
        if weights is None:
            shape = line_weights if kind == "line" else cubic_weights
            weights = shape(size, len(before), len(after)).astype(self._dtype)
            self._held.put((size, len(before), len(after)), weights)
        return np.asarray(weights @ np.concatenate([before, after]))

    def _conditional_mean(self, before: Samples, after: Samples, size: int) -> Samples:
        autocovariance = self._config.autocovariance
        if autocovariance is None:  # refused by FillConfig
            raise ValueError("the fill 'covariance' needs an autocovariance")
        left, right = _within_lags(size, len(before), len(after), autocovariance.shape[1])
        if size + left + right > autocovariance.shape[1]:
            # The gap alone is longer than what is known of the signal.
            nearest = np.concatenate([before[len(before) - left :], after[:right]])
            return np.asarray(line_weights(size, left, right).astype(self._dtype) @ nearest)
        knots = flank_knots(size, left, right, self._most_knots(size))
        weights = self._held.get((size, left, right))
        if weights is None:
            weights = np.empty((self._n_filled, size, len(knots)), self._dtype)
            for row, of_channel in zip(weights, autocovariance, strict=True):
                row[:] = kriging_weights(of_channel, knots, size)
            self._held.put((size, left, right), weights)
        flanks = np.concatenate([before[len(before) + knots[knots < 0]], after[knots[knots >= size] - size]])
        return np.asarray(np.matmul(weights, flanks.T[:, :, None])[:, :, 0].T)

    def _most_knots(self, size: int) -> int:
        """Knots per channel with which the weights of one gap stay within the limit."""
        bytes_per_knot = self._n_filled * size * self._dtype.itemsize
        return int(np.clip(WEIGHT_BYTES // max(1, bytes_per_knot), 2, MOST_KNOTS))


class _HeldWeights:
    """The weights last used, within a limit of memory; the longest unused go first."""

    def __init__(self) -> None:
        self._arrays: OrderedDict[tuple[int, int, int], Samples] = OrderedDict()

    @property
    def n_bytes(self) -> int:
        return sum(weights.nbytes for weights in self._arrays.values())

    def get(self, geometry: tuple[int, int, int]) -> Samples | None:
        found = self._arrays.get(geometry)
        if found is not None:
            self._arrays.move_to_end(geometry)
        return found

    def put(self, geometry: tuple[int, int, int], weights: Samples) -> None:
        self._arrays[geometry] = weights
        while self.n_bytes > WEIGHT_BYTES:
            self._arrays.popitem(last=False)


def line_weights(size: int, left: int, right: int) -> NDArray[np.float64]:
    """Weights of the flank samples for the straight line between the means of both flanks.

    Parameters
    ----------
    size, left, right : int
        Samples in the gap, before it and after it; not both flanks empty. With one flank the line is
        that flank's mean.

    Returns
    -------
    array, shape (size, left + right)
    """
    if not left or not right:
        return np.full((size, left + right), 1.0 / (left + right))
    from_mean, to_mean = -(left + 1) / 2.0, size - 1 + (right + 1) / 2.0
    share = ((np.arange(size) - from_mean) / (to_mean - from_mean))[:, None]
    return np.hstack([np.repeat((1.0 - share) / left, left, axis=1), np.repeat(share / right, right, axis=1)])


def cubic_weights(size: int, left: int, right: int) -> NDArray[np.float64]:
    """Weights of the flank samples for a least-squares cubic in time through both flanks.

    A flank of a single sample fixes a value and no slope; the polynomial is then a line. With one
    flank only its nearest sample is held.

    Parameters
    ----------
    size, left, right : int
        Samples in the gap, before it and after it; not both flanks empty.

    Returns
    -------
    array, shape (size, left + right)
    """
    if not left or not right:
        weights = np.zeros((size, left + right))
        weights[:, left - 1 if left else 0] = 1.0
        return weights
    degree = 3 if min(left, right) > 1 else 1
    inside = np.arange(size)
    outside = np.concatenate([np.arange(-left, 0), np.arange(size, size + right)])
    middle, half = (size + right - 1 - left) / 2.0, (size + left + right) / 2.0
    polynomials = np.polynomial.legendre.legvander
    at_flanks = np.asarray(polynomials((outside - middle) / half, degree))
    return np.asarray(polynomials((inside - middle) / half, degree) @ np.linalg.pinv(at_flanks))


def _monotone(before: Samples, after: Samples, size: int) -> NDArray[np.float64]:
    """Monotone curve through two knots per flank: the means of its far half and of its near half."""
    knots: list[float] = []
    values: list[NDArray[np.float64]] = []
    for flank, first in ((before, -len(before)), (after, size)):
        half = len(flank) // 2
        for start, stop in ((0, half), (half, len(flank))):
            if start < stop:
                knots.append(first + (start + stop - 1) / 2.0)
                values.append(flank[start:stop].mean(axis=0, dtype=np.float64))
    return monotone_interpolation(np.array(knots), np.array(values), np.arange(size, dtype=np.float64))


def _autoregressive(before: Samples, after: Samples, size: int) -> NDArray[np.float64]:
    """Predictions from both sides, the weight of the later one rising evenly across the gap."""
    if not len(after):
        return _prediction(before, size)
    if not len(before):
        return _prediction(after[::-1], size)[::-1]
    share = (np.arange(1, size + 1) / (size + 1.0))[:, None]
    forward, backward = _prediction(before, size), _prediction(after[::-1], size)[::-1]
    return np.asarray(forward + share * (backward - forward))


def _prediction(flank: Samples, n_ahead: int) -> NDArray[np.float64]:
    """Continue a flank by its own model, of at most a third of its length, around its own mean."""
    known = flank.astype(np.float64)
    mean = known.mean(axis=0)
    known -= mean
    coefficients, _ = burg(known, min(AUTOREGRESSIVE_ORDER, len(known) // 3))
    # A stable model may still swing far before it settles; the flank's own range bounds it.
    most = np.abs(known).max(axis=0)
    return np.asarray(np.clip(predict(coefficients, known, n_ahead), -most, most) + mean)


def _within_lags(size: int, left: int, right: int, n_lags: int) -> tuple[int, int]:
    """Shorten flanks until every lag between two samples is known; one sample of each always stays."""
    spare = max(0, n_lags - size)
    if left + right <= spare:
        return left, right
    if not left or not right:
        return min(left, max(1, spare)), min(right, max(1, spare))
    half = max(1, spare // 2)
    return min(left, half), min(right, half)
