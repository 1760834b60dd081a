"""What is said beforehand is what is written; what would be refused is said beforehand."""

from __future__ import annotations

import os
from dataclasses import replace
from pathlib import Path

import pytest

from pulsemend.export import set_writer
from pulsemend.mending.learned import Learned, learn
from pulsemend.mending.mend import mend
from pulsemend.mending.outlook import look_ahead
from pulsemend.mending.prepare import Request
from pulsemend.model.epochs import Trials
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan_file import read_plan
from pulsemend.model.vocabulary import Fill, Format
from pulsemend.progress import finish
from pulsemend.readers.opening import open_recording
from support.small_lantern import Study


@pytest.fixture(scope="module")
def learned(study: Study) -> Learned:
    recording = open_recording(study.recording)
    try:
        return finish(learn(recording, read_plan(study.plan).plan, NO_MARKS))
    finally:
        recording.close()


def in_formats(learned: Learned, *formats: Format) -> Learned:
    plan = learned.plan
    return replace(learned, plan=replace(plan, export=replace(plan.export, formats=formats)))


def test_files_shape_and_sizes_are_those_of_the_set(study: Study, learned: Learned, tmp_path: Path) -> None:
    before = look_ahead(learned, tmp_path / "sets")
    assert before.refusals == ()
    assert not before.exists
    folder = finish(mend(Request(study.recording, study.plan), tmp_path / "sets")).folder
    assert before.folder == folder
    found = {path.name: path.stat().st_size for path in folder.iterdir()}
    assert {name for name, _ in before.files} == set(found)
    large = {name: size for name, size in before.files if size is not None}
    assert len(large) == 2
    for name, size in large.items():
        # Estimates from above; a small set is half headers.
        assert 0.5 * found[name] < size
    assert sum(found.values()) <= before.needed_bytes
    assert before.shape[0] == len(learned.decision.kept)
    after = look_ahead(learned, tmp_path / "sets")
    assert after.exists
    assert after.refusals == ()


def test_nothing_is_written_and_nothing_made(learned: Learned, tmp_path: Path) -> None:
    look_ahead(learned, tmp_path / "not" / "there")
    assert list(tmp_path.iterdir()) == []


def test_only_chosen_formats_are_among_the_files(learned: Learned, tmp_path: Path) -> None:
    outlook = look_ahead(in_formats(learned, Format.HDF5), tmp_path)
    assert [one.chosen for one in outlook.formats] == [True, False]
    assert not any(name.endswith(".fif") for name, _ in outlook.files)
    assert outlook.formats[1].size_bytes > 0


def test_what_a_format_cannot_hold_is_refused_where_it_is_chosen(
    learned: Learned, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(set_writer, "LARGEST_BYTES", 1000)
    both = look_ahead(learned, tmp_path)
    assert "FIF would take" in both.formats[1].refusal
    assert both.refusals == (both.formats[1].refusal,)
    without = look_ahead(in_formats(learned, Format.HDF5), tmp_path)
    assert without.formats[1].refusal == both.formats[1].refusal
    assert without.refusals == ()


def test_open_gaps_are_refused_in_fif(learned: Learned, tmp_path: Path) -> None:
    plan = learned.plan
    leave = replace(learned, plan=replace(plan, pulses=replace(plan.pulses, fill=Fill.LEAVE)))
    (refusal,) = look_ahead(leave, tmp_path).refusals
    assert "FIF cannot hold" in refusal


def test_a_place_that_cannot_take_a_set(learned: Learned, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    assert "no folder" in look_ahead(learned, tmp_path / "file" / "sets").refusals[0]
    stranger = look_ahead(learned, tmp_path).folder
    stranger.mkdir()
    (stranger / "notes.txt").write_text("mine")
    outlook = look_ahead(learned, tmp_path)
    assert outlook.exists
    assert "notes.txt" in outlook.refusals[0]


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root may write everywhere")
def test_a_place_without_permission(learned: Learned, tmp_path: Path) -> None:
    tmp_path.chmod(0o500)
    assert "nothing may be written" in look_ahead(learned, tmp_path).refusals[0]
    tmp_path.chmod(0o700)


def test_a_full_disk_is_said_beforehand(
    learned: Learned, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    usage = type("Usage", (), {"free": 1000})
    monkeypatch.setattr("shutil.disk_usage", lambda _place: usage)
    outlook = look_ahead(learned, tmp_path)
    assert outlook.free_bytes == 1000
    assert "are free" in outlook.refusals[0]


def test_nothing_kept_is_said_with_the_commonest_reason(learned: Learned, tmp_path: Path) -> None:
    decision = learned.decision
    left_out = tuple(row for row in decision.ledger if not row.kept)
    nothing = replace(learned, decision=replace(decision, kept=(), ledger=left_out))
    (refusal,) = look_ahead(nothing, tmp_path).refusals
    assert "is kept" in refusal
    assert str(left_out[0].fate) in refusal
    no_trial = replace(learned, decision=replace(decision, kept=(), ledger=(), trials=Trials(())))
    assert look_ahead(no_trial, tmp_path).refusals == ("No trial was found, so there is no epoch to write.",)


def test_unknown_pulses_in_the_signal_are_refused_as_the_command_does(
    learned: Learned, tmp_path: Path
) -> None:
    unmarked = replace(learned, estimates=replace(learned.estimates, unmarked=(12_345,)))
    (refusal,) = look_ahead(unmarked, tmp_path).refusals
    assert "no pulse is known" in refusal
