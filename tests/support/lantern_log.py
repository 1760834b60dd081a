"""A Lantern recording of twelve trials with its log, and a plan that takes labels from both."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pulsemend.mending.facts import RecordingSummary, summarise
from pulsemend.mending.mend import dry_run
from pulsemend.mending.prepare import Prepared
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fate
from pulsemend.progress import finish
from pulsemend.simulate.lantern import RESOLUTION_UV, LanternSpec
from pulsemend.simulate.memory import Rehearsal, rehearse
from pulsemend.simulate.schedule import Fault, FaultKind, Moment, Question
from pulsemend.simulate.truth import log_text
from pulsemend.simulate.write_triplet import TripletFormat, TripletPaths, TripletWriter
from support.small_lantern import make_request

RATE_HZ = 2000.0
N_TRIALS = 12
STEM = "sub-lt01_task-lantern"
LOG = f"{STEM}_log.tsv"

PLAN = """\
pulsemend = 1
[about]
line_hz = 50
[markers."lanterns up"]
role = "sample"
[markers."arrow left"]
role = "cue"
labels = { item = "left" }
[markers."arrow right"]
role = "cue"
labels = { item = "right" }
[markers.pulse]
role = "pulse"

[[trial]]
slot = "sample"
role = "sample"
[[trial]]
slot = "cue1"
role = "cue"
after_s = [1.0, 2.0]
[[trial]]
slot = "pulse1"
role = "pulse"
after_s = [1.5, 2.6]
optional = true
[[trial]]
slot = "cue2"
role = "cue"
after_s = [5.1, 5.3]
[[trial]]
slot = "pulse2"
role = "pulse"
after_s = [1.5, 2.6]
optional = true

[log]
file = "{stem}_log.tsv"
slots = ["cue1", "cue2"]
time = "arrow_s"
columns = ["correct", "reaction_s"]

[labels]
second = { compare = ["cue1.item", "cue2.item"], same = "stay", different = "switch" }

[pulses]
window_ms = [-2.0, 14.0]
fill = "line"

[filter]
rate_hz = 250.0

