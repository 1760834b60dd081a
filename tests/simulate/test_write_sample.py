"""The folder that `write_sample` leaves."""

from __future__ import annotations

import hashlib
import json
from dataclasses import replace
from pathlib import Path

import mne
import numpy as np
import pytest

from pulsemend.errors import InputError, UsageError
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan_checks import check_against_rate, check_channels, check_decided, check_plan
from pulsemend.model.plan_file import read_plan
from pulsemend.progress import Progress, finish
from pulsemend.simulate.lantern import LanternSpec
from pulsemend.simulate.memory import rehearse
from pulsemend.simulate.sample import SampleResult, write_sample
from pulsemend.simulate.schedule import Fault, FaultKind
from pulsemend.simulate.truth import LOG_COLUMNS

TINY = LanternSpec(
    trials=2,
    faults=(Fault(FaultKind.UNMARKED, 1, "pulse1"), Fault(FaultKind.UNSENT, 2, "probe1")),
    channels=("Cz", "P3", "TP8"),
    rate_hz=2000.0,
)


def write(folder: Path, recordings: int = 1, spec: LanternSpec = TINY) -> SampleResult:
    return finish(write_sample(folder, recordings, spec))


def hashes(folder: Path) -> dict[str, str]:
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def test_files_hold_what_was_simulated(tmp_path: Path) -> None:
    result = finish(write_sample(tmp_path / "new" / "sample", spec=TINY, clean=True))
    made = rehearse(TINY)
    raw = mne.io.read_raw_brainvision(result.recordings[0], verbose="error")
    stored = np.empty((made.lantern.n_samples, 3))
    made.recording.read(0, len(stored), stored)
    np.testing.assert_array_equal(np.rint(raw.get_data().T / 1e-7), stored)

    wanted = [(m.sample, f"{m.type}/{m.code}") for m in made.lantern.markers]
    found = zip(np.rint(raw.annotations.onset * 2000), raw.annotations.description, strict=True)
    assert [(n, text) for n, text in found if not text.startswith("New Segment")] == wanted

    beside = result.folder / "truth" / "sub-lt01_task-lantern_desc-clean_eeg.vhdr"
    clean = mne.io.read_raw_brainvision(beside, verbose="error").get_data().T
    np.testing.assert_allclose(clean, made.clean_v, atol=1e-9)


def test_truth_says_what_is_in_the_files(tmp_path: Path) -> None:
    result = write(tmp_path)
    made = rehearse(TINY)
    truth = json.loads(result.truths[0].read_text(encoding="utf-8"))
    assert truth["settings"]["seed"] == 1
    assert truth["bad_channels"] == ["TP8"]
    assert [fault["kind"] for fault in truth["faults"]] == ["unmarked pulse", "marker missing"]
    marked = [event["marked_sample"] for event in truth["events"] if event["marked_sample"] is not None]
    assert sorted(marked) == [m.sample for m in made.lantern.markers]
    pulses = [event for event in truth["events"] if event["code"] == "pulse"]
    assert [p["time_s"] for p in pulses] == pytest.approx([p.time_s for p in made.lantern.schedule.pulses])
    assert [p["marked_sample"] is None for p in pulses] == [True, False, False, False]
    arrays = np.load(tmp_path / "truth" / "sub-lt01_task-lantern_truth.npz", allow_pickle=False)
    np.testing.assert_array_equal(arrays["source_maps"], made.lantern.source_maps)
    assert arrays["evoked_pulse"].shape == (len(arrays["places"]), len(arrays["times_s"]))
    assert 3e-6 < np.abs(arrays["evoked_pulse"]).max() < 20e-6


