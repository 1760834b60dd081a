"""Bad channels in the chain: found, left out of the reference, rebuilt; truth and the reader library."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import signal

from pulsemend.engine.bad_channels import channel_notes, evidence, found_bad, rebuilding
from pulsemend.engine.chain import Chain
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import basis_of, fit
from pulsemend.engine.setup import Setup, bind
from pulsemend.mending.prepare import with_positions
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.plan import Channels, Filter, Plan, Pulses
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import ChannelType, Fill
from pulsemend.progress import finish
from pulsemend.simulate.head import CAP
from pulsemend.simulate.memory import MemoryForm, MemoryRecording
from support.engine_cases import NO_PULSES, UNTOUCHED, plan
from support.faulty_channels import BROKEN, RATE_HZ, broken, clean

WINDOW_MS = (-2.0, 14.0)
FOUND: dict[str, Any] = {"find_bad": True, "rebuild_bad": True}


def learned(
    volts: NDArray[np.float64],
    the_plan: Plan,
    marks: Marks = NO_MARKS,
    types: dict[str, ChannelType] | None = None,
    pulses: tuple[int, ...] = (),
) -> tuple[MemoryRecording, Setup, Estimates]:
    markers = tuple(Marker(float(at), "pulse") for at in pulses)
    form = MemoryForm(RATE_HZ, CAP, types or {}, markers=markers)
    recording = MemoryRecording(volts, form)
    setup = bind(with_positions(recording.facts), the_plan, marks)
    return recording, setup, finish(fit(recording, setup))


def names(chosen: NDArray[np.bool_]) -> set[str]:
    return {CAP[place] for place in np.flatnonzero(chosen)}


@pytest.fixture(scope="module")
def faulty() -> NDArray[np.float64]:
    return broken(clean(1), CAP, 1)


def test_faults_are_found_and_the_marks_win(faulty: NDArray[np.float64]) -> None:
    the_plan = plan(pulses=NO_PULSES, line_hz=50.0, bad=("Fp1", "Fp2"), **FOUND)
    marks = Marks(good=("T8", "Fp2"))
    _, setup, estimates = learned(faulty, the_plan, marks)
    assert names(setup.bad) == {"Fp1"}
    assert names(found_bad(setup, estimates.channels)) == set(BROKEN) - {"T8"}
    assert evidence(estimates.channels, CAP.index("T8"))[0].startswith("loud or dead: below 5% of the usual")
    assert evidence(estimates.channels, CAP.index("P3"))[0].endswith("limit 6 (in 29 of 30 windows)")
    assert not evidence(estimates.channels, CAP.index("Pz"))
    bridged = [note for note in channel_notes(setup, estimates.channels) if "record the same" in note]
    assert len(bridged) == 1
    assert {"C1", "C3"} <= set(bridged[0].split())


def test_toggling_good_needs_no_new_fit(faulty: NDArray[np.float64]) -> None:
    the_plan = plan(pulses=NO_PULSES, **FOUND)
    facts = with_positions(MemoryRecording(faulty, MemoryForm(RATE_HZ, CAP)).facts)
    first, second = (basis_of(bind(facts, the_plan, Marks(good=good))) for good in ((), ("T8",)))
    assert first == second


def test_eyes_and_muscles_are_not_judged(faulty: NDArray[np.float64]) -> None:
    types = {"F7": ChannelType.EOG, "T8": ChannelType.EMG}
    _, setup, estimates = learned(faulty, plan(pulses=NO_PULSES, **FOUND), types=types)
    assert estimates.channels is not None
    assert names(found_bad(setup, estimates.channels)) == set(BROKEN) - {"F7", "T8"}
    assert np.isnan(estimates.channels.amplitude_v[[CAP.index("F7"), CAP.index("T8")]]).all()


def test_nothing_is_searched_where_the_plan_says_so(faulty: NDArray[np.float64]) -> None:
    _, setup, estimates = learned(faulty, plan(pulses=NO_PULSES, rebuild_bad=True))
    assert estimates.channels is None
    assert not rebuilding(setup, found_bad(setup, None)).rows.size


def test_estimates_are_read_back(faulty: NDArray[np.float64], tmp_path: Path) -> None:
    _, _, estimates = learned(faulty[:20_000], plan(pulses=NO_PULSES, **FOUND))
    estimates.save(tmp_path / "estimates.h5")
    found, again = estimates.channels, Estimates.load(tmp_path / "estimates.h5").channels
    assert found is not None
    assert again is not None
    assert (again.n_windows, again.bridged) == (found.n_windows, found.bridged)
    np.testing.assert_array_equal(again.amplitude_v, found.amplitude_v)
    for one, other in zip(found.criteria, again.criteria, strict=True):
        assert (one.label, one.limit) == (other.label, other.limit)
        np.testing.assert_array_equal(one.value, other.value)
        np.testing.assert_array_equal(one.worst, other.worst)
        np.testing.assert_array_equal(one.n_over, other.n_over)


def test_pulses_do_not_make_channels_bad() -> None:
    """Only signal away from pulses is looked at: spikes of 5 mV beside one electrode change nothing."""
    volts = clean(1)
    pulses = tuple(range(1000, 60_000, 1500))
    for at in pulses:
        volts[at : at + 5, :] += 1e-3
        volts[at : at + 60, CAP.index("C3")] += 5e-3
    the_plan = plan(pulses=Pulses(window_ms=WINDOW_MS, fill=Fill.LINE), **FOUND)
    _, setup, estimates = learned(volts, the_plan, pulses=pulses)
    assert estimates.channels is not None
    assert not found_bad(setup, estimates.channels).any()


@pytest.mark.parametrize("bad", ["C3", "TP10", "Oz"])
def test_a_rebuilt_channel_against_truth_and_the_reader_library(bad: str) -> None:
    """The error is that of the reader library on the same samples within 1 %, and far below doing nothing."""
    import mne

    truth = clean(1)[:10_000] - clean(1)[:10_000].mean(axis=0)
    volts = truth.copy()
    place = CAP.index(bad)
    volts[:, place] = 1e-4 * np.random.default_rng(1).standard_normal(len(volts))
    the_plan = plan(pulses=NO_PULSES, filter=UNTOUCHED, reference="as recorded", bad=(bad,), rebuild_bad=True)
    recording, setup, estimates = learned(volts, the_plan)
    mended = Chain(recording, setup, estimates).stretch(0, 0, len(volts)).T.astype(np.float64)
    np.testing.assert_allclose(np.delete(mended, place, 1), np.delete(volts, place, 1), atol=1e-10)
    raw = mne.io.RawArray(volts.T, mne.create_info(list(CAP), RATE_HZ, "eeg"), verbose="error")
    places = {c.name: np.array(c.position_m) for c in setup.channels}
    raw.set_montage(mne.channels.make_dig_montage(places, coord_frame="head"))
    raw.info["bads"] = [bad]
    raw.interpolate_bads(origin=(0.0, 0.0, 0.0), method={"eeg": "spline"}, verbose="error")

    # The simulated drift below 1 Hz is each electrode's own and cannot come from others.
    above_1_hz = signal.butter(2, 1.0, "highpass", fs=RATE_HZ, output="sos")

    def size(x: NDArray[np.float64]) -> float:
        return float(signal.sosfiltfilt(above_1_hz, x).std())

    def error(x: NDArray[np.float64]) -> float:
        return size(x - truth[:, place])

    ours, theirs = error(mended[:, place]), error(raw.get_data()[place])
    assert ours <= 1.01 * theirs
    assert ours < 0.75 * size(truth[:, place])


def test_found_channels_leave_the_average_and_the_rank(faulty: NDArray[np.float64]) -> None:
    the_plan = plan(pulses=NO_PULSES, line_hz=50.0, **FOUND)
    recording, setup, estimates = learned(faulty, the_plan)
    data = Chain(recording, setup, estimates).stretch(0, 0, 5000).astype(np.float64)
    good = ~found_bad(setup, estimates.channels)
    np.testing.assert_allclose(data[good].mean(axis=0), 0.0, atol=1e-11)
    strengths = np.linalg.svd(data, compute_uv=False)
    # 62 channels, 6 rebuilt, one less for the reference.
    assert np.count_nonzero(strengths > 1e-5 * strengths[0]) <= 62 - len(BROKEN) - 1


def test_a_rebuilt_channel_is_marked_where_its_sources_are() -> None:
    """C5's longer gap counts for C3, which rests on it, and not for O2; C3's own, longest gap does not."""
    volts = clean(1)[:20_000]
    at = 10_000
    volts[at : at + 3] += 2e-3
    gaps = {"C5": (-2.0, 40.0), "C3": (-2.0, 60.0)}
    the_plan = plan(
        pulses=Pulses(window_ms=WINDOW_MS, fill=Fill.LINE, channels=gaps),
        filter=Filter(0.0, 100.0, 0.0),
        bad=("C3", "O2"),
        rebuild_bad=True,
    )
    recording, setup, estimates = learned(volts, the_plan, pulses=(at,))
    chain = Chain(recording, setup, estimates)
    cut = chain.cut(float(at), -0.1, 300)
    marked = chain.replaced(cut)
    np.testing.assert_array_equal(marked[CAP.index("C3")], marked[CAP.index("C5")])
    np.testing.assert_array_equal(marked[CAP.index("O2")], marked[CAP.index("Pz")])
    assert marked[CAP.index("C5")].sum() == 43
    assert chain.replaced_share(cut) == marked.mean()


def test_bad_channels_without_a_place_are_not_rebuilt(faulty: NDArray[np.float64]) -> None:
    form = MemoryForm(RATE_HZ)
    recording = MemoryRecording(faulty[:20_000], form)
    the_plan = plan(pulses=NO_PULSES, line_hz=50.0, bad=("E5",), **FOUND)
    setup = bind(with_positions(recording.facts), the_plan, NO_MARKS)
    estimates = finish(fit(recording, setup))
    found = found_bad(setup, estimates.channels)
    assert {"F7", "T8", "P3"} <= names(found)
    assert not rebuilding(setup, found).rows.size
    assert "E5 is bad and not rebuilt" in " ".join(channel_notes(setup, estimates.channels))


def test_a_named_reference_that_is_bad_is_told(faulty: NDArray[np.float64]) -> None:
    base = plan(pulses=NO_PULSES, line_hz=50.0)
    the_plan = replace(base, channels=Channels(reference=("P3", "TP9")))
    _, setup, estimates = learned(faulty, the_plan)
    told = [note for note in channel_notes(setup, estimates.channels) if "reference" in note]
    assert told == ["P3 was found bad and is part of the reference that the plan names"]


def test_rebuilding_does_not_depend_on_how_it_is_asked_for(faulty: NDArray[np.float64]) -> None:
    recording, setup, estimates = learned(faulty, plan(pulses=NO_PULSES, line_hz=50.0, **FOUND))
    whole = Chain(recording, setup, estimates).stretch(0, 0, 9000)
    pieces = Chain(recording, setup, estimates)
    edges = [(7001, 9000), (0, 1), (1, 997), (997, 7001)]
    parts = {edge: pieces.stretch(0, *edge) for edge in edges}
    np.testing.assert_array_equal(np.concatenate([parts[edge] for edge in sorted(edges)], axis=1), whole)
