"""What a plan makes `mend` do or refuse: contract 4.2, on the small recording."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from pulsemend.errors import InputError, NoEpochs, PlanError
from pulsemend.mending.mend import dry_run
from pulsemend.model.vocabulary import Fate, Fill
from pulsemend.progress import finish
from support.small_lantern import PLAN, SetOnDisk, Study, changed, make_request, run_mend
from support.written_recordings import triplet_by_hand

NO_PULSES = changed(
    PLAN,
    ("[pulses]\nwindow_ms = [-2.0, 14.0]\nfill = \"line\"\n[[pulses.also]]\nwindow_ms = [248.0, 254.0]\n"
     "[pulses.channels]\nP3 = [-2.0, 25.0]\n", "[pulses]\ntimes = \"none\"\n"),
)  # fmt: skip


def refused(study: Study, plan: str, folder: Path) -> InputError:
    """What `mend` says to a plan that it refuses; nothing is written then."""
    with pytest.raises(InputError) as caught:
        run_mend(study.recording, plan, folder)
    assert caught.value.exit_code == 3
    assert not (folder / "sets").exists()
    return caught.value


def test_undecided_codes_stop_it_and_are_listed(study: Study, tmp_path: Path) -> None:
    """Also where no other code has the role of a slot, as in a draft."""
    plan = changed(
        PLAN,
        ('[markers."arrow left"]\nrole = "cue"', '[markers."arrow left"]\nrole = "undecided"'),
        ('[markers.pulse]\nrole = "pulse"', '[markers.pulse]\nrole = "undecided"'),
    )
    error = refused(study, plan, tmp_path)
    assert '"arrow left", "pulse"' in str(error)
    assert isinstance(error, PlanError)
    assert error.line == plan.splitlines().index('[markers."arrow left"]') + 2


def test_pulses_that_no_marker_names_stop_it(study: Study, tmp_path: Path) -> None:
    plan = PLAN[: PLAN.index("[markers.pulse]")] + (
        '[[trial]]\nslot = "cue1"\nrole = "cue"\n[pulses]\nwindow_ms = [-2.0, 14.0]\n'
        '[epochs]\nlength_s = 0.5\n[[epochs.rule]]\nname = "delay"\nanchor = "cue1"\nstart_s = 0.0\n'
    )
    message = str(refused(study, plan, tmp_path))
    given = sum(pulse.happened for pulse in study.lantern.schedule.pulses)
    assert f"{given} pulse-like events" in message
    assert 'pulses.times = "none"' in message
    plan = plan.replace("window_ms = [-2.0, 14.0]", 'times = "none"')
    assert run_mend(study.recording, plan, tmp_path).folder.is_dir()


def test_without_pulses_both_rules_hold_and_anchors_are_markers(study: Study, tmp_path: Path) -> None:
    """'"refuse" and "accept filled" both hold because there is no gap'; pulse slots match their markers."""
    plan = changed(NO_PULSES, ("start_s = 0.5", "start_s = 1.0\nclear_ms = [500.0, 500.0]"))
    result = run_mend(study.recording, plan, tmp_path)
    written = SetOnDisk(result.folder)
    assert written.table("epochs.tsv")["name"].count("delay1") == 3
    assert written.table("epochs.tsv")["name"].count("after2") == 2
    assert not written.hdf5("replaced").any()
    assert written.table("pulses.tsv")["sample"] == []
    markers = [marker.sample for marker in study.lantern.markers if marker.code == "pulse"]
    onsets_s = written.hdf5("labels/onset_s")[written.hdf5("labels/name") == "after2"]
    assert set(onsets_s) <= {sample / 5000.0 for sample in markers}


def test_missing_optional_anchor_has_its_fate(study: Study, tmp_path: Path) -> None:
    result = run_mend(study.recording, PLAN, tmp_path)
    ledger = SetOnDisk(result.folder).table("ledger.tsv")
    row = ledger["fate"].index(Fate.NO_ANCHOR.value)
    assert (ledger["trial"][row], ledger["name"][row]) == ("2", "after2")
    assert ledger["detail"][row] == "no pulse2 in this trial"


def test_missing_required_slot_leaves_out_the_whole_trial(study: Study, tmp_path: Path) -> None:
    head, _, tail = PLAN.rpartition("optional = true\n")
    result = run_mend(study.recording, head + tail, tmp_path)
    ledger = SetOnDisk(result.folder).table("ledger.tsv")
    second = [fate for trial, fate in zip(ledger["trial"], ledger["fate"], strict=True) if trial == "2"]
    assert second == [Fate.TRIAL_INCOMPLETE.value] * 2


@pytest.mark.parametrize(
    ("old", "new", "key", "named"),
    [
        ("length_s = 1.0", "length_s = 1.0004", "epochs.length_s", ("1", "1.001")),
        ("start_s = 0.5", "start_s = 0.4996", "epochs.rule[2].start_s", ("0.499", "0.5")),
        ("start_s = -0.1", "start_s = -0.1006", "epochs.rule[1].start_s", ("-0.101", "-0.1")),
    ],
)
def test_what_is_no_whole_sample_is_refused_with_its_neighbours(
    old: str, new: str, key: str, named: tuple[str, str], study: Study, tmp_path: Path
) -> None:
    error = refused(study, changed(PLAN, (old, new)), tmp_path)
    assert isinstance(error, PlanError)
    assert error.key == key
    assert {word.strip(",") for word in error.allowed.split()} >= set(named)


@pytest.mark.parametrize("rate", ["0", "5000"])
def test_whole_samples_count_at_the_recorded_rate_too(rate: str, study: Study, tmp_path: Path) -> None:
    plan = changed(PLAN, ("[epochs]", f"[filter]\nrate_hz = {rate}\n[epochs]"))
    error = refused(study, changed(plan, ("length_s = 1.0", "length_s = 1.00015")), tmp_path)
    assert {"1.0", "1.0002"} & {word.strip(",") for word in error.what.replace(";", " ").split()}
    assert run_mend(study.recording, changed(plan, ("length_s = 1.0", "length_s = 1.0002")), tmp_path)


@pytest.mark.parametrize(
    ("keys", "key"),
    [
        ("rate_hz = 10000", "filter.rate_hz"),
        ("rate_hz = 200\nlowpass_hz = 81", "filter.lowpass_hz"),
        ("rate_hz = 0\nlowpass_hz = 2499", "filter.lowpass_hz"),
    ],
)
def test_filters_that_do_not_fit_the_rate_are_refused(
    keys: str, key: str, study: Study, tmp_path: Path
) -> None:
    error = refused(study, changed(PLAN, ("[epochs]", f"[filter]\n{keys}\n[epochs]")), tmp_path)
    assert isinstance(error, PlanError)
    assert error.key == key


def test_no_lowpass_at_a_reduced_rate_means_two_fifths_of_it(study: Study, tmp_path: Path) -> None:
    plan = changed(PLAN, ("[epochs]", "[filter]\nrate_hz = 500\nlowpass_hz = 0\n[epochs]"))
    result = run_mend(study.recording, plan, tmp_path)
    provenance = json.loads(SetOnDisk(result.folder).path("provenance.json").read_text())
    (lowpass,) = [step for step in provenance["steps"] if step["name"] == "low-pass"]
    assert lowpass["parameters"]["cutoff_hz"] == 200.0


@pytest.mark.parametrize(
    ("keys", "where"),
    [
        ('decay = "sudden"', "pulses.decay"),
        ('times = "guess"', "pulses.times"),
        ("windows_ms = [1, 2]", "pulses.windows_ms"),
    ],
)
def test_unknown_words_and_keys_are_refused_by_path(
    keys: str, where: str, study: Study, tmp_path: Path
) -> None:
    error = refused(study, changed(PLAN, ('fill = "line"', f'fill = "line"\n{keys}')), tmp_path)
    assert isinstance(error, PlanError)
    assert error.key == where
    assert error.line == PLAN.splitlines().index('fill = "line"') + 2


def test_window_is_needed_where_there_are_pulses(study: Study, tmp_path: Path) -> None:
    error = refused(study, changed(PLAN, ("window_ms = [-2.0, 14.0]\n", "")), tmp_path)
    assert isinstance(error, PlanError)
    assert error.key == "pulses.window_ms"


def test_no_epoch_kept_writes_nothing_and_names_the_commonest_reason(study: Study, tmp_path: Path) -> None:
    plan = changed(PLAN, ("start_s = 0.5", "start_s = 1.7"), ("start_s = -0.1\npulse = \"accept filled\"",
                                                             "start_s = -0.1"))  # fmt: skip
    error = refused(study, plan, tmp_path)
    assert isinstance(error, NoEpochs)
    assert Fate.TOUCHES_GAP.value in str(error)


def test_unnamed_and_absent_codes_are_warnings_listed_once(study: Study, tmp_path: Path) -> None:
    plan = changed(PLAN, ("[markers.pulse]", '[markers."never sent"]\nrole = "probe"\n[markers.pulse]'))
    prepared = finish(dry_run(make_request(study.recording, plan, tmp_path)))
    codes = [marker.code for marker in study.lantern.markers]
    unnamed = [text for text in prepared.warnings if "does not name" in text]
    assert len(unnamed) == 1
    assert f"dot ({codes.count('dot')})" in unnamed[0]
    assert next(text for text in prepared.warnings if "lacks" in text).endswith("never sent")


@pytest.mark.parametrize(("clear_ms", "kept"), [(12, 2), (16, 0)])
def test_clear_span_is_kept_free_after_gaps(clear_ms: int, kept: int, study: Study, tmp_path: Path) -> None:
    """The epoch begins 40 ms after the onset, less half an output sample; the gap of P3 ends after 25 ms."""
    plan = changed(
        PLAN,
        ('start_s = -0.1\npulse = "accept filled"', f"start_s = 0.04\nclear_ms = [0, {clear_ms}]"),
        ("[[pulses.also]]\nwindow_ms = [248.0, 254.0]\n", ""),
    )
    result = run_mend(study.recording, plan, tmp_path)
    assert SetOnDisk(result.folder).table("epochs.tsv")["name"].count("after2") == kept


@pytest.mark.parametrize("fill", list(Fill))
def test_recording_without_any_pulse_goes_through_a_plan_with_pulses(fill: Fill, tmp_path: Path) -> None:
    """A session without stimulation, mended like the others: nothing to learn, nothing to fill."""
    slow = (4000 * np.sin(np.arange(4000) / 90.0)[None] * [[1.0], [0.5], [-1.0], [0.2]]).astype(np.int16)
    recording = triplet_by_hand(tmp_path, slow, "INT_16", events=[(1500, "Stimulus", "cue")])
    plan = (
        'pulsemend = 1\n[markers.cue]\nrole = "cue"\n[markers.pulse]\nrole = "pulse"\n'
        '[[trial]]\nslot = "cue"\nrole = "cue"\n'
        f'[pulses]\nwindow_ms = [-2.0, 14.0]\nfill = "{fill}"\n'
        "[filter]\nrate_hz = 250\nlowpass_hz = 40\n"
        '[epochs]\nlength_s = 1.0\n[[epochs.rule]]\nname = "delay"\nanchor = "cue"\nstart_s = 0.0\n'
        '[export]\nformats = ["hdf5"]\n'
    )
    written = SetOnDisk(run_mend(recording, plan, tmp_path).folder)
    assert written.hdf5("data").shape == (1, 4, 250)
    assert np.isfinite(written.hdf5("data")).all()
    assert not written.hdf5("replaced").any()
