"""Our writer of triplets, read back by the reader library."""

from __future__ import annotations

from pathlib import Path

import mne
import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.model.recording import Marker
from pulsemend.simulate.write_triplet import TripletFormat, TripletPaths, TripletWriter

MARKERS = (Marker(0, "dot", "Screen"), Marker(7, "arrow, left", "Screen"), Marker(41, "pulse", "Coil"))
FORM = TripletFormat(("Fz", "Cz", "O1"), 5000.0, 0.1, "FCz", comment="made up")


def write(header: Path, form: TripletFormat, *blocks: NDArray[np.int16] | NDArray[np.float32]) -> None:
    with TripletWriter(TripletPaths.beside(header), form, MARKERS) as writer:
        for block in blocks:
            writer.write(block)


def test_whole_numbers_come_back(tmp_path: Path) -> None:
    stored = np.random.default_rng(1).integers(-32767, 32768, (50, 3), dtype=np.int16)
    write(tmp_path / "a_eeg.vhdr", FORM, stored[:13], stored[13:])
    raw = mne.io.read_raw_brainvision(tmp_path / "a_eeg.vhdr", verbose="error")
    assert raw.ch_names == ["Fz", "Cz", "O1"]
    assert raw.info["sfreq"] == 5000.0
    np.testing.assert_array_equal(np.rint(raw.get_data().T / 1e-7), stored)


def test_markers_come_back(tmp_path: Path) -> None:
    write(tmp_path / "a.vhdr", FORM, np.zeros((50, 3), np.int16))
    raw = mne.io.read_raw_brainvision(tmp_path / "a.vhdr", verbose="error")
    found = [
        (round(onset * 5000), text)
        for onset, text in zip(raw.annotations.onset, raw.annotations.description, strict=True)
        if not text.startswith("New Segment")
    ]
    assert [sample for sample, _ in found] == [0, 7, 41]
    assert found[0][1] == "Screen/dot"
    assert found[2][1] == "Coil/pulse"
    # A comma separates fields in the file, so it is written as the format's substitute.
    assert (tmp_path / "a.vmrk").read_text(encoding="utf-8").count(r"Mk3=Screen,arrow\1 left,8,1,0") == 1


def test_floats_come_back(tmp_path: Path) -> None:
    microvolts = np.random.default_rng(1).standard_normal((50, 3)).astype(np.float32)
    form = TripletFormat(FORM.channels, 2048.0, 1.0, number="float32")
    write(tmp_path / "a.vhdr", form, microvolts)
    raw = mne.io.read_raw_brainvision(tmp_path / "a.vhdr", verbose="error")
    assert raw.info["sfreq"] == pytest.approx(2048.0, rel=1e-12)
    np.testing.assert_allclose(raw.get_data().T, microvolts.astype(np.float64) * 1e-6, rtol=1e-12)


def test_wrong_blocks_are_refused(tmp_path: Path) -> None:
    with TripletWriter(TripletPaths.beside(tmp_path / "a.vhdr"), FORM, ()) as writer:
        with pytest.raises(ValueError, match="does not fit"):
            writer.write(np.zeros((5, 3), np.float32))
        with pytest.raises(ValueError, match="does not fit"):
            writer.write(np.zeros((5, 2), np.int16))


def test_no_header_after_an_error(tmp_path: Path) -> None:
    with (
        pytest.raises(RuntimeError),
        TripletWriter(TripletPaths.beside(tmp_path / "a.vhdr"), FORM, ()),
    ):
        raise RuntimeError
    assert not (tmp_path / "a.vhdr").exists()
