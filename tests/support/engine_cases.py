"""Small recordings and plans that the engine's tests share."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.chain import Chain
from pulsemend.engine.fit import fit
from pulsemend.engine.setup import bind
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.plan import (
    About,
    Channels,
    EpochRule,
    Epochs,
    Export,
    Filter,
    MarkerPlan,
    Plan,
    Pulses,
    Slot,
)
from pulsemend.model.recording import Channel, FloatArray, Marker, Recording, RecordingFacts
from pulsemend.model.vocabulary import ChannelType, Fill, Precision, PulseTimes, Role
from pulsemend.progress import finish

STEP_V = 1e-7
"""Stored unit of the recordings made here: a tenth of a microvolt."""


class ArrayRecording:
    """A recording of stored numbers, shape (n_channels, n_samples), held in memory."""

    def __init__(
        self,
        stored: NDArray[np.float64],
        rate_hz: float,
        markers: tuple[Marker, ...] = (),
        boundaries: tuple[int, ...] = (),
        names: tuple[str, ...] = (),
        scale_v: float = STEP_V,
    ) -> None:
        names = names or tuple(f"E{i + 1}" for i in range(len(stored)))
        self.stored = stored
        self._facts = RecordingFacts(
            stem="memory",
            format="memory",
            rate_hz=rate_hz,
            n_samples=stored.shape[1],
            channels=tuple(Channel(name, ChannelType.EEG, scale_v) for name in names),
            markers=markers,
            boundaries=boundaries,
        )

    @property
    def facts(self) -> RecordingFacts:
        return self._facts

    def read(self, start: int, stop: int, out: FloatArray, offset: NDArray[np.float64] | None = None) -> None:
        stored = self.stored[:, start:stop].T
        out[...] = stored if offset is None else stored - offset

    def fingerprint_paths(self) -> tuple[str, ...]:
        return ()

    def close(self) -> None:
        pass


def plan(
    *,
    pulses: Pulses | None = None,
    filter: Filter | None = None,  # noqa: A002  the plan's own word
    precision: Precision = Precision.SINGLE,
    reference: str = "average",
    line_hz: float = 0.0,
    **channels: Any,
) -> Plan:
    """Make a plan whose epochs nobody looks at: the engine is asked for them one by one."""
    return Plan(
        about=About("engine", line_hz),
        markers=(MarkerPlan("pulse", Role.PULSE), MarkerPlan("cue", Role.CUE)),
        trial=(Slot("cue1", Role.CUE),),
        pulses=pulses or Pulses(window_ms=(-2.0, 14.0), fill=Fill.LINE),
        filter=filter or Filter(),
        channels=replace(Channels(reference=reference, find_bad=False, rebuild_bad=False), **channels),
        epochs=Epochs(1.0, (EpochRule("delay1", "cue1", 0.0),)),
        export=Export(precision=precision),
    )


UNTOUCHED = Filter(highpass_hz=0.0, lowpass_hz=0.0, rate_hz=0.0)
NO_PULSES = Pulses(times=PulseTimes.NONE)


def coloured(
    n_channels: int, n_samples: int, rate_hz: float, seed: int, sd_uv: float = 15.0
) -> NDArray[np.float64]:
    """Noise with a 1/f amplitude spectrum and an offset per channel, as whole stored numbers."""
    rng = np.random.default_rng(seed)
    f = np.fft.rfftfreq(n_samples, 1.0 / rate_hz)
    f[0] = f[1]
    spectrum = (
        rng.standard_normal((n_channels, f.size)) + 1j * rng.standard_normal((n_channels, f.size))
    ) / f
    x = np.fft.irfft(spectrum, n_samples)
    x *= sd_uv / x.std()
    return np.round((x + 500.0 * np.arange(n_channels)[:, None] - 800.0) * 10.0)


def with_pulses(
    stored: NDArray[np.float64], rate_hz: float, onsets: list[int], lead: int = 3
) -> ArrayRecording:
    """Put spikes of 1 ms and some millivolts at the onsets; markers lead them by `lead` samples."""
    stored = stored.copy()
    shape = np.interp(np.arange(round(1e-3 * rate_hz)), [0, 1, 2, 4], [3e4, -2e4, 1e4, 3e3])
    for onset in onsets:
        stored[:, onset : onset + shape.size] += shape
    return ArrayRecording(stored, rate_hz, tuple(Marker(float(onset - lead), "pulse") for onset in onsets))


def make_chain(recording: Recording, a_plan: Plan, marks: Marks = NO_MARKS) -> Chain:
    """Bind, fit and build."""
    setup = bind(recording.facts, a_plan, marks)
    return Chain(recording, setup, finish(fit(recording, setup)))


@dataclass(frozen=True)
class EpochSamples:
    """One epoch, as the tests look at it."""

    data: NDArray[Any]
    replaced: NDArray[np.bool_]
    shift_s: float
    remainder_s: float


def read_epoch(chain: Chain, anchor_sample: float, start_s: float, n_times: int) -> EpochSamples:
    """Cut and read one epoch."""
    cut = chain.cut(anchor_sample, start_s, n_times)
    return EpochSamples(chain.samples(cut), chain.replaced(cut), cut.shift_s, cut.remainder_s)
