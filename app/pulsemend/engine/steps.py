"""What the engine does to the samples, step by step with every parameter: for provenance and report."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.bad_channels import found_bad, rebuilding, reference_from
from pulsemend.engine.decay import DecayEstimates
from pulsemend.engine.decay_subtraction import OVER_UV
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.setup import Setup
from pulsemend.signal.absorption import LATENCIES_S
from pulsemend.signal.channels import WINDOW_SHARE, Judgement
from pulsemend.signal.gaps import shortened
from pulsemend.signal.splines import ORDER, REGULARISATION
from pulsemend.units import v_to_uv


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
    if estimates.decay is not None:
        taken.append(Step("decay", _decay_parameters(setup, estimates.decay)))
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
    names = np.array(setup.names)
    found = found_bad(setup, estimates.channels)
    if estimates.channels is not None:
        taken.append(Step("search for bad channels", _search_parameters(setup, estimates.channels)))
    ways = rebuilding(setup, found)
    if ways.rows.size:
        taken.append(
            Step(
                "rebuild bad channels",
                {
                    "channels": names[ways.rows].tolist(),
                    "method": "spherical splines",
                    "order": ORDER,
                    "regularisation": REGULARISATION,
                    "rests_on": {
                        str(names[row]): names[: setup.used.size][sources].tolist()
                        for row, sources in zip(ways.rows, ways.sources, strict=True)
                    },
                },
            )
        )
    if setup.reference_from.any():
        taken.append(
            Step(
                "reference",
                {
                    "mean_of": names[reference_from(setup, found)].tolist(),
                    "subtracted_from": names[setup.reference_to].tolist(),
                    "recorded_reference_put_back": setup.restored,
                },
            )
        )
    return tuple(taken)


def _decay_parameters(setup: Setup, decay: DecayEstimates) -> dict[str, Any]:
    names = [channel.name for channel in setup.channels]
    fitted = [
        {
            "channel": names[column],
            "at_the_gaps_end_uv": round(v_to_uv(float(decay.shape(row).at(np.zeros(1))[0])), 3),
            "shape": [float(f"{value:.6g}") for value in decay.shape(row).values],
            "spread_of_amplitudes": round(float(decay.spread[row]), 4),
            "recovered_share": [round(float(x), 3) if np.isfinite(x) else None for x in decay.share[row]],
        }
        for row, column in enumerate(decay.columns.tolist())
    ]
    return {
        "kind": decay.kind.value,
        "stretch_s": setup.decay_s,
        "least_v": setup.decay_least_v,
        "shape_from": f"the median of {decay.n_pulses} pulses; only its amplitude is fitted per pulse",
        "subtracted_until_uv": OVER_UV,
        "step_at_the_pulse": "not touched: each side keeps its own level",
        "fitted": fitted,
        "latencies_of_recovered_share_s": list(LATENCIES_S),
        "not_fitted": {names[i]: reason for i, reason in enumerate(decay.reasons) if reason},
    }


def _search_parameters(setup: Setup, judgement: Judgement) -> dict[str, Any]:
    """Tell what was found, with each value beside its limit, and what the marks made of it."""
    against = {
        channel.name: {
            one.label.value: {
                "value": round(float(one.value[place]), 3),
                "limit": one.limit,
                "windows": int(one.n_over[place]),
            }
            for one in judgement.criteria
            if judgement.flagged(one)[place]
        }
        for place, channel in enumerate(setup.channels)
        if judgement.bad[place]
    }
    return {
        "windows": judgement.n_windows,
        "share_of_windows": WINDOW_SHARE,
        "against": against,
        "good_by_the_marks": [name for name in against if name in _names(setup, setup.good)],
        "bridged": [[setup.channels[a].name, setup.channels[b].name] for a, b in judgement.bridged],
    }


def _names(setup: Setup, chosen: NDArray[np.bool_]) -> list[str]:
    return [channel.name for channel, is_chosen in zip(setup.channels, chosen, strict=True) if is_chosen]


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
