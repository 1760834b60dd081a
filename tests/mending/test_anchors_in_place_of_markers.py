"""Anchors in place of absent pulses, and of markers whose stimulus came later: through all of `mend`."""

from __future__ import annotations

import json
from collections import Counter
from pathlib import Path

import pytest

from pulsemend.errors import InputError
from pulsemend.mending.facts import write_events
from pulsemend.model.vocabulary import Fate
from pulsemend.simulate.schedule import Fault, FaultKind
from support.lantern_log import (
    N_TRIALS,
    ONSET,
    PLAN,
    RATE_HZ,
    SHIFT_S,
    SIGNAL_FILLS,
    UNMARKED,
    VISUAL,
    adds_up,
    dry,
    facts_of,
    markers_of,
    moment,
    photodiode,
    sample_of,
    without,
    write,
)
from support.small_lantern import SetOnDisk, changed, run_mend


@pytest.fixture(scope="module")
def recording(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write(tmp_path_factory.mktemp("recorded"))


# Anchors where there is no pulse

SHAM = (2, 7, 11)
SHAM_FAULTS = tuple(Fault(FaultKind.UNFIRED, trial, "pulse2") for trial in SHAM)
AROUND = """\
[[epochs.rule]]
name = "around2"
anchor = "pulse2"
start_s = -0.5
pulse = "accept filled"
"""


def sham(folder: Path) -> Path:
    """Trials whose second pulse was neither given nor marked."""
    samples = [sample_of(trial, "pulse2") for trial in SHAM]
    return write(folder, without(markers_of(), *samples), faults=SHAM_FAULTS)


def standing_in(how: str) -> str:
    slot = 'slot = "pulse2"\nrole = "pulse"'
    return changed(
        PLAN, (slot, f"{slot}\n{how}"), ("[epochs]\nlength_s = 1.0\n", f"[epochs]\nlength_s = 1.0\n{AROUND}")
    )


def test_a_fixed_stand_in_is_an_anchor_without_a_gap(tmp_path: Path) -> None:
    plan = standing_in('stand_in = "fixed"\nstand_in_s = 2.0')
    written = SetOnDisk(run_mend(sham(tmp_path / "in"), plan, tmp_path / "study").folder)
    epochs = written.table("epochs.tsv")
    rows = [place for place, name in enumerate(epochs["name"]) if name == "around2"]
    assert len(rows) == N_TRIALS
    replaced = written.hdf5("replaced")
    for place in rows:
        trial = int(epochs["trial"][place])
        source = epochs["pulse2.source"][place]
        assert source == ("stand-in" if trial in SHAM else "marker")
        assert replaced[place].any() == (trial not in SHAM)
        if trial in SHAM:
            onset_s = sample_of(trial, "cue2") / RATE_HZ + 2.0
            assert float(epochs["onset_s"][place]) == pytest.approx(onset_s, abs=1e-9)
    assert len(written.table("pulses.tsv")["state"]) == 2 * N_TRIALS - len(SHAM)


def test_a_drawn_stand_in_is_a_latency_of_the_other_trials(tmp_path: Path) -> None:
    recording = sham(tmp_path / "in")
    latencies = {
        sample_of(n, "pulse2") - sample_of(n, "cue2") for n in range(1, N_TRIALS + 1) if n not in SHAM
    }
    drawn = {}
    for seed in (1, 2, 3):
        plan = standing_in(f'stand_in = "drawn"\nstand_in_seed = {seed}')
        prepared = dry(recording, plan, tmp_path / "study")
        adds_up(prepared)
        at = {trial.number: trial.stand_ins["pulse2"] for trial in prepared.trials.trials if trial.stand_ins}
        assert tuple(at) == SHAM
        assert all(at[trial] - sample_of(trial, "cue2") in latencies for trial in SHAM)
        assert dry(recording, plan, tmp_path / "study").trials == prepared.trials
        drawn[seed] = tuple(at.values())
    assert len(set(drawn.values())) > 1


def test_without_a_stand_in_these_trials_have_no_anchor(tmp_path: Path) -> None:
    prepared = dry(sham(tmp_path / "in"), standing_in(""), tmp_path / "study")
    adds_up(prepared)
    left_out = {(one.trial, one.fate) for one in prepared.ledger if not one.kept}
    assert left_out == {(trial, Fate.NO_ANCHOR) for trial in SHAM}
    assert "pulse2.source" not in prepared.kept[0].labels


# Pulses whose marker was lost


def test_a_lost_pulse_marker_is_made_up_for_by_the_signal(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", faults=(UNMARKED,))
    plan = changed(standing_in(""), ('slot = "pulse2"\nrole = "pulse"', SIGNAL_FILLS))
    written = SetOnDisk(run_mend(recording, plan, tmp_path / "study").folder)
    pulses = written.table("pulses.tsv")
    assert Counter(pulses["state"]) == {
        "marked and in the signal": 2 * N_TRIALS - 1,
        "found in the signal, no marker": 1,
    }
    (row,) = (place for place, state in enumerate(pulses["state"]) if state.startswith("found"))
    true_s = moment(5, "pulse2", UNMARKED).time_s
    onset_s = int(pulses["sample"][row]) / RATE_HZ
    assert 0.0 <= onset_s - true_s < 0.002  # the simulated amplifier's delay
    epochs = written.table("epochs.tsv")
    sources = {
        int(trial): source
        for trial, name, source in zip(
            *(epochs[one] for one in ("trial", "name", "pulse2.source")), strict=True
        )
        if name == "around2"
    }
    assert sources == {
        trial: "found in the signal" if trial == 5 else "marker" for trial in range(1, N_TRIALS + 1)
    }
    place = next(
        at for at, (trial, name) in enumerate(zip(epochs["trial"], epochs["name"], strict=True))
        if (trial, name) == ("5", "around2")
    )  # fmt: skip
    assert float(epochs["onset_s"][place]) == onset_s
    # Its gap is where it was found: 500 ms after the start of this epoch, which has 250 samples a second.
    assert written.hdf5("replaced")[place, 0, 125]
    assert not written.hdf5("replaced")[place, 0, :124].any()


def test_where_the_plan_does_not_allow_it_a_pulse_without_marker_stays_unknown(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", faults=(UNMARKED,))
    prepared = dry(recording, standing_in(""), tmp_path / "study")
    assert len(prepared.estimates.pulses) == 2 * N_TRIALS - 1
    left_out = [(one.trial, one.rule, one.fate) for one in prepared.ledger if not one.kept]
    assert left_out == [(5, "around2", Fate.NO_ANCHOR)]


# A photodiode


def test_visual_markers_move_to_the_onset_that_a_photodiode_shows(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", extra=photodiode())
    plan = changed(PLAN, ("[pulses]", ONSET))
    prepared = dry(recording, plan, tmp_path / "study")
    adds_up(prepared)
    shift = SHIFT_S * RATE_HZ
    for trial in prepared.trials.trials:
        for slot in ("sample", "cue1", "cue2"):
            assert trial.markers[slot].sample == pytest.approx(sample_of(trial.number, slot) + shift, abs=1.0)
        for slot in ("pulse1", "pulse2"):
            assert trial.markers[slot].sample == sample_of(trial.number, slot)
    moved = [one for one in prepared.warnings if "markers are moved" in one]
    assert len(moved) == len(VISUAL)
    assert all("Photo shows the onset of" in one and "+32.0 ms" in one for one in moved)
    # Epochs start where the stimulus did; the channel itself is no part of the set.
    written = SetOnDisk(run_mend(recording, plan, tmp_path / "whole").folder)
    epochs = written.table("epochs.tsv")
    for trial, anchor, onset_s in zip(*(epochs[one] for one in ("trial", "anchor", "onset_s")), strict=True):
        expected_s = sample_of(int(trial), anchor) / RATE_HZ + SHIFT_S
        assert float(onset_s) == pytest.approx(expected_s, abs=0.5 / RATE_HZ + 1e-6)
    assert "Photo" not in written.hdf5("channels/name").tolist()
    provenance = json.loads(written.path("provenance.json").read_text(encoding="utf-8"))
    assert [one["is_used"] for one in provenance["stimulus_onsets"]] == [True] * len(VISUAL)
    assert "log" in provenance
    assert provenance["log"]["joined"] == 2 * N_TRIALS


def test_the_table_of_events_has_the_moved_markers(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", extra=photodiode())
    summary = facts_of(recording, changed(PLAN, ("[pulses]", ONSET)), tmp_path / "study")
    write_events(summary, tmp_path / "events.tsv")
    lines = [line.split("\t") for line in (tmp_path / "events.tsv").read_text(encoding="utf-8").splitlines()]
    rows = [dict(zip(lines[0], line, strict=True)) for line in lines[1:]]
    assert len(rows) == len(markers_of())
    in_trials = [row for row in rows if row["trial"] != "n/a"]
    assert len(in_trials) == 5 * N_TRIALS
    for row in in_trials:
        shift_s = SHIFT_S if row["code"] in VISUAL else 0.0
        marked_s = sample_of(int(row["trial"]), row["slot"]) / RATE_HZ
        assert float(row["onset"]) == pytest.approx(marked_s + shift_s, abs=0.5 / RATE_HZ + 1e-6)
        assert row["state"] == "complete"


def test_a_channel_that_is_not_there_is_one_clear_line(recording: Path, tmp_path: Path) -> None:
    with pytest.raises(InputError, match='no channel "Photo" to measure onsets in'):
        dry(recording, changed(PLAN, ("[pulses]", ONSET)), tmp_path)


def test_what_a_person_calls_no_pulse_is_not_found_again(tmp_path: Path) -> None:
    """Neither at a marker nor where the signal alone showed one."""
    recording = write(tmp_path / "in", faults=(UNMARKED,))
    plan = changed(PLAN, ('slot = "pulse2"\nrole = "pulse"', SIGNAL_FILLS))
    open_ = dry(recording, plan, tmp_path / "study")
    (found,) = (pulse.sample for pulse in open_.estimates.pulses if pulse.marked is None)
    marked = sample_of(2, "pulse1")
    marks = f"[pulses]\nremoved = [{marked}, {found}]\n"
    decided = dry(recording, plan, tmp_path / "study", marks)
    assert len(decided.estimates.pulses) == 2 * N_TRIALS - 2
    assert all(
        abs(pulse.sample - gone) > 100 for pulse in decided.estimates.pulses for gone in (marked, found)
    )