[epochs]
length_s = 1.0
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.4
labels = { cued = "cue1.item", uncued = "other(cue1.item)", order = "first", correct = "log.cue1.correct" }
[[epochs.rule]]
name = "delay2"
anchor = "cue2"
start_s = 0.4
labels = { cued = "cue2.item", uncued = "other(cue2.item)", order = "second", correct = "log.cue2.correct" }
"""
"""No label column has a name of its own in the log: what rules take from it is `correct`."""

NO_LABELS_OF_LOG = PLAN.replace(', correct = "log.cue1.correct"', "").replace(
    ', correct = "log.cue2.correct"', ""
)
SIGNAL_FILLS = 'slot = "pulse2"\nrole = "pulse"\nfrom_signal = true'


def spec(*faults: Fault) -> LanternSpec:
    """Twelve trials, 165 s, five channels; one broken channel among them is no part of this."""
    return LanternSpec(
        trials=N_TRIALS, channels=("F3", "Cz", "C3", "P3", "Pz"), rate_hz=RATE_HZ, faults=faults, loud=""
    )


UNMARKED = Fault(FaultKind.UNMARKED, 5, "pulse2")


@cache
def made(*faults: Fault) -> Rehearsal:
    """Simulate once for all tests."""
    return rehearse(spec(*faults))


@dataclass(frozen=True)
class Extra:
    """A further channel of whole numbers, shape (n_samples,), in tenths of a microvolt."""

    name: str
    stored: NDArray[np.int16]


def write(
    folder: Path,
    markers: Iterable[Marker] | None = None,
    *,
    faults: Sequence[Fault] = (),
    extra: Extra | None = None,
    log: str | None = None,
) -> Path:
    """Write recording and log; return the header.

    Other markers than its own, a further channel and another log (None: its own; "": no file) may be given.
    """
    folder.mkdir(parents=True, exist_ok=True)
    simulated = made(*faults)
    facts = simulated.recording.facts
    stored = np.empty((facts.n_samples, len(facts.channels)))
    simulated.recording.read(0, facts.n_samples, stored)
    names = tuple(channel.name for channel in facts.channels)
    block = stored.astype(np.int16)
    if extra is not None:
        names, block = (*names, extra.name), np.column_stack([block, extra.stored])
    header = folder / f"{STEM}_eeg.vhdr"
    form = TripletFormat(names, RATE_HZ, RESOLUTION_UV)
    own = facts.markers if markers is None else tuple(sorted(markers, key=lambda one: one.sample))
    with TripletWriter(TripletPaths.beside(header), form, own) as writer:
        writer.write(block)
    text = log_text(questions()) if log is None else log
    if text:
        (folder / LOG).write_text(text, encoding="utf-8")
    return header


def questions() -> tuple[Question, ...]:
    """Rows of the log, as simulated."""
    return made().lantern.schedule.questions


def markers_of(*faults: Fault) -> tuple[Marker, ...]:
    """Markers as simulated."""
    return made(*faults).recording.facts.markers


def changed_rows(change: Callable[[list[list[str]]], list[list[str]]]) -> str:
    """Give the log with other rows; the first is the header."""
    rows = [line.split("\t") for line in log_text(questions()).splitlines()]
    return "".join("\t".join(row) + "\n" for row in change(rows))


def dry(recording: Path, plan: str, folder: Path, marks: str | None = None) -> Prepared:
    """Do everything but write, with a plan and marks given as texts."""
    return finish(dry_run(make_request(recording, plan, folder, marks)))


def without(markers: Sequence[Marker], *samples: float) -> tuple[Marker, ...]:
    """Leave markers out by their samples."""
    assert set(samples) <= {marker.sample for marker in markers}
    return tuple(marker for marker in markers if marker.sample not in samples)


def recoded(markers: Sequence[Marker], numbers: dict[str, int]) -> tuple[Marker, ...]:
    """Give markers numbers for codes; what has none is left out."""
    return tuple(replace(one, code=str(numbers[one.code])) for one in markers if one.code in numbers)


def moment(trial: int, slot: str, *faults: Fault) -> Moment:
    moments = made(*faults).lantern.schedule.moments
    return next(one for one in moments if (one.trial, one.slot) == (trial, slot))


def sample_of(trial: int, slot: str) -> int:
    marked = moment(trial, slot).marked
    assert marked is not None
    return marked


def adds_up(prepared: Prepared) -> None:
    """Facts, T-6.10: kept and left out are all candidates, and each has one reason."""
    fates = Counter(one.fate for one in prepared.ledger)
    assert fates[Fate.KEPT] == len(prepared.kept)
    assert sum(fates.values()) == len(prepared.ledger)
    assert len({(one.trial, one.rule, one.piece) for one in prepared.ledger}) == len(prepared.ledger)


def facts_of(recording: Path, plan: str, folder: Path, marks: str | None = None) -> RecordingSummary:
    request = make_request(recording, plan, folder, marks)
    return finish(summarise(recording, request.plan, request.marks))


SHIFT_S = 0.032
VISUAL = ("lanterns up", "arrow left", "arrow right")
ONSET = '[[onset]]\nchannel = "Photo"\ncodes = ["lanterns up", "arrow left", "arrow right"]\n[pulses]'


def photodiode() -> Extra:
    """Bright for 150 ms from 32 ms after every marker of the screen, with noise."""
    rng = np.random.default_rng(4)
    stored = 200.0 + rng.normal(0.0, 5.0, made().recording.facts.n_samples)
    for one in markers_of():
        if one.code in VISUAL:
            start = int(one.sample) + round(SHIFT_S * RATE_HZ)
            stored[start : start + round(0.15 * RATE_HZ)] += 4000.0
    return Extra("Photo", stored.astype(np.int16))
