"""HDF5 and FIF hold the same bits, and the libraries that people use read them."""

from __future__ import annotations

import io
import math
import subprocess
import sys
from contextlib import redirect_stdout
from dataclasses import replace
from pathlib import Path

import h5py
import mne
import numpy as np
import pytest

from pulsemend.export.contents import SetChannel, SetEpoch, zero_samples
from pulsemend.export.fif import fif_names, read_fif
from pulsemend.model.vocabulary import ChannelType, Format, Precision
from support.written_sets import candidate, make_contents, make_data, plan_text, write_set

NAME = "sub-01_task-lantern_desc-mended"


@pytest.mark.parametrize("precision", list(Precision))
def test_both_containers_hold_what_was_written_bit_for_bit(tmp_path: Path, precision: Precision) -> None:
    contents = make_contents(precision=precision)
    data, replaced = make_data(contents)
    kind = np.float32 if precision is Precision.SINGLE else np.float64
    folder = write_set(contents, tmp_path)
    with h5py.File(folder / f"{NAME}_epochs.h5") as file:
        assert file["data"].dtype == kind
        assert file["data"][()].tobytes() == data.astype(kind).tobytes()
        assert file["replaced"].dtype == np.bool_
        np.testing.assert_array_equal(file["replaced"][()], replaced)
    # Outside reference: the reader library; it gives float64 whatever the file holds.
    whole = mne.read_epochs(folder / f"{NAME}_epo.fif", verbose="error")
    assert whole.get_data(copy=False).tobytes() == data.astype(kind).astype(np.float64).tobytes()
    one_by_one = mne.read_epochs(folder / f"{NAME}_epo.fif", preload=False, verbose="error")
    assert not one_by_one.preload
    for index in (2, 0, 1):
        epoch = one_by_one[index].get_data(copy=False, verbose="error")[0]
        assert epoch.tobytes() == data[index].astype(kind).astype(np.float64).tobytes()


def test_hdf5_has_the_layout_of_the_contract(tmp_path: Path) -> None:
    contents = make_contents()
    folder = write_set(contents, tmp_path)
    with h5py.File(folder / f"{NAME}_epochs.h5") as file:
        assert set(file) == {"data", "replaced", "times", "channels", "labels"}
        assert set(file.attrs) == {
            *("schema", "rate_hz", "plan", "source_sha256", "content_sha256", "replaced_reach_s", "rank")
        }
        assert file.attrs["schema"] == 1
        assert file.attrs["rate_hz"] == 200.0
        assert file.attrs["plan"] == contents.plan_text
        assert file.attrs["source_sha256"] == "ab" * 32
        assert file.attrs["replaced_reach_s"] == 1.65
        assert file.attrs["rank"] == 3
        assert file["data"].shape == file["replaced"].shape == (3, 4, 100)
        assert file["data"].attrs["units"] == "V"
        assert file["data"].chunks is None
        assert file["times"].attrs["zero"] == "anchor"
        np.testing.assert_array_equal(file["times"][()], contents.times)
        assert set(file["channels"]) == {"name", "type", "position", "status"}
        assert file["channels/name"].asstr()[()].tolist() == [channel.name for channel in contents.channels]
        assert file["channels/type"].asstr()[()].tolist() == ["eeg", "eeg", "eeg", "eog"]
        assert file["channels/status"].asstr()[()].tolist() == ["good", "good", "bad", "good"]
        np.testing.assert_array_equal(file["channels/position"][0], (0.0, 0.08, 0.05))
        assert np.isnan(file["channels/position"][2:]).all()
        labels = file["labels"]
        assert labels["name"].asstr()[()].tolist() == ["delay", "baseline", "baseline"]
        assert labels["trial"][()].tolist() == [1, 1, 2]
        assert labels["piece"][()].tolist() == [1, 1, 1]
        assert labels["anchor"].asstr()[()].tolist() == ["cue1"] * 3
        assert labels["onset_s"][()].tolist() == [10.003, 10.003, 20.003]
        assert labels["start_s"][()].tolist() == [0.25] * 3
        assert labels["cue1.item"].asstr()[()].tolist() == [
            "links \u2190 1",
            "links \u2190 1",
            "links \u2190 2",
        ]
        by_column = {labels[key].attrs.get("column", key): labels[key] for key in labels}
        assert by_column["log.a/b"].asstr()[0] == "tab\there"
        for key in ("labels/name", "channels/name"):
            assert h5py.check_string_dtype(file[key].dtype).encoding == "utf-8"


