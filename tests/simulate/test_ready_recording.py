"""The small recording that comes with the program, made again."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan_checks import check_against_rate, check_channels, check_plan
from pulsemend.model.plan_file import read_plan
from pulsemend.resources import sample_folder
from pulsemend.simulate.ready import READY, write_ready


@pytest.fixture(scope="module")
def again(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("ready")
    write_ready(folder)
    return folder


def test_same_files(again: Path) -> None:
    names = {str(path.relative_to(again)) for path in again.rglob("*") if path.is_file()}
    assert names == {
        f"{READY.stem}_{ending}" for ending in ("eeg.vhdr", "eeg.vmrk", "eeg.eeg", "log.tsv")
    } | {f"truth/{READY.stem}_truth.{ending}" for ending in ("json", "npz")}
    for name in names:
        if name.endswith((".vhdr", ".vmrk", ".tsv")):
            assert (again / name).read_bytes() == (sample_folder() / name).read_bytes(), name


def test_same_samples(again: Path) -> None:
    made, kept = (
        np.fromfile(folder / f"{READY.stem}_eeg.eeg", "<i2").astype(int)
        for folder in (again, sample_folder())
    )
    # Bit for bit on one machine. Another one's mathematical library may round the last bit of a sine
    # otherwise, which can carry a value over the edge between two steps of the converter, hardly ever.
    assert made.shape == kept.shape
    assert np.abs(made - kept).max() <= 1
    assert np.count_nonzero(made != kept) <= 10


def test_same_truth(again: Path) -> None:
    made, kept = (
        json.loads((folder / "truth" / f"{READY.stem}_truth.json").read_text(encoding="utf-8"))
        for folder in (again, sample_folder())
    )
    assert made == kept


def test_fits_the_plan_and_the_limit_of_its_size() -> None:
    plan = read_plan(sample_folder() / "lantern.toml").plan
    assert check_plan(plan) == ()
    check_against_rate(plan, READY.rate_hz)
    assert check_channels(plan, NO_MARKS, READY.channels) == ()
    assert sum(path.stat().st_size for path in sample_folder().rglob("*")) < 4_000_000
