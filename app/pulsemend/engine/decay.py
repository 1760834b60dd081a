"""What is learned of the decay after each gap: its shape per channel, its size per pulse, its price."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.decay_stretches import Stretches, read_stretches
from pulsemend.engine.setup import Setup
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import Decay
from pulsemend.progress import Progress, Work
from pulsemend.signal.absorption import LATENCIES_S, Absorption, absorption
from pulsemend.signal.decay import NOTHING_LATE, DecayShape, Late, fit_shape
from pulsemend.signal.decay_amplitudes import (
    amplitude_weights,
    block_means,
    covariance_of,
    settled_amplitudes,
)

MOST_PULSES = 300
"""The median pulse is taken over so many, spread evenly over the recording."""

QUICK_PULSES = 30
"""For a first picture."""

NOT_LOOKED_AT = "not looked at yet"
"""Reason of a channel that was not asked for."""

SHORTEST_S = 0.005
"""A stretch shorter than this before the next gap tells nothing of a decay."""

TOLD_APART = 4.0
"""The fall after the gap counts if it is so many times its own standard error over the pulses."""

_LEAST_BLOCKS = 8
_SEED = 20
_SMALL = "smaller than decay_least_uv at the gap's end"
_STAGE = "fitting the decay"
_ARRAYS = ("columns", "values", "amplitudes", "spread", "share", "share_low", "share_high")

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class DecayEstimates:
    """What was learned of the decays.

    Parameters
    ----------
    kind : Decay
    reasons : tuple of str
        For every used channel why no decay was fitted in it; empty where one was.
    columns : int array, shape (n_fitted,)
        The fitted ones among the used channels.
    values : array, shape (n_fitted, 4)
        Of `DecayShape`, in volts and in seconds from the gap's end; NaN beyond those the kind has.
    amplitudes : array, shape (n_fitted, n_pulses)
        Relative to the median pulse.
    spread : array, shape (n_fitted,)
        Standard deviation of the true amplitudes; 0 where noise alone explains what was seen.
    share, share_low, share_high : array, shape (n_fitted, n_latencies)
        Of a test response that comes back, at `signal.absorption.LATENCIES_S`: median and interval.
    n_pulses : int
        Pulses that the shapes were fitted to, at most.
    """

    kind: Decay
    reasons: tuple[str, ...]
    columns: NDArray[np.intp]
    values: Floats
    amplitudes: Floats
    spread: Floats
    share: Floats
    share_low: Floats
    share_high: Floats
    n_pulses: int

    def save(self, group: Any) -> None:
        """Write into a group of an HDF5 file."""
        group.attrs["kind"] = self.kind.value
        group.attrs["reasons"] = json.dumps(self.reasons)
        group.attrs["n_pulses"] = self.n_pulses
        group["latencies_s"] = np.array(LATENCIES_S)
        for name in _ARRAYS:
            group[name] = getattr(self, name)

    @classmethod
    def load(cls, group: Any) -> DecayEstimates:
        """Read what `save` wrote.

        Raises
        ------
        KeyError, ValueError
            Something else wrote it.
        """
        arrays = {name: group[name][()] for name in _ARRAYS}
        return cls(
            kind=Decay(group.attrs["kind"]),
            reasons=tuple(json.loads(group.attrs["reasons"])),
            n_pulses=int(group.attrs["n_pulses"]),
            **arrays,
        )

    def shape(self, place: int) -> DecayShape:
        """Shape of a fitted channel's decay, volts, from the gap's end."""
        values = self.values[place]
        return DecayShape(self.kind.value, tuple(float(value) for value in values[np.isfinite(values)]))

    def absorption(self, place: int) -> Absorption:
        """How much of a response the fit in a fitted channel leaves."""
        return Absorption(
            np.array(LATENCIES_S), self.share[place], self.share_low[place], self.share_high[place]
        )


def learn_decay(
    recording: Recording,
    setup: Setup,
    onsets: Sequence[int],
    background: Floats | None,
    quick: NDArray[np.intp] | None = None,
) -> Work[DecayEstimates]:
    """Fit the decay of every channel: its shape from the median pulse, its amplitude per pulse.

    Parameters
    ----------
    recording : Recording
        The stretches after the gaps are read, pulse by pulse.
    setup : Setup
        Plan and marks, bound to it.
    onsets : sequence of int
        Of the pulses, in order of time.
    background : array, shape (n_used, n_blocks), or None
        From `BackgroundSum`; without it every pulse counts as large as the median pulse.
    quick : array of int or None
        Only these of the used channels, from `QUICK_PULSES` that count as large as their median, and without
        absorption: for a first picture.

    Yields
    ------
    Progress

    Returns
    -------
    DecayEstimates
    """
    reasons = [""] * setup.used.size
    found: dict[int, _Fitted] = {}
    chosen = np.arange(setup.used.size) if quick is None else quick
    most = MOST_PULSES if quick is None else QUICK_PULSES
    n_pulses = 0
    for group in setup.groups:
        members = np.intersect1d(group.columns, chosen)
        stretches = yield from read_stretches(
            recording, setup, group, members, onsets, most, quick is not None
        )
        n_pulses = max(n_pulses, stretches.n_pulses)
        for place, column in enumerate(members.tolist()):
            yield Progress(_STAGE, len(found) + sum(map(bool, reasons)), chosen.size)
            own = None if background is None else background[column]
            fitted = _fit_channel(setup, stretches, place, own, quick is None)
            if isinstance(fitted, str):
                reasons[column] = fitted
            else:
                found[column] = fitted
    for column in np.setdiff1d(np.arange(setup.used.size), chosen).tolist():
        reasons[column] = NOT_LOOKED_AT
    return _estimates(setup, reasons, found, len(onsets), n_pulses)


@dataclass(frozen=True)
class _Fitted:
    shape: DecayShape
    amplitudes: Floats
    spread: float
    absorbed: Absorption | None


def _fit_channel(
    setup: Setup, stretches: Stretches, place: int, background: Floats | None, with_absorption: bool
) -> _Fitted | str:
    """Fit one channel, or say why there is nothing to fit."""
    times_s = stretches.times_s
    if not stretches.n_pulses:
        return "no pulse is followed by a clean stretch"
    if len(times_s) < 2 or times_s[-1] < SHORTEST_S:
        return "the stretch is too short, or the next gap follows too soon in most pulses"
    x = stretches.points[:, :, place].astype(np.float64)
    means = x.mean(axis=1, keepdims=True)
    x -= means
    reason = _too_small(x, times_s, setup.decay_least_v)
    if reason:
        return reason
    median = np.median(x, axis=0)
    late = _late(stretches, stretches.late[:, :, place] - means)
    fit = fit_shape(times_s, median, setup.decay.value, late)
    if fit.shape is None:
        return fit.reason
    least_v = setup.decay_least_v
    if abs(float(fit.shape.at(np.zeros(1))[0])) < least_v:
        return _SMALL
    amplitudes, spread = _amplitudes(stretches, place, fit.shape, background)
    absorbed = None
    if with_absorption:
        absorbed = absorption(times_s, median, late, fit, stretches.since_pulse_s, _SEED)
    return _Fitted(fit.shape, amplitudes, spread, absorbed)


def _late(stretches: Stretches, y: Floats) -> Late:
    """Medians over the pulses of the late blocks that enough pulses show clean."""
    known = np.isfinite(y).sum(axis=0)
    enough = known >= max(1, min(3, len(y)), len(y) // 4)
    if not enough.any():
        return NOTHING_LATE
    return Late(stretches.late_s[enough], np.nanmedian(y[:, enough], axis=0))


def _too_small(x: Floats, times_s: Floats, least_v: float) -> str:
    """Why the fall over the stretch tells of no decay; empty if it does."""
    early = times_s - times_s[0] < 0.001
    falls = x[:, early].mean(axis=1) - x[:, -(len(times_s) // 4 + 1) :].mean(axis=1)
    middle = float(np.median(falls))
    # The slowest decay that is told from a drift falls by a third within the stretch.
    if abs(middle) < 0.3 * least_v:
        return _SMALL
    if len(falls) < 3:
        return ""
    # Standard error of a median: 1.2533 times that of a mean; 1.4826 times the MAD is a standard deviation.
    error = 1.2533 * 1.4826 * float(np.median(np.abs(falls - middle))) / np.sqrt(len(falls))
    return "" if abs(middle) > TOLD_APART * error else "not told apart from the background"


def _amplitudes(
    stretches: Stretches, place: int, shape: DecayShape, background: Floats | None
) -> tuple[Floats, float]:
    """Amplitude of every pulse, and their true spread."""
    grid = stretches.grid
    blocks = stretches.blocks[:, :, place].astype(np.float64)
    of_all = np.ones(stretches.n_onsets)
    if background is None:
        return of_all, 0.0
    samples = np.arange(grid.n_blocks * grid.block) * grid.point + (grid.point - 1) / 2.0
    step_s = (stretches.times_s[1] - stretches.times_s[0]) / grid.point
    means = block_means(shape.at(samples * step_s), grid.block)
    lengths = np.isfinite(blocks).sum(axis=1)
    amplitudes, variances = np.full((2, len(blocks)), np.nan)
    for n in np.unique(lengths).tolist():
        if n >= min(_LEAST_BLOCKS, grid.n_blocks):
            rows = lengths == n
            weights, variance = amplitude_weights(means[:n], covariance_of(background[:n]))
            amplitudes[rows], variances[rows] = blocks[rows, :n] @ weights, variance
    of_all[list(stretches.pulses)], spread = settled_amplitudes(amplitudes, variances, stretches.fitted)
    return of_all, spread


def _estimates(
    setup: Setup, reasons: Sequence[str], found: dict[int, _Fitted], n_onsets: int, n_pulses: int
) -> DecayEstimates:
    columns = np.array(sorted(found), dtype=np.intp)
    values = np.full((columns.size, 4), np.nan)
    amplitudes = np.ones((columns.size, n_onsets))
    shares = np.full((3, columns.size, len(LATENCIES_S)), np.nan)
    for row, column in enumerate(columns.tolist()):
        fitted = found[column]
        values[row, : len(fitted.shape.values)] = fitted.shape.values
        amplitudes[row] = fitted.amplitudes
        if fitted.absorbed is not None:
            shares[:, row] = fitted.absorbed.median, fitted.absorbed.low, fitted.absorbed.high
    spread = np.array([found[column].spread for column in columns.tolist()], dtype=np.float64)
    return DecayEstimates(
        kind=setup.decay,
        reasons=tuple(reasons),
        columns=columns,
        values=values,
        amplitudes=amplitudes,
        spread=spread,
        share=shares[0],
        share_low=shares[1],
        share_high=shares[2],
        n_pulses=n_pulses,
    )
