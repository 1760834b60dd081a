"""A small recording with every kind of thing that the Markers stage shows, and the truth about it."""

from __future__ import annotations

import shutil
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from pulsemend.mending.prepare import marks_path
from pulsemend.model.marks_file import read_marks
from pulsemend.model.plan_file import read_plan
from pulsemend.model.recording import Marker
from pulsemend.readers.opening import open_recording
from pulsemend.session.session import Session
from pulsemend.simulate.write_triplet import TripletFormat, TripletPaths, TripletWriter

RATE_HZ = 250.0
N_TRIALS = 12
DURATION_S = 80.0
OFFSET_S, DRIFT = -4711.0, 50e-6
DOUBLED_TRIAL, LOST_TRIAL, UNLOGGED_TRIAL = 3, 5, 7
STRAY_S = 79.0

PLAN = """\
pulsemend = 1

[markers."S 1"]
role = "sample"
[markers."S 11"]
role = "cue"
labels = { item = "left" }
[markers."S 12"]
role = "cue"
labels = { item = "right" }
[markers."S 31"]
role = "probe"
[markers."S 99"]
role = "other"

[[trial]]
slot = "sample"
role = "sample"
[[trial]]
slot = "cue"
role = "cue"
after_s = [0.8, 1.4]
[[trial]]
slot = "probe"
role = "probe"
after_s = [1.0, 2.0]

[log]
file = "{stem}_log.tsv"
slots = ["cue"]
time = "cue_s"

[pulses]
times = "none"

[filter]
highpass_hz = 0.0
lowpass_hz = 0.0
rate_hz = 0.0

[epochs]
length_s = 1.0
[[epochs.rule]]
name = "delay"
anchor = "cue"
start_s = 0.0
"""


@dataclass(frozen=True)
class MarkerStudy:
    """Files, and where things are."""

    recording: Path
    plan: Path
    cues_s: tuple[float, ...]

    def open(self, session: Session, folder: Path, *, with_plan: bool = True) -> None:
        """Open the recording, with a copy of its plan that may be written to."""
        plan = folder / "plan.toml"
        shutil.copy(self.plan, plan)
        recording = open_recording(self.recording)
        facts = recording.facts
        recording.close()
        at = marks_path(plan, facts.stem)
        marks = read_marks(at) if at.exists() else None
        session.open_recording(self.recording, facts, marks, at)
        if with_plan:
            session.open_plan(read_plan(plan), plan)


def starts_s() -> list[float]:
    """Instants of the trials: irregular, as an experimenter's pauses are."""
    rng = np.random.default_rng(4)
    return [float(at_s) for at_s in np.cumsum(rng.uniform(4.5, 7.5, N_TRIALS)) - 2.5]


def markers() -> tuple[list[Marker], tuple[float, ...]]:
    """Markers of the recording, and the instants of its cues."""
    found: list[tuple[int, str]] = []
    cues_s = []
    for number, start_s in enumerate(starts_s(), start=1):
        cue_s = start_s + 1.0 + 0.02 * (number % 5)
        cues_s.append(round(cue_s * RATE_HZ) / RATE_HZ)
        own = [(start_s, "S  1"), (cue_s, f"S 1{1 + number % 2}"), (cue_s + 1.3, "S 31")]
        if number == LOST_TRIAL:
            own.pop()
        found += [(round(at_s * RATE_HZ), code) for at_s, code in own]
        if number == DOUBLED_TRIAL:
            found.append((round(cue_s * RATE_HZ) + 2, own[1][1]))
    found += [(sample + 20, "S  0") for sample, _ in found]
    found.append((round(STRAY_S * RATE_HZ), "S 31"))
    return [Marker(float(sample), code, "Stimulus") for sample, code in sorted(found)], tuple(cues_s)


def write_marker_study(folder: Path) -> MarkerStudy:
    """Write recording, log and plan."""
    folder.mkdir(exist_ok=True)
    header = folder / "sub-lt01_task-markers_eeg.vhdr"
    marked, cues_s = markers()
    with TripletWriter(TripletPaths.beside(header), TripletFormat(("Fz", "Cz"), RATE_HZ), marked) as writer:
        rng = np.random.default_rng(1)
        writer.write(rng.integers(-300, 300, (round(DURATION_S * RATE_HZ), 2)).astype(np.int16))
    rows = [
        f"{number}\t{(cue_s - OFFSET_S) / (1 + DRIFT):.5f}"
        for number, cue_s in enumerate(cues_s, start=1)
        if number != UNLOGGED_TRIAL
    ]
    # A trial that was never recorded.
    rows.append(f"{N_TRIALS + 1}\t{(DURATION_S - 3.0 - OFFSET_S) / (1 + DRIFT):.5f}")
    log = folder / "sub-lt01_task-markers_log.tsv"
    log.write_bytes(("number\tcue_s\n" + "\n".join(rows) + "\n").encode())
    plan = folder / "plan.toml"
    plan.write_bytes(PLAN.encode())
    return MarkerStudy(header, plan, cues_s)
