"""Simulated signal without pulses, clean or with channels broken in known ways."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import signal

from pulsemend.signal.channels import Judgement, Label, WindowMeter, judge
from pulsemend.simulate.background import activity_filter
from pulsemend.simulate.head import CAP, directions
from pulsemend.simulate.lantern import LanternSpec
from pulsemend.simulate.memory import rehearse

RATE_HZ = 1000.0
_CAP_32 = """
    Fp1 Fp2 F7 F3 Fz F4 F8 FC5 FC1 FC2 FC6 T7 C3 Cz C4 T8 TP9 CP5 CP1 CP2 CP6 TP10
    P7 P3 Pz P4 P8 PO7 O1 Oz O2 PO8
"""
CAP_32 = tuple(_CAP_32.split())
WINDOW = 2000
BROKEN = {
    "F7": {Label.LOUD_OR_DEAD},
    "T8": {Label.LOUD_OR_DEAD},
    "P3": {Label.FAST_NOISE},
    "F4": {Label.UNLIKE, Label.UNPREDICTED},
    "O1": {Label.UNLIKE, Label.UNPREDICTED},
    "P8": {Label.UNLIKE, Label.UNPREDICTED},
}
"""What `broken` does to each: six times too loud, dead, 40 uV of white noise, F4 and O1 swapped, a signal of
its own. C3 and C1 (Cz where there is no C1) are bridged."""


def clean(seed: int) -> NDArray[np.float64]:
    """A minute of 62 channels at 1 kHz, volts, shape (60 000, 62), in the order of the cap."""
    return _simulated(seed).copy()


@lru_cache(maxsize=3)
def _simulated(seed: int) -> NDArray[np.float64]:
    spec = LanternSpec(
        trials=2, seed=seed, rate_hz=RATE_HZ, duration_s=60.0, faults=(), loud="", pulse_size=0.0
    )
    return rehearse(spec).clean_v[:60_000]


def broken(volts: NDArray[np.float64], names: tuple[str, ...], seed: int) -> NDArray[np.float64]:
    """Break channels as `BROKEN` says."""
    rng = np.random.default_rng(seed)
    x, at, n = volts.copy(), {name: place for place, name in enumerate(names)}, len(volts)
    x[:, at["F7"]] *= 6.0
    x[:, at["T8"]] = 1e-6 * rng.standard_normal(n)
    x[:, at["P3"]] += 40e-6 * rng.standard_normal(n)
    x[:, [at["F4"], at["O1"]]] = x[:, [at["O1"], at["F4"]]]
    x[:, at["P8"]] = (
        10e-6 * signal.sosfilt(activity_filter(RATE_HZ), rng.standard_normal(n + WINDOW))[WINDOW:]
    )
    pair = [at["C3"], at[bridged_with_c3(names)]]
    x[:, pair] = x[:, pair].mean(axis=1, keepdims=True) + 0.3e-6 * rng.standard_normal((n, 2))
    return x


def bridged_with_c3(names: tuple[str, ...]) -> str:
    return "C1" if "C1" in names else "Cz"


def columns_of(names: tuple[str, ...]) -> list[int]:
    """Places of some names in what `clean` gives."""
    return [CAP.index(name) for name in names]


def judged(
    volts: NDArray[np.float64], names: tuple[str, ...] | None, rate_hz: float = RATE_HZ
) -> Judgement | None:
    """Measure windows of 2 s and judge; `names` None: without positions."""
    meter = WindowMeter(rate_hz, 50.0)
    length = round(2.0 * rate_hz)
    windows = [meter.measure(volts[at : at + length]) for at in range(0, len(volts) - length + 1, length)]
    return judge([window for window in windows if window], None if names is None else directions(names))


def labels(found: Judgement) -> dict[int, set[Label]]:
    """Labels of every channel that is bad, by its place."""
    return {
        int(place): {one.label for one in found.criteria if found.flagged(one)[place]}
        for place in np.flatnonzero(found.bad)
    }
