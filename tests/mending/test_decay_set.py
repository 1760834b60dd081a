"""Decays through the whole job: what is written, what says so beside it, and what `check` finds."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import h5py
import numpy as np
import pytest

from pulsemend.engine.estimates import Estimates
from pulsemend.export.checksums import checksums_text, file_sha256
from pulsemend.export.read_set import check_set
from pulsemend.mending.draft import write_draft
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.vocabulary import Decay
from pulsemend.progress import finish
from pulsemend.units import uv_to_v
from support.small_lantern import PLAN, SetOnDisk, Study, changed, run_mend

WITH_DECAY = changed(PLAN, ('fill = "line"\n', 'fill = "line"\ndecay = "power"\ndecay_ms = 120.0\n'))


@pytest.fixture(scope="module")
def written(study: Study, tmp_path_factory: pytest.TempPathFactory) -> SetOnDisk:
    return SetOnDisk(run_mend(study.recording, WITH_DECAY, tmp_path_factory.mktemp("decay")).folder)


@pytest.fixture(scope="module")
def plain(study: Study, tmp_path_factory: pytest.TempPathFactory) -> SetOnDisk:
    return SetOnDisk(run_mend(study.recording, PLAN, tmp_path_factory.mktemp("plain")).folder)


def test_the_set_says_where_a_response_is_altered(written: SetOnDisk) -> None:
    marked = written.hdf5("decay_fitted")
    data = written.hdf5("data")
    assert marked.dtype == np.bool_
    assert marked.shape == data.shape
    names = written.hdf5("labels/name")
    # A delay in which no pulse is given ends before any: nothing in it is touched.
    assert not marked[names == "delay1"].any()
    assert marked[names == "after2"].any()
    assert not (marked & written.hdf5("replaced")).all(axis=(1, 2)).any()
    shares = written.table("epochs.tsv")["decay_share"]
    np.testing.assert_allclose(np.array(shares, float), marked.mean(axis=(1, 2)), atol=1e-9)
    assert [row["decay_share"] for row in written.metadata()] == pytest.approx([float(s) for s in shares])


def test_after_a_pulse_the_marks_begin_where_the_gap_ends(written: SetOnDisk) -> None:
    marked, replaced = written.hdf5("decay_fitted"), written.hdf5("replaced")
    after = written.hdf5("labels/name") == "after2"
    seen = 0
    for epoch, gaps in zip(marked[after], replaced[after], strict=True):
        for flags, gap in zip(epoch, gaps, strict=True):
            if flags.any():
                seen += 1
                first = int(np.argmax(flags))
                # An output sample can be both: half an output period reaches into the gap and behind it.
                assert gap[first - 1]
                assert first > 100
    assert seen


def test_provenance_names_channels_shapes_and_shares(written: SetOnDisk, study: Study) -> None:
    provenance = json.loads(written.path("provenance.json").read_text())
    names = [step["name"] for step in provenance["steps"]]
    assert names.index("decay") < names.index("fill")
    step = provenance["steps"][names.index("decay")]["parameters"]
    assert step["kind"] == "power"
    fitted = {one["channel"]: one for one in step["fitted"]}
    assert fitted
    assert set(fitted) | set(step["not_fitted"]) == set(study.lantern.spec.channels)
    assert all(abs(one["at_the_gaps_end_uv"]) >= 20.0 for one in fitted.values())
    assert all(len(one["recovered_share"]) == 10 for one in fitted.values())
    assert provenance["set"]["decay_fitted"] is True
    estimates = Estimates.load(written.path("estimates.h5"))
    assert estimates.decay is not None
    assert estimates.decay.kind is Decay.POWER
    assert estimates.decay.columns.size == len(fitted)


def test_the_largest_decay_is_the_simulated_one(written: SetOnDisk, study: Study) -> None:
    """Known truth: height and time constant that the sample was made with, at the end of the gap of 14 ms."""
    estimates = Estimates.load(written.path("estimates.h5"))
    assert estimates.decay is not None
    true = study.lantern.artifacts
    at_end = true.decay_v * (1.0 + 0.0142 / true.decay_tau_s) ** -2
    largest = int(np.argmax(np.abs(at_end)))
    row = estimates.decay.columns.tolist().index(largest)
    found = float(estimates.decay.shape(row).at(np.zeros(1))[0])
    assert found == pytest.approx(at_end[largest], rel=0.3)
    assert abs(at_end[largest]) > uv_to_v(20.0)


def test_less_is_left_behind_the_pulse(written: SetOnDisk, plain: SetOnDisk) -> None:
    fitted = {
        one["channel"]
        for step in json.loads(written.path("provenance.json").read_text())["steps"]
        if step["name"] == "decay"
        for one in step["parameters"]["fitted"]
    }
    channels = [name in fitted for name in written.hdf5("channels/name").tolist()]
    after = written.hdf5("labels/name") == "after2"
    behind = slice(120, 180)
    without, with_fit = (
        np.sqrt(np.mean(one.hdf5("data")[after][:, channels, behind] ** 2)) for one in (plain, written)
    )
    assert with_fit < 0.7 * without


def test_without_decay_the_set_is_as_it_was(plain: SetOnDisk) -> None:
    """No dataset, no column, no key beyond those of the contract, and a hash over the same stream as ever."""
    with h5py.File(plain.path("epochs.h5")) as file:
        assert "decay_fitted" not in file
    assert "decay_share" not in plain.table("epochs.tsv")
    assert "decay_share" not in plain.metadata()[0]
    provenance = json.loads(plain.path("provenance.json").read_text())
    assert "decay" not in [step["name"] for step in provenance["steps"]]
    assert provenance["set"]["decay_fitted"] is False
    result = finish(check_set(plain.folder))
    assert result.ok
    assert "decay_fitted" not in [item.id for item in result.items]


def _tampered(written: SetOnDisk, folder: Path, edit: str) -> set[str]:
    copy = Path(shutil.copytree(written.folder, folder / written.folder.name))
    prefix = copy / copy.name
    with h5py.File(f"{prefix}_epochs.h5", "r+") as file:
        if edit == "flip":
            file["decay_fitted"][0, 0, 0] = not file["decay_fitted"][0, 0, 0]
        elif edit == "remove":
            del file["decay_fitted"]
    if edit == "table":
        table = Path(f"{prefix}_epochs.tsv")
        lines = [line.split("\t") for line in table.read_text().splitlines()]
        lines[1][lines[0].index("decay_share")] = "0.5"
        table.write_bytes("".join("\t".join(line) + "\n" for line in lines).encode())
    sums = Path(f"{prefix}_checksums.sha256")
    sums.unlink()
    sums.write_bytes(checksums_text({file.name: file_sha256(file) for file in copy.iterdir()}))
    items = finish(check_set(copy)).items
    return {item.id for item in items if not item.passed and item.kind == "integrity"}


def test_check_finds_edits_of_the_marks(written: SetOnDisk, tmp_path: Path) -> None:
    assert _tampered(written, tmp_path / "a", "flip") == {"content", "decay_fitted"}
    assert _tampered(written, tmp_path / "b", "remove") >= {"content", "decay_fitted"}
    assert _tampered(written, tmp_path / "c", "table") == {"decay_fitted"}


def test_a_draft_offers_the_decay_and_decides_nothing(study: Study, tmp_path: Path) -> None:
    text = finish(write_draft(study.recording, tmp_path / "plan.toml")).read_text()
    (line,) = (line for line in text.splitlines() if line.startswith("decay ="))
    assert line.startswith('decay = "none"')
    assert "exponential" in line
    assert any(one.startswith("decay_ms = 80.0") for one in text.splitlines())
    assert parse_plan(text, "draft").plan.pulses.decay is Decay.NONE
