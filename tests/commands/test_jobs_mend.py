"""`mend` as its users run it: exit codes, streams, odd names and places. Contract 4.1."""

from __future__ import annotations

import errno
import json
import os
import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from pulsemend.__main__ import main
from support.child import pulsemend
from support.small_lantern import PLAN, SetOnDisk, Study, changed

SET = "sub-lt01_task-lantern_desc-mended"


@pytest.fixture
def complaint(capsys: pytest.CaptureFixture[str]) -> Callable[..., tuple[int, str]]:
    """Run a command line in this process; its code and the one line it complains with."""

    def run(*words: str | Path) -> tuple[int, str]:
        code = main(list(map(str, words)))
        streams = capsys.readouterr()
        assert streams.out == ""
        assert "Traceback" not in streams.err
        complaints = [line for line in streams.err.splitlines() if line.startswith("pulsemend: ")]
        assert len(complaints) == 1
        assert streams.err.endswith(f"{complaints[0]}\n")
        return code, complaints[0]

    return run


def copied(study: Study, folder: Path, stem: str = "sub-lt01_task-lantern") -> Path:
    """Copy the recording under another name, which its header then holds, too."""
    folder.mkdir(parents=True)
    for path in study.recording.parent.glob("*_eeg.*"):
        shutil.copy(path, folder / f"{stem}_eeg{path.suffix}")
    for suffix in (".vhdr", ".vmrk"):
        path = folder / f"{stem}_eeg{suffix}"
        text = path.read_text(encoding="utf-8").replace("sub-lt01_task-lantern_eeg", f"{stem}_eeg")
        path.write_text(text, encoding="utf-8")
    return folder / f"{stem}_eeg.vhdr"


def test_mend_prints_what_was_kept_and_where_it_is(study: Study, tmp_path: Path) -> None:
    ended = pulsemend("mend", study.recording, "--plan", study.plan, "--out", "sets", cwd=tmp_path)
    assert ended.code == 0
    assert ended.out.startswith(
        "sub-lt01_task-lantern: 3 trials, 0 incomplete, 0 doubtful; 5 pulses, 1 of them marked"
    )
    assert "delay1: 3 kept" in ended.out
    assert "left out, no anchor in this trial: 1" in ended.out
    assert ended.out.rstrip().endswith(SET)
    assert (tmp_path / "sets" / SET / f"{SET}_epochs.h5").is_file()
    again = pulsemend("mend", study.recording, "--plan", study.plan, "--out", "sets", cwd=tmp_path)
    assert (again.code, again.out) == (3, "")
    assert again.err.splitlines()[-1].startswith("pulsemend: ")
    assert "--overwrite" in again.err.splitlines()[-1]


def test_mend_json_is_one_object_and_progress_lines(study: Study, tmp_path: Path) -> None:
    ended = pulsemend("mend", study.recording, "--plan", study.plan, "--out", tmp_path, "--json")
    assert ended.code == 0
    result = ended.result
    written = SetOnDisk(tmp_path / SET)
    assert result["content_sha256"] == written.attributes()["content_sha256"]
    assert result["kept"] == sum(result["kept_per_rule"].values()) == len(written.hdf5("data")) == 5
    assert sum(result["fates"].values()) == result["candidates"] == 6
    assert Path(result["set"]) == tmp_path / SET
    assert len(ended.progress) >= 4
    for line in ended.progress:
        assert list(line) == ["stage", "done", "total", "seconds_left"]
    stages = list(dict.fromkeys(line["stage"] for line in ended.progress))
    assert stages == [
        "identifying the recording",
        "learning from the recording",
        "measuring the leak",
        "writing epochs",
        "reading back",
    ]


