"""What the transplant test costs: processor time for 400 gaps in 62 channels at 5 kHz.

Run it as ``python tests/benchmarks/repair_cost.py``, with OMP_NUM_THREADS=1 for one thread of the linear
algebra library. The recording is made on the fly and never held whole: reading it costs a copy.
"""

from __future__ import annotations

import resource
import time
from dataclasses import replace

import numpy as np

from pulsemend.engine.fit import fit
from pulsemend.engine.setup import bind
from pulsemend.engine.transplant import other_methods, own_method, prepare
from pulsemend.engine.transplants import TransplantConfig
from pulsemend.mending.learned import learn
from pulsemend.mending.repair_cost import repair_cost
from pulsemend.model.marks import NO_MARKS
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
from pulsemend.model.recording import Channel, FloatArray, Marker, RecordingFacts
from pulsemend.model.vocabulary import ChannelType, Decay, Fill, Role
from pulsemend.progress import finish
from pulsemend.signal.fills import FillConfig, Filler, default_flank_s, flank_samples, lags_needed
from pulsemend.signal.gaps import Gap
from pulsemend.units import v_to_uv

RATE_HZ = 5000.0
N_CHANNELS, N_GAPS = 62, 400
EVERY = 20_500  # samples between pulses: about three stretches between two
N_PULSES = 160
PERIOD = 200_003
LIMITS_S = {"fills": 3.0, "test": 20.0}


class Repeating:
    """A recording whose background repeats, with a spike of 5 mV and perhaps a decay after each marker."""

    def __init__(self, decays: bool) -> None:
        rng = np.random.default_rng(1)
        f = np.fft.rfftfreq(PERIOD, 1.0 / RATE_HZ)
        f[0] = f[1]
        spectrum = rng.standard_normal((N_CHANNELS, f.size)) + 1j * rng.standard_normal((N_CHANNELS, f.size))
        x = np.fft.irfft(spectrum / f, PERIOD)
        self._background = np.round(150.0 * x / x.std()).T.astype(np.float32)
        self._pulse = np.zeros(5000, np.float32)
        if decays:
            self._pulse += np.round(1e4 * np.exp(-np.arange(5000) / 100.0)).astype(np.float32)
        self._pulse[:5] += np.array([5e4, -3e4, 1e4, 5e3, 1e3], np.float32)
        self._onsets = [EVERY * (k + 1) for k in range(N_PULSES)]
        self._facts = RecordingFacts(
            stem="repeating",
            format="memory",
            rate_hz=RATE_HZ,
            n_samples=EVERY * (N_PULSES + 2),
            channels=tuple(Channel(f"E{i}", ChannelType.EEG, 1e-7) for i in range(N_CHANNELS)),
            markers=tuple(Marker(float(onset), "pulse") for onset in self._onsets),
        )

    @property
    def facts(self) -> RecordingFacts:
        return self._facts

    def read(self, start: int, stop: int, out: FloatArray, offset: np.ndarray | None = None) -> None:
        at = start
        while at < stop:
            first = at % PERIOD
            n = min(stop - at, PERIOD - first)
            out[at - start : at - start + n] = self._background[first : first + n]
            at += n
        for k in range(max(1, start // EVERY - 1), min(N_PULSES, stop // EVERY + 1) + 1):
            a, b = max(start, k * EVERY), min(stop, k * EVERY + self._pulse.size)
            if a < b:
                out[a - start : b - start] += self._pulse[a - k * EVERY : b - k * EVERY, None]
        if offset is not None:
            out -= offset

    def fingerprint_paths(self) -> tuple[str, ...]:
        return ()

    def close(self) -> None:
        pass


def a_plan(decay: Decay = Decay.NONE) -> Plan:
    return Plan(
        about=About("benchmark", 50.0),
        markers=(MarkerPlan("pulse", Role.PULSE),),
        trial=(Slot("pulse", Role.PULSE),),
        pulses=replace(Pulses(window_ms=(-2.0, 14.0), fill=Fill.COVARIANCE), decay=decay),
        filter=Filter(highpass_hz=1.0, lowpass_hz=100.0, rate_hz=1000.0),
        channels=Channels(reference="average"),
        epochs=Epochs(1.0, (EpochRule("all", "pulse", 0.0),)),
        export=Export(),
    )


def fills_alone() -> None:
    rng = np.random.default_rng(2)
    x = np.cumsum(rng.standard_normal((3000, N_CHANNELS)), axis=0).astype(np.float32)
    lags = np.arange(lags_needed(81, 1000), 0.0, -1.0)
    for kind in (fill.value for fill in Fill if fill is not Fill.LEAVE):
        flank = flank_samples(default_flank_s(kind), RATE_HZ)
        known = np.tile(lags, (N_CHANNELS, 1)) if kind == "covariance" else None
        before = time.process_time()
        filler = Filler(FillConfig(kind, "both", flank, RATE_HZ, known), N_CHANNELS, np.float32)
        for _ in range(N_GAPS):
            filler.fill(x, 0, Gap(1400, 1481, flank, flank))
        print(f"  {kind:16s}{time.process_time() - before:6.2f} s")


def whole_test(decay: Decay, compare: bool) -> None:
    recording = Repeating(decay is not Decay.NONE)
    learned = finish(learn(recording, a_plan(decay), NO_MARKS))
    before = time.process_time()
    cost = finish(repair_cost(recording, learned, compare=compare, config=TransplantConfig(most_gaps=N_GAPS)))
    taken_s = time.process_time() - before
    own = cost.methods[0]
    print(
        f"  decay {decay.value:12s} {len(cost.methods)} fills, {cost.n_gaps} gaps: {taken_s:6.2f} s; "
        f"in the gap {v_to_uv(own.in_gap.value):.2f} uV, trustworthy from {own.earliest_s}"
    )


def parts() -> None:
    """Where the time goes."""
    recording, plan = Repeating(False), a_plan()
    setup = bind(recording.facts, plan, NO_MARKS)
    estimates = finish(fit(recording, setup))
    methods = (own_method(setup), *other_methods(setup))
    before = time.process_time()
    bench = finish(prepare(recording, setup, estimates, methods[:1], TransplantConfig()))
    print(f"  planting {time.process_time() - before:6.2f} s")
    before = time.process_time()
    finish(bench.measure(methods[:1]))
    print(f"  repairing and comparing {time.process_time() - before:6.2f} s")


if __name__ == "__main__":
    print(f"fills alone, {N_GAPS} gaps x {N_CHANNELS} channels, limit {LIMITS_S['fills']:.0f} s each")
    fills_alone()
    print(f"whole test, limit {LIMITS_S['test']:.0f} s")
    parts()
    whole_test(Decay.NONE, compare=False)
    whole_test(Decay.EXPONENTIAL, compare=False)
    whole_test(Decay.NONE, compare=True)
    print(f"peak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MB")