def test_plan_fits_the_recording(tmp_path: Path) -> None:
    result = write(tmp_path)
    plan = read_plan(result.plan).plan
    assert check_plan(plan) == ()
    check_decided(plan)
    check_against_rate(plan, TINY.rate_hz)
    assert check_channels(plan, NO_MARKS, TINY.channels) == ()
    assert {plan.log.time, *plan.log.columns} <= set(LOG_COLUMNS)
    assert result.logs[0].name == plan.log.file.replace("{stem}", TINY.stem)
    assert {label.name for label in plan.labels} == {"second"}
    # The same columns in every rule, so that both delays pool.
    assert {tuple(sorted(rule.labels)) for rule in plan.epochs.rule} == {("cued", "order", "uncued")}
    codes = {m.code for m in rehearse(replace(TINY, trials=8)).lantern.markers}
    assert codes == {marker.code for marker in plan.markers}


def test_written_twice_is_written_the_same(tmp_path: Path) -> None:
    write(tmp_path)
    first = hashes(tmp_path)
    write(tmp_path)
    assert hashes(tmp_path) == first
    listed = json.loads((tmp_path / "sample.json").read_text(encoding="utf-8"))["files"]
    assert listed == {name: digest for name, digest in first.items() if name != "sample.json"}


def test_another_sample_replaces_the_first(tmp_path: Path) -> None:
    write(tmp_path, 2)
    result = write(tmp_path, 1, replace(TINY, seed=5))
    assert json.loads(result.truths[0].read_text(encoding="utf-8"))["settings"]["seed"] == 5
    # The second recording of the first sample stays, and stays listed.
    write(tmp_path, 2)


def test_several_recordings_differ(tmp_path: Path) -> None:
    result = write(tmp_path, 3, replace(TINY, trials=1, faults=()))
    assert [path.name[:8] for path in result.recordings] == ["sub-lt01", "sub-lt02", "sub-lt03"]
    assert len({path.with_suffix(".eeg").read_bytes()[:4000] for path in result.recordings}) == 3
    assert all(path.is_file() for path in (*result.logs, *result.truths))


@pytest.mark.parametrize("name", ["lantern.toml", "truth/sub-lt01_task-lantern_truth.json"])
def test_a_file_of_somebody_else_is_left_alone(tmp_path: Path, name: str) -> None:
    (tmp_path / "truth").mkdir()
    (tmp_path / name).write_text("mine")
    with pytest.raises(InputError, match="not part of the sample"):
        write(tmp_path)
    assert hashes(tmp_path) == {name: hashlib.sha256(b"mine").hexdigest()}


def test_a_changed_plan_is_left_alone(tmp_path: Path) -> None:
    result = write(tmp_path)
    result.plan.write_text("mine")
    before = hashes(tmp_path)
    with pytest.raises(InputError, match="changed since"):
        write(tmp_path)
    assert hashes(tmp_path) == before


@pytest.mark.parametrize("text", ["no list", "[]", '{"files": 3}'])
def test_a_foreign_list_is_left_alone(tmp_path: Path, text: str) -> None:
    (tmp_path / "sample.json").write_text(text)
    with pytest.raises(InputError, match="not the list"):
        write(tmp_path)
    assert (tmp_path / "sample.json").read_text() == text


def test_stopped_work_leaves_no_file(tmp_path: Path) -> None:
    work = write_sample(tmp_path, spec=TINY)
    next(work)
    assert any(path.name.endswith(".eeg") or ".part-" in path.name for path in tmp_path.iterdir())
    work.close()
    assert hashes(tmp_path) == {}


def test_progress_rises_to_the_end(tmp_path: Path) -> None:
    steps: list[Progress] = []
    finish(write_sample(tmp_path, 2, TINY), steps.append)
    assert [step.done for step in steps] == sorted(step.done for step in steps)
    assert steps[-1].done == steps[-1].total == 2


def test_a_folder_that_is_a_file_is_named(tmp_path: Path) -> None:
    (tmp_path / "sample").write_text("")
    with pytest.raises(InputError, match="cannot be written"):
        write(tmp_path / "sample")


def test_no_recording_is_a_wrong_use(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="at least one"):
        write(tmp_path, 0)
