"""A FIF recording in several files: one recording, whole across the seams, or refused."""

from __future__ import annotations

import pickle
from contextlib import closing
from pathlib import Path

import mne
import numpy as np
import pytest

from pulsemend.errors import DamagedRecording, MissingPart, UnknownFormat
from pulsemend.progress import finish
from pulsemend.readers.fingerprint import fingerprint
from pulsemend.readers.opening import open_recording
from support.written_recordings import NAMES, RATE_HZ

N_SAMPLES = 200_000


def recording_of_rising_numbers() -> mne.io.BaseRaw:
    """Every sample is its own number times a nanovolt, so that a seam out of place would show."""
    info = mne.create_info(list(NAMES), RATE_HZ, ["eeg", "eeg", "eeg", "eog"])
    volts = np.arange(N_SAMPLES) + np.arange(len(NAMES))[:, None] * 1000.0
    raw = mne.io.RawArray(np.float32(volts * 1e-9).astype(float), info, verbose="error")
    raw.set_annotations(mne.Annotations([10.0, 250.0, 399.0], [0.0] * 3, ["cue", "pulse", "end"]))
    return raw


@pytest.fixture(params=["neuromag", "bids"])
def parts(request: pytest.FixtureRequest, tmp_path: Path) -> list[Path]:
    name = "lt01_eeg.fif" if request.param == "bids" else "lt01_raw.fif"
    recording_of_rising_numbers().save(
        tmp_path / name, split_size="2MB", split_naming=request.param, buffer_size_sec=2, verbose="error"
    )
    found = sorted(tmp_path.iterdir(), key=lambda path: (len(path.name), path.name))
    assert len(found) >= 3
    return found


def test_samples_across_the_seams(parts: list[Path]) -> None:
    lengths = [part_length(part) for part in parts]
    assert sum(lengths) == N_SAMPLES
    expected = recording_of_rising_numbers().get_data().T
    with closing(open_recording(parts[0])) as recording:
        assert recording.facts.n_samples == N_SAMPLES
        assert recording.facts.boundaries == ()
        for seam in np.cumsum(lengths)[:-1]:
            for start, stop in ((seam - 700, seam + 700), (seam - 1, seam + 1), (seam, seam + 1)):
                out = np.empty((stop - start, len(NAMES)))
                recording.read(int(start), int(stop), out)
                np.testing.assert_array_equal(out, expected[start:stop])


def part_length(path: Path) -> int:
    raw = mne.io.read_raw_fif(path, on_split_missing="ignore", verbose="error")
    return int(raw._raw_lengths[0])


def test_all_parts_are_identified_and_markers_found(parts: list[Path]) -> None:
    with closing(open_recording(parts[0])) as recording:
        facts = recording.facts
        identity = finish(fingerprint(recording))
        again = pickle.loads(pickle.dumps(recording))
    assert [part[0] for part in identity.parts] == [part.name for part in parts]
    assert [part.name for part in facts.parts] == [part.name for part in parts]
    assert facts.stem == ("lt01_raw" if "_raw" in parts[0].name else "lt01")
    assert [(m.sample, m.code) for m in facts.markers] == [
        (5000, "cue"),
        (125_000, "pulse"),
        (199_500, "end"),
    ]
    with closing(again):
        assert again.facts == facts


@pytest.mark.parametrize("lost", [1, 2])
def test_a_missing_part(parts: list[Path], lost: int) -> None:
    parts[lost].unlink()
    with pytest.raises(MissingPart) as caught:
        open_recording(parts[0])
    assert caught.value.todo


def test_a_later_part_is_no_recording(parts: list[Path]) -> None:
    for part in parts[1:]:
        with pytest.raises(UnknownFormat, match="continues another file") as caught:
            open_recording(part)
        assert caught.value.where == part.name


def test_a_later_part_that_was_cut_short(parts: list[Path]) -> None:
    content = parts[1].read_bytes()
    parts[1].write_bytes(content[:-1000])
    with pytest.raises(DamagedRecording) as caught:
        open_recording(parts[0])
    assert caught.value.where == parts[1].name
