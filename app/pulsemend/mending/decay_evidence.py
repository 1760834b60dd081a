"""What is known of the decays after the gaps, as a person judges it: where, how large, at what price."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.decay import DecayEstimates
from pulsemend.engine.decay_subtraction import LONGEST_S, OVER_UV
from pulsemend.engine.setup import Setup
from pulsemend.signal.absorption import INTERVAL, altered
from pulsemend.signal.gaps import window_to_samples
from pulsemend.units import uv_to_v

STEP_S = 0.001
"""Marked stretches are told this finely."""

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class LeftAlone:
    """Channels in which no decay was fitted, for one reason."""

    reason: str
    channels: tuple[str, ...]


@dataclass(frozen=True)
class DecaySummary:
    """Where decays were fitted.

    Parameters
    ----------
    n_fitted, n_channels : int
        Channels with a fitted decay, and in all.
    left_alone : tuple of LeftAlone
        The commonest reason first.
    largest : str
        Fitted channel with the largest decay; empty without any.
    largest_v, median_v : float
        Size at the gap's end in the median pulse: there, and the median over the fitted channels.
    n_pulses : int
        Pulses that the shapes were fitted to.
    """

    n_fitted: int
    n_channels: int
    left_alone: tuple[LeftAlone, ...]
    largest: str
    largest_v: float
    median_v: float
    n_pulses: int


def decay_summary(setup: Setup, decay: DecayEstimates) -> DecaySummary:
    """Count fitted channels and the reasons of the others.

    Parameters
    ----------
    setup : Setup
        Plan and marks, bound to the recording.
    decay : DecayEstimates
        Of the same setup.
    """
    names = [channel.name for channel in setup.channels]
    reasons: dict[str, list[str]] = {}
    for name, reason in zip(names, decay.reasons, strict=True):
        if reason:
            reasons.setdefault(reason, []).append(name)
    by_count = sorted(reasons.items(), key=lambda item: -len(item[1]))
    sizes_v = np.abs(_curves(decay, np.zeros(1))[:, 0])
    return DecaySummary(
        n_fitted=decay.columns.size,
        n_channels=len(names),
        left_alone=tuple(LeftAlone(reason, tuple(of)) for reason, of in by_count),
        largest=names[decay.columns[int(np.argmax(sizes_v))]] if sizes_v.size else "",
        largest_v=float(sizes_v.max(initial=0.0)),
        median_v=float(np.median(sizes_v)) if sizes_v.size else 0.0,
        n_pulses=decay.n_pulses,
    )


@dataclass(frozen=True)
class AbsorptionView:
    """How much of a response is left where decays were fitted.

    Parameters
    ----------
    channel : str
        Empty for the median over the fitted channels.
    n_channels : int
        Of how many that is.
    latencies_s : array, shape (n_latencies,)
        Of the test responses, since the pulse; those within the gap are left out.
    share, low, high : arrays, shape (n_latencies,)
        Share that comes back, with most of the test responses (or, for the median, most channels) between
        low and high.
    marked_s : tuple of (float, float)
        Stretches since the pulse, half open, marked as decay-fitted; for the median: in at least half of the
        channels.
    """

    channel: str
    n_channels: int
    latencies_s: Floats
    share: Floats
    low: Floats
    high: Floats
    marked_s: tuple[tuple[float, float], ...]


def absorption_view(setup: Setup, decay: DecayEstimates, channel: str = "") -> AbsorptionView | None:
    """Show the absorption in one channel, or the median over all fitted ones.

    Parameters
    ----------
    setup : Setup
        Plan and marks, bound to the recording.
    decay : DecayEstimates
        Of the same setup.
    channel : str
        Name; empty for the median.

    Returns
    -------
    AbsorptionView or None
        None where no decay was fitted.
    """
    names = [setup.channels[column].name for column in decay.columns]
    rows = [row for row, name in enumerate(names) if channel in ("", name)]
    if not rows:
        return None
    latencies_s = decay.absorption(rows[0]).latencies_s
    if channel:
        share, low, high = decay.share[rows[0]], decay.share_low[rows[0]], decay.share_high[rows[0]]
        known = np.isfinite(share)
    else:
        known = np.isfinite(decay.share).any(axis=0)
        low, share, high = np.full((3, latencies_s.size), np.nan)
        percents = [INTERVAL[0], 50.0, INTERVAL[1]]
        low[known], share[known], high[known] = np.nanpercentile(decay.share[:, known], percents, axis=0)
    since_s = np.arange(0.0, LONGEST_S, STEP_S)
    often = np.mean([_marked(setup, decay, row, since_s) for row in rows], axis=0) >= 0.5
    edges = np.flatnonzero(np.diff(np.concatenate([[False], often, [False]])))
    return AbsorptionView(
        channel=channel,
        n_channels=len(rows),
        latencies_s=latencies_s[known],
        share=share[known],
        low=low[known],
        high=high[known],
        marked_s=tuple(
            (float(a * STEP_S), float(b * STEP_S)) for a, b in zip(edges[::2], edges[1::2], strict=True)
        ),
    )


def why_not(setup: Setup, decay: DecayEstimates, channel: str) -> str:
    """Say why a channel has no fitted decay; empty if it has one, or is none that is used."""
    for one, reason in zip(setup.channels, decay.reasons, strict=True):
        if one.name == channel:
            return reason
    return ""


def _curves(decay: DecayEstimates, times_s: Floats) -> Floats:
    """Fitted decays since the gap's end, shape (n_fitted, n_times), volts."""
    curves = [decay.shape(row).at(times_s) for row in range(decay.columns.size)]
    return np.array(curves, dtype=np.float64).reshape(decay.columns.size, times_s.size)


def _marked(setup: Setup, decay: DecayEstimates, row: int, since_s: Floats) -> NDArray[np.bool_]:
    """Tell where samples of a fitted channel are marked, as the chain marks them."""
    column = decay.columns[row]
    group = next(group for group in setup.groups if column in group.columns)
    end_s = window_to_samples(0, group.windows_s[0], setup.facts.rate_hz)[1] / setup.facts.rate_hz
    after_s = since_s - end_s
    inside = after_s > -1e-9
    curve = np.abs(decay.shape(row).at(np.maximum(after_s, 0.0)))
    return np.asarray(inside & (curve >= uv_to_v(OVER_UV)) & altered(decay.absorption(row), since_s))