def test_reader_library_finds_times_events_labels_and_fates(tmp_path: Path) -> None:
    folder = write_set(make_contents(), tmp_path)
    epochs = mne.read_epochs(folder / f"{NAME}_epo.fif", preload=False, verbose="error")
    assert epochs.tmin == 0.25
    assert len(epochs.times) == 100
    # 10.003 s x 200 Hz = 2000.6; the second epoch shares its anchor and moves on by one
    assert epochs.events.tolist() == [[2001, 0, 1], [2002, 0, 2], [4001, 0, 2]]
    assert epochs.event_id == {"delay": 1, "baseline": 2}
    assert epochs.drop_log == ((), (), ("touches a gap",), (), ("no anchor in this trial",))
    assert epochs.selection.tolist() == [0, 1, 3]
    assert len(epochs["baseline"]) == 2
    rows = epochs.metadata if isinstance(epochs.metadata, list) else epochs.metadata.to_dict("records")
    assert [row["trial"] for row in rows] == [1, 1, 2]
    assert rows[2]["cue1.item"] == "links \u2190 2"
    assert rows[2]["log.a/b"] == "tab\there"
    assert rows[0]["onset_s"] == 10.003
    assert rows[0]["shift_s"] == 0.003
    assert rows[0]["replaced_share"] == 0.0125
    info = epochs.info
    assert info["sfreq"] == 200.0
    assert (info["highpass"], info["lowpass"]) == (1.0, 40.0)
    assert info["custom_ref_applied"]
    assert info["bads"] == ["Cz:e"]
    assert info["meas_date"] is None
    assert epochs.get_channel_types() == ["eeg", "eeg", "eeg", "eog"]
    assert [entry["cal"] * entry["range"] for entry in info["chs"]] == [1.0] * 4
    np.testing.assert_allclose(info["chs"][0]["loc"][:3], (0.0, 0.08, 0.05), rtol=1e-6)
    # only what was given: no landmarks of the head that nobody measured
    assert [int(point["kind"]) for point in info["dig"]] == [int(mne.io.constants.FIFF.FIFFV_POINT_EEG)] * 2
    montage = info.get_montage()
    np.testing.assert_allclose(montage.get_positions()["ch_pos"]["Fz"], (0.0, 0.08, 0.05), rtol=1e-6)


def test_the_reference_is_not_called_custom_where_it_is_the_recorded_one(tmp_path: Path) -> None:
    folder = write_set(make_contents(rereferenced=False, highpass_hz=0.0, lowpass_hz=0.0), tmp_path)
    info = mne.read_epochs(folder / f"{NAME}_epo.fif", preload=False, verbose="error").info
    assert not info["custom_ref_applied"]
    assert (info["highpass"], info["lowpass"]) == (0.0, 100.0)


def test_the_reader_library_can_save_and_read_the_set_again(tmp_path: Path) -> None:
    folder = write_set(make_contents(), tmp_path)
    epochs = mne.read_epochs(folder / f"{NAME}_epo.fif", verbose="error")
    epochs.save(tmp_path / "again_epo.fif", verbose="error")
    again = mne.read_epochs(tmp_path / "again_epo.fif", verbose="error")
    np.testing.assert_array_equal(again.get_data(copy=False), epochs.get_data(copy=False))
    assert again.drop_log == epochs.drop_log


def test_names_the_format_cannot_hold_are_spelled_out_and_kept_apart(tmp_path: Path) -> None:
    assert fif_names(["Cz", "C\u00e9", "Ce", "\u03b1;1", "a" * 40, "Cz"]) == [
        *("Cz", "Ce", "Ce-2", "u03b1u003b1", "a" * 40, "Cz-2")
    ]
    names = ["\u03b1", "x" * 20 + "1", "x" * 20 + "2", "a:b;{COLON}\u20ac"]
    channels = tuple(SetChannel(name, ChannelType.EEG, status="bad") for name in names)
    folder = write_set(make_contents(channels=channels), tmp_path)
    epochs = mne.read_epochs(folder / f"{NAME}_epo.fif", preload=False, verbose="error")
    assert epochs.ch_names == fif_names(names)
    assert epochs.info["bads"] == fif_names(names)


def test_one_epoch_one_channel_one_sample(tmp_path: Path) -> None:
    row = candidate(1)
    contents = make_contents(
        channels=(SetChannel("Cz", ChannelType.EEG),),
        times=np.array([0.25]),
        ledger=(row,),
        epochs=(SetEpoch(row, 10.003, 0.25),),
        plan_text=plan_text().replace("length_s = 0.5", "length_s = 0.005"),
    )
    folder = write_set(contents, tmp_path, np.full((1, 1, 1), 1e-6), np.zeros((1, 1, 1), bool))
    read = mne.read_epochs(folder / f"{NAME}_epo.fif", verbose="error")
    assert read.get_data(copy=False).item() == np.float32(1e-6)


