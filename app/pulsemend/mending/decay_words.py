"""What the fit of decays did to a recording, and what that costs, in one sentence."""

from __future__ import annotations

from collections import Counter

from pulsemend.engine.decay import MOST_PULSES
from pulsemend.engine.decay_subtraction import DecaySubtraction
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.setup import Setup
from pulsemend.units import s_to_ms


def decay_words(setup: Setup, estimates: Estimates) -> tuple[str, ...]:
    """Say in how many channels decays were fitted, and until when a response may be altered.

    Parameters
    ----------
    setup : Setup
        What the estimates were learned with.
    estimates : Estimates
        From the fit.

    Returns
    -------
    tuple of str
        Empty where no decay is looked for.
    """
    decay = estimates.decay
    if decay is None:
        return ()
    n_channels = len(decay.reasons)
    if not decay.columns.size:
        reason, count = Counter(decay.reasons).most_common(1)[0]
        return (f"decay: fitted in none of {n_channels} channels; in {count}: {reason}",)
    words = f"decay: fitted in {decay.columns.size} of {n_channels} channels"
    ends = [
        (end_s, column)
        for group in setup.groups
        for column, end_s in DecaySubtraction(setup, group, estimates.onsets, decay).altered_until_s
    ]
    if ends:
        until_s, worst = max(ends)
        words += (
            f"; until {s_to_ms(until_s):.0f} ms after a pulse ({setup.channels[worst].name}) it may alter a "
            "response by a fifth or more, marked in /decay_fitted"
        )
    if len(estimates.pulses) > decay.n_pulses >= MOST_PULSES:
        words += f"; shapes rest on {decay.n_pulses} pulses spread over the recording"
    return (words,)
