"""The sample's plan on the recording that comes with the program: what its labels and its log say."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from pulsemend.mending.mend import mend
from pulsemend.mending.prepare import Request
from pulsemend.progress import finish
from pulsemend.resources import sample_folder
from pulsemend.simulate.lantern import make_lantern
from pulsemend.simulate.ready import READY
from pulsemend.simulate.truth import LOG_DRIFT
from support.small_lantern import SetOnDisk


@pytest.fixture(scope="module")
def written(tmp_path_factory: pytest.TempPathFactory) -> SetOnDisk:
    folder = sample_folder()
    request = Request(folder / f"{READY.stem}_eeg.vhdr", folder / "lantern.toml")
    return SetOnDisk(finish(mend(request, tmp_path_factory.mktemp("sets"))).folder)


def test_both_delays_pool_into_the_same_columns(written: SetOnDisk) -> None:
    epochs = written.table("epochs.tsv")
    questions = {(one.trial, one.number): one for one in make_lantern(READY).schedule.questions}
    orders = {
        "baseline": "before",
        "delay1": "first",
        "after1": "first",
        "delay2": "second",
        "after2": "second",
    }
    for place, (name, trial) in enumerate(zip(epochs["name"], map(int, epochs["trial"]), strict=True)):
        first, second = questions[trial, 1], questions[trial, 2]
        own = second if orders[name] == "second" else first
        assert epochs["order"][place] == orders[name]
        assert epochs["cued"][place] == own.asked
        assert {epochs["cued"][place], epochs["uncued"][place]} == {"left", "right"}
        assert epochs["second"][place] == ("stay" if first.asked == second.asked else "switch")
        for number, question in ((1, first), (2, second)):
            correct = "yes" if question.answer == question.probe else "no"
            assert epochs[f"log.cue{number}.correct"][place] == correct
    assert set(epochs["name"]) == set(orders)


def test_its_log_is_joined_and_its_stimulation_told(written: SetOnDisk) -> None:
    provenance = json.loads(written.path("provenance.json").read_text(encoding="utf-8"))
    log = provenance["log"]
    assert log["joined"] == 2 * READY.trials
    assert abs(log["clock"]["drift"] - (1 / (1 + LOG_DRIFT) - 1)) < 3 * log["clock"]["drift_se"]
    assert provenance["stimulation"]["condition"] == "active"
    assert set(written.table("epochs.tsv")["stimulation.intensity"]) == {"55"}
    assert provenance["later_labels"]["cued"] == ["baseline"]


def test_nothing_about_it_is_a_warning_but_how_the_log_was_read(written: SetOnDisk) -> None:
    provenance = json.loads(written.path("provenance.json").read_text(encoding="utf-8"))
    assert all(warning.startswith(f"{READY.stem}_log.tsv: ") for warning in provenance["warnings"])
    assert Path(sample_folder() / f"{READY.stem}_log.tsv").is_file()
