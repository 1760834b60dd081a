"""What marks do to a set: contract 4.3, on the small recording."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pytest

from pulsemend.errors import InputError, MarksError
from pulsemend.mending.mend import dry_run, mend
from pulsemend.mending.prepare import Request
from pulsemend.model.vocabulary import Fate, PulseState
from pulsemend.progress import finish
from pulsemend.readers.fingerprint import fingerprint
from pulsemend.readers.opening import open_recording
from support.small_lantern import PLAN, SetOnDisk, Study, changed, make_request, run_mend

STEM = "sub-lt01_task-lantern"
RATE_HZ = 5000.0


def fate_of(folder: Path, rule: str, trial: int) -> str:
    ledger = SetOnDisk(folder).table("ledger.tsv")
    rows = list(zip(ledger["name"], ledger["trial"], strict=True))
    return ledger["fate"][rows.index((rule, str(trial)))]


def marker_of(study: Study, trial: int, slot: str) -> int:
    moments = study.lantern.schedule.moments
    marked = next(moment.marked for moment in moments if (moment.trial, moment.slot) == (trial, slot))
    assert marked is not None
    return marked


def onset_of(study: Study, trial: int, slot: str) -> int:
    moments = study.lantern.schedule.moments
    time_s = next(moment.time_s for moment in moments if (moment.trial, moment.slot) == (trial, slot))
    return round(time_s * RATE_HZ)


def fingerprint_text(recording: Path) -> str:
    opened = open_recording(recording)
    parts = finish(fingerprint(opened)).parts
    opened.close()
    return "".join(
        f'[[fingerprint]]\nname = "{name}"\nsize = {size}\nsha256 = "{sha256}"\n'
        for name, size, sha256 in parts
    )


def test_marks_beside_the_plan_are_found_and_a_given_file_wins(study: Study, tmp_path: Path) -> None:
    request = make_request(study.recording, PLAN, tmp_path, "trials_excluded = [2]\n")
    beside = tmp_path / "marks" / f"{STEM}.marks.toml"
    beside.parent.mkdir()
    beside.write_text("pulsemend_marks = 1\ntrials_excluded = [1]\n")
    found = finish(dry_run(Request(request.recording, request.plan)))
    given = finish(dry_run(request))
    for prepared, trial in ((found, 1), (given, 2)):
        excluded = {row.trial for row in prepared.ledger if row.fate is Fate.TRIAL_EXCLUDED}
        assert excluded == {trial}


def test_marks_that_are_given_but_missing_are_refused(study: Study, tmp_path: Path) -> None:
    request = make_request(study.recording, PLAN, tmp_path)
    with pytest.raises(InputError, match=r"nowhere\.toml"):
        finish(mend(Request(request.recording, request.plan, tmp_path / "nowhere.toml"), tmp_path / "sets"))


def test_marks_of_this_recording_are_accepted(study: Study, tmp_path: Path) -> None:
    result = run_mend(study.recording, PLAN, tmp_path, fingerprint_text(study.recording))
    assert result.folder.is_dir()


def test_marks_of_another_recording_are_refused(study: Study, tmp_path: Path) -> None:
    """The same names and sizes; one sample differs."""
    other = tmp_path / "other"
    other.mkdir()
    for path in study.recording.parent.glob(f"{STEM}_eeg.*"):
        shutil.copy(path, other)
    samples = other / f"{STEM}_eeg.eeg"
    samples.write_bytes(samples.read_bytes()[:-2] + b"\x01\x00")
    with pytest.raises(MarksError, match="sha256") as caught:
        run_mend(other / study.recording.name, PLAN, tmp_path, fingerprint_text(study.recording))
    assert caught.value.exit_code == 3
    assert not (tmp_path / "sets").exists()


def test_trials_and_epochs_are_left_out_by_hand(study: Study, tmp_path: Path) -> None:
    marks = 'trials_excluded = [3]\n[[epochs_left_out]]\ntrial = 1\nrule = "delay1"\n'
    folder = run_mend(study.recording, PLAN, tmp_path, marks).folder
    assert fate_of(folder, "delay1", 1) == Fate.BY_HAND
    assert fate_of(folder, "after2", 1) == Fate.KEPT
    assert fate_of(folder, "after2", 3) == fate_of(folder, "delay1", 3) == Fate.TRIAL_EXCLUDED


def test_decisions_about_what_does_not_exist_are_warned_of(study: Study, tmp_path: Path) -> None:
    at = marker_of(study, 1, "cue1")
    marks = (
        'trials_excluded = [9]\n[[epochs_left_out]]\ntrial = 1\nrule = "gone"\n'
        f"[pulses]\nremoved = [{at}]\n[[pulses.moved]]\nsample = {at + 1}\nto = {at + 2}\n"
    )
    warnings = finish(dry_run(make_request(study.recording, PLAN, tmp_path, marks))).warnings
    for piece in ("trial 9", "gone", f"sample {at} is removed,", f"sample {at + 1} is moved,"):
        assert any(piece in text for text in warnings), piece


def test_bad_channels_stay_in_the_set_and_out_of_the_reference(study: Study, tmp_path: Path) -> None:
    plan = changed(PLAN, ("[epochs]", '[channels]\nbad = ["O1"]\nrebuild_bad = false\n[epochs]'))
    written = SetOnDisk(run_mend(study.recording, plan, tmp_path, 'bad = ["TP8"]\n').folder)
    table = written.table("channels.tsv")
    assert {n: s for n, s in zip(table["name"], table["status"], strict=True) if s != "good"} == {
        "TP8": "bad",
        "O1": "bad",
    }
    notes = dict(zip(table["name"], table["status_description"], strict=True))
    assert notes == {
        **dict.fromkeys(table["name"], "n/a"),
        "TP8": "named bad in the marks",
        "O1": "named bad in the plan",
    }
    assert written.hdf5("channels/status").tolist() == table["status"]
    assert sorted(written.fif().info["bads"]) == ["O1", "TP8"]
    good = written.hdf5("channels/status") == "good"
    mean = written.hdf5("data")[:, good].mean(axis=1, dtype=np.float64)
    assert np.abs(mean).max() < 1e-11  # the good ones are the average reference; 32-bit numbers of 1e-4 V


def test_pulse_added_by_hand_is_repaired_and_may_be_an_anchor(study: Study, tmp_path: Path) -> None:
    onset = onset_of(study, 2, "pulse2")
    written = SetOnDisk(run_mend(study.recording, PLAN, tmp_path, f"[pulses]\nadded = [{onset}]\n").folder)
    assert fate_of(written.folder, "after2", 2) == Fate.KEPT
    pulses = written.table("pulses.tsv")
    row = pulses["sample"].index(str(onset))
    assert (pulses["marker_sample"][row], pulses["state"][row]) == ("n/a", PulseState.ADDED)
    epochs = written.table("epochs.tsv")
    index = list(zip(epochs["name"], epochs["trial"], strict=True)).index(("after2", "2"))
    assert float(epochs["onset_s"][index]) == onset / RATE_HZ


def test_pulse_moved_by_hand_moves_gap_and_anchor(study: Study, tmp_path: Path) -> None:
    at = marker_of(study, 1, "pulse2")
    to = at + 40
    marks = f"[[pulses.moved]]\nsample = {at}\nto = {to}\n"
    written = SetOnDisk(run_mend(study.recording, PLAN, tmp_path, marks).folder)
    pulses = written.table("pulses.tsv")
    row = pulses["sample"].index(str(to))
    assert (float(pulses["marker_sample"][row]), pulses["state"][row]) == (at, PulseState.MOVED)
    epochs = written.table("epochs.tsv")
    index = list(zip(epochs["name"], epochs["trial"], strict=True)).index(("after2", "1"))
    assert float(epochs["onset_s"][index]) == to / RATE_HZ


def test_pulse_removed_by_hand_is_neither_repaired_nor_an_anchor(study: Study, tmp_path: Path) -> None:
    at = marker_of(study, 3, "pulse1")  # the one without an artifact
    plan = changed(PLAN, ('anchor = "pulse2"', 'anchor = "pulse1"'))
    before = SetOnDisk(run_mend(study.recording, plan, tmp_path / "with").folder)
    marks = f"[pulses]\nremoved = [{at}]\n"
    after = SetOnDisk(run_mend(study.recording, plan, tmp_path / "without", marks).folder)
    assert len(after.table("pulses.tsv")["sample"]) == len(before.table("pulses.tsv")["sample"]) - 1
    assert fate_of(before.folder, "after2", 3) == Fate.KEPT
    assert fate_of(after.folder, "after2", 3) == Fate.NO_ANCHOR


@pytest.mark.parametrize(
    ("marks", "status", "note"),
    [
        (None, "rebuilt", "found: fast noise"),
        ('good = ["TP8"]\n', "good", "n/a"),
        ('bad = ["TP8"]\n', "rebuilt", "named bad in the marks"),
    ],
)
def test_channel_found_bad_is_rebuilt_unless_the_marks_say_good(
    marks: str | None, status: str, note: str, study: Study, tmp_path: Path
) -> None:
    written = SetOnDisk(run_mend(study.recording, PLAN, tmp_path, marks).folder)
    table = written.table("channels.tsv")
    place = table["name"].index("TP8")
    assert table["status"][place] == status
    assert table["status_description"][place].startswith(note)
    assert {*table["status"][:place], *table["status"][place + 1 :]} == {"good"}
    assert written.hdf5("channels/status").tolist() == list(table["status"])
    # One less for the reference, one less where a channel is made of the others.
    assert written.attributes()["rank"] == len(table["name"]) - 1 - (status == "rebuilt")


def test_gap_of_one_channel_in_this_recording_wins(study: Study, tmp_path: Path) -> None:
    marks = "[gaps_ms]\nP3 = [-2.0, 14.0]\nO1 = [-2.0, 40.0]\n"
    plan = changed(PLAN, ("[epochs]", "[channels]\nfind_bad = false\n[epochs]"))
    counts = {}
    for name, text in (("plan", None), ("marks", marks)):
        written = SetOnDisk(run_mend(study.recording, plan, tmp_path / name, text).folder)
        first = written.hdf5("replaced")[written.hdf5("labels/name") == "after2"][0]
        counts[name] = dict(zip(written.hdf5("channels/name"), first.sum(axis=1).tolist(), strict=True))
    usual = counts["plan"]["C3"]
    assert counts["plan"] == {**dict.fromkeys(counts["plan"], usual), "P3": usual + 11}
    assert counts["marks"] == {**dict.fromkeys(counts["plan"], usual), "O1": usual + 26}


def test_channel_type_of_the_marks_wins(study: Study, tmp_path: Path) -> None:
    marks = '[types]\nO1 = "eog"\nTP8 = "misc"\n'
    written = SetOnDisk(run_mend(study.recording, PLAN, tmp_path, marks).folder)
    types = dict(zip(written.hdf5("channels/name"), written.hdf5("channels/type"), strict=True))
    assert types.pop("O1") == "eog"
    assert "TP8" not in types
    assert set(types.values()) == {"eeg"}
    assert written.fif().get_channel_types(picks=["O1"]) == ["eog"]


def test_epochs_that_touch_a_bad_stretch_are_left_out(study: Study, tmp_path: Path) -> None:
    cue = marker_of(study, 1, "cue1")
    first = cue + round(1.4 * RATE_HZ)
    marks = f'[[bad_stretches]]\nstart = {first}\nstop = {first + 50}\nkind = "cough"\n'
    folder = run_mend(study.recording, PLAN, tmp_path, marks).folder
    assert fate_of(folder, "delay1", 1) == Fate.BAD_STRETCH
    assert fate_of(folder, "delay1", 2) == Fate.KEPT
    ledger = SetOnDisk(folder).table("ledger.tsv")
    assert ledger["detail"][ledger["fate"].index(Fate.BAD_STRETCH)].startswith("cough, ")


def test_samples_beyond_the_end_are_refused(study: Study, tmp_path: Path) -> None:
    end = study.lantern.n_samples
    with pytest.raises(MarksError) as caught:
        run_mend(study.recording, PLAN, tmp_path, f"[pulses]\nadded = [5, {end}]\n")
    assert str(end) in str(caught.value)
    assert not (tmp_path / "sets").exists()


def test_marks_in_the_set_keep_comments_and_gain_the_fingerprint(study: Study, tmp_path: Path) -> None:
    marks = '# loud all the time\nbad = ["TP8"]   # seen on the day\n'
    written = SetOnDisk(run_mend(study.recording, PLAN, tmp_path, marks).folder)
    text = written.path("marks.toml").read_text()
    assert marks in text
    assert fingerprint_text(study.recording).count("sha256") == text.count("sha256") == 3
