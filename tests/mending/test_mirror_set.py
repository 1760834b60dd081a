"""Mirror gaps through the whole job: what is written, what stays as it was, and what cancels."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pulsemend.export.read_set import check_set
from pulsemend.mending.prepare import lay_geometry
from pulsemend.model.epochs import Candidate
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import EpochRule, Epochs, Filter, Pulses
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fate, Fill, PulseRule
from pulsemend.progress import finish
from pulsemend.trials.mirrors import mirror_gaps
from support.engine_cases import ArrayRecording, coloured, make_chain
from support.engine_cases import plan as engine_plan
from support.small_lantern import PLAN, SetOnDisk, Study, changed, run_mend

TWIN = '[[epochs.rule]]\nname = "twin"\nanchor = "cue1"\nstart_s = 0.6\n'
"""Epochs of another rule in the same stretches, which are not to see a mirror gap."""

WITHOUT = changed(PLAN, ('[[epochs.rule]]\nname = "delay1"', f'{TWIN}[[epochs.rule]]\nname = "delay1"'))
WITH = changed(
    WITHOUT,
    (
        'name = "delay1"\nanchor = "cue1"\nstart_s = 0.5',
        'name = "delay1"\nanchor = "cue1"\nstart_s = 0.5\nmirror_gaps = true',
    ),
)


@pytest.fixture(scope="module")
def plain(study: Study, tmp_path_factory: pytest.TempPathFactory) -> SetOnDisk:
    return SetOnDisk(run_mend(study.recording, WITHOUT, tmp_path_factory.mktemp("plain")).folder)


@pytest.fixture(scope="module")
def mirrored(study: Study, tmp_path_factory: pytest.TempPathFactory) -> SetOnDisk:
    return SetOnDisk(run_mend(study.recording, WITH, tmp_path_factory.mktemp("mirrored")).folder)


def test_mirrored_epochs_hold_as_much_fill_as_those_with_pulses(
    mirrored: SetOnDisk, plain: SetOnDisk
) -> None:
    names = mirrored.hdf5("labels/name")
    replaced = mirrored.hdf5("replaced")
    delay, after = replaced[names == "delay1"], replaced[names == "after2"]
    assert delay.any(axis=(1, 2)).all()
    # Each gap may touch one output sample more or less at either edge; there are two gaps.
    assert np.abs(delay.sum(axis=2)[:, None] - after.sum(axis=2)[None, :]).max() <= 4
    assert not plain.hdf5("replaced")[names == "delay1"].any()
    shares = [float(text) for text in mirrored.table("epochs.tsv")["replaced_share"]]
    np.testing.assert_allclose(shares, replaced.mean(axis=(1, 2)), atol=1e-9)


def test_epochs_of_other_rules_are_what_they_were_to_the_last_bit(
    mirrored: SetOnDisk, plain: SetOnDisk
) -> None:
    names = mirrored.hdf5("labels/name")
    delay = names == "delay1"
    assert (names == "twin").sum() == 3
    for dataset in ("data", "replaced"):
        np.testing.assert_array_equal(mirrored.hdf5(dataset)[~delay], plain.hdf5(dataset)[~delay])
    assert (mirrored.hdf5("data")[delay] != plain.hdf5("data")[delay]).any(axis=(1, 2)).all()
    assert mirrored.path("pulses.tsv").read_bytes() == plain.path("pulses.tsv").read_bytes()


def test_tables_and_provenance_say_where_and_by_which_rule(mirrored: SetOnDisk, plain: SetOnDisk) -> None:
    table = mirrored.table("epochs.tsv")
    assert "mirror_latency_s" not in plain.table("epochs.tsv")
    told = json.loads(mirrored.path("provenance.json").read_text())["mirror_gaps"]
    assert told["epochs_per_rule"] == {"delay1": 3}
    assert "SHA-256" in told["latencies_from"]
    assert json.loads(plain.path("provenance.json").read_text())["mirror_gaps"] is None
    for name, latency, marks in zip(
        table["name"], table["mirror_latency_s"], mirrored.hdf5("replaced"), strict=True
    ):
        if name != "delay1":
            assert latency == "n/a"
            continue
        assert float(latency) == pytest.approx(0.1, abs=2e-4)  # rule after2 begins 100 ms before its pulse
        first = int(np.argmax(marks[0]))
        assert first == pytest.approx((float(latency) - 0.002) * 1000, abs=1.0)


def test_check_sees_a_whole_set_in_which_rules_no_longer_differ(
    mirrored: SetOnDisk, plain: SetOnDisk, study: Study, tmp_path: Path
) -> None:
    two = changed(WITH, (TWIN, ""))
    both = SetOnDisk(run_mend(study.recording, two, tmp_path).folder)
    passed = {}
    for name, one in (("both", both), ("mirrored", mirrored), ("plain", plain)):
        result = finish(check_set(one.folder))
        assert result.ok
        passed[name] = next(item.passed for item in result.items if item.id == "replaced_by_rule")
    assert passed == {"both": True, "mirrored": False, "plain": False}


def test_a_recording_without_pulse_epochs_is_mended_with_a_warning(study: Study, tmp_path: Path) -> None:
    alone = WITH[: WITH.index('[[epochs.rule]]\nname = "after2"')] + (
        '[[epochs.rule]]\nname = "delay1"\nanchor = "cue1"\nstart_s = 0.5\nmirror_gaps = true\n'
    )
    result = run_mend(study.recording, alone, tmp_path)
    (words,) = (one for one in result.prepared.warnings if one.startswith("mirror_gaps"))
    assert "3 epochs of delay1 receive none" in words
    assert not SetOnDisk(result.folder).hdf5("replaced").any()


N_EPOCHS, RATE_HZ, SPACING = 120, 1000, 1500


def test_the_repair_cancels_where_there_is_background_alone() -> None:
    """Markers of pulses that were never given, in noise: gaps and mirror gaps must be alike on average.

    Slow noise and fast noise of 5 uV: the fill takes most of the fast one away, so that without mirror gaps
    the variance in the gap differs by far more than the 10 % that are allowed with them.
    """
    n = 2 * N_EPOCHS * SPACING + 2000
    rng = np.random.default_rng(8)
    stored = coloured(24, n, RATE_HZ, 7) + np.round(rng.normal(0.0, 50.0, (24, n)))
    anchors = 1000 + SPACING * np.arange(2 * N_EPOCHS)
    pulsed = anchors[::2]
    onsets = pulsed + rng.integers(150, 450, N_EPOCHS)
    recording = ArrayRecording(stored, RATE_HZ, tuple(Marker(float(at), "pulse") for at in onsets))
    rules = (
        EpochRule("pulsed", "cue1", 0.0, pulse=PulseRule.ACCEPT_FILLED),
        EpochRule("free", "cue1", 0.0, mirror_gaps=True),
    )
    the_plan = replace(
        engine_plan(
            pulses=Pulses(window_ms=(-2.0, 14.0), fill=Fill.COVARIANCE), filter=replace(Filter(), rate_hz=0.0)
        ),
        epochs=Epochs(0.6, rules),
    )
    chain = make_chain(recording, the_plan)
    kept = [
        Candidate(rules[k % 2].name, k % 2, k // 2 + 1, 1, "cue1", float(at), 0.0, Fate.KEPT)
        for k, at in enumerate(anchors)
    ]
    geometry = lay_geometry(chain.setup, chain.estimates, NO_MARKS)
    mirrors = mirror_gaps(kept, the_plan, geometry)
    assert [mirror is not None for mirror in mirrors] == [False, True] * N_EPOCHS
    gaps: dict[str, list[np.ndarray]] = {"pulsed": [], "mirrored": [], "untouched": []}
    for one, mirror in zip(kept, mirrors, strict=True):
        cut = chain.cut(one.anchor_sample or 0.0, 0.0, 600)
        own = chain.with_gaps_at(mirror.onsets) if mirror else chain
        where = own.replaced(cut)
        assert where.sum() == 24 * 17
        samples = own.samples(cut)[where].reshape(24, 17)
        gaps["mirrored" if mirror else "pulsed"].append(samples)
        if mirror:
            gaps["untouched"].append(chain.samples(cut)[where].reshape(24, 17))
    variance = {name: float(np.var(np.array(of))) for name, of in gaps.items()}
    assert variance["mirrored"] / variance["pulsed"] == pytest.approx(1.0, abs=0.1)
    fast = {name: float(np.var(np.diff(np.array(of), axis=2))) for name, of in gaps.items()}
    assert fast["mirrored"] / fast["pulsed"] == pytest.approx(1.0, abs=0.1)
    assert fast["untouched"] / fast["pulsed"] > 1.5
    means = {name: np.array(of).mean(axis=(1, 2)) for name, of in gaps.items()}
    error = np.sqrt(sum(means[name].var() / N_EPOCHS for name in ("pulsed", "mirrored")))
    assert abs(means["mirrored"].mean() - means["pulsed"].mean()) < 4 * error
