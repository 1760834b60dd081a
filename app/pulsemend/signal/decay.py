"""The decay that a pulse leaves behind after its gap: its shape from the median pulse, its size per pulse.

============================  =====================================
``exponential``               ``a e^(-t/tau) + c``
``two exponentials``          ``a e^(-t/tau) + b e^(-t/upsilon) + c``
``power``                     ``a (1 + t/t0)^(-p) + c``
============================  =====================================

The decay is what falls to zero; ``c``, the level it falls to, stays in the signal. The signal before the
pulse is never looked at, so a step at the pulse is no part of a decay and no curve is ever laid across a
pulse. A power law is what electrode and skin show [1]_: order 1 at one electrode, 2 after referencing.

References
----------
.. [1] Freche D, Naim-Feil J, Peled A, Levit-Binnun N, Moses E (2018) A quantitative physical model of the
   TMS-induced discharge artifacts in EEG. PLoS Comput Biol 14(7):e1006177.
   doi:10.1371/journal.pcbi.1006177
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

DECAY_KINDS = ("exponential", "two exponentials", "power")

LEAST_TAU_S = 0.0005
"""A decay faster than this belongs to the pulse, and into its gap; common practice: none known."""

LONGEST_TAU = 2.0
"""A decay is told from a drift only if it is faster than so many times the stretch."""

POWERS = (1.0, 4.0)
"""Orders looked for: 1 and 2 are what the model of the paper gives, filters in the skin may add to it."""

LEAST_EXPLAINED = 0.5
"""A shape that leaves more than this share of the median pulse's variance unexplained is not its shape."""

_GRID = 16
_FAR = 1e9
_STARTS = 6
_FIRST_STEPS = 20
_KEPT = 3
_MOST_STEPS = 200
_SETTLED = 1e-12
_LARGEST = 3.0
"""A decay many times as large as what is seen of it rests on what lies outside the stretch."""

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class DecayShape:
    """A decay as it was fitted, without its level.

    Parameters
    ----------
    kind : str
        One of `DECAY_KINDS`.
    values : tuple of float
        ``(a, tau)``, ``(a, tau, b, upsilon)`` or ``(a, t0, p)``; amplitudes in the signal's unit, times in s.
    """

    kind: str
    values: tuple[float, ...]

    def at(self, times_s: Floats) -> Floats:
        """Size of the decay at times counted as in the fit, in the signal's unit."""
        return np.asarray(_curves(self.kind, np.array([self.values]), np.asarray(times_s, np.float64))[0])


@dataclass(frozen=True)
class DecayFit:
    """Result of a fit.

    Parameters
    ----------
    shape : DecayShape or None
        None where no decay was found.
    level : float
        What the signal falls to.
    reason : str
        Why there is no shape; empty where there is one.
    """

    shape: DecayShape | None
    level: float = 0.0
    reason: str = ""


class Late(NamedTuple):
    """What is known of the signal long after the stretch: it tells a slow decay from another level.

    Parameters
    ----------
    times_s : array, shape (n_late,)
        Counted as in the stretch.
    y : array, shape (n_late,)
        Counts together as much as the whole stretch.
    """

    times_s: Floats
    y: Floats


NOTHING_LATE = Late(np.zeros(0), np.zeros(0))