def test_epochs_with_different_starts_count_from_their_first_sample(tmp_path: Path) -> None:
    rows = (candidate(1, "baseline", start_s=-0.5), candidate(1))
    contents = make_contents(
        times=np.arange(100) / 200.0,
        zero="epoch start",
        ledger=rows,
        epochs=tuple(SetEpoch(row, 10.003, row.start_s, replaced_share=0.0125) for row in rows),
        plan_text=plan_text(start_s=-0.5),
    )
    folder = write_set(contents, tmp_path)
    read = mne.read_epochs(folder / f"{NAME}_epo.fif", preload=False, verbose="error")
    assert read.tmin == 0.0
    assert read.events[:, 0].tolist() == [round(9.503 * 200), round(10.253 * 200)]
    with h5py.File(folder / f"{NAME}_epochs.h5") as file:
        assert file["times"].attrs["zero"] == "epoch start"


def test_time_zeros_are_unique() -> None:
    assert zero_samples((1.0, 1.0, 1.0, 1.004), (0.0,) * 4, "anchor", 250.0) == [250, 251, 252, 253]
    assert zero_samples((1.0, 1.0), (-0.5, 0.5), "epoch start", 100.0) == [50, 150]


@pytest.mark.parametrize("kind", [Format.HDF5, Format.FIF])
def test_one_container_alone(tmp_path: Path, kind: Format) -> None:
    folder = write_set(make_contents(formats=(kind,)), tmp_path)
    present = {path.name.removeprefix(f"{NAME}_") for path in folder.iterdir()}
    assert ("epochs.h5" in present) is (kind is Format.HDF5)
    assert ("epo.fif" in present) is (kind is Format.FIF)


def test_the_same_set_gives_the_same_bytes(tmp_path: Path) -> None:
    first = write_set(make_contents(), tmp_path / "a")
    second = write_set(make_contents(), tmp_path / "b")
    for path in first.iterdir():
        assert path.read_bytes() == (second / path.name).read_bytes(), path.name


def test_writing_says_nothing_on_standard_output(tmp_path: Path) -> None:
    said = io.StringIO()
    with redirect_stdout(said), mne.utils.use_log_level("INFO"):
        write_set(make_contents(), tmp_path)
    assert said.getvalue() == ""


def test_the_reader_library_is_not_loaded_unless_fif_is_written() -> None:
    code = (
        "import sys, pulsemend.export.set_writer, pulsemend.export.read_set;"
        "sys.exit(any(name.split('.')[0] == 'mne' for name in sys.modules))"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_tags_of_the_file_are_found_without_the_library(tmp_path: Path) -> None:
    folder = write_set(make_contents(), tmp_path)
    facts = read_fif(folder / f"{NAME}_epo.fif")
    assert facts.data.shape == (3, 4, 100)
    assert facts.data.dtype == ">f4"
    assert facts.first == 50
    assert facts.zero_samples == (2001, 2002, 4001)
    assert math.isclose(facts.rate_hz, 200.0)


def test_every_type_of_channel(tmp_path: Path) -> None:
    channels = tuple(SetChannel(kind.value, kind) for kind in ChannelType)
    contents = make_contents(channels=channels)
    data, replaced = make_data(contents)
    replaced[:] = False
    epochs = tuple(replace(epoch, replaced_share=0.0) for epoch in contents.epochs)
    folder = write_set(replace(contents, epochs=epochs), tmp_path, data, replaced)
    read = mne.read_epochs(folder / f"{NAME}_epo.fif", verbose="error")
    assert read.get_channel_types() == ["eeg", "eog", "emg", "ecg", "misc", "stim"]
    np.testing.assert_array_equal(read.get_data(copy=False), data.astype(np.float32))


def test_rule_names_in_other_letters(tmp_path: Path) -> None:
    rows = (replace(candidate(1), rule="verz\u00f6gert_\u03b2"), candidate(1, "baseline"))
    contents = make_contents(
        ledger=rows,
        epochs=tuple(SetEpoch(row, 10.003, 0.25, replaced_share=0.0125) for row in rows),
        plan_text=plan_text().replace('name = "delay"', 'name = "verz\u00f6gert_\u03b2"'),
    )
    read = mne.read_epochs(write_set(contents, tmp_path) / f"{NAME}_epo.fif", preload=False, verbose="error")
    assert read.event_id == {"verzogert_u03b2": 1, "baseline": 2}
    rows_read = read.metadata if isinstance(read.metadata, list) else read.metadata.to_dict("records")
    assert rows_read[0]["name"] == "verz\u00f6gert_\u03b2"
