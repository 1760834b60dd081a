"""A Lantern recording with known truth: what it contains, and its samples in blocks.

`make_lantern` draws everything but the noise from the seed; `blocks` streams the samples. Noise is drawn in
cells of fixed length whatever the blocks are, so a recording does not depend on how it is read.
"""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from enum import IntEnum
from operator import attrgetter
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import ThreadpoolController

from pulsemend.model.recording import Marker
from pulsemend.simulate import background
from pulsemend.simulate.artifact import Artifacts, amplifier, make_artifacts
from pulsemend.simulate.background import Burst, Noise
from pulsemend.simulate.evoked import LENGTH_S, OTHER_PROBE, PEAKS, PLACES, waveform
from pulsemend.simulate.head import CAP, REFERENCE, dipole_map, directions
from pulsemend.simulate.schedule import LANTERN_FAULTS, Fault, Moment, Schedule, make_schedule
from pulsemend.units import uv_to_v

T = TypeVar("T")

CELL_S = 0.25
RESOLUTION_UV = 0.1
RAIL = 32767  # the converter's largest number; with the resolution 3.2767 mV
LINE_WEAKER = 0.2  # height of the line's harmonic against the line


@dataclass(frozen=True)
class LanternSpec:
    """What to simulate.

    Parameters
    ----------
    participant : str
        Invented; part of the file names and of what the seed is drawn with.
    seed : int
    trials : int
        About 13 s each, with two pulses.
    channels : tuple of str
        Some or all of the cap's, recorded against FCz.
    rate_hz : float
    duration_s : float
        Pauses between trials are stretched until the recording lasts this long; 0: as short as the trials.
    faults : tuple of Fault
    coil : str
        Site under the coil.
    loud : str
        A channel that only records noise; empty for none.
    line_hz : float
        Mains frequency; 0 for no line noise.
    pulse_size : float
        Size of everything a pulse leaves but the brain's answer; 0 for a recording without artifacts.
    """

    participant: str = "lt01"
    seed: int = 1
    trials: int = 10
    channels: tuple[str, ...] = CAP
    rate_hz: float = 5000.0
    duration_s: float = 0.0
    faults: tuple[Fault, ...] = LANTERN_FAULTS
    coil: str = "P3"
    loud: str = "TP8"
    line_hz: float = 50.0
    pulse_size: float = 1.0

    @property
    def stem(self) -> str:
        """The recording's name without the ending of its files."""
        return f"sub-{self.participant}_task-lantern"


@dataclass(frozen=True)
class Block:
    """Consecutive samples.

    Parameters
    ----------
    start : int
        Absolute number of the first one.
    stored : int16 array, shape (n_samples, n_channels)
        As the converter stores them.
    clean : array, shape (n_samples, n_channels)
        Volts without spike, decay, muscle and recharge, before the converter.
    """

    start: int
    stored: NDArray[np.int16]
    clean: NDArray[np.float64]


@dataclass(frozen=True)
class Lantern:
    """A recording's truth: everything that was drawn except noise.

    Parameters
    ----------
    spec : LanternSpec
    schedule : Schedule
    artifacts : Artifacts
    bursts : tuple of Burst
    source_names : tuple of str
    source_maps : array, shape (n_sources, n_channels)
        As recorded against FCz; volts per unit of each source's activity.
    offset_v : array, shape (n_channels,)
    sensor_v : array, shape (n_channels,)
        Standard deviation of each channel's own noise before the amplifier's low-pass.
    drift_periods_s, drift_phases : array, shape (n_drifts,)
    """

    spec: LanternSpec
    schedule: Schedule
    artifacts: Artifacts
    bursts: tuple[Burst, ...]
    source_names: tuple[str, ...]
    source_maps: NDArray[np.float64]
    offset_v: NDArray[np.float64]
    sensor_v: NDArray[np.float64]
    drift_periods_s: NDArray[np.float64]
    drift_phases: NDArray[np.float64]

    @property
    def n_samples(self) -> int:
        """Length of the recording."""
        return self.schedule.n_samples

    @property
    def markers(self) -> tuple[Marker, ...]:
        """The markers of its file."""
        return self.schedule.markers

    @property
    def scale_v(self) -> float:
        """Volts per stored unit."""
        return uv_to_v(RESOLUTION_UV)


