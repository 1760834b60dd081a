"""What the engine does to the samples, step by step with every parameter: for provenance and report."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from pulsemend.engine.estimates import Estimates
from pulsemend.engine.setup import Setup
from pulsemend.signal.gaps import shortened


@dataclass(frozen=True)
class Step:
    """One step and its parameters (JSON values, units in the names)."""

    name: str
    parameters: dict[str, Any]


def steps(setup: Setup, estimates: Estimates) -> tuple[Step, ...]:
    """List the steps in the order in which the chain takes them; steps that do nothing are absent."""
    taken: list[Step] = []
    if setup.removes_offset:
        where = "removed first; " + (
            "not put back, the high-pass removes it" if setup.highpass_on else "put back before the reference"
        )
        taken.append(Step("constant offset", {"of": "each channel", "handling": where}))
    if setup.groups and estimates.pulses:
        taken.append(Step("fill", _fill_parameters(setup, estimates)))
    if setup.antialias is not None:
        taken.append(
            Step(
                "anti-alias and decimate",
                {
                    "recorded_rate_hz": setup.facts.rate_hz,
                    "rate_hz": setup.rate_hz,
                    "taps": int(setup.antialias.size),
                    "phase": "zero",
                    "ends": "mirrored oddly by half the taps",
                },
            )
        )
    taken += [Step(name, {**parameters, "phase": "zero"}) for name, parameters in setup.band_steps]
    if setup.reference_from.any():
        names = np.array(setup.names)
        taken.append(
            Step(
                "reference",
                {
                    "mean_of": names[setup.reference_from].tolist(),
                    "subtracted_from": names[setup.reference_to].tolist(),
                    "recorded_reference_put_back": setup.restored,
                },
            )
        )
    return tuple(taken)


def _fill_parameters(setup: Setup, estimates: Estimates) -> dict[str, Any]:
    gaps = [
        gap
        for group in setup.groups
        for segment in setup.facts.segments
        for gap in setup.lay(group, estimates.onsets, segment)
    ]
    return {
        "fill": setup.fill.value,
        "side": setup.side.value,
        "flank_samples": setup.flank,
        "windows_s": [
            {
                "channels": [setup.channels[i].name for i in group.columns],
                "windows_s": [list(window) for window in group.windows_s],
            }
            for group in setup.groups
        ],
        "pulses": len(estimates.pulses),
        "gaps": len(gaps),
        "gaps_with_shortened_flanks": sum(shortened(gap, setup.flank) for gap in gaps),
    }