def fit_shape(
    times_s: Floats, y: Floats, kind: str, late: Late = NOTHING_LATE, *, level: bool = True
) -> DecayFit:
    """Fit a decay by bounded least squares [1]_, from the best of a grid of time constants on.

    Parameters
    ----------
    times_s : array, shape (n_times,)
        Rising, evenly. Amplitudes belong to time 0; the first time need not be 0.
    y : array, shape (n_times,)
        The median pulse, in any unit.
    kind : str
        One of `DECAY_KINDS`.
    late : Late
        Further points.
    level : bool
        Whether the signal may fall to another level than zero.

    Returns
    -------
    DecayFit

    Raises
    ------
    ValueError
        There is no such kind.

    References
    ----------
    .. [1] Marquardt DW (1963) An algorithm for least-squares estimation of nonlinear parameters. J Soc Ind
       Appl Math 11:431-441. doi:10.1137/0111030
    """
    if kind not in DECAY_KINDS:
        raise ValueError(f"kind must be one of {DECAY_KINDS}; received {kind!r}")
    y = np.asarray(y, np.float64)
    if len(y) < 4 * _n_values(kind):
        return DecayFit(None, reason="the stretch after the gap is too short")
    size = float(np.ptp(y))
    if not size or not np.isfinite(size):
        return DecayFit(None, reason="the signal after the gap is constant")
    # Amplitudes near one, whatever the unit; and positive, because all of a decay falls in one direction.
    end = late.y if late.y.size else y[-max(1, len(y) // 3) :]
    factor = size if y[: max(1, len(y) // 10)].mean() >= end.mean() else -size
    points = _points(times_s, kind, late, level)
    target = np.concatenate([y, late.y])[None] / factor
    starts = _from_grid(points, target[0])
    values, costs = _descend(points, np.tile(target, (len(starts), 1)), starts, _FIRST_STEPS)
    # What looks best early is not always so in the end.
    best = values[np.argsort(costs)[:_KEPT]]
    values, costs = _descend(points, np.tile(target, (len(best), 1)), best)
    return _judged(points, values[int(np.argmin(costs))], target[0], factor)


def fit_again(
    times_s: Floats, ys: Floats, before: DecayFit, late: Late = NOTHING_LATE, late_ys: Floats | None = None
) -> list[DecayFit]:
    """Repeat a fit for many signals that differ little from the one it was made for, all at once.

    Parameters
    ----------
    times_s : array, shape (n_times,)
        As in the fit.
    ys : array, shape (n_signals, n_times)
        The signals.
    before : DecayFit
        With a shape; where the search starts.
    late : Late
        As in the fit; only its times count here.
    late_ys : array, shape (n_signals, n_late), or None
        The further points of each signal.

    Returns
    -------
    list of DecayFit
        One for each signal.

    Raises
    ------
    ValueError
        The fit before has no shape.
    """
    if before.shape is None:
        raise ValueError("a fit without a shape cannot be repeated")
    kind = before.shape.kind
    factor = float(before.shape.at(np.zeros(1))[0])
    points = _points(times_s, kind, late, True)
    target = np.hstack([ys] if late_ys is None else [ys, late_ys]) / factor
    start = np.array([*before.shape.values, before.level])
    start[[0, -1]] /= factor
    if kind == "two exponentials":
        start[2] /= factor
    values, _ = _descend(points, target, np.tile(start, (len(ys), 1)))
    return [_judged(points, found, one, factor) for found, one in zip(values, target, strict=True)]


@dataclass(frozen=True)
class _Points:
    """Where a signal is fitted, and within which bounds."""

    kind: str
    times_s: Floats
    n_stretch: int
    weights: Floats
    low: Floats
    high: Floats
    level: bool

    @property
    def shortest_s(self) -> float:
        return LEAST_TAU_S

    @property
    def longest_s(self) -> float:
        return LONGEST_TAU * float(self.times_s[self.n_stretch - 1] - self.times_s[0])


def _points(times_s: Floats, kind: str, late: Late, level: bool) -> _Points:
    n = len(times_s)
    shortest, longest = LEAST_TAU_S, LONGEST_TAU * float(times_s[-1] - times_s[0])
    if kind == "power":
        # At time t a power law falls as fast as an exponential of (t0 + t) / p.
        low, high = [0.0, shortest * POWERS[0], POWERS[0]], [_FAR, longest * POWERS[1], POWERS[1]]
    else:
        low, high = ([0.0, shortest] * (_n_values(kind) // 2), [_FAR, longest] * (_n_values(kind) // 2))
    least, most = (-_FAR, _FAR) if level else (0.0, 0.0)
    weights = np.ones(n + late.times_s.size)
    weights[n:] = n / max(1, late.times_s.size)
    return _Points(
        kind,
        np.concatenate([times_s, late.times_s]),
        n,
        weights,
        np.array([*low, least]),
        np.array([*high, most]),
        level,
    )


def _descend(
    points: _Points, ys: Floats, start: Floats, most_steps: int = _MOST_STEPS
) -> tuple[Floats, Floats]:
    """Least squares within bounds for many signals, shape (n_signals, n_times), at once.

    Returns
    -------
    values : array, shape (n_signals, n_values + 1)
    costs : array, shape (n_signals,)
    """
    values = np.clip(start, points.low, points.high)
    left = _curves(points.kind, values, points.times_s) + values[:, -1:] - ys
    costs = (left**2) @ points.weights
    damping = np.full(len(ys), 1e-3)
    rows = np.arange(len(ys))
    for _ in range(most_steps):
        tried = _tried(points, values[rows], left[rows], damping[rows])
        tried_left = _curves(points.kind, tried, points.times_s) + tried[:, -1:] - ys[rows]
        tried_costs = (tried_left**2) @ points.weights
        gain = costs[rows] - tried_costs
        better = gain > 0.0
        still = (np.abs(tried - values[rows]) <= 1e-10 * np.abs(values[rows]) + 1e-14).all(axis=1)
        settled = still | (better & (gain <= _SETTLED * costs[rows])) | (damping[rows] > 1e12)
        taken = rows[better]
        values[taken], left[taken], costs[taken] = tried[better], tried_left[better], tried_costs[better]
        damping[rows] *= np.where(better, 0.1, 8.0)
        rows = rows[~settled]
        if not rows.size:
            break
    return values, costs


def _tried(points: _Points, values: Floats, left: Floats, damping: Floats) -> Floats:
    """Where the next step of every signal leads, shape (n_signals, n_values + 1)."""
    slopes = _slopes(points.kind, values, points.times_s)
    weighted = (slopes * points.weights[:, None]).transpose(0, 2, 1)
    gradient = (weighted @ left[:, :, None])[:, :, 0]
    # A value at its bound that would be led beyond it stays there; the others move as if it were known.
    held = ((values <= points.low) & (gradient > 0.0)) | ((values >= points.high) & (gradient < 0.0))
    gradient[held] = 0.0
    normal = weighted @ slopes
    normal[held[:, :, None] | held[:, None, :]] = 0.0
    scale = np.maximum(np.einsum("dkk->dk", normal), 1e-300)
    identity = np.eye(values.shape[1])
    normal += identity * (scale * (damping[:, None] + 1e-14) + held)[:, None, :]
    step = -np.linalg.solve(normal, gradient[:, :, None])[:, :, 0]
    return np.asarray(np.clip(values + step, points.low, points.high))


def _n_values(kind: str) -> int:
    return {"exponential": 2, "two exponentials": 4, "power": 3}[kind]


def _curves(kind: str, values: Floats, times_s: Floats) -> Floats:
    """Curves of many decays, values of shape (n, n_values or more): shape (n, n_times)."""
    a, first_s = values[:, 0:1], values[:, 1:2]
    if kind == "power":
        return np.asarray(a * (1.0 + times_s / first_s) ** -values[:, 2:3])
    curves = a * np.exp(-times_s / first_s)
    if kind == "two exponentials":
        curves += values[:, 2:3] * np.exp(-times_s / values[:, 3:4])
    return np.asarray(curves)


def _slopes(kind: str, values: Floats, times_s: Floats) -> Floats:
    """Give the derivatives by every value, then by the level: shape (n, n_times, n_values + 1)."""
    columns: list[Floats] = []
    if kind == "power":
        a, t0, p = values[:, 0:1], values[:, 1:2], values[:, 2:3]
        base = 1.0 + times_s / t0
        curve = base**-p
        columns = [curve, a * p * times_s / t0**2 * curve / base, -a * curve * np.log(base)]
    else:
        for place in range(0, _n_values(kind), 2):
            a, tau = values[:, place : place + 1], values[:, place + 1 : place + 2]
            curve = np.exp(-times_s / tau)
            columns += [curve, a * curve * times_s / tau**2]
    return np.stack([*columns, np.ones_like(columns[0])], axis=2)


def _from_grid(points: _Points, y: Floats) -> Floats:
    """Best few of a grid of time constants (and orders), amplitudes and level by linear least squares."""
    times_s, kind, level = points.times_s, points.kind, points.level
    share = points.weights / points.weights.sum()
    taus = np.geomspace(1.5 * points.shortest_s, 0.7 * points.longest_s, _GRID)
    if kind == "power":
        fixed = np.array([(tau * p, p) for tau in taus for p in (1.2, 2.0, 3.0)])
        curves = (1.0 + times_s / fixed[:, :1]) ** -fixed[:, 1:]
        curves = curves[:, :, None]
    elif kind == "exponential":
        fixed = taus[:, None]
        curves = np.exp(-times_s / fixed)[:, :, None]
    else:
        fixed = np.array([(fast, slow) for i, fast in enumerate(taus) for slow in taus[i + 2 :: 2]])
        curves = np.exp(-times_s[None, :, None] / fixed[:, None, :])
    around = np.einsum("gtk,t->gk", curves, share if level else np.zeros_like(share))
    mean = float(share @ y) if level else 0.0
    centred, target = curves - around[:, None, :], y - mean
    weighted = centred * share[:, None]
    moments = np.einsum("gtk,gtl->gkl", weighted, centred) + 1e-9 * np.eye(curves.shape[2])
    amplitudes = np.linalg.solve(moments, np.einsum("gtk,t->gk", weighted, target)[:, :, None])[:, :, 0]
    # Amplitudes of the other sign are not allowed, and make bad starts.
    amplitudes = np.maximum(amplitudes, 1e-3)
    left = (np.einsum("gtk,gk->gt", centred, amplitudes) - target) ** 2 @ share
    # One start for each first time constant: two alike would end alike.
    order = np.argsort(left)
    _, first_of_each = np.unique(fixed[order, 0], return_index=True)
    best = order[np.sort(first_of_each)[:_STARTS]]
    heights = mean - np.einsum("gk,gk->g", around[best], amplitudes[best])
    if kind == "two exponentials":
        pairs = np.stack([amplitudes[best], fixed[best]], axis=2).reshape(len(best), 4)
        return np.column_stack([pairs, heights])
    return np.column_stack([amplitudes[best], fixed[best], heights])


def _judged(points: _Points, values: Floats, y: Floats, factor: float) -> DecayFit:
    """Turn what was found into a result, in the signal's unit, if it is a decay."""
    reason = _fault(points, values, y)
    if reason:
        return DecayFit(None, reason=reason)
    own = [float(value) for value in values[:-1]]
    own[0] *= factor
    if points.kind == "two exponentials":
        own[2] *= factor
    return DecayFit(DecayShape(points.kind, tuple(own)), factor * float(values[-1]))


def _fault(points: _Points, values: Floats, y: Floats) -> str:
    """Why what was found is no decay; empty if it is one."""
    stretch_s, y = points.times_s[: points.n_stretch], y[: points.n_stretch]
    curve = _curves(points.kind, values[None], stretch_s)[0]
    left = curve + values[-1] - y
    if float(np.sum(left**2)) > (1.0 - LEAST_EXPLAINED) * float(np.sum((y - y.mean()) ** 2)):
        return "what follows the gap has not this shape"
    if curve[0] > _LARGEST * float(np.ptp(y)):
        return "the signal does not level off within the stretch fitted"
    # The time in which it falls to 1/e, as it begins.
    if points.kind == "two exponentials":
        parts = [(values[0], values[1]), (values[2], values[3])]
    elif points.kind == "power":
        parts = [(values[0], (values[1] + stretch_s[0]) / values[2])]
    else:
        parts = [(values[0], values[1])]
    shown = [tau for a, tau in parts if a > 0.1]
    if any(tau > 0.95 * points.longest_s for tau in shown):
        return "the signal does not level off within the stretch fitted"
    if shown and max(shown) < 1.05 * points.shortest_s:
        return "what follows the gap is over within a millisecond: it belongs into the gap"
    return ""
