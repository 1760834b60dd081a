"""What a gap leaves behind or rests on: flanks too long for a cubic, a decay that goes on."""

from __future__ import annotations

import numpy as np

from pulsemend.engine.bad_channels import found_bad
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.setup import Setup
from pulsemend.model.vocabulary import Fill, Side
from pulsemend.units import s_to_ms, v_to_uv

_PERIODS = 0.25
"""A cubic follows a wave up to a quarter of its period on either side."""

_MOST_NAMED = 3


def gap_warnings(setup: Setup, estimates: Estimates) -> list[str]:
    """Say what a person should know about the gaps' edges, one sentence each.

    Parameters
    ----------
    setup : Setup
        Gaps, fill and filters.
    estimates : Estimates
        From the fit.
    """
    return [*_long_flanks(setup, estimates), *_level_left(setup, estimates)]


def _long_flanks(setup: Setup, estimates: Estimates) -> list[str]:
    """Flanks that hold more of the fastest waves of interest than a cubic can follow.

    Nothing is known of these without a low-pass; and with one flank alone a cubic holds a single sample.
    """
    highest_hz = next((step["cutoff_hz"] for name, step in setup.band_steps if name == "low-pass"), None)
    is_cubic = setup.fill is Fill.CUBIC and setup.side is Side.BOTH
    if not (is_cubic and setup.groups and estimates.pulses and isinstance(highest_hz, float | int)):
        return []
    flank_s, longest_s = setup.flank / setup.facts.rate_hz, _PERIODS / highest_hz
    # Half a sample is rounding.
    if flank_s <= longest_s + 0.5 / setup.facts.rate_hz:
        return []
    return [
        f'fill "cubic": flanks of {s_to_ms(flank_s):.3g} ms are longer than a quarter of the period at the '
        f"low-pass ({s_to_ms(longest_s):.3g} ms at {highest_hz:g} Hz), so waves near it bend the fill: "
        "shorten pulses.flank_ms, lower the low-pass, or take another fill"
    ]


def _level_left(setup: Setup, estimates: Estimates) -> list[str]:
    """Channels that are away from their level before the pulse where the gap ends."""
    if estimates.level_left_v is None:
        return []
    judged = setup.eeg & ~setup.bad & ~found_bad(setup, estimates.channels)
    sizes_v = np.where(judged, np.nan_to_num(np.abs(estimates.level_left_v)), 0.0)
    away = np.flatnonzero((sizes_v >= setup.decay_least_v) & (sizes_v > 0.0))
    if not away.size:
        return []
    worst = away[np.argsort(-sizes_v[away], kind="stable")][:_MOST_NAMED]
    named = ", ".join(
        f"{setup.channels[i].name} {v_to_uv(float(estimates.level_left_v[i])):+.0f} uV"
        for i in worst.tolist()
    )
    return [
        f"where the gap ends, {away.size} of {int(judged.sum())} EEG channels are still "
        f"{v_to_uv(setup.decay_least_v):g} uV or more from their level before the pulse (most: {named}): "
        'a decay or a step that decay = "none" leaves in'
    ]