class _Part(IntEnum):
    """What has its own stream of random numbers: a change in one leaves the others as they are."""

    SCHEDULE = 0
    MAPS = 1
    BURSTS = 2
    ARTIFACTS = 3
    ELECTRODES = 4
    ACTIVITY = 5
    SENSORS = 6


def _rng(spec: LanternSpec, part: _Part) -> np.random.Generator:
    entropy = [spec.seed, int.from_bytes(spec.participant.encode(), "big")]
    return np.random.Generator(np.random.PCG64(np.random.SeedSequence(entropy, spawn_key=(int(part),))))


def make_lantern(spec: LanternSpec) -> Lantern:
    """Draw a recording.

    Parameters
    ----------
    spec : LanternSpec
        What to simulate.

    Raises
    ------
    ValueError
        A channel that is not on the cap, no trial, or a fault in a trial that does not exist.
    """
    foreign = [name for name in spec.channels if name not in CAP]
    if foreign:
        message = f"not on the cap: {foreign}"
        raise ValueError(message)
    beyond = [fault for fault in spec.faults if not 1 <= fault.trial <= spec.trials]
    if spec.trials < 1 or beyond:
        message = f"{spec.trials} trials, faults beyond them: {beyond}"
        raise ValueError(message)
    schedule = make_schedule(
        _rng(spec, _Part.SCHEDULE), spec.trials, spec.rate_hz, spec.duration_s, spec.faults
    )
    duration_s = schedule.n_samples / spec.rate_hz
    n = len(spec.channels)
    electrodes = _rng(spec, _Part.ELECTRODES)
    offset_v = electrodes.normal(0.0, background.OFFSET_V, n)
    loud = np.array([name == spec.loud for name in spec.channels])
    names, maps = _sources(spec, electrodes)
    maps[:, loud] = 0.0
    return Lantern(
        spec=spec,
        schedule=schedule,
        artifacts=make_artifacts(
            _rng(spec, _Part.ARTIFACTS),
            schedule,
            spec.channels,
            coil=spec.coil,
            rate_hz=spec.rate_hz,
            size=spec.pulse_size,
        ),
        bursts=background.draw_bursts(_rng(spec, _Part.BURSTS), duration_s),
        source_names=names,
        source_maps=maps,
        offset_v=np.clip(offset_v, -background.OFFSET_MOST_V, background.OFFSET_MOST_V),
        sensor_v=np.where(loud, background.LOUD_V, background.SENSOR_V),
        drift_periods_s=electrodes.uniform(*background.DRIFT_PERIOD_S, background.N_DRIFTS),
        drift_phases=electrodes.uniform(0.0, 2 * np.pi, background.N_DRIFTS),
    )


def _sources(
    spec: LanternSpec, electrodes: np.random.Generator
) -> tuple[tuple[str, ...], NDArray[np.float64]]:
    """Names and maps (n_sources, n_channels) of all sources, in the order of `_activity`."""
    # Maps are made for the whole cap, so that a smaller montage records the same brain.
    sites = directions((*CAP, REFERENCE))
    places = np.stack([dipole_map(sites, np.array(at), np.array(moment)) for at, moment in PLACES.values()])
    patches = background.patch_maps(_rng(spec, _Part.MAPS), sites)
    brain = np.concatenate([patches, background.alpha_maps(sites), places])
    brain = brain[:, [CAP.index(name) for name in spec.channels]] - brain[:, -1:]
    n = len(spec.channels)
    line_v = background.LINE_V if spec.line_hz else 0.0
    line = line_v * electrodes.standard_normal((2, n))
    drift = background.DRIFT_V * electrodes.standard_normal((background.N_DRIFTS, n))
    names = (
        *(f"patch {i + 1}" for i in range(background.N_PATCHES)),
        "alpha left",
        "alpha right",
        *PLACES,
        "line",
        "line a quarter period later",
        *(f"drift {i + 1}" for i in range(background.N_DRIFTS)),
    )
    return names, np.concatenate([brain, line, drift])


def evoked_kind(moment: Moment) -> str | None:
    """Which evoked response a moment has, as a key of `PEAKS`; None for none."""
    kind = moment.slot.rstrip("12")
    return kind if moment.happened and kind in PEAKS else None


def evoked_size(moment: Moment, place: str) -> float:
    """Size of a moment's evoked response at a place, relative to the usual."""
    return OTHER_PROBE if moment.code == "probe other" and place == "parietal" else 1.0


