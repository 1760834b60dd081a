"""The examples of the guide run as they are printed, on a set that was really written."""

from __future__ import annotations

import dataclasses
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import pulsemend
from support.written_sets import N_TIMES, RATE_HZ, make_contents, write_set

PAGE = Path(pulsemend.__file__).resolve().parent / "guide" / "sets.md"
EXAMPLES = re.findall(r"```python\n(.*?)```", PAGE.read_text("utf-8"), re.DOTALL)


@pytest.fixture
def here(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Stand in the folder of a set that is called as in the guide."""
    folder = write_set(dataclasses.replace(make_contents(), stem="lt01"), tmp_path)
    assert folder.name == "lt01_desc-mended"
    monkeypatch.chdir(tmp_path)
    return folder


def run(example: str) -> dict[str, Any]:
    names: dict[str, Any] = {}
    # The guide names a rule of the sample's plan; the small set here has another.
    example = example.replace('"delay1"', '"delay"')
    exec(compile(example, str(PAGE), "exec"), names)
    return names


def test_hdf5_example(here: Path) -> None:
    found = run(EXAMPLES[0])
    assert found["data"].shape == (3, 4, N_TIMES)
    assert found["rate_hz"] == RATE_HZ
    assert next(iter(found["channels"])) == "Fz"
    assert found["times_s"][0] == 0.25
    assert found["delay"].shape == (1, 4, N_TIMES)
    assert found["share"] == pytest.approx(5 / (4 * N_TIMES))


@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_fif_example_gives_the_same_epochs(here: Path) -> None:
    by_hdf5, by_fif = run(EXAMPLES[0]), run(EXAMPLES[1])
    assert len(by_fif["delay"]) == 1
    assert np.array_equal(by_fif["delay"].get_data(copy=False), by_hdf5["delay"])


def test_every_file_of_a_set_is_in_the_guide(here: Path) -> None:
    text = PAGE.read_text("utf-8")
    names = {path.name.removeprefix("lt01_desc-mended_") for path in here.iterdir()}
    assert {name for name in names if f"`{name}`" not in text} == set()
