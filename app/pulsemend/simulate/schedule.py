"""What happens in a Lantern recording, when, and what the marker file says about it.

Trial: dot, lanterns, first arrow, pulse, probe, answer, second arrow, pulse, probe, answer. Both lanterns are
remembered; each arrow says which of them the next probe asks about.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from pulsemend.model.recording import Marker

Span = tuple[float, float]

LEAD_S = 1.0  # recording before the first dot and after the last pause
DOT_TO_LANTERNS_S: Span = (1.3, 1.7)
LANTERNS_TO_ARROW_S: Span = (1.2, 1.6)
ARROW_TO_PULSE_S: Span = (1.7, 2.4)
ARROW_TO_PROBE_S = 3.6
PROBE_TO_ANSWER_S: Span = (0.45, 0.95)
PROBE_TO_ARROW_S = 1.6
PAUSE_S = 1.5
CORRECT = 0.85  # share of right answers

MARKER_LEAD_S = 0.0006  # a pulse's marker stands this long before its artifact, give or take one sample
FINE = 8  # pulses fall on a grid of eighths of a sample

# Four combinations of first and second arrow, in an order that keeps both arrows balanced after any two.
_ARROWS = (("left", "left"), ("right", "right"), ("left", "right"), ("right", "left"))
_PROBES = (("same", "other"), ("other", "same"), ("same", "same"), ("other", "other"))
_OTHER = {"same": "other", "other": "same"}


class FaultKind(StrEnum):
    """What may be wrong with a marker of a Lantern recording."""

    UNMARKED = "unmarked pulse"
    UNFIRED = "marked pulse that is not in the signal"
    UNSENT = "marker missing"


@dataclass(frozen=True)
class Fault:
    """One thing that is wrong, by trial (from 1) and slot."""

    kind: FaultKind
    trial: int
    slot: str


LANTERN_FAULTS = (
    Fault(FaultKind.UNMARKED, 2, "pulse2"),
    Fault(FaultKind.UNFIRED, 4, "pulse1"),
    Fault(FaultKind.UNSENT, 5, "probe1"),
)


@dataclass(frozen=True)
class Moment:
    """One thing that happened, or that was only marked.

    Parameters
    ----------
    trial : int
        From 1.
    slot : str
        Name of its slot in the plan: ``dot``, ``sample``, ``cue1``, ``pulse1``, ``probe1``, ``answer1``, ...
    code, type : str
        As the marker file has them.
    time_s : float
        True time from the first sample; for a pulse that of its onset.
    marked : int or None
        Sample of its marker, from 0; None if there is none.
    happened : bool
        False for a pulse that was marked and not given.
    """

    trial: int
    slot: str
    code: str
    type: str
    time_s: float
    marked: int | None
    happened: bool = True


@dataclass(frozen=True)
class Question:
    """One arrow, probe and answer: a row of the behavioural log. Times in seconds from the first sample."""

    trial: int
    number: int
    asked: str
    probe: str
    answer: str
    arrow_s: float
    probe_s: float
    answer_s: float


@dataclass(frozen=True)
class Schedule:
    """Everything that happens in a recording, in order of time."""

    n_samples: int
    moments: tuple[Moment, ...]
    questions: tuple[Question, ...]

    @property
    def markers(self) -> tuple[Marker, ...]:
        """The markers of the file, in order of time."""
        marked = [(m.marked, m) for m in self.moments if m.marked is not None]
        return tuple(Marker(sample, m.code, m.type) for sample, m in sorted(marked, key=lambda pair: pair[0]))

    @property
    def pulses(self) -> tuple[Moment, ...]:
        """Every pulse, given or only marked."""
        return tuple(m for m in self.moments if m.slot.startswith("pulse"))


def make_schedule(
    rng: np.random.Generator, trials: int, rate_hz: float, duration_s: float, faults: tuple[Fault, ...]
) -> Schedule:
    """Draw a schedule with balanced conditions.

    Parameters
    ----------
    rng : numpy Generator
        Source of everything drawn here.
    trials : int
        Their number.
    rate_hz : float
        Sampling rate of the recording.
    duration_s : float
        The pauses between trials are stretched until the recording is this long; 0 for no stretching.
    faults : tuple of Fault
        What is wrong with its markers.
    """
    arrows = _shuffled(rng, _ARROWS, trials)
    probes = _shuffled(rng, _PROBES, trials)
    drawn = [_draw_trial(rng) for _ in range(trials)]
    natural = 2 * LEAD_S + sum(length for _, length in drawn)
    stretch = max(0.0, duration_s - natural) / trials

    moments: list[Moment] = []
    questions: list[Question] = []
    start = LEAD_S
    broken = {(fault.trial, fault.slot): fault.kind for fault in faults}
    for i in range(trials):
        times, length = drawn[i]
        right = rng.random(2) < CORRECT
        said = tuple(probe if ok else _OTHER[probe] for probe, ok in zip(probes[i], right, strict=True))
        for slot, code, kind in _texts(arrows[i], probes[i], said):
            fault = broken.get((i + 1, slot))
            moments.append(_place(rng, i + 1, slot, code, kind, start + times[slot], rate_hz, fault))
        for j in (1, 2):
            at = [start + times[f"{name}{j}"] for name in ("cue", "probe", "answer")]
            questions.append(Question(i + 1, j, arrows[i][j - 1], probes[i][j - 1], said[j - 1], *at))
        start += length + stretch
    return Schedule(round((start + LEAD_S) * rate_hz), tuple(moments), tuple(questions))


def _shuffled(rng: np.random.Generator, kinds: tuple[tuple[str, str], ...], n: int) -> list[tuple[str, str]]:
    drawn = [kinds[i % len(kinds)] for i in range(n)]
    return [drawn[i] for i in rng.permutation(n)]


def _draw_trial(rng: np.random.Generator) -> tuple[dict[str, float], float]:
    """Draw the times of all slots since the dot, and the trial's length with its pause."""
    times = {"dot": 0.0, "sample": rng.uniform(*DOT_TO_LANTERNS_S)}
    times["cue1"] = times["sample"] + rng.uniform(*LANTERNS_TO_ARROW_S)
    times["cue2"] = times["cue1"] + ARROW_TO_PROBE_S + PROBE_TO_ARROW_S
    for j in (1, 2):
        cue = times[f"cue{j}"]
        times[f"pulse{j}"] = cue + rng.uniform(*ARROW_TO_PULSE_S)
        times[f"probe{j}"] = cue + ARROW_TO_PROBE_S
        times[f"answer{j}"] = times[f"probe{j}"] + rng.uniform(*PROBE_TO_ANSWER_S)
    return times, times["probe2"] + PAUSE_S


