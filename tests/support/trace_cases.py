"""A small recording with events, and a model that holds a view, for tests of traces and ribbon."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.pyramid import Pyramid, pyramid
from pulsemend.engine.store import Store
from pulsemend.model.vocabulary import Role
from pulsemend.progress import finish
from pulsemend.session.view import View
from pulsemend.window.traces.model import Bands, Events, Overlays
from support.array_recording import ArrayRecording

RATE_HZ = 1000.0
N_SAMPLES = 100_000
DURATION_S = N_SAMPLES / RATE_HZ
UV_PER_UNIT = 0.1
PULSES_S = np.arange(5.0, 100.0, 10.0)


class Model:
    """The least that holds a view."""

    def __init__(self, view: View) -> None:
        self.view = view
        self.changes = 0
        self.listeners: list[Callable[[], None]] = []

    def set_view(self, view: View) -> None:
        if view != self.view:
            self.view = view
            self.changes += 1
            for listener in list(self.listeners):
                listener()

    def subscribe(self, listener: Callable[[], None]) -> Callable[[], None]:
        self.listeners.append(listener)
        return lambda: self.listeners.remove(listener)


def signal(n_channels: int, n_samples: int = N_SAMPLES, seed: int = 3) -> NDArray[np.int16]:
    """Noise of some 10 uV on an offset of its own per channel."""
    rng = np.random.default_rng(seed)
    noise = rng.normal(0, 80, (n_samples, n_channels)) + 1000 * rng.normal(0, 1, n_channels)
    return np.rint(noise).astype(np.int16)


def recording(folder: Path, n_channels: int = 8, names: tuple[str, ...] = ()) -> ArrayRecording:
    return ArrayRecording(signal(n_channels), folder / "samples", RATE_HZ, names, UV_PER_UNIT / 1e6)


def pyramid_of(of: ArrayRecording, folder: Path) -> Pyramid:
    return finish(pyramid(of, Store(folder / "cache")))


def names_of(of: ArrayRecording) -> tuple[str, ...]:
    return tuple(channel.name for channel in of.facts.channels)


def overlays(bad: frozenset[str] = frozenset()) -> Overlays:
    """A cue before every pulse, a gap around it, one bad stretch."""
    times_s = np.sort(np.concatenate([PULSES_S, PULSES_S - 2.0]))
    n_events = len(times_s)
    return Overlays(
        Events(
            times_s,
            (Role.CUE, Role.PULSE) * (n_events // 2),
            ("cue left", "pulse") * (n_events // 2),
            tuple(range(100, 100 + n_events)),
        ),
        Bands(PULSES_S - 0.002, PULSES_S + 0.014),
        Bands(np.array([12.0]), np.array([13.0]), ("movement",)),
        bad=bad,
    )
