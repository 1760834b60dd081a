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
from typing import Any

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
        return _curve(self.kind, np.array(self.values), np.asarray(times_s, np.float64))


@dataclass(frozen=True)
class DecayFit:
    """Result of `fit_shape`.

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


def fit_shape(
    times_s: Floats, y: Floats, kind: str, *, level: bool = True, start: DecayShape | None = None
) -> DecayFit:
    """Fit a decay by bounded least squares.

    Parameters
    ----------
    times_s : array, shape (n_times,)
        Rising. Amplitudes belong to time 0; the first time need not be 0.
    y : array, shape (n_times,)
        The median pulse, in any unit.
    kind : str
        One of `DECAY_KINDS`.
    level : bool
        Whether the signal may fall to another level than zero.
    start : DecayShape or None
        Where to start from; by default the best of a grid of time constants.

    Returns
    -------
    DecayFit

    Raises
    ------
    ValueError
        There is no such kind.
    """
    from scipy.optimize import least_squares

    if kind not in DECAY_KINDS:
        raise ValueError(f"kind must be one of {DECAY_KINDS}; received {kind!r}")
    times_s, y = np.asarray(times_s, np.float64), np.asarray(y, np.float64)
    if len(y) < 4 * _n_values(kind):
        return DecayFit(None, reason="the stretch after the gap is too short")
    size = float(np.ptp(y))
    if not size or not np.isfinite(size):
        return DecayFit(None, reason="the signal after the gap is constant")
    # Amplitudes near one, whatever the unit; and positive, because all of a decay falls in one direction.
    third = max(1, len(y) // 3)
    sign = 1.0 if y[:third].mean() >= y[-third:].mean() else -1.0
    scaled = sign * y / size
    first = _from_grid(times_s, scaled, kind, level) if start is None else _scaled(start, scaled, sign / size)
    low, high = _bounds(kind, times_s)
    # Without a level the last value is none that is sought.
    sought = slice(None) if level else slice(-1)

    def left(values: Floats) -> Floats:
        return _curve(kind, values, times_s) + (values[-1] if level else 0.0) - scaled

    def slopes(values: Floats) -> Floats:
        return _slopes(kind, values, times_s)[:, sought]

    found = least_squares(
        left,
        np.clip(first, low + 1e-9 * np.abs(low), high - 1e-9 * np.abs(high))[sought],
        slopes,
        (low[sought], high[sought]),
        x_scale="jac",
        ftol=1e-11,
        xtol=1e-11,
        gtol=1e-11,
        max_nfev=60,
    )
    reason = _fault(kind, found.x, times_s, scaled, found.fun)
    if reason:
        return DecayFit(None, reason=reason)
    values = found.x[: _n_values(kind)]
    height = sign * size * float(found.x[-1]) if level else 0.0
    return DecayFit(_unscaled(kind, values, sign * size), height)


def amplitude_weights(shape: Floats, covariance: Floats | None) -> tuple[Floats, float]:
    """Weigh the samples of a stretch for the amplitude of a shape in it, beside an offset of its own.

    With the background's covariance this is the best linear unbiased estimate (generalised least squares):
    slow background activity looks like a decay, and ordinary least squares would take it for one.

    Parameters
    ----------
    shape : array, shape (n_times,)
        The decay of the median pulse.
    covariance : array, shape (n_times, n_times), or None
        Of the background, positive definite; None counts it as white.

    Returns
    -------
    weights : array, shape (n_times,)
        Their products with a stretch add up to its amplitude, relative to `shape`.
    variance : float
        Of that amplitude, from the background alone; NaN if that is not known.
    """
    from scipy.linalg import cho_factor, cho_solve

    design = np.stack([shape / np.abs(shape).max(), np.ones_like(shape)], axis=1)
    weighted = design if covariance is None else cho_solve(cho_factor(covariance), design)
    weights = np.linalg.solve(design.T @ weighted, weighted.T)[0] / np.abs(shape).max()
    return weights, np.nan if covariance is None else float(weights @ covariance @ weights)


def covariance_of(autocovariance: Floats) -> Floats:
    """Turn an autocovariance into a covariance matrix that is positive definite.

    Parameters
    ----------
    autocovariance : array, shape (n_lags,)
        Up to a constant, as `pulsemend.signal.autocovariance` gives it.

    Returns
    -------
    array, shape (n_lags, n_lags)
        Of signal whose offset is unknown.
    """
    from scipy.linalg import toeplitz

    n = len(autocovariance)
    centre = np.eye(n) - 1.0 / n
    strengths, directions = np.linalg.eigh(centre @ toeplitz(autocovariance) @ centre)
    # The offset's direction is as strong as any; estimates of the weakest ones may even be negative.
    least = 1e-6 * strengths[-1] if strengths[-1] > 0.0 else 1.0
    positive = (directions * np.maximum(strengths, least)) @ directions.T
    return np.asarray(positive + strengths[-1] / n)


OUTLYING = 3.5
"""A pulse so many standard deviations from the others is one of its own, such as a misfire."""


def settled_amplitudes(amplitudes: Floats, variances: Floats) -> tuple[Floats, float]:
    """Draw noisy amplitudes towards the median pulse's, as far as their noise explains their spread.

    The fitted shape is the median pulse, so the median amplitude is 1. What a pulse differs from it counts by
    the share of its variance that is the pulses' own (the best linear estimate [1]_); a pulse far outside
    keeps its own amplitude.

    Parameters
    ----------
    amplitudes : array, shape (n_pulses,)
        As estimated; NaN where it cannot be.
    variances : array, shape (n_pulses,)
        Of the estimates, from the background; NaN where it is not known.

    Returns
    -------
    amplitudes : array, shape (n_pulses,)
        Finite, relative to the median pulse.
    spread : float
        Standard deviation of the true amplitudes.

    References
    ----------
    .. [1] Efron B, Morris C (1973) Stein's estimation rule and its competitors - an empirical Bayes approach.
       J Am Stat Assoc 68:117-130. doi:10.1080/01621459.1973.10481350
    """
    known = np.isfinite(amplitudes) & np.isfinite(variances)
    settled = np.ones_like(amplitudes)
    if np.count_nonzero(known) < 3:
        return settled, 0.0
    departure = amplitudes[known] - np.median(amplitudes[known])
    noise = variances[known]
    spread = float(1.4826 * np.median(np.abs(departure)))
    own = max(0.0, spread**2 - float(np.median(noise)))
    share = np.where(own + noise > 0.0, own / np.maximum(own + noise, 1e-300), 0.0)
    share[np.abs(departure) > OUTLYING * np.sqrt(own + noise)] = 1.0
    settled[known] += share * departure
    return settled, float(np.sqrt(own))


def _n_values(kind: str) -> int:
    return {"exponential": 2, "two exponentials": 4, "power": 3}[kind]


def _curve(kind: str, values: Floats, times_s: Floats) -> Floats:
    if kind == "power":
        return np.asarray(values[0] * (1.0 + times_s / values[1]) ** -values[2])
    curve = values[0] * np.exp(-times_s / values[1])
    if kind == "two exponentials":
        curve += values[2] * np.exp(-times_s / values[3])
    return np.asarray(curve)


def _slopes(kind: str, values: Floats, times_s: Floats) -> Floats:
    """Give the derivatives by every value, then by the level: shape (n_times, n_values + 1)."""
    columns: list[Floats] = []
    if kind == "power":
        a, t0, p = values[:3]
        base = 1.0 + times_s / t0
        curve = base**-p
        columns = [curve, a * p * times_s / t0**2 * curve / base, -a * curve * np.log(base)]
    else:
        for place in range(0, _n_values(kind), 2):
            a, tau = values[place : place + 2]
            curve = np.exp(-times_s / tau)
            columns += [curve, a * curve * times_s / tau**2]
    return np.stack([*columns, np.ones_like(times_s)], axis=1)


def _limits_s(times_s: Floats) -> tuple[float, float]:
    return LEAST_TAU_S, LONGEST_TAU * float(times_s[-1] - times_s[0])


def _bounds(kind: str, times_s: Floats) -> tuple[Floats, Floats]:
    shortest, longest = _limits_s(times_s)
    if kind == "power":
        # At time t a power law falls as fast as an exponential of (t0 + t) / p.
        return (
            np.array([0.0, shortest * POWERS[0], POWERS[0], -1e3]),
            np.array([1e6, longest * POWERS[1], POWERS[1], 1e3]),
        )
    pairs = _n_values(kind) // 2
    return np.array([0.0, shortest] * pairs + [-1e3]), np.array([1e6, longest] * pairs + [1e3])


def _from_grid(times_s: Floats, y: Floats, kind: str, level: bool) -> Floats:
    """Best of a grid of time constants (and orders), amplitudes and level by linear least squares."""
    shortest, longest = _limits_s(times_s)
    taus = np.geomspace(1.5 * shortest, 0.7 * longest, _GRID)
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
    around = curves.mean(axis=1) if level else np.zeros((len(curves), curves.shape[2]))
    centred, target = curves - around[:, None, :], y - (y.mean() if level else 0.0)
    moments = np.einsum("gtk,gtl->gkl", centred, centred) + 1e-9 * len(y) * np.eye(curves.shape[2])
    amplitudes = np.linalg.solve(moments, np.einsum("gtk,t->gk", centred, target)[:, :, None])[:, :, 0]
    # Amplitudes of the other sign are not allowed, and make bad starts.
    amplitudes = np.maximum(amplitudes, 1e-3)
    left = np.sum((np.einsum("gtk,gk->gt", centred, amplitudes) - target) ** 2, axis=1)
    best = int(np.argmin(left))
    height = float(y.mean() - around[best] @ amplitudes[best]) if level else 0.0
    if kind == "two exponentials":
        pairs = zip(amplitudes[best], fixed[best], strict=True)
        return np.array([*(value for pair in pairs for value in pair), height])
    return np.array([amplitudes[best, 0], *fixed[best], height])


def _scaled(start: DecayShape, y: Floats, factor: float) -> Floats:
    values = np.array([*start.values, float(y[-1])])
    values[0] = abs(values[0] * factor)
    if start.kind == "two exponentials":
        values[2] = abs(values[2] * factor)
    return values


def _unscaled(kind: str, values: Floats, factor: float) -> DecayShape:
    own = [float(value) for value in values]
    own[0] *= factor
    if kind == "two exponentials":
        own[2] *= factor
    return DecayShape(kind, tuple(own))


def _fault(kind: str, values: Floats, times_s: Floats, y: Floats, left: Floats) -> str:
    """Why what was found is no decay; empty if it is one."""
    shortest, longest = _limits_s(times_s)
    curve = _curve(kind, values, times_s)
    total = float(np.sum((y - y.mean()) ** 2))
    if float(np.sum(left**2)) > (1.0 - LEAST_EXPLAINED) * total:
        return "what follows the gap has not this shape"
    if curve[0] > _LARGEST:
        return "the signal does not level off within the stretch fitted"
    # The time in which it falls to 1/e, from the stretch's first sample on.
    falls_s = float(curve[0] / max(-np.gradient(curve, times_s)[0], 1e-300))
    if kind != "two exponentials":
        if falls_s > 0.95 * longest:
            return "the signal does not level off within the stretch fitted"
        if falls_s < 1.05 * shortest:
            return "what follows the gap is over within a millisecond: it belongs into the gap"
    else:
        for a, tau in (values[0:2], values[2:4]):
            if a > 0.1 and tau > 0.95 * longest:
                return "the signal does not level off within the stretch fitted"
    return ""


def block_means(x: NDArray[Any], size: int) -> NDArray[Any]:
    """Mean of every `size` samples along the first axis; what is left over at the end is dropped."""
    n = len(x) // size
    return np.asarray(x[: n * size].reshape(n, size, *x.shape[1:]).mean(axis=1))