def _texts(
    arrows: tuple[str, str], probes: tuple[str, str], said: tuple[str, ...]
) -> list[tuple[str, str, str]]:
    """Slot, code and type of every moment of a trial, in order of time."""
    rows = [("dot", "dot", "Screen"), ("sample", "lanterns up", "Screen")]
    for j in (1, 2):
        rows += [
            (f"cue{j}", f"arrow {arrows[j - 1]}", "Screen"),
            (f"pulse{j}", "pulse", "Coil"),
            (f"probe{j}", f"probe {probes[j - 1]}", "Screen"),
            (f"answer{j}", f"answer {said[j - 1]}", "Button"),
        ]
    return rows


def _place(
    rng: np.random.Generator,
    trial: int,
    slot: str,
    code: str,
    kind: str,
    time_s: float,
    rate_hz: float,
    fault: FaultKind | None,
) -> Moment:
    marked: int | None = round(time_s * rate_hz)
    if slot.startswith("pulse"):
        time_s = round(time_s * rate_hz * FINE) / (rate_hz * FINE)
        marked = round((time_s - MARKER_LEAD_S) * rate_hz) + int(rng.integers(-1, 2))
    if fault in (FaultKind.UNMARKED, FaultKind.UNSENT):
        marked = None
    return Moment(trial, slot, code, kind, time_s, marked, fault is not FaultKind.UNFIRED)
