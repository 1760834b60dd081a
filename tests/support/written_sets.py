"""A small epoch set with everything odd in it, and a way to write it."""

from __future__ import annotations

import dataclasses
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.export.contents import SetChannel, SetContents, SetEpoch
from pulsemend.export.set_writer import SetWriter
from pulsemend.model.epochs import Candidate, Pulse
from pulsemend.model.vocabulary import ChannelType, Fate, Precision, PulseState

RATE_HZ = 200.0
N_TIMES = 100

PLAN = """\
pulsemend = 1

[markers."arrow left"]
role = "cue"
labels = { item = "left" }

[[trial]]
slot = "cue1"
role = "cue"

[pulses]
window_ms = [-2.0, 14.0]
fill = "FILL"

[filter]
highpass_hz = 1.0
lowpass_hz = 40.0
rate_hz = 200.0

[epochs]
length_s = 0.5
[[epochs.rule]]
name = "delay"
anchor = "cue1"
start_s = 0.25
[[epochs.rule]]
name = "baseline"
anchor = "cue1"
start_s = START

[export]
formats = ["hdf5", "fif"]
"""


def plan_text(fill: str = "line", start_s: float = 0.25) -> str:
    """A plan that belongs to the set below."""
    return PLAN.replace("FILL", fill).replace("START", str(start_s))


def candidate(trial: int, rule: str = "delay", fate: Fate = Fate.KEPT, **changes: Any) -> Candidate:
    """A row of the ledger, ten seconds from one trial to the next."""
    row = Candidate(
        rule=rule,
        rule_index=("delay", "baseline").index(rule),
        trial=trial,
        piece=1,
        anchor="cue1",
        anchor_sample=10_000.0 * trial + 3,
        start_s=0.25,
        fate=fate,
        labels={"cue1.item": f"links \u2190 {trial}", "log.a/b": "tab\there"},
    )
    return dataclasses.replace(row, **changes)


def make_contents(**changes: Any) -> SetContents:
    """A set of 3 epochs, 4 channels and 100 samples, recorded at 1 kHz."""
    ledger = (
        candidate(1),
        candidate(1, "baseline"),
        candidate(2, fate=Fate.TOUCHES_GAP, detail="pulse1 at 20.4 s"),
        candidate(2, "baseline"),
        candidate(3, fate=Fate.NO_ANCHOR, anchor_sample=None),
    )
    epochs = tuple(
        SetEpoch(
            row,
            onset_s=(row.anchor_sample or 0.0) / 1000.0,
            start_s=row.start_s,
            shift_s=0.003,
            replaced_share=5 / (4 * N_TIMES),
        )
        for row in ledger
        if row.kept
    )
    contents = SetContents(
        stem="sub-01_task-lantern",
        channels=(
            SetChannel("Fz", ChannelType.EEG, position_m=(0.0, 0.08, 0.05)),
            SetChannel(
                "\u03b1-long channel name of many letters", ChannelType.EEG, position_m=(0.01, -0.08, 0.05)
            ),
            SetChannel("Cz:\u00e9", ChannelType.EEG, status="bad", status_note="loud\tor dead"),
            SetChannel("VEOG", ChannelType.EOG),
        ),
        rate_hz=RATE_HZ,
        recorded_rate_hz=1000.0,
        times=0.25 + np.arange(N_TIMES) / RATE_HZ,
        zero="anchor",
        epochs=epochs,
        ledger=ledger,
        pulses=(
            Pulse(20_400, 20_398.0, PulseState.ALIGNED),
            Pulse(40_000, None, PulseState.ADDED),
        ),
        plan_text=plan_text(),
        marks_text="pulsemend = 1\n",
        source_sha256="ab" * 32,
        rereferenced=True,
        highpass_hz=1.0,
        lowpass_hz=40.0,
        replaced_reach_s=1.65,
        provenance={"steps": [{"name": "fill", "fill": "line"}]},
    )
    return dataclasses.replace(contents, **changes)


def make_data(contents: SetContents, seed: int = 7) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Samples of some microvolts; five of every epoch's last channel are replaced."""
    data = np.random.default_rng(seed).normal(0.0, 2e-5, contents.shape)
    data[0, 0, 0] = -0.0
    replaced = np.zeros(contents.shape, bool)
    replaced[:, -1, 10:15] = True
    return data, replaced


def save_estimates(path: Path) -> None:
    """Stand in for the engine's own file."""
    path.write_bytes(b"estimates")


def write_set(
    contents: SetContents,
    parent: Path,
    data: NDArray[np.float64] | None = None,
    replaced: NDArray[np.bool_] | None = None,
    overwrite: bool = False,
) -> Path:
    """Write a whole set."""
    made, flags = make_data(contents)
    data = made if data is None else data
    replaced = flags if replaced is None else replaced
    dtype = np.float32 if contents.precision is Precision.SINGLE else np.float64
    with SetWriter(contents, parent, overwrite) as writer:
        for index in range(len(contents.epochs)):
            writer.write(index, data[index].astype(dtype), replaced[index])
        return writer.finish(3, {"counts": {"trials": 3}}, save_estimates)
