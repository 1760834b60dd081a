"""How near the repaired signal comes to the truth, against plain scripts with the reader library.

    python tests/benchmarks/accuracy.py [--small]

prints Markdown: two tables with a row for every simulated recording, and below them each bound with how many
of these cells meet it. `--small` takes a few cells.

Compared with what the same filter (1 to 100 Hz, 1 kHz) makes of the same recording without any artifact:

  (a) plain       a straight line over each gap, filter, epochs
  (b) nothing     filter, epochs
  (c) ramps       as (a), before it a straight line per pulse, fitted to the 80 ms after the gap; its slope is
                  taken out and its end kept, so that no step is made there
  (d) one exp.    as (a), before it one exponential per channel, fitted by `scipy.optimize` to the median
                  pulse (each less its mean) over the same 80 ms, its time constant at most twice as long, and
                  subtracted until the next pulse
  ours            fit and chain with the plan's "covariance" fill; decay of the simulated kind ("own") or
                  "power" whatever was simulated; `across_pulses` "filled" or "split"

The scripts are told the onsets; ours finds them near markers that lead by three samples. Every decay meets
every combination of gap, step and muscle; rate and background are spread evenly over these.
"""

from __future__ import annotations

import argparse
import sys
import time
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from itertools import product
from pathlib import Path
from typing import Any

import mne
import mne.preprocessing
import numpy as np
import scipy.optimize
from numpy.typing import NDArray

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from pulsemend.engine.chain import Chain
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import fit
from pulsemend.engine.setup import Setup, bind
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import Filter, Pulses
from pulsemend.model.vocabulary import AcrossPulses, Decay, Fill
from pulsemend.progress import finish
from pulsemend.signal.gaps import window_to_samples
from pulsemend.simulate.evoked import waveform
from pulsemend.units import ms_to_s, v_to_uv
from support.decay_cases import RATE_HZ, background, with_decays
from support.engine_cases import STEP_V, ArrayRecording, plan, with_pulses

Floats = NDArray[np.float64]

N_PULSES = 40
N_CHANNELS = 8
N_WITHOUT_DECAY = 20
"""Channels; more where the share is counted in which nothing is fitted."""

FIRST_S, SPACING_S, JITTER_S = 1.5, 1.3, 0.2
STEP_UV, MUSCLE_UV = 50.0, 200.0
SPREAD = 0.1
"""Standard deviation of a pulse's decay, relative to the usual one; and of its muscle activity."""

OUTPUT_HZ = 1000
START_S, N_TIMES = -0.510, 761
TIMES_S = START_S + np.arange(N_TIMES) / OUTPUT_HZ
BEFORE = TIMES_S < -0.0099
WINDOWS_S = ((0.020, 0.060), (0.060, 0.200))
MOST_LAG = 15
DECAY_WINDOW_S = 0.080
KINDS = (Decay.EXPONENTIAL, Decay.TWO_EXPONENTIALS, Decay.POWER)
SCRIPTS = ("plain", "nothing", "ramps", "one exp.")
OURS = ("own, filled", "own, split", "power, filled", "power, split")


@dataclass(frozen=True)
class Cell:
    """One simulated recording."""

    rate_hz: int
    gap_ms: tuple[float, float]
    alpha: bool
    decay: Decay
    size_uv: float
    step: bool
    muscle: bool

    @property
    def words(self) -> str:
        """The first columns of its row."""
        decay = f"{self.decay.value}, {self.size_uv:g}" if self.size_uv else "none"
        ground = "alpha" if self.alpha else "pink"
        also = " + ".join([*["step"] * self.step, *["muscle"] * self.muscle]) or "-"
        return f"{self.rate_hz // 1000} kHz, to {self.gap_ms[1]:g} ms, {ground} | {decay} | {also}"

    @property
    def gap(self) -> tuple[int, int]:
        """Replaced samples from the onset: first, and first after."""
        return window_to_samples(0, (ms_to_s(self.gap_ms[0]), ms_to_s(self.gap_ms[1])), self.rate_hz)


