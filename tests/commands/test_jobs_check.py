"""`check` as its users run it: what is broken, what is only beyond its limit, and what is no set."""

from __future__ import annotations

import errno
import json
import os
import shutil
from pathlib import Path

import pytest

from pulsemend.__main__ import main
from pulsemend.export import found_set
from pulsemend.export.checksums import file_sha256
from support.child import pulsemend
from support.small_lantern import PLAN, SetOnDisk, Study, run_mend

BALANCED = PLAN[: PLAN.index('[[epochs.rule]]\nname = "after2"')] + (
    '[[epochs.rule]]\nname = "delay1"\nanchor = "cue1"\nstart_s = 0.5\n'
)
"""One rule, so that no readiness item but the leak is beyond its limit."""

SHOWN_HERE = ("replaced_by_rule", "leak")
"""Items beyond their limit in every set of this study: it accepts gaps, and its decay is not subtracted."""


@pytest.fixture(scope="module")
def whole(study: Study, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A set whose rules differ in how much of them was replaced."""
    return run_mend(study.recording, PLAN, tmp_path_factory.mktemp("whole")).folder


@pytest.fixture
def damaged(whole: Path, tmp_path: Path) -> SetOnDisk:
    """A copy to be damaged."""
    return SetOnDisk(Path(shutil.copytree(whole, tmp_path / whole.name)))


def checked(folder: Path, capsys: pytest.CaptureFixture[str], *options: str) -> tuple[int, dict[str, bool]]:
    """Code, and whether each item is passed."""
    code = main(["check", str(folder), "--json", *options])
    streams = capsys.readouterr()
    result = json.loads(streams.out)
    assert result["integrity"] == (code == 0 or "--strict" in options)
    return code, {item["id"]: item["passed"] for item in result["items"]}


def test_whole_set_is_0_with_every_check_and_its_evidence(whole: Path) -> None:
    ended = pulsemend("check", whole)
    assert ended.code == 0
    assert "BROKEN" not in ended.out
    for piece in (
        "5 x 8 x 1000",
        "5 kept + 1 left out = 6 candidates",
        "1000 Hz, 1000 samples",
        "bit for bit",
    ):
        assert piece in ended.out


def test_json_is_one_object_and_progress_lines(whole: Path) -> None:
    ended = pulsemend("check", whole, "--json")
    assert ended.code == 0
    assert ended.result["set"] == whole.name
    assert ended.result["integrity"] is True
    for item in ended.result["items"]:
        assert set(item) == {"id", "title", "value", "limit", "passed", "kind", "detail"}
    assert all(list(line) == ["stage", "done", "total", "seconds_left"] for line in ended.progress)
    assert ended.progress


def test_readiness_beyond_its_limit_is_1_only_with_strict(
    whole: Path, study: Study, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    code, items = checked(whole, capsys)
    assert (code, items["replaced_by_rule"]) == (0, False)
    assert main(["check", str(whole), "--strict"]) == 1
    assert "LOOK AT" in capsys.readouterr().out
    # Without a high-pass nothing of a pulse is carried far: the epochs end 200 ms before theirs.
    still = BALANCED.replace("start_s = 0.5", "start_s = 0.3") + "[filter]\nhighpass_hz = 0.0\n"
    balanced = run_mend(study.recording, still, tmp_path).folder
    assert checked(balanced, capsys, "--strict")[0] == 0


def flip(path: Path, at: int) -> None:
    """Change one bit."""
    content = bytearray(path.read_bytes())
    content[at] ^= 1
    path.write_bytes(content)


@pytest.mark.parametrize("name", ["epochs.h5", "epo.fif", "epochs.tsv", "provenance.json", "estimates.h5"])
def test_one_changed_bit_is_1(name: str, damaged: SetOnDisk, capsys: pytest.CaptureFixture[str]) -> None:
    path = damaged.path(name)
    flip(path, path.stat().st_size * 2 // 3)
    code, items = checked(damaged.folder, capsys)
    assert (code, items["checksums"]) == (1, False)


@pytest.mark.parametrize("name", ["epochs.h5", "epo.fif", "ledger.tsv", "checksums.sha256", "plan.toml"])
def test_a_missing_file_is_1_and_named(
    name: str, damaged: SetOnDisk, capsys: pytest.CaptureFixture[str]
) -> None:
    damaged.path(name).unlink()
    assert main(["check", str(damaged.folder)]) == 1
    assert name in capsys.readouterr().out


def test_a_file_that_may_not_be_read_is_not_called_changed_or_missing(
    damaged: SetOnDisk, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Root may read everything, so the system's refusal is made up."""

    def refuse(path: Path) -> str:
        if path.name.endswith("epochs.h5"):
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), str(path))
        return file_sha256(path)

    monkeypatch.setattr(found_set, "file_sha256", refuse)
    assert main(["check", str(damaged.folder)]) == 1
    shown = capsys.readouterr().out
    assert "epochs.h5 cannot be read" in shown
    assert "is missing" not in shown
    assert "was changed" not in shown


@pytest.mark.parametrize("share", [0.0, 0.3, 0.99])
def test_a_file_cut_short_is_1(share: float, damaged: SetOnDisk, capsys: pytest.CaptureFixture[str]) -> None:
    for name in ("epochs.h5", "epo.fif"):
        path = damaged.path(name)
        path.write_bytes(path.read_bytes()[: int(path.stat().st_size * share)])
    assert checked(damaged.folder, capsys)[0] == 1


def test_a_condition_without_epochs_is_1(
    study: Study, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """It is written, though: `mend` exits 0 whenever a whole set was written."""
    plan = tmp_path / "plan.toml"
    plan.write_text(f'{PLAN}[[epochs.rule]]\nname = "never"\nanchor = "cue1"\nstart_s = 1.8\n')
    assert main(["mend", str(study.recording), "--plan", str(plan), "--out", str(tmp_path)]) == 0
    capsys.readouterr()
    code, items = checked(tmp_path / "sub-lt01_task-lantern_desc-mended", capsys)
    assert (code, items["conditions"]) == (1, False)
    assert [name for name, passed in items.items() if not passed and name not in SHOWN_HERE] == [
        "conditions",
        "balance",
    ]


def test_what_is_no_set_is_3_in_one_line(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "file").write_text("")
    for place in (tmp_path, tmp_path / "file", tmp_path / "nowhere"):
        assert main(["check", str(place)]) == 3
        streams = capsys.readouterr()
        assert streams.out == ""
        assert streams.err.count("\n") == 1
        assert str(place) in streams.err