def test_dry_run_shows_the_ledger_and_writes_nothing(
    study: Study, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    words = ["mend", str(study.recording), "--plan", str(study.plan), "--out", str(tmp_path / "sets")]
    assert main([*words, "--dry-run"]) == 0
    shown = capsys.readouterr().out
    assert "no pulse2 in this trial" in shown
    assert main([*words, "--dry-run", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["kept"] == 5
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("name", ["lt 01 #2", "Würfel-参加者 é", "it's 50% [a]{b}"])
def test_odd_names_in_folders_and_files(name: str, study: Study, tmp_path: Path) -> None:
    """In the recording's name, its folder's, the plan's, the marks' and the sets' folder's."""
    recording = copied(study, tmp_path / f"{name} in", name)
    plan = tmp_path / f"{name} plans" / f"{name}.toml"
    (plan.parent / "marks").mkdir(parents=True)
    plan.write_text(PLAN, encoding="utf-8")
    marks = plan.parent / "marks" / f"{name}.marks.toml"
    marks.write_text("pulsemend_marks = 1\ntrials_excluded = [3]\n", encoding="utf-8")
    assert main(["mend", str(recording), "--plan", str(plan), "--out", str(tmp_path / f"{name} out")]) == 0
    folder = tmp_path / f"{name} out" / f"{name}_desc-mended"
    written = SetOnDisk(folder)
    assert set(written.hdf5("labels/trial")) == {1, 2}
    assert len(written.fif().events) == len(written.hdf5("data"))
    assert main(["check", str(folder)]) == 0


def test_odd_names_where_only_ascii_is_known_and_none_in_the_log(study: Study, tmp_path: Path) -> None:
    """The locale is that of many clusters. Issue: no names or absolute paths in the log at INFO."""
    name = "参加者-annaberger #1"
    recording = copied(study, tmp_path / name, name)
    env = {
        **os.environ, "LC_ALL": "C", "PYTHONIOENCODING": "ascii", "XDG_STATE_HOME": str(tmp_path / "state")
    }  # fmt: skip
    out = tmp_path / name / "sets"
    ended = pulsemend("mend", recording, "--plan", study.plan, "--out", out, env=env)
    assert ended.code == 0
    assert (out / f"{name}_desc-mended").is_dir()
    logs = [path.read_text(encoding="utf-8") for path in (tmp_path / "state").rglob("*") if path.is_file()]
    assert any("mend" in text for text in logs)
    for text in logs:
        assert "annaberger" not in text
        assert str(tmp_path) not in text


def test_what_cannot_be_read_is_3_in_one_line(
    study: Study, tmp_path: Path, complaint: Callable[..., tuple[int, str]]
) -> None:
    recording = copied(study, tmp_path / "in")
    rest = ("--plan", study.plan, "--out", tmp_path / "sets")
    samples = recording.with_suffix(".eeg")
    whole = samples.read_bytes()
    samples.write_bytes(whole[:-3])
    for problem in ("cut off", "vanished"):
        if problem == "vanished":
            samples.unlink()
        code, line = complaint("mend", recording, *rest)
        assert code == 3
        assert samples.name in line
    code, line = complaint("mend", tmp_path / "in" / "nobody.vhdr", *rest)
    assert (code, "nobody.vhdr" in line) == (3, True)
    code, line = complaint("mend", study.plan, *rest)
    assert (code, "plan.toml" in line) == (3, True)
    assert not (tmp_path / "sets").exists()


@pytest.mark.parametrize(
    ("text", "piece"),
    [
        ("pulsemend = 1\n[epochs\n", "line 2"),
        (changed(PLAN, ("length_s = 1.0", "length_s = -1.0")), "epochs.length_s"),
        (changed(PLAN, ("pulsemend = 1", "pulsemend = 2")), "pulsemend"),
        ("", "plan.toml"),
    ],
)
def test_plans_that_cannot_be_used_are_3_in_one_line(
    text: str, piece: str, study: Study, tmp_path: Path, complaint: Callable[..., tuple[int, str]]
) -> None:
    plan = tmp_path / "plan.toml"
    plan.write_text(text)
    code, line = complaint("mend", study.recording, "--plan", plan, "--out", tmp_path / "sets")
    assert code == 3
    assert piece in line
    assert not (tmp_path / "sets").exists()


def test_plan_that_is_missing_or_a_folder_is_3(
    study: Study, tmp_path: Path, complaint: Callable[..., tuple[int, str]]
) -> None:
    for plan in (tmp_path / "no.toml", tmp_path):
        code, line = complaint("mend", study.recording, "--plan", plan, "--out", tmp_path / "sets")
        assert code == 3
        assert str(plan) in line


def test_output_that_is_no_folder_is_3(
    study: Study, tmp_path: Path, complaint: Callable[..., tuple[int, str]]
) -> None:
    (tmp_path / "file").write_text("mine")
    for out in (tmp_path / "file", tmp_path / "file" / "below"):
        code, line = complaint("mend", study.recording, "--plan", study.plan, "--out", out)
        assert code == 3
        assert "file" in line
    assert (tmp_path / "file").read_text() == "mine"


def test_read_only_output_folder_is_3(
    study: Study, tmp_path: Path, complaint: Callable[..., tuple[int, str]], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Root may write everywhere: for it the refusal is made up where the system would make it."""
    out = tmp_path / "locked"
    out.mkdir(mode=0o555)
    if os.access(out, os.W_OK):

        def refuse(path: Path, *_: object, **__: object) -> None:
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), str(path))

        monkeypatch.setattr(Path, "mkdir", refuse)
        monkeypatch.setattr(os, "mkdir", refuse)
    code, line = complaint("mend", study.recording, "--plan", study.plan, "--out", out)
    assert code == 3
    assert f"{out}: the set cannot be written here" in line
    assert list(out.iterdir()) == []


def test_error_in_json_mode_is_one_object_on_either_stream(
    study: Study, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    plan = tmp_path / "plan.toml"
    plan.write_text(changed(PLAN, ("start_s = 0.5", "start_s = 0.5001")))
    out = tmp_path / "sets"
    assert main(["mend", str(study.recording), "--plan", str(plan), "--out", str(out), "--json"]) == 3
    streams = capsys.readouterr()
    found = json.loads(streams.out)
    assert found["exit_code"] == 3
    assert found["error"]["kind"] == "PlanError"
    assert json.loads(streams.err.splitlines()[-1])["error"] == found["error"]["message"]
