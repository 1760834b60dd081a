"""What the simulated brain answers to lanterns, arrows, pulses and probes. All values are invented.

Latencies of the response to a pulse lie where published ones do (tens of milliseconds to about 200 ms); the
late pair stands for what the click and the tap of the coil evoke as well.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

LENGTH_S = 0.9  # every response is over by then


@dataclass(frozen=True)
class Peak:
    """One Gaussian deflection: map, latency and standard deviation in seconds, amplitude in volts."""

    place: str
    latency_s: float
    width_s: float
    height_v: float


# Equivalent dipoles: position inside the unit sphere (x right, y front, z up) and moment.
PLACES: dict[str, tuple[tuple[float, float, float], tuple[float, float, float]]] = {
    "occipital": ((0.0, -0.62, 0.25), (0.0, -0.9, 0.4)),
    "parietal": ((0.05, -0.35, 0.58), (0.0, -0.3, 1.0)),
    "central": ((0.0, 0.1, 0.55), (0.0, 0.2, 1.0)),
    "under the coil": ((-0.4, -0.42, 0.5), (0.5, 0.8, 0.4)),
}

PEAKS: dict[str, tuple[Peak, ...]] = {
    "sample": (
        Peak("occipital", 0.105, 0.014, 5e-6),
        Peak("occipital", 0.165, 0.020, -7e-6),
        Peak("parietal", 0.290, 0.050, 4e-6),
    ),
    "cue": (
        Peak("occipital", 0.110, 0.015, 3e-6),
        Peak("occipital", 0.175, 0.022, -4e-6),
        Peak("parietal", 0.340, 0.060, 5e-6),
    ),
    "pulse": (
        Peak("under the coil", 0.030, 0.004, 4e-6),
        Peak("under the coil", 0.045, 0.006, -5e-6),
        Peak("under the coil", 0.060, 0.008, 5e-6),
        Peak("central", 0.100, 0.016, -7e-6),
        Peak("central", 0.180, 0.030, 8e-6),
    ),
    "probe": (
        Peak("occipital", 0.105, 0.015, 4e-6),
        Peak("occipital", 0.170, 0.022, -5e-6),
        Peak("parietal", 0.420, 0.080, 6e-6),
    ),
}
OTHER_PROBE = 1.5  # a probe that differs evokes this much more at the parietal place


def waveform(kind: str, place: str, times_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """Response to one kind of event at one place.

    Parameters
    ----------
    kind : str
        A key of `PEAKS`.
    place : str
        A key of `PLACES`.
    times_s : array, shape (n_times,)
        Since the event.

    Returns
    -------
    array, shape (n_times,)
        Volts at the site where the place's map is 1.
    """
    total = np.zeros(len(times_s))
    for peak in PEAKS[kind]:
        if peak.place == place:
            total += peak.height_v * np.exp(-0.5 * ((times_s - peak.latency_s) / peak.width_s) ** 2)
    return total
