"""Random recordings, plans and marks through the whole job: whatever comes, there is a whole set or a reason.

Nothing but an error meant for the user may be raised, every set passes its own checks, and kept samples are
of a size that an electrode can have. A failure names its seed.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from pulsemend.errors import InputError
from pulsemend.mending.check import check_set
from pulsemend.model.vocabulary import Fill
from pulsemend.progress import finish
from support.small_lantern import SetOnDisk, run_mend
from support.written_recordings import RATE_HZ, triplet_by_hand

PULSE = (9000, -15000, 7000, 2000)


def draw_recording(dice: random.Random, folder: Path) -> tuple[Path, tuple[str, ...], int]:
    """Draw up to 18 s, 4 channels and 40 markers; pulses may overlap, leave the recording or be missing."""
    n = dice.choice([50, 3000, 3000, 9000])
    names = dice.choice([("Fz",), ("Fz", "C3"), ("VEOG", "Fz"), ("Fz", "C3", "C4", "VEOG")])
    rng = np.random.default_rng(dice.randrange(2**32))
    shape = (len(names), n)
    stored = 0.3 * np.cumsum(rng.normal(0, 30, shape), axis=1) + rng.normal(0, 8000, (len(names), 1))
    stored *= dice.random() > 0.1
    events = []
    for _ in range(dice.choice([0, 5, 5, 20, 20])):
        at = dice.randrange(n)
        events.append((at, "Stimulus", dice.choice(["cue", "cue", "answer", "pulse"])))
        if dice.random() < 0.5:
            pulse = min(n - 1, at + dice.choice([0, 50, 100, 130]))
            events.append((pulse, "Stimulus", "pulse"))
            stored[:, pulse + 2 : pulse + 6] += PULSE[: max(0, min(4, n - pulse - 2))]
    if dice.random() < 0.3:
        events.append((dice.randrange(1, n), "New Segment", ""))
    whole = np.clip(stored, -32767, 32767).astype(np.int16)
    return triplet_by_hand(folder, whole, "INT_16", names=names, events=sorted(events)), names, n


def draw_rule(dice: random.Random, number: int, rate_hz: float) -> str:
    return f"""[[epochs.rule]]
name = "rule{number}"
anchor = "{dice.choice(["cue", "pulse"])}"
start_s = {dice.choice([-60, -10, 0, 0, 5, 30]) / rate_hz}
count = {dice.choice([1, 1, 3])}
pulse = "{dice.choice(["refuse", "accept filled"])}"
clear_ms = [{dice.choice([0, 0, 10, 3.3])}, {dice.choice([0, 0, 20])}]
{'stop_before = "pulse"' if dice.random() < 0.2 else ""}
labels = {{ asked = "cue.item" }}
"""


def draw_plan(dice: random.Random, names: tuple[str, ...]) -> str:
    fill = dice.choice(list(Fill))
    reduced = dice.choice([0, 500, 250, 125, 200, 100])
    rate_hz = reduced or RATE_HZ
    none = dice.random() < 0.25
    window = f"window_ms = [{dice.choice([-4, -2.5, 0, 1, -40])}, {dice.choice([2, 14, 14, 60])}]"
    also = f"[[pulses.also]]\nwindow_ms = {dice.choice([[100, 106], [10, 20], [-30, -20]])}"
    reference = dice.choice(['"average"', '"as recorded"', f'["{names[-1]}"]'])
    formats = (
        dice.choice(['["hdf5", "fif"]', '["fif"]', '["hdf5"]']) if fill is not Fill.LEAVE else '["hdf5"]'
    )
    rules = "".join(draw_rule(dice, number, rate_hz) for number in range(dice.choice([1, 2, 3])))
    return f"""
pulsemend = 1
[about]
line_hz = {dice.choice([0, 0, 50])}
[markers.cue]
role = "cue"
labels = {{ item = "left" }}
[markers.pulse]
role = "pulse"
[[trial]]
slot = "cue"
role = "cue"
[[trial]]
slot = "pulse"
role = "pulse"
after_s = [0.0, {dice.choice([0.3, 1.0])}]
optional = {dice.choice(["true", "true", "false"])}
[pulses]
times = "{"none" if none else "markers"}"
{"" if none else window}
fill = "{fill}"
side = "{dice.choice(["both", "both", "before", "after"])}"
{f"flank_ms = {dice.choice([2, 10, 100])}" if dice.random() < 0.3 else ""}
{also if dice.random() < 0.3 and not none else ""}
[filter]
highpass_hz = {dice.choice([0, 0.5, 1, 2])}
lowpass_hz = {dice.choice([0, 0.3 * rate_hz, 0.4 * rate_hz, 20])}
rate_hz = {reduced}
[channels]
bad = {dice.choice(["[]", "[]", f'["{names[0]}"]'])}
reference = {reference}
recorded_reference = "{dice.choice(["", "", "FCz"])}"
[epochs]
length_s = {dice.choice([1, 10, 50, 200]) / rate_hz}
{rules}
[export]
formats = {formats}
precision = "{dice.choice(["single", "double"])}"
"""


def draw_marks(dice: random.Random, names: tuple[str, ...], n: int) -> str:
    added = sorted({dice.randrange(n) for _ in range(dice.choice([0, 0, 1, 3]))})
    start = dice.randrange(n)
    stretch = f"[[bad_stretches]]\nstart = {start}\nstop = {min(n, start + dice.choice([1, 50, n]))}\n"
    return f"""
bad = {dice.choice(["[]", f'["{names[-1]}"]'])}
trials_excluded = {dice.choice([[], [1], [2, 30]])}
[gaps_ms]
{f"{names[0]} = [-10.0, 30.0]" if dice.random() < 0.3 else ""}
[pulses]
added = {added}
removed = {dice.choice([[], [start]])}
{stretch if dice.random() < 0.3 else ""}
"""


@pytest.mark.slow
def test_there_is_a_whole_set_or_a_reason(tmp_path: Path, slow_count: Callable[[int], int]) -> None:
    whole = 0
    for seed in range(slow_count(600)):
        dice = random.Random(seed)
        folder = tmp_path / str(seed)
        folder.mkdir()
        recording, names, n = draw_recording(dice, folder)
        plan = draw_plan(dice, names)
        marks = draw_marks(dice, names, n) if dice.random() < 0.5 else None
        try:
            result = run_mend(recording, plan, folder, marks)
        except InputError:
            assert not (folder / "sets").exists(), seed
            continue
        except Exception as error:
            raise AssertionError(f"seed {seed}") from error
        whole += 1
        broken = [item for item in finish(check_set(result.folder)).items if not item.passed]
        assert [item for item in broken if item.kind == "integrity" and item.id != "conditions"] == [], seed
        if SetOnDisk(result.folder).path("epochs.h5").exists():
            assert np.nanmax(np.abs(SetOnDisk(result.folder).hdf5("data")), initial=0.0) < 0.02, seed
    assert whole > 0.2 * slow_count(600)