@dataclass
class Found:
    """What one method leaves: errors in microvolts, evoked response as (ratio, shift in ms) per window."""

    after_uv: float
    before_uv: float
    evoked: list[tuple[float, float]]


@dataclass
class Result:
    """One cell's row."""

    cell: Cell
    found: dict[str, Found] = field(default_factory=dict)
    own: Decay = Decay.EXPONENTIAL
    fitted: dict[Decay, int] = field(default_factory=dict)
    changed: dict[Decay, int] = field(default_factory=dict)
    n_channels: int = 0


def cells(small: bool) -> Iterator[Cell]:
    """List the cells."""
    decays = [(Decay.NONE, 0.0), *product(KINDS, (100.0, 1000.0))]
    for (decay, size_uv), long, step, muscle in product(decays, (True, False), (False, True), (False, True)):
        if small and (muscle or not long or size_uv == 100.0):
            continue
        # Rate and background at two levels each, balanced against gap, step and muscle: a quarter fraction.
        rate_hz = 5000 if (long + step + muscle) % 2 else 1000
        yield Cell(
            rate_hz, (-2.0, 14.0 if long else 8.0), (long + step) % 2 == 1, decay, size_uv, step, muscle
        )


@dataclass(frozen=True)
class Simulated:
    """A recording, the same without artifact (both in stored numbers), and the onsets in samples."""

    recording: ArrayRecording
    truth: Floats
    onsets: list[int]


