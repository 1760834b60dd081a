"""What "the same set" means: equal whatever container and time, different for any change of meaning."""

from __future__ import annotations

import hashlib
import json
import math
import struct
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pulsemend.export.content_hash import ContentHash
from pulsemend.export.contents import SetChannel, SetContents, SetEpoch, labels_of
from pulsemend.model.vocabulary import ChannelType, Format, Precision
from support.written_sets import candidate, make_contents, make_data, write_set


def hash_of(contents: SetContents, data: np.ndarray, replaced: np.ndarray) -> str:
    content = ContentHash(contents.channels, labels_of(contents), contents.dtype, contents.shape)
    for volts, flags in zip(data, replaced, strict=True):
        content.add(volts, flags)
    return content.hexdigest()


def recorded_hash(folder: Path) -> str:
    (path,) = folder.glob("*_provenance.json")
    return str(json.loads(path.read_bytes())["set"]["content_sha256"])


def tiny() -> tuple[SetContents, np.ndarray, np.ndarray]:
    row = candidate(1, labels={"b": "\u03b2", "a": ""})
    contents = make_contents(
        channels=(
            SetChannel("Cz", ChannelType.EEG, position_m=(0.0, 0.0, 0.1)),
            SetChannel("\u03b1", ChannelType.EOG, status="bad"),
        ),
        times=0.25 + np.arange(5) / 200,
        ledger=(row,),
        epochs=(SetEpoch(row, 10.003, 0.25),),
    )
    data = np.arange(10.0).reshape(1, 2, 5) * 2.0**-20
    replaced = np.zeros((1, 2, 5), bool)
    replaced[0, 1, 3] = True
    return contents, data.astype(np.float32), replaced


def test_the_stream_is_the_one_described() -> None:
    contents, data, replaced = tiny()

    def text(value: str) -> bytes:
        return struct.pack("<Q", len(value.encode())) + value.encode()

    one = struct.pack("<Q", 1)
    stream = b"".join(
        [
            *(text("pulsemend epoch set 1"), text("float32"), struct.pack("<3Q", 1, 2, 5)),
            struct.pack("<Q", 2),
            *(text("Cz"), text("eeg"), text("good"), struct.pack("<3d", 0.0, 0.0, 0.1)),
            *(text("\u03b1"), text("eog"), text("bad"), struct.pack("<3d", *[math.nan] * 3)),
            *(
                one + text("delay"),
                one + struct.pack("<q", 1),
                one + struct.pack("<q", 1),
                one + text("cue1"),
            ),
            *(one + struct.pack("<d", 10.003), one + struct.pack("<d", 0.25)),
            struct.pack("<Q", 2),
            *(text("a") + one + text(""), text("b") + one + text("\u03b2")),
            struct.pack("<10f", *(np.arange(10) * 2.0**-20)),
            bytes([0b00000000, 0b10000000]),  # the ninth of ten samples
        ]
    )
    assert hash_of(contents, data, replaced) == hashlib.sha256(stream).hexdigest()


def test_the_hash_of_a_fixed_set_stays_what_it_is() -> None:
    # Frozen: people compare sets of different years by it. A change needs a new name of the stream.
    assert hash_of(*tiny()) == "0377e5f722a305035f9446b893f1f94877078f638fbc9372a89fb8f4489567c0"


def test_it_is_free_of_container_time_and_everything_beside_the_set(tmp_path: Path) -> None:
    first = recorded_hash(write_set(make_contents(), tmp_path / "a"))
    for name, contents in {
        "hdf5": make_contents(formats=(Format.HDF5,)),
        "fif": make_contents(formats=(Format.FIF,)),
        "beside": make_contents(marks_text="pulsemend = 1 # again\n", provenance={"when": "later"}),
        "stem": make_contents(stem="sub-07"),
    }.items():
        assert recorded_hash(write_set(contents, tmp_path / name)) == first, name


@pytest.mark.parametrize("order", [">f4", "<f4"])
def test_byte_order_and_layout_in_memory_do_not_matter(order: str) -> None:
    contents, data, replaced = tiny()
    other = np.asfortranarray(data.astype(order))
    assert hash_of(contents, other, replaced) == hash_of(contents, data, replaced)


def test_any_change_of_meaning_changes_it() -> None:
    contents, data, replaced = tiny()
    epoch = contents.epochs[0]
    seen = {hash_of(contents, data, replaced)}

    def changed(other: SetContents, volts: np.ndarray = data, flags: np.ndarray = replaced) -> None:
        value = hash_of(other, volts, flags)
        assert value not in seen
        seen.add(value)

    changed(contents, np.nextafter(data, np.float32(1)))
    changed(contents, -data)
    changed(contents, data, ~replaced)
    changed(contents, data[:, ::-1], replaced)
    for rows in (
        replace(epoch, onset_s=10.004),
        replace(epoch, start_s=0.26),
        *(
            replace(epoch, candidate=replace(epoch.candidate, **change))
            for change in (
                {"rule": "baseline"},
                {"trial": 2},
                {"piece": 2},
                {"anchor": "cue2"},
                {"labels": {"b": "\u03b2", "a": "x"}},
                {"labels": {"b": "", "a": "\u03b2"}},
                {"labels": {"b": "\u03b2", "c": ""}},
            )
        ),
    ):
        changed(replace(contents, epochs=(rows,), ledger=(rows.candidate,)))
    first, second = contents.channels
    for channels in (
        (second, first),
        (replace(first, name="Pz"), second),
        (replace(first, status="rebuilt"), second),
        (replace(first, type=ChannelType.EMG), second),
        (replace(first, position_m=None), second),
        (replace(first, position_m=(0.0, 0.0, 0.11)), second),
    ):
        changed(replace(contents, channels=channels))
    changed(replace(contents, precision=Precision.DOUBLE))


def test_notes_and_order_of_columns_do_not_change_it() -> None:
    contents, data, replaced = tiny()
    epoch = contents.epochs[0]
    row = replace(epoch.candidate, labels={"a": "", "b": "\u03b2"}, detail="x")
    other = replace(
        contents,
        epochs=(replace(epoch, candidate=row, shift_s=0.5),),
        ledger=(row,),
        channels=(contents.channels[0], replace(contents.channels[1], status_note="loud")),
    )
    assert hash_of(other, data, replaced) == hash_of(contents, data, replaced)


def test_epochs_hash_as_they_are_whatever_the_writer_is_given(tmp_path: Path) -> None:
    contents = make_contents(precision=Precision.DOUBLE)
    data, replaced = make_data(contents)
    assert recorded_hash(write_set(contents, tmp_path)) == hash_of(contents, data, replaced)
