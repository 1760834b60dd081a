"""What was learned of decays, as rows of a table and in words: the evidence beside the choice."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

import numpy as np

from pulsemend.engine.decay import MOST_PULSES
from pulsemend.engine.decay_subtraction import LONGEST_S, OVER_UV
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.setup import Setup
from pulsemend.signal.absorption import Absorption, altered
from pulsemend.signal.decay import DecayShape
from pulsemend.signal.gaps import window_to_samples
from pulsemend.units import s_to_ms, uv_to_v

_STEP_S = 0.001


@dataclass(frozen=True)
class DecayRow:
    """The decay of one used channel.

    Parameters
    ----------
    channel : str
    reason : str
        Why none was fitted; empty where one was, and all that follows is there.
    size_v : float
        Of the median pulse at the gap's end.
    shape : DecayShape or None
        From the gap's end on.
    spread : float
        Standard deviation of the pulses' amplitudes, as a part of the median pulse's.
    lasts_s : float
        From the gap's end until it is below a tenth of a microvolt; `LONGEST_S` at most.
    absorption : Absorption or None
        How much of a response comes back, by latency.
    altered_until_s : float
        Since the pulse: until then a response may be altered by a fifth or more; 0 if it is nowhere.
    """

    channel: str
    reason: str
    size_v: float = 0.0
    shape: DecayShape | None = None
    spread: float = 0.0
    lasts_s: float = 0.0
    absorption: Absorption | None = None
    altered_until_s: float = 0.0


def decay_rows(setup: Setup, estimates: Estimates) -> tuple[DecayRow, ...]:
    """One row per used channel, in file order; none where no decay is looked for.

    Parameters
    ----------
    setup : Setup
        What the estimates were learned with.
    estimates : Estimates
        From the fit.
    """
    decay = estimates.decay
    if decay is None:
        return ()
    rate_hz = setup.facts.rate_hz
    ends_s = np.zeros(setup.used.size)
    for group in setup.groups:
        ends_s[group.columns] = window_to_samples(0, group.windows_s[0], rate_hz)[1] / rate_hz
    place_of = {int(column): place for place, column in enumerate(decay.columns)}
    rows = []
    for column, (channel, reason) in enumerate(zip(setup.channels, decay.reasons, strict=True)):
        place = place_of.get(column)
        if place is None:
            rows.append(DecayRow(channel.name, reason))
            continue
        shape, found = decay.shape(place), decay.absorption(place)
        times_s = np.arange(0.0, LONGEST_S, _STEP_S)
        lasting = np.abs(shape.at(times_s)) >= uv_to_v(OVER_UV)
        changed = np.flatnonzero(altered(found, ends_s[column] + times_s) & lasting)
        rows.append(
            DecayRow(
                channel=channel.name,
                reason="",
                size_v=float(shape.at(np.zeros(1))[0]),
                shape=shape,
                spread=float(decay.spread[place]),
                lasts_s=float(lasting.sum() * _STEP_S),
                absorption=found,
                altered_until_s=float(ends_s[column] + times_s[changed[-1]]) if changed.size else 0.0,
            )
        )
    return tuple(rows)


def decay_words(setup: Setup, estimates: Estimates) -> tuple[str, ...]:
    """Say what the fit of decays did to the recording, and what that costs; empty without one.

    Parameters
    ----------
    setup : Setup
        What the estimates were learned with.
    estimates : Estimates
        From the fit.
    """
    rows = decay_rows(setup, estimates)
    if not rows:
        return ()
    fitted = [row for row in rows if not row.reason]
    if not fitted:
        reason, count = Counter(row.reason for row in rows).most_common(1)[0]
        return (f"decay: fitted in none of {len(rows)} channels; in {count}: {reason}",)
    words = f"decay: fitted in {len(fitted)} of {len(rows)} channels"
    until_s = max(row.altered_until_s for row in fitted)
    if until_s:
        worst = max(fitted, key=lambda row: row.altered_until_s)
        words += (
            f"; until {s_to_ms(until_s):.0f} ms after a pulse ({worst.channel}) it may alter a response "
            "by a fifth or more, marked in /decay_fitted"
        )
    if estimates.decay is not None and len(estimates.pulses) > estimates.decay.n_pulses >= MOST_PULSES:
        words += f"; shapes rest on {estimates.decay.n_pulses} pulses spread over the recording"
    return (words,)
