"""FIF: sample numbers from 0, joins and skips, trigger channels, positions."""

from __future__ import annotations

from contextlib import closing
from pathlib import Path

import mne
import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.errors import DamagedRecording
from pulsemend.model.recording import RecordingFacts
from pulsemend.readers.opening import open_recording
from support.written_recordings import EVENTS, N_SAMPLES, RATE_HZ, fif_raw


def opened(path: Path) -> tuple[RecordingFacts, NDArray[np.float64]]:
    """Facts and volts, shape (n_channels, n_samples)."""
    with closing(open_recording(path)) as recording:
        facts = recording.facts
        out = np.empty((facts.n_samples, len(facts.channels)))
        recording.read(0, facts.n_samples, out)
    return facts, out.T


def saved(raw: mne.io.BaseRaw, folder: Path) -> Path:
    raw.save(folder / "lt01_raw.fif", overwrite=True, verbose="error")
    return folder / "lt01_raw.fif"


@pytest.mark.parametrize("dated", [False, True], ids=["without date", "with date"])
def test_samples_count_from_0_wherever_the_file_starts(tmp_path: Path, dated: bool) -> None:
    whole = fif_raw()
    if dated:
        whole.set_meas_date(1_767_225_600)
    cut = whole.copy().crop(tmin=200 / RATE_HZ)
    assert cut.first_samp == 200
    facts, volts = opened(saved(cut, tmp_path))
    assert [(m.sample, m.code, m.type) for m in facts.markers] == [
        (sample - 200, text, kind) for sample, kind, text in EVENTS if sample >= 200
    ]
    np.testing.assert_array_equal(volts, whole.get_data()[:, 200:])


@pytest.mark.parametrize("fmt", ["single", "double", "int", "short"])
def test_volts_equal_the_reader_library_exactly(tmp_path: Path, fmt: str) -> None:
    """Outside reference: mne."""
    fif_raw().save(tmp_path / "lt01_raw.fif", fmt=fmt, verbose="error")
    _, volts = opened(tmp_path / "lt01_raw.fif")
    reference = mne.io.read_raw_fif(tmp_path / "lt01_raw.fif", verbose="error")
    np.testing.assert_array_equal(volts, reference.get_data())


def test_joined_recordings_have_a_boundary(tmp_path: Path) -> None:
    joined = mne.concatenate_raws([fif_raw(), fif_raw()], verbose="error")
    facts, _ = opened(saved(joined, tmp_path))
    assert facts.boundaries == (N_SAMPLES,)
    assert len(facts.markers) == 2 * len(EVENTS)


def test_skipped_stretch_is_a_segment_of_its_own(tmp_path: Path) -> None:
    raw = fif_raw(())
    raw.set_annotations(mne.Annotations([1.0], [0.5], ["BAD_ACQ_SKIP"]))
    facts, _ = opened(saved(raw, tmp_path))
    assert facts.boundaries == (500, 750)
    assert facts.markers == ()


def test_rounded_annotation_times_are_told(tmp_path: Path) -> None:
    """The format keeps them in 32 bits: near 2**17 s, 500 Hz, that is half of 1/64 s, or 3.9 samples."""
    raw = fif_raw(())
    late = mne.io.RawArray(raw.get_data(), raw.info, first_samp=70_000_000, verbose="error")
    late.set_annotations(mne.Annotations([1.3], [0], ["cue"]))
    facts, _ = opened(saved(late, tmp_path))
    assert [marker.code for marker in facts.markers] == ["cue"]
    assert abs(facts.markers[0].sample - 650) <= 3.9
    assert any("rounded in the file, by up to 3.9 samples" in note for note in facts.notes)


def with_trigger_channel(levels: NDArray[np.float64]) -> mne.io.RawArray:
    raw = fif_raw(())
    info = mne.create_info(["STI 014"], RATE_HZ, "stim")
    stim = mne.io.RawArray(levels[None, :], info, verbose="error")
    raw.set_annotations(None)
    return raw.add_channels([stim], force_update_info=True)


def test_trigger_channel_gives_markers(tmp_path: Path) -> None:
    """Outside reference: mne.find_events on the same file."""
    rng = np.random.default_rng(8)
    levels = np.repeat(rng.integers(0, 4, N_SAMPLES // 5).astype(float), 5)
    levels[0] = 0
    path = saved(with_trigger_channel(levels), tmp_path)
    facts, _ = opened(path)
    assert [c.type.value for c in facts.channels][-1] == "trigger"
    events = mne.find_events(
        mne.io.read_raw_fif(path, verbose="error"), consecutive=True, min_duration=0, verbose="error"
    )
    assert [(m.sample, m.code) for m in facts.markers] == [(s, str(code)) for s, _, code in events]
    assert len(facts.markers) > 100


def test_positions_and_types(tmp_path: Path) -> None:
    raw = fif_raw()
    raw.set_channel_types({"C4": "misc"}, verbose="error")
    raw.set_montage(
        mne.channels.make_dig_montage({"Fz": (0.0, 0.06, 0.08)}, coord_frame="head"), on_missing="ignore"
    )
    facts, _ = opened(saved(raw, tmp_path))
    np.testing.assert_allclose(np.array(facts.channels[0].position_m), (0, 0.06, 0.08), atol=1e-7)
    assert facts.channels[1].position_m is None
    assert facts.channels[2].type.value == "misc"
    assert any("misc: C4" in note for note in facts.notes)


def test_epochs_are_not_a_recording(tmp_path: Path) -> None:
    epochs = mne.EpochsArray(np.zeros((2, 4, 100)), fif_raw().info, verbose="error")
    epochs.save(tmp_path / "lt01-epo.fif", verbose="error")
    with pytest.raises(DamagedRecording, match="reader library"):
        open_recording(tmp_path / "lt01-epo.fif")
