"""A small Lantern recording on disk with a plan of its own, for whole runs of the main job."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from pulsemend.mending.mend import MendResult, mend
from pulsemend.mending.prepare import Request
from pulsemend.progress import finish
from pulsemend.simulate.lantern import Lantern, LanternSpec, make_lantern
from pulsemend.simulate.sample import write_sample
from pulsemend.simulate.schedule import Fault, FaultKind

SPEC = LanternSpec(
    trials=3,
    channels=("F3", "Fz", "C3", "Cz", "TP8", "P3", "Pz", "O1"),
    faults=(Fault(FaultKind.UNMARKED, 2, "pulse2"), Fault(FaultKind.UNFIRED, 3, "pulse1")),
)
"""42 s at 5 kHz. One pulse without a marker, one marker without a pulse, and a broken channel, TP8."""

PLAN = """\
# The order of rules is not that of time, on purpose.
pulsemend = 1

[about]
name = "small lantern"
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

[pulses]
window_ms = [-2.0, 14.0]
fill = "line"
[[pulses.also]]
window_ms = [248.0, 254.0]
[pulses.channels]
P3 = [-2.0, 25.0]

[epochs]
length_s = 1.0
[[epochs.rule]]
name = "after2"
anchor = "pulse2"
start_s = -0.1
pulse = "accept filled"
labels = { asked = "cue2.item" }
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.5
labels = { asked = "cue1.item" }
"""


@dataclass(frozen=True)
class Study:
    """A recording, its plan, and what is true about them."""

    recording: Path
    plan: Path
    lantern: Lantern = field(repr=False)


def write_study(folder: Path) -> Study:
    """Write the recording, and the plan into a folder of its own."""
    written = finish(write_sample(folder, spec=SPEC))
    plan = folder / "study" / "plan.toml"
    plan.parent.mkdir()
    plan.write_bytes(PLAN.encode())
    return Study(written.recordings[0], plan, make_lantern(SPEC))


def changed(text: str, *pairs: tuple[str, str]) -> str:
    """Replace pieces of a text; each stands there exactly once, so that no test changes nothing."""
    for old, new in pairs:
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    return text


def run_mend(
    recording: Path, plan: str, folder: Path, marks: str | None = None, *, overwrite: bool = False
) -> MendResult:
    """Mend with a plan and marks given as texts, which are written beside the set."""
    request = make_request(recording, plan, folder, marks)
    return finish(mend(request, folder / "sets", overwrite=overwrite))


def make_request(recording: Path, plan: str, folder: Path, marks: str | None = None) -> Request:
    """Write plan and marks, and ask for them."""
    folder.mkdir(exist_ok=True)
    (folder / "plan.toml").write_bytes(plan.encode())
    if marks is not None:
        (folder / "marks.toml").write_bytes(f"pulsemend_marks = 1\n{marks}".encode())
    return Request(recording, folder / "plan.toml", None if marks is None else folder / "marks.toml")


@dataclass(frozen=True)
class SetOnDisk:
    """What another program finds in a set, read with the public libraries only."""

    folder: Path

    def path(self, name: str) -> Path:
        return self.folder / f"{self.folder.name}_{name}"

    def hdf5(self, name: str) -> NDArray[Any]:
        """Read one dataset; texts as str."""
        with h5py.File(self.path("epochs.h5")) as file:
            dataset = file[name]
            if h5py.check_string_dtype(dataset.dtype):
                return np.asarray(dataset.asstr()[()])
            return np.asarray(dataset[()])

    def attributes(self, name: str = "/") -> dict[str, Any]:
        with h5py.File(self.path("epochs.h5")) as file:
            return dict(file[name].attrs)

    def fif(self) -> Any:
        """Read the FIF file with the reader library."""
        import mne

        return mne.read_epochs(self.path("epo.fif"), proj=False, verbose="error")

    def metadata(self) -> list[dict[str, Any]]:
        """Rows of the FIF file's metadata, which become a frame where pandas is installed."""
        rows = self.fif().metadata
        return list(rows) if isinstance(rows, list) else list(rows.to_dict("records"))

    def table(self, name: str) -> dict[str, list[str]]:
        """Columns of a table."""
        lines = [line.split("\t") for line in self.path(name).read_text(encoding="utf-8").splitlines()]
        return {column: [line[i] for line in lines[1:]] for i, column in enumerate(lines[0])}