def blocks(lantern: Lantern, block_samples: int) -> Iterator[Block]:
    """Stream a recording.

    Parameters
    ----------
    lantern : Lantern
        The recording's truth.
    block_samples : int
        Samples per block; the last block is shorter. The samples do not depend on it.

    Yields
    ------
    Block
    """
    stored: list[NDArray[np.int16]] = []
    clean: list[NDArray[np.float64]] = []
    start = held = 0
    for cell_stored, cell_clean in _cells(lantern):
        stored.append(cell_stored)
        clean.append(cell_clean)
        held += len(cell_clean)
        if held >= block_samples or start + held == lantern.n_samples:
            all_stored, all_clean = np.concatenate(stored), np.concatenate(clean)
            last = start + held == lantern.n_samples
            cut = held if last else held - held % block_samples
            for a in range(0, cut, block_samples):
                b = min(a + block_samples, cut)
                yield Block(start + a, all_stored[a:b], all_clean[a:b])
            stored, clean = [all_stored[cut:]], [all_clean[cut:]]
            start, held = start + cut, held - cut


def _cells(lantern: Lantern) -> Iterator[tuple[NDArray[np.int16], NDArray[np.float64]]]:
    """Stream stored numbers and clean volts, cell by cell."""
    spec = lantern.spec
    n_cell = max(1, round(CELL_S * spec.rate_hz))
    activity = Noise(
        _rng(spec, _Part.ACTIVITY), background.N_PATCHES, background.activity_filter(spec.rate_hz)
    )
    blas = ThreadpoolController()
    sensors = Noise(_rng(spec, _Part.SENSORS), len(spec.channels), amplifier(spec.rate_hz))
    for _ in range(round(background.WARM_UP_S / CELL_S)):
        activity.draw(n_cell)
    for start in range(0, lantern.n_samples, n_cell):
        # The last cell is drawn whole, too: sums of the same shape round the same way.
        times_s = np.arange(start, start + n_cell) / spec.rate_hz
        rows = np.concatenate([activity.draw(n_cell), _caused(lantern, times_s)])
        # So small a product gains nothing from threads, and without them it always rounds the same way.
        with blas.limit(limits=1, user_api="blas"):
            clean = lantern.source_maps.T @ rows
        clean += lantern.offset_v[:, None]
        clean += sensors.draw(n_cell) * lantern.sensor_v[:, None]
        clean = clean[:, : lantern.n_samples - start]
        volts = clean.copy()
        lantern.artifacts.add_to(volts, start)
        volts /= lantern.scale_v
        np.rint(volts, out=volts)
        np.clip(volts, -RAIL, RAIL, out=volts)
        yield np.ascontiguousarray(volts.astype(np.int16).T), clean.T


def _between(events: Sequence[T], first_s: float, last_s: float, time: str) -> Sequence[T]:
    """Pick the events of a closed span of time; they stand in order of the attribute ``time``."""
    when = attrgetter(time)
    return events[bisect_left(events, first_s, key=when) : bisect_right(events, last_s, key=when)]


def _caused(lantern: Lantern, times_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """Activity of every source that is no noise, shape (n_sources - n_patches, n_times)."""
    places = tuple(PLACES)
    rows = np.zeros((2 + len(places) + 2 + background.N_DRIFTS, len(times_s)))
    first_s, last_s = times_s[0], times_s[-1]
    for burst in _between(lantern.bursts, first_s - background.ALPHA_LENGTH_S[1], last_s, "start_s"):
        rows[burst.side] += burst.wave(times_s)
    for moment in _between(lantern.schedule.moments, first_s - LENGTH_S, last_s, "time_s"):
        kind = evoked_kind(moment)
        if kind is None:
            continue
        since_s = times_s - moment.time_s
        inside = (since_s >= 0.0) & (since_s < LENGTH_S)
        for i, place in enumerate(places):
            response = evoked_size(moment, place) * waveform(kind, place, since_s)
            rows[2 + i] += np.where(inside, response, 0.0)
    line = 2 * np.pi * lantern.spec.line_hz * times_s
    many = background.LINE_HARMONIC
    row = 2 + len(places)
    rows[row] = np.cos(line) + LINE_WEAKER * np.cos(many * line)
    rows[row + 1] = np.sin(line) + LINE_WEAKER * np.sin(many * line)
    turns = times_s / lantern.drift_periods_s[:, None]
    rows[row + 2 :] = np.sin(2 * np.pi * turns + lantern.drift_phases[:, None])
    return rows
