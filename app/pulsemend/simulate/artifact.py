"""What a pulse leaves in the recording besides the brain's answer: spike, decay, muscle and recharge.

Every shape is made on a grid of eighths of a sample, sent through the amplifier's low-pass there and then
sampled at the phase its onset falls on. Amplitudes are invented; their order of magnitude and the decay's
power law follow the papers below.

References
----------
Freche D, Naim-Feil J, Peled A, Levit-Binnun N, Moses E (2018) PLoS Comput Biol 14(7):e1006177.
https://doi.org/10.1371/journal.pcbi.1006177
Mutanen T, Maki H, Ilmoniemi RJ (2013) Brain Stimul 6:371-376. https://doi.org/10.1016/j.brs.2012.07.005
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import signal

from pulsemend.simulate.head import angles_from, directions
from pulsemend.simulate.schedule import FINE, Schedule

AMPLIFIER_HZ = 1000.0
AMPLIFIER_ORDER = 4

SPIKE_S = 0.0003  # one cycle of the coil's current
SPIKE_V = 0.012  # under the coil, before the amplifier's low-pass; far beyond the converter's range
SPIKE_LEAST_V = 0.0012  # far from it
DECAY_S = 1.0  # the decay's end
DECAY_V = 0.001
DECAY_LEAST_V = 0.00001
DECAY_POWER = 2.0
DECAY_TAU_S = (0.005, 0.020)
MUSCLE_V = 0.0002
RECHARGE_DELAY_S = 0.250
RECHARGE_JITTER_S = 0.0002
RECHARGE_S = 0.0015
RECHARGE_V = 0.0004
SHORT_S = 0.030  # spike and muscle, and the recharge, are over by then


@dataclass(frozen=True)
class Hit:
    """One artifact: its kind, onset in eighths of a sample, and size relative to the usual."""

    kind: str
    onset_fine: int
    size: float


@dataclass(frozen=True)
class Artifacts:
    """All artifacts of a recording.

    Parameters
    ----------
    shapes : dict of str to array, shape (8, n_channels, n_samples)
        Volts, by kind and phase.
    hits : tuple of Hit
    decay_v, decay_tau_s : array, shape (n_channels,)
        The decay is ``decay_v (1 + t / decay_tau_s)^-2`` less its value after one second.
    """

    shapes: dict[str, NDArray[np.float64]]
    hits: tuple[Hit, ...]
    decay_v: NDArray[np.float64]
    decay_tau_s: NDArray[np.float64]

    def add_to(self, volts: NDArray[np.float64], start: int) -> None:
        """Add every artifact that reaches into a block, in place.

        Parameters
        ----------
        volts : array, shape (n_channels, n_samples)
            The block.
        start : int
            Absolute number of the block's first sample.
        """
        stop = start + volts.shape[1]
        for hit in self.hits:
            first = -(-hit.onset_fine // FINE)
            shape = self.shapes[hit.kind][first * FINE - hit.onset_fine]
            a, b = max(first, start), min(first + shape.shape[1], stop)
            if a < b:
                volts[:, a - start : b - start] += hit.size * shape[:, a - first : b - first]


def amplifier(rate_hz: float, grid: int = 1) -> NDArray[np.float64]:
    """Second-order sections of the low-pass of an amplifier that samples at a rate, shape (n_sections, 6).

    Parameters
    ----------
    rate_hz : float
        Sampling rate of the recording.
    grid : int
        The signal to filter has this many values per sample.
    """
    corner = min(AMPLIFIER_HZ, 0.4 * rate_hz)
    return np.asarray(signal.butter(AMPLIFIER_ORDER, corner, fs=rate_hz * grid, output="sos"))


def make_artifacts(
    rng: np.random.Generator,
    schedule: Schedule,
    channels: tuple[str, ...],
    *,
    coil: str,
    rate_hz: float,
    size: float = 1.0,
) -> Artifacts:
    """Draw the artifacts of every pulse that was given.

    Parameters
    ----------
    rng : numpy Generator
        Source of everything drawn here.
    schedule : Schedule
        When pulses were given.
    channels : tuple of str
        Names of the recorded channels.
    coil : str
        Site under the coil.
    rate_hz : float
        Sampling rate of the recording.
    size : float
        Of everything, relative to the usual; 0 for no artifact at all.
    """
    n = len(channels)
    near = np.exp(-((angles_from(coil, channels) / 0.6) ** 2))
    sign = rng.choice([-1.0, 1.0], n)
    spike_v = sign * (SPIKE_LEAST_V * rng.uniform(0.7, 1.4, n) + SPIKE_V * near)
    decay_v = rng.choice([-1.0, 1.0], n) * (DECAY_LEAST_V + DECAY_V * near) * rng.uniform(0.3, 1.0, n)
    tau_s = rng.uniform(*DECAY_TAU_S, n)
    sites, site = directions(channels), directions((coil,))[0]
    lateral = np.clip(np.sign(site[0]) * sites[:, 0] - 0.6, 0.0, None) / 0.4
    muscle_v = MUSCLE_V * lateral * rng.uniform(0.5, 1.0, n)
    recharge_v = RECHARGE_V * sign * (0.2 + 0.8 * near)

    fine_hz = rate_hz * FINE
    sections = amplifier(rate_hz, FINE)
    t = np.arange(round(SHORT_S * fine_hz)) / fine_hz
    long = np.arange(round(DECAY_S * fine_hz)) / fine_hz
    burst = spike_v[:, None] * _spike(t) + muscle_v[:, None] * _muscle(t)
    shapes = {
        "spike": _sampled(burst, sections),
        "decay": _sampled(_decay(long, decay_v[:, None], tau_s[:, None]), sections),
        "recharge": _sampled(recharge_v[:, None] * _lobe(t), sections),
    }
    return Artifacts(shapes, _hits(rng, schedule, rate_hz, size), decay_v, tau_s)


def _hits(rng: np.random.Generator, schedule: Schedule, rate_hz: float, size: float) -> tuple[Hit, ...]:
    hits: list[Hit] = []
    for pulse in schedule.pulses:
        # Drawn for every pulse, so that a fault in one leaves all others as they were.
        spike, decay, recharge = size * rng.normal(1.0, (0.03, 0.10, 0.03))
        late_s = RECHARGE_DELAY_S + rng.uniform(-RECHARGE_JITTER_S, RECHARGE_JITTER_S)
        if pulse.happened and size:
            onset = round(pulse.time_s * rate_hz * FINE)
            hits += [
                Hit("spike", onset, spike),
                Hit("decay", onset, decay),
                Hit("recharge", onset + round(late_s * rate_hz * FINE), recharge),
            ]
    return tuple(hits)


def _spike(t: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.where(t < SPIKE_S, np.sin(2 * np.pi * t / SPIKE_S) + np.sin(np.pi * t / SPIKE_S), 0.0)


def _muscle(t: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(
        np.exp(-0.5 * ((t - 0.0050) / 0.0010) ** 2) - 0.7 * np.exp(-0.5 * ((t - 0.0085) / 0.0016) ** 2)
    )


def _lobe(t: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.where(t < RECHARGE_S, np.sin(np.pi * t / RECHARGE_S), 0.0)


def _decay(
    t: NDArray[np.float64], height_v: NDArray[np.float64], tau_s: NDArray[np.float64]
) -> NDArray[np.float64]:
    # Less its last value, so that it ends without a step.
    return height_v * ((1.0 + t / tau_s) ** -DECAY_POWER - (1.0 + DECAY_S / tau_s) ** -DECAY_POWER)


def _sampled(fine: NDArray[np.float64], sections: NDArray[np.float64]) -> NDArray[np.float64]:
    """Low-pass (n_channels, n_fine) and deal it out to the eight phases."""
    n = fine.shape[1] // FINE
    passed = np.asarray(signal.sosfilt(sections, fine[:, : n * FINE], axis=1))
    return np.ascontiguousarray(passed.reshape(len(fine), n, FINE).transpose(2, 0, 1))
