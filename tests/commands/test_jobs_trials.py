"""Trials, logs and events on the command line: `facts --plan --events`, `mend --dry-run`, and exit code 3."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from pulsemend.__main__ import main
from pulsemend.model.recording import Marker
from support.child import pulsemend
from support.lantern_log import (
    LOG,
    N_TRIALS,
    NO_LABELS_OF_LOG,
    PLAN,
    RATE_HZ,
    STEM,
    markers_of,
    recoded,
    sample_of,
    without,
    write,
)
from support.small_lantern import changed

Shown = Callable[..., str]


@pytest.fixture
def shown(capsys: pytest.CaptureFixture[str]) -> Shown:
    """Run a command line in this process; what it prints."""

    def run(*words: str | Path, code: int = 0) -> str:
        assert main(list(map(str, words))) == code
        streams = capsys.readouterr()
        assert "Traceback" not in streams.err
        return streams.out if code == 0 else streams.err

    return run


def plan_in(folder: Path, text: str = PLAN) -> Path:
    folder.mkdir(exist_ok=True)
    (folder / "plan.toml").write_text(text, encoding="utf-8")
    return folder / "plan.toml"


def test_facts_of_a_plan_and_its_table_of_events(tmp_path: Path, shown: Shown) -> None:
    lost = sample_of(4, "cue2")
    recording = write(tmp_path / "in", without(markers_of(), lost))
    table = tmp_path / "events.tsv"
    words = ("facts", recording, "--plan", plan_in(tmp_path), "--events", table)
    out = shown(*words)
    assert f"trials: {N_TRIALS}, 1 incomplete, 0 doubtful, 0 set aside; markers in no trial: 0" in out
    assert f"- trial 4 at {sample_of(4, 'sample') / RATE_HZ:.3f} s: no cue2" in out
    # The row of the lost arrow stands between two others: joined by that, which is said.
    assert "24 of 24 rows joined" in out
    assert "By their place between two neighbours, for want of a time: row 8 with trial 4 cue2." in out
    assert out.rstrip().endswith(f"written: {table}")
    lines = [line.split("\t") for line in table.read_text(encoding="utf-8").splitlines()]
    assert lines[0][:6] == ["onset", "duration", "sample", "code", "type", "role"]
    assert len(lines) == 1 + len(markers_of()) - 1
    rows = [dict(zip(lines[0], line, strict=True)) for line in lines[1:]]
    assert {row["state"] for row in rows if row["trial"] == "4"} == {"incomplete: no cue2"}
    assert {row["slot"] for row in rows if row["trial"] == "5"} == {
        "sample", "cue1", "pulse1", "cue2", "pulse2"
    }  # fmt: skip
    found = json.loads(shown(*words, "--json"))
    assert [one["missing"] for one in found["trials"] if one["missing"]] == [["cue2"]]


def test_facts_stay_readable_and_json_has_all(tmp_path: Path, shown: Shown) -> None:
    """Half of all trials are broken, 90 codes have no name, 40 arrows belong to no trial."""
    markers = [one for place, one in enumerate(markers_of()) if one.code != "arrow left"]
    markers += [Marker(3 + 7 * place, f"unknown {place:02d}") for place in range(90)]
    markers += [Marker(200 + 9 * place, "arrow right", "Screen") for place in range(40)]
    recording = write(tmp_path / "in", markers)
    words = ("facts", recording, "--plan", plan_in(tmp_path, NO_LABELS_OF_LOG))
    out = shown(*words)
    found = json.loads(shown(*words, "--json"))
    assert len(out.splitlines()) < 200
    assert max(map(len, out.splitlines())) < 1000
    n_codes = len(found["codes"])
    assert n_codes == 90 + len({one.code for one in markers_of()}) - 1
    assert out.count(f"and {n_codes - 60} more; --json has all") == 2
    alone = found["markers_in_no_trial"]
    assert len(alone) >= 40
    assert f"and {len(alone) - 20} more; --json has all" in out
    # What is cut is what is rare, and what the plan does not name.
    for code in ("lanterns up", "arrow right", "pulse"):
        assert out.count(f"  {code} ") >= 2


def test_dry_run_prints_trials_counts_ledger_and_differences(tmp_path: Path, shown: Shown) -> None:
    recording = write(tmp_path / "in", without(markers_of(), sample_of(4, "cue2"), sample_of(8, "cue1")))
    words = ("mend", recording, "--plan", plan_in(tmp_path), "--out", tmp_path / "sets", "--dry-run")
    out = shown(*words)
    for piece in (
        f"{STEM}: {N_TRIALS} trials, 2 incomplete",
        "left out, trial incomplete: 4",
        "no cue2",
        "epochs per condition",
        "candidate epochs",
        "standard error",
    ):
        assert piece in out
    found = json.loads(shown(*words, "--json"))
    assert len(found["trial_table"]) == N_TRIALS
    assert len(found["ledger"]) == found["candidates"] == sum(found["fates"].values()) == 2 * N_TRIALS
    assert sum(count["kept"] for count in found["counts"]) == found["kept"] == 2 * N_TRIALS - 4
    assert {one["labels"]["correct"] for one in found["ledger"] if one["fate"] == "kept"} == {"yes", "no"}
    assert not (tmp_path / "sets").exists()


def test_a_log_that_labels_need_is_3_in_one_line_and_nothing_is_written(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", log="")
    ended = pulsemend("mend", recording, "--plan", plan_in(tmp_path), "--out", tmp_path / "sets")
    assert (ended.code, ended.out) == (3, "")
    (line,) = (one for one in ended.err.splitlines() if one.startswith("pulsemend: "))
    assert line.startswith(f"pulsemend: {LOG}: the log cannot be opened")
    assert "Name the right log in the marks" in line
    assert not (tmp_path / "sets").exists()


def test_a_log_that_nothing_needs_is_a_note(tmp_path: Path, shown: Shown) -> None:
    recording = write(tmp_path / "in", log="trial\tarrow_s\n")
    plan = plan_in(tmp_path, NO_LABELS_OF_LOG)
    out = shown("mend", recording, "--plan", plan, "--out", tmp_path / "sets")
    assert f"note: the log was not joined: {LOG}: " in out
    assert "written: " in out


def test_cures_on_the_command_line(tmp_path: Path, shown: Shown) -> None:
    """`facts` names the fault and how to accept its cure; accepted, `mend` has every trial."""
    numbers = {"lanterns up": 1, "arrow left": 2, "arrow right": 6, "pulse": 8}
    stuck = [replace(one, code=str(int(one.code) | 32)) for one in recoded(markers_of(), numbers)]
    recording = write(tmp_path / "in", stuck)
    names = [
        (f'[markers."{code}"]' if " " in code else f"[markers.{code}]", f'[markers."{number}"]')
        for code, number in numbers.items()
    ]
    plan = plan_in(tmp_path, changed(PLAN, *names))
    out = shown("facts", recording, "--plan", plan)
    assert "- stuck bit 5: " in out
    assert "cure: " in out
    assert "[cures] accepted" in out
    (tmp_path / "marks").mkdir()
    marks = tmp_path / "marks" / f"{STEM}.marks.toml"
    marks.write_text('pulsemend_marks = 1\n[cures]\naccepted = ["stuck bit 5"]\n', encoding="utf-8")
    out = shown("mend", recording, "--plan", plan, "--out", tmp_path / "sets", "--dry-run")
    assert f"{STEM}: {N_TRIALS} trials, 0 incomplete, 0 doubtful" in out
    assert "cure of stuck bit 5 was applied to" in out