def simulate(cell: Cell, seed: int) -> Simulated:
    """Make a recording at 5 kHz and, for 1 kHz, take every fifth sample of it."""
    rng = np.random.default_rng(seed)
    n_channels = N_CHANNELS if cell.size_uv else N_WITHOUT_DECAY
    at_s = FIRST_S + SPACING_S * np.arange(N_PULSES) + rng.uniform(0, JITTER_S, N_PULSES)
    onsets = [5 * round(1000 * at) for at in at_s]
    n = onsets[-1] + 2 * RATE_HZ
    signs = rng.choice([-1.0, 1.0], (n_channels, 1))
    truth = background(n_channels, n, seed, cell.alpha)
    t = np.arange(RATE_HZ) / RATE_HZ
    response = waveform("pulse", "under the coil", t) + waveform("pulse", "central", t)
    response = rng.choice([-1.0, 1.0], (n_channels, 1)) * np.round(response / STEP_V)
    burst = np.exp(-0.5 * ((t - 0.0050) / 0.0010) ** 2) - 0.7 * np.exp(-0.5 * ((t - 0.0085) / 0.0016) ** 2)
    artifact = np.zeros_like(truth)
    if cell.size_uv:
        artifact = signs * with_decays(artifact, onsets, cell.decay, SPREAD, cell.size_uv)
    for onset in onsets:
        stop = min(n, onset + t.size)
        truth[:, onset:stop] += response[:, : stop - onset]
        if cell.step:
            artifact[:, onset:] += 10.0 * STEP_UV * signs
        if cell.muscle:
            size = 10.0 * MUSCLE_UV * (1.0 + SPREAD * rng.standard_normal((n_channels, 1)))
            artifact[:, onset:stop] += np.round(signs * size * burst[: stop - onset])
    every = RATE_HZ // cell.rate_hz
    truth, artifact = truth[:, ::every], artifact[:, ::every]
    onsets = [onset // every for onset in onsets]
    return Simulated(with_pulses(truth + artifact, cell.rate_hz, onsets), truth, onsets)


def by_script(cell: Cell, stored: Floats, onsets: list[int], line: bool) -> Floats:
    """Epochs of the plain script, shape (n_pulses, n_channels, n_times), volts."""
    rate_hz, (first, stop) = cell.rate_hz, cell.gap
    info = mne.create_info(len(stored), rate_hz, "eeg")
    raw = mne.io.RawArray(stored * STEP_V, info, verbose="error")
    events = np.column_stack([onsets, np.zeros(len(onsets), int), np.ones(len(onsets), int)])
    if line:
        # Rounded up inside; half a sample keeps rounding errors out.
        edges = (first - 0.5) / rate_hz, (stop - 0.5) / rate_hz
        raw = mne.preprocessing.fix_stim_artifact(
            raw, events, 1, tmin=edges[0], tmax=edges[1], mode="linear", picks="eeg"
        )
    raw.filter(1.0, 100.0, verbose="error")
    epochs = mne.Epochs(
        raw,
        events,
        tmin=START_S,
        tmax=START_S + (N_TIMES - 1) / OUTPUT_HZ,
        baseline=None,
        decim=rate_hz // OUTPUT_HZ,
        preload=True,
        verbose="error",
    )
    return np.asarray(epochs.get_data(copy=False))


def less_ramps(cell: Cell, stored: Floats, onsets: list[int]) -> Floats:
    """Take the slope of the 80 ms after each gap out of them."""
    stored, stop = stored.copy(), cell.gap[1]
    n = round(DECAY_WINDOW_S * cell.rate_hz)
    t = np.arange(n) - (n - 1) / 2
    for onset in onsets:
        piece = stored[:, onset + stop : onset + stop + n]
        piece -= (piece @ t / (t @ t))[:, None] * (t - t[-1])
    return stored


def less_exponentials(cell: Cell, stored: Floats, onsets: list[int]) -> Floats:
    """Subtract one exponential per channel after each gap until the next."""
    stored, (first, stop) = stored.copy(), cell.gap
    n = round(DECAY_WINDOW_S * cell.rate_hz)
    t = np.arange(n) / cell.rate_hz
    pieces = np.array([stored[:, onset + stop : onset + stop + n] for onset in onsets])
    # Without their means, or what is left of drifts and steps would hide the decay.
    medians = np.median(pieces - pieces.mean(axis=2, keepdims=True), axis=0)

    def curve(t: Floats, a: float, tau: float, level: float) -> Floats:
        return np.asarray(a * np.exp(-t / tau) + level)

    for row, median in enumerate(medians):
        start = (median[0] - median[-1], 0.02, median[-1])
        bounds = ([-np.inf, 0.0005, -np.inf], [np.inf, 2 * DECAY_WINDOW_S, np.inf])
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore", scipy.optimize.OptimizeWarning)
                (a, tau, _), _ = scipy.optimize.curve_fit(curve, t, median, start, bounds=bounds)
        except RuntimeError:
            continue
        for onset, following in zip(onsets, [*(o + first for o in onsets[1:]), stored.shape[1]], strict=True):
            since = np.arange(following - onset - stop) / cell.rate_hz
            stored[row, onset + stop : following] -= a * np.exp(-since / tau)
    return stored


class Repair:
    """The engine on one recording; what is learned is learned once for every kind of decay."""

    def __init__(self, cell: Cell, simulated: Simulated) -> None:
        self._cell, self._simulated = cell, simulated
        self._learned: dict[Decay, Estimates] = {}

    def setup(self, decay: Decay, across: AcrossPulses = AcrossPulses.FILLED) -> Setup:
        """Bind the plan."""
        pulses = Pulses(window_ms=self._cell.gap_ms, fill=Fill.COVARIANCE, decay=decay)
        a_plan = plan(pulses=pulses, filter=Filter(across_pulses=across), reference="as recorded")
        return bind(self._simulated.recording.facts, a_plan, NO_MARKS)

    def learned(self, decay: Decay) -> Estimates:
        """Learn from the recording."""
        if decay not in self._learned:
            self._learned[decay] = finish(fit(self._simulated.recording, self.setup(decay)))
        return self._learned[decay]

    def n_fitted(self, decay: Decay) -> int:
        """Count the channels with a fitted decay."""
        found = self.learned(decay).decay
        return 0 if found is None else found.columns.size

    def epochs(self, decay: Decay, across: AcrossPulses = AcrossPulses.FILLED) -> Floats:
        """Epochs, shape (n_pulses, n_channels, n_times), volts."""
        chain = Chain(self._simulated.recording, self.setup(decay, across), self.learned(decay))
        return cut_all(chain, self._simulated.onsets)


def cut_all(chain: Chain, onsets: list[int]) -> Floats:
    """Cut an epoch around every onset."""
    cuts = [chain.cut(float(onset), START_S, N_TIMES) for onset in onsets]
    return np.array([chain.samples(cut) for cut in cuts], dtype=np.float64)


def without_artifact(cell: Cell, simulated: Simulated) -> Floats:
    """What our filter makes of the recording without artifact and without gaps."""
    recording = ArrayRecording(simulated.truth, cell.rate_hz)
    a_plan = plan(pulses=Pulses(window_ms=cell.gap_ms, fill=Fill.LINE), reference="as recorded")
    setup = bind(recording.facts, a_plan, NO_MARKS)
    return cut_all(Chain(recording, setup, finish(fit(recording, setup))), simulated.onsets)


def compare(cell: Cell, epochs: Floats, truth: Floats) -> Found:
    """Compare epochs with those without artifact."""
    after = (cell.gap_ms[1] * 1e-3 + 1e-6 < TIMES_S) & (TIMES_S < 0.0601)
    wrong = v_to_uv(epochs - truth)
    mean, right = epochs.mean(axis=0), truth.mean(axis=0)
    pairs = [(mean, right, window_s) for window_s in WINDOWS_S]
    return Found(rms(wrong[:, :, after]), rms(wrong[:, :, BEFORE]), [evoked(*pair) for pair in pairs])


def rms(x: Floats) -> float:
    """Root of the mean square."""
    return float(np.sqrt(np.mean(np.square(x))))


def evoked(mean: Floats, right: Floats, window_s: tuple[float, float]) -> tuple[float, float]:
    """Peak-to-peak amplitude over the true one, and latency shift (ms): medians over the channels.

    The shift is the lag, up to 15 ms, at which the averages correlate best.
    """
    at = np.flatnonzero((window_s[0] - 1e-6 < TIMES_S) & (window_s[1] + 1e-6 > TIMES_S))
    ratios = np.ptp(mean[:, at], axis=1) / np.ptp(right[:, at], axis=1)
    lags = np.arange(-MOST_LAG, MOST_LAG + 1)
    alike = [
        [np.corrcoef(one[at + lag], its[at])[0, 1] for lag in lags]
        for one, its in zip(mean, right, strict=True)
    ]
    shifts = lags[np.argmax(alike, axis=1)] * 1000.0 / OUTPUT_HZ
    return float(np.median(ratios)), float(np.median(shifts))


def measure(cell: Cell, seed: int) -> Result:
    """Simulate one cell and compare every method with its truth."""
    simulated = simulate(cell, seed)
    stored, onsets = simulated.recording.stored, simulated.onsets
    result = Result(cell, n_channels=len(stored))
    truth = by_script(cell, simulated.truth, onsets, line=False)
    inputs: dict[str, Callable[[], Floats]] = {
        "plain": lambda: stored,
        "nothing": lambda: stored,
        "ramps": lambda: less_ramps(cell, stored, onsets),
        "one exp.": lambda: less_exponentials(cell, stored, onsets),
    }
    for name, given in inputs.items():
        epochs = by_script(cell, given(), onsets, line=name != "nothing")
        result.found[name] = compare(cell, epochs, truth)
    truth = without_artifact(cell, simulated)
    repair = Repair(cell, simulated)
    if cell.size_uv:
        result.own = cell.decay
    done: dict[Any, Floats] = {}
    for name in OURS:
        kind, across = name.split(", ")
        key = result.own if kind == "own" else Decay.POWER, AcrossPulses(across)
        if key not in done:
            done[key] = repair.epochs(*key)
        result.found[name] = compare(cell, done[key], truth)
        result.fitted[key[0]] = repair.n_fitted(key[0])
    if not cell.size_uv:
        count_changed(repair, result)
    return result


def count_changed(repair: Repair, result: Result) -> None:
    """Count, for every kind of decay asked for, the channels that it is fitted in and those it changes."""
    unfitted = repair.epochs(Decay.NONE).mean(axis=0)
    heard = WINDOWS_S[0][0] - 1e-6 < TIMES_S
    for kind in KINDS:
        result.fitted[kind] = repair.n_fitted(kind)
        change = np.ptp((repair.epochs(kind).mean(axis=0) - unfitted)[:, heard], axis=1)
        result.changed[kind] = int(np.sum(change >= 0.01 * np.ptp(unfitted[:, heard], axis=1)))


def print_tables(results: list[Result]) -> None:
    """Print both tables."""
    names = (*SCRIPTS, *OURS)
    heads = [*(f"({letter}) {name}" for letter, name in zip("abcd", SCRIPTS, strict=True)), *OURS]
    print("RMS error in microvolts, from the gap's end to 60 ms / in the epochs before the pulse:\n")
    print("| | recording | decay, µV | also |", " | ".join(heads), "| fitted in: own, power |")
    print("|---" * (5 + len(names)) + "|")
    for number, result in enumerate(results, 1):
        columns = [f"{result.found[n].after_uv:.1f} / {result.found[n].before_uv:.2f}" for n in names]
        fitted = result.fitted[result.own], result.fitted[Decay.POWER]
        columns.append(f"{fitted[0]}, {fitted[1]} of {result.n_channels}")
        print(f"| {number} | {result.cell.words} |", " | ".join(columns), "|")
    some = ("plain", "ramps", "one exp.", *OURS)
    print("\nEvoked response: amplitude ratio and latency shift in ms, 20 to 60 ms; 60 to 200 ms:\n")
    heads = ["(a) plain", "(c) ramps", "(d) one exp.", *OURS]
    print("| | recording | decay, µV | also |", " | ".join(heads), "|")
    print("|---" * (4 + len(some)) + "|")
    for number, result in enumerate(results, 1):
        columns = ["; ".join(f"{r:.2f} {round(s):+d}" for r, s in result.found[n].evoked) for n in some]
        print(f"| {number} | {result.cell.words} |", " | ".join(columns), "|")


def print_bounds(results: list[Result]) -> None:
    """Print each bound with how many cells meet it, and the cells that do not."""
    judged = [(n, r) for n, r in enumerate(results, 1) if r.found["plain"].after_uv > 10.0]
    print(f"\n(a) leaves more than 10 uV from the gap's end to 60 ms in {len(judged)} cells. There:\n")
    for bound, other, factor in (
        ("at most a third of (c)", "ramps", 1 / 3),
        ("at most 1.05 times (d)", "one exp.", 1.05),
    ):
        for name in OURS:
            ratios = {n: r.found[name].after_uv / r.found[other].after_uv for n, r in judged}
            missed = {n: ratio for n, ratio in ratios.items() if ratio > factor}
            told = ", ".join(f"{n} ({ratio:.2f})" for n, ratio in missed.items())
            print(
                f"- {name}: {bound} in {len(ratios) - len(missed)} of {len(ratios)}"
                + (f"; not in cell (ratio) {told}" if told else "")
            )
    plain = [(n, r) for n, r in enumerate(results, 1) if not r.cell.size_uv]
    for kind in KINDS:
        total = sum(r.n_channels for _, r in plain)
        for what, counts in (
            ("nothing is fitted", {n: r.fitted[kind] for n, r in plain}),
            ("the evoked response changes by less than 1 %", {n: r.changed[kind] for n, r in plain}),
        ):
            few = {n for n, r in plain if counts[n] <= 0.05 * r.n_channels}
            told = ", ".join(f"{n} ({counts[n]})" for n in counts if n not in few)
            print(
                f"- no decay simulated, asked for {kind.value}: {what} in {total - sum(counts.values())} of "
                f"{total} channels; in at least 95 % of them in {len(few)} of {len(plain)} cells"
                + (f"; not in cell (channels) {told}" if told else "")
            )


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--small", action="store_true", help="a few cells")
    begun = time.monotonic()
    chosen = list(cells(parser.parse_args().small))
    results = []
    for seed, cell in enumerate(chosen):
        results.append(measure(cell, seed))
        print(f"{seed + 1} of {len(chosen)}, {time.monotonic() - begun:.0f} s", file=sys.stderr)
    print_tables(results)
    print_bounds(results)


if __name__ == "__main__":
    main()
