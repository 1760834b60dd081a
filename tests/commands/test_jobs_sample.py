"""`facts`, `draft`, `sample` and `demo` as their users run them."""

from __future__ import annotations

import hashlib
import os
import re
import tomllib
from pathlib import Path

import pytest

from pulsemend.__main__ import main
from pulsemend.simulate import sample
from pulsemend.simulate.ready import READY
from support.child import SMALL_SAMPLE, pulsemend
from support.small_lantern import SetOnDisk, Study

STEM = "sub-lt01_task-lantern"


def state(folder: Path) -> dict[str, tuple[str, int]]:
    """Contents and time of every file."""
    return {
        str(path.relative_to(folder)): (
            hashlib.sha256(path.read_bytes()).hexdigest(),
            path.stat().st_mtime_ns,
        )
        for path in folder.rglob("*")
        if path.is_file()
    }


def test_facts_json_is_what_was_written(study: Study) -> None:
    """Known truth: the simulated schedule."""
    ended = pulsemend("facts", study.recording, "--json")
    assert ended.code == 0
    facts = ended.result
    lantern = study.lantern
    assert (facts["rate_hz"], facts["samples"]) == (5000.0, lantern.n_samples)
    assert facts["channels"] == dict.fromkeys(lantern.spec.channels, "eeg")
    assert facts["markers"] == [{"sample": one.sample, "code": one.code} for one in lantern.markers]
    assert sum(code["count"] for code in facts["codes"]) == len(lantern.markers)
    given = [pulse.time_s * 5000.0 for pulse in lantern.schedule.pulses if pulse.happened]
    assert len(facts["pulse_like_samples"]) == len(given)
    for found, true in zip(facts["pulse_like_samples"], given, strict=True):
        assert abs(found - true) < 5.0
    assert all(list(line) == ["stage", "done", "total", "seconds_left"] for line in ended.progress)


def test_facts_for_people_list_every_code(study: Study, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["facts", str(study.recording)]) == 0
    shown = capsys.readouterr().out
    assert "41.9 s at 5000 Hz, 8 channels (8 eeg)" in shown
    for code in {marker.code for marker in study.lantern.markers}:
        assert code in shown
    (lost,) = (one for one in study.lantern.schedule.pulses if one.happened and one.marked is None)
    told = re.search(r"  1 of them without a marker, at ([0-9.]+) s\n", shown)
    assert told is not None
    assert float(told[1]) == pytest.approx(lost.time_s, abs=0.001)


def test_draft_is_a_plan_that_mend_refuses_until_a_person_decided(study: Study, tmp_path: Path) -> None:
    plan = tmp_path / "first plan #1.toml"
    ended = pulsemend("draft", study.recording, "--out", plan)
    assert (ended.code, plan.name in ended.out) == (0, True)
    text = plan.read_text(encoding="utf-8")
    assert "# decide:" in text
    assert {marker.code for marker in study.lantern.markers} == set(tomllib.loads(text)["markers"])
    refused = pulsemend("mend", study.recording, "--plan", plan, "--out", tmp_path / "sets")
    assert (refused.code, refused.out) == (3, "")
    assert not (tmp_path / "sets").exists()
    again = pulsemend("draft", study.recording, "--out", plan)
    assert (again.code, again.out) == (2, "")
    assert plan.read_text(encoding="utf-8") == text


def test_sample_and_demo_replace_only_what_they_wrote(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """One folder: a sample, a demo on it with files of somebody else in between, and the demo again."""
    folder = tmp_path / "Lantern #1 ü"
    monkeypatch.setattr(sample, "LanternSpec", lambda: READY)
    assert main(["sample", str(folder)]) == 0
    for line in capsys.readouterr().out.splitlines():
        assert Path(line.split(maxsplit=1)[1]).is_file(), line
    recording = {name: digest for name, (digest, _) in state(folder).items()}
    mine = [folder / "notes.txt", folder / "sets" / "mine" / "epochs.h5", folder / "truth" / "own.json"]
    for path in mine:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text("mine")
    stamps = {path: path.stat().st_mtime_ns for path in mine}

    first = pulsemend("demo", folder, "--no-window", script=SMALL_SAMPLE)
    assert first.code == 0
    written = SetOnDisk(folder / "sets" / f"{STEM}_desc-mended")
    assert "BROKEN" not in first.out
    assert str(written.folder) in first.out
    assert "is no medical device" in " ".join(first.out.split())
    content = written.attributes()["content_sha256"]

    # No display, and not told to do without a window: exit 0 either way.
    without = {key: value for key, value in os.environ.items() if key not in ("DISPLAY", "WAYLAND_DISPLAY")}
    env = {**without, "PYTHONIOENCODING": "utf-8"}
    second = pulsemend("demo", folder, env=env, script=SMALL_SAMPLE)
    assert second.code == 0
    assert written.attributes()["content_sha256"] == content
    after = {name: digest for name, (digest, _) in state(folder).items()}
    assert {name: after[name] for name in recording} == recording
    assert {path: path.stat().st_mtime_ns for path in mine} == stamps
    assert {path.read_text() for path in mine} == {"mine"}
    assert not [name for name in after if ".part-" in name or ".old-" in name]


def test_demo_refuses_to_replace_a_plan_somebody_changed(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    plan = tmp_path / "lantern.toml"
    plan.write_text("# mine\n")
    assert main(["demo", str(tmp_path), "--no-window"]) == 3
    streams = capsys.readouterr()
    assert (streams.out, streams.err.count("\n")) == ("", 1)
    assert "lantern.toml" in streams.err
    assert [path.name for path in tmp_path.iterdir()] == ["lantern.toml"]
    assert plan.read_text() == "# mine\n"


def test_a_place_that_cannot_be_written_is_3_in_one_line(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "file").write_text("mine")
    for words in (["sample"], ["demo", "--no-window"]):
        assert main([*words, str(tmp_path / "file")]) == 3
        streams = capsys.readouterr()
        assert (streams.out, streams.err.count("\n")) == ("", 1)
        assert "file" in streams.err


@pytest.mark.parametrize("words", [["facts"], ["draft", "--out", "plan.toml"]])
def test_a_vanished_sample_file_is_3_in_one_line(
    words: list[str], study: Study, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    header = tmp_path / study.recording.name
    header.write_bytes(study.recording.read_bytes())
    header.with_suffix(".vmrk").write_bytes(study.recording.with_suffix(".vmrk").read_bytes())
    words = [word.replace("plan.toml", str(tmp_path / "plan.toml")) for word in words]
    assert main([*words, str(header)]) == 3
    streams = capsys.readouterr()
    assert (streams.out, streams.err.count("\n")) == ("", 1)
    assert header.with_suffix(".eeg").name in streams.err
    assert not (tmp_path / "plan.toml").exists()


@pytest.mark.slow
def test_several_recordings_and_the_default_folder_of_the_demo(tmp_path: Path) -> None:
    sampled = pulsemend("sample", "several", "--recordings", "2", cwd=tmp_path)
    assert sampled.code == 0
    names = {path.name for path in (tmp_path / "several").glob("*.vhdr")}
    assert names == {"sub-lt01_task-lantern_eeg.vhdr", "sub-lt02_task-lantern_eeg.vhdr"}
    assert pulsemend("demo", "--no-window", cwd=tmp_path).code == 0
    assert (tmp_path / "pulsemend-demo" / "sets" / f"{STEM}_desc-mended").is_dir()
    # The same recording, whoever writes it.
    one, other = (tmp_path / name / f"{STEM}_eeg.eeg" for name in ("several", "pulsemend-demo"))
    assert one.read_bytes() == other.read_bytes()
