"""The FIF container: the only module that touches private parts of the reader library.

The library writes the blocks around the samples; the samples' own tag is reserved, and big-endian epochs are
written into it in place (`region`). Channels carry cal = range = 1, so that volts are equal bit for bit to
those of the HDF5 file. The file holds no time and no machine: the same set gives the same bytes.

Reading back needs four kinds of tags only, so it walks the tags itself instead of loading the library.
"""

from __future__ import annotations

import json
import struct
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO

import numpy as np

from pulsemend.export.contents import SetContents, labels_of, zero_samples
from pulsemend.export.region import Region
from pulsemend.model.vocabulary import ChannelType, Precision

if TYPE_CHECKING:
    import mne

LARGEST_BYTES = 1_800_000_000
"""Larger files are refused: the format ends at 2 GiB, and what follows the samples must fit as well."""

_KINDS = {ChannelType.TRIGGER: "stim"}
_NO_TIME = {"version": 65540, "machid": (0, 0), "secs": 0, "usecs": 2**31 - 1}

_TAG = struct.Struct(">4i")
_MATRIX = 1 << 30
_FLOAT, _DOUBLE = 4, 5
_N_CHANNELS, _RATE, _FIRST, _LAST, _EPOCHS, _EVENTS = 200, 201, 208, 209, 302, 3561
_LARGEST_TAG_READ = 1 << 26


@dataclass(frozen=True)
class FifFacts:
    """What an epochs file says besides its samples.

    Parameters
    ----------
    data : Region
    rate_hz : float
        As stored, in single precision.
    first : int
        Output sample of the first sample of every epoch, counted from time zero.
    zero_samples : tuple of int
        Output samples of time zero.
    """

    data: Region
    rate_hz: float
    first: int
    zero_samples: tuple[int, ...]


def fif_names(names: Sequence[str]) -> list[str]:
    """Spell names in the letters the format holds: accents dropped, other letters as codes, all distinct.

    Parameters
    ----------
    names : sequence of str
        In any script.
    """
    taken: set[str] = set()
    result = []
    for name in names:
        plain = "".join(
            sign if sign.isascii() and sign not in ";{}" else f"u{ord(sign):04x}"
            for sign in unicodedata.normalize("NFD", name)
            if not unicodedata.combining(sign)
        )
        unique, count = plain, 2
        while unique in taken:
            unique, count = f"{plain}-{count}", count + 1
        taken.add(unique)
        result.append(unique)
    return result


def fif_bytes(contents: SetContents) -> int:
    """Estimate the size of the file, with room for what stands around the samples.

    Parameters
    ----------
    contents : SetContents
        The set.
    """
    epochs, channels, times = contents.shape
    text = 64 * (len(contents.label_columns) + 12)
    return (
        epochs * (channels * times * contents.dtype.itemsize + text)
        + len(contents.ledger) * 64
        + channels * 512
    )


def create_fif(path: Path, contents: SetContents) -> Region:
    """Write everything but the samples, and reserve their place.

    Parameters
    ----------
    path : Path
        Ends with ``_epo.fif``.
    contents : SetContents
        The set.

    Returns
    -------
    Region
        Where the samples go.
    """
    import mne
    from mne._fiff import write as fiff
    from mne._fiff.constants import FIFF
    from mne._fiff.meas_info import write_meas_info

    with mne.utils.use_log_level("ERROR"), fiff.start_and_end_file(path, id_=_NO_TIME) as file:
        fiff.start_block(file, FIFF.FIFFB_MEAS)
        fiff.write_id(file, FIFF.FIFF_BLOCK_ID, _NO_TIME)
        write_meas_info(file, _info(contents))
        fiff.start_block(file, FIFF.FIFFB_PROCESSED_DATA)
        fiff.start_block(file, FIFF.FIFFB_MNE_EPOCHS)
        _write_events(file, contents)
        fiff.start_block(file, FIFF.FIFFB_MNE_METADATA)
        fiff.write_string(file, FIFF.FIFF_DESCRIPTION, json.dumps(_metadata(contents)))
        fiff.end_block(file, FIFF.FIFFB_MNE_METADATA)
        first = round(float(contents.times[0]) * contents.rate_hz)
        fiff.write_int(file, FIFF.FIFF_FIRST_SAMPLE, first)
        fiff.write_int(file, FIFF.FIFF_LAST_SAMPLE, first + contents.length - 1)
        fiff.write_float(file, FIFF.FIFF_MNE_EPOCHS_RAW_SFREQ, contents.rate_hz)
        region = _reserve(file, path, contents)
        _write_fates(file, contents)
        fiff.end_block(file, FIFF.FIFFB_MNE_EPOCHS)
        fiff.end_block(file, FIFF.FIFFB_PROCESSED_DATA)
        fiff.end_block(file, FIFF.FIFFB_MEAS)
    return region


def read_fif(path: Path) -> FifFacts:
    """Read what is needed to compare the samples with another container's.

    Parameters
    ----------
    path : Path
        The file.

    Returns
    -------
    FifFacts

    Raises
    ------
    OSError, KeyError, ValueError
        The file is damaged or is something else.
    """
    found: dict[int, bytes] = {}
    region = None
    with path.open("rb") as file:
        size = file.seek(0, 2)
        place = following = 0
        while following != -1:
            file.seek(place)
            head = file.read(_TAG.size)
            if len(head) < _TAG.size:
                raise ValueError("the file ends inside a tag")
            kind, form, length, following = _TAG.unpack(head)
            body = place + _TAG.size
            if length < 0 or body + length > size:
                raise ValueError("the file ends inside a tag")
            if kind == _EPOCHS:
                region = _data_region(file, path, body, form, length)
            elif kind in (_N_CHANNELS, _RATE, _FIRST, _LAST, _EVENTS) and length < _LARGEST_TAG_READ:
                found.setdefault(kind, file.read(length))
            if following > 0 and following <= place:
                raise ValueError("the tags run in a circle")
            place = following if following > 0 else body + length
    if region is None:
        raise ValueError("the file holds no epochs")
    first, last = (struct.unpack(">i", found[kind])[0] for kind in (_FIRST, _LAST))
    channels = struct.unpack(">i", found[_N_CHANNELS])[0]
    events = np.frombuffer(found[_EVENTS], ">i4").reshape(-1, 3)
    if region.shape != (len(events), channels, last - first + 1):
        raise ValueError(
            f"the samples have the shape {region.shape}, the rest of the file says "
            f"{(len(events), channels, last - first + 1)}"
        )
    return FifFacts(region, struct.unpack(">f", found[_RATE])[0], first, tuple(events[:, 0].tolist()))


def _data_region(file: BinaryIO, path: Path, body: int, form: int, length: int) -> Region:
    """Place and shape of a matrix of three dimensions; its sizes stand behind its values, last one first."""
    dtype = {_MATRIX | _FLOAT: ">f4", _MATRIX | _DOUBLE: ">f8"}.get(form)
    if dtype is None or length < 16:
        raise ValueError("the samples are of an unknown type")
    file.seek(body + length - 16)
    times, channels, epochs, dimensions = struct.unpack(">4i", file.read(16))
    if dimensions != 3 or min(times, channels, epochs) < 1:
        raise ValueError("the samples have no usable shape")
    region = Region(path, body, dtype, (epochs, channels, times))
    if region.epoch_bytes * epochs != length - 16:
        raise ValueError("the samples' size and their shape disagree")
    return region


def _reserve(file: BinaryIO, path: Path, contents: SetContents) -> Region:
    """Write the samples' tag with a hole for the samples."""
    double = contents.precision is Precision.DOUBLE
    offset = file.tell() + _TAG.size
    region = Region(path, offset, ">f8" if double else ">f4", contents.shape)
    epochs, channels, times = contents.shape
    length = region.epoch_bytes * epochs
    file.write(_TAG.pack(_EPOCHS, _MATRIX | (_DOUBLE if double else _FLOAT), length + 16, 0))
    file.seek(offset + length)
    file.write(struct.pack(">4i", times, channels, epochs, 3))
    return region


def _info(contents: SetContents) -> mne.Info:
    import mne
    from mne._fiff.constants import FIFF

    names = fif_names([channel.name for channel in contents.channels])
    info = mne.create_info(
        names,
        contents.rate_hz,
        [_KINDS.get(channel.type, channel.type.value) for channel in contents.channels],
    )
    info["bads"] = [
        name for name, channel in zip(names, contents.channels, strict=True) if channel.status == "bad"
    ]
    positions = {
        name: np.array(channel.position_m)
        for name, channel in zip(names, contents.channels, strict=True)
        if channel.position_m is not None and channel.type is ChannelType.EEG
    }
    # Not through set_montage, which would invent the three points of the head that nobody measured.
    for entry in info["chs"]:
        if entry["ch_name"] in positions:
            entry["loc"][:3] = positions[entry["ch_name"]]
            entry["loc"][3:6] = 0.0
    with info._unlock():
        if positions:
            info["dig"] = mne.channels.make_dig_montage(positions, coord_frame="head").dig
        info["highpass"] = contents.highpass_hz
        info["lowpass"] = contents.lowpass_hz or contents.rate_hz / 2
        if contents.rereferenced:
            info["custom_ref_applied"] = FIFF.FIFFV_MNE_CUSTOM_REF_ON
    return info


def _write_events(file: BinaryIO, contents: SetContents) -> None:
    """Events: sample of time zero, 0, number of the rule (its place in the plan, from 1)."""
    from mne._fiff import write as fiff
    from mne._fiff.constants import FIFF

    labels = labels_of(contents)
    samples = zero_samples(labels.onset_s, labels.start_s, contents.zero, contents.rate_hz)
    numbers = [epoch.candidate.rule_index + 1 for epoch in contents.epochs]
    events = np.array([(s, 0, n) for s, n in zip(samples, numbers, strict=True)], np.int32)
    rules = dict(sorted((number, name) for number, name in zip(numbers, labels.name, strict=True)))
    text = ";".join(
        f"{name}:{number}" for number, name in zip(rules, fif_names(list(rules.values())), strict=True)
    )
    fiff.start_block(file, FIFF.FIFFB_MNE_EVENTS)
    fiff.write_int(file, FIFF.FIFF_MNE_EVENT_LIST, events.T)
    fiff.write_string(file, FIFF.FIFF_DESCRIPTION, text)
    fiff.end_block(file, FIFF.FIFFB_MNE_EVENTS)


def _metadata(contents: SetContents) -> list[dict[str, Any]]:
    """One record per epoch, in the form the library writes a table of its own."""
    columns = contents.label_columns
    return [
        {
            "index": index,
            "name": epoch.candidate.rule,
            "trial": epoch.candidate.trial,
            "piece": epoch.candidate.piece,
            "anchor": epoch.candidate.anchor,
            "onset_s": epoch.onset_s,
            "start_s": epoch.start_s,
            "shift_s": epoch.shift_s,
            "replaced_share": epoch.replaced_share,
            **({"decay_share": epoch.decay_share} if contents.decay_fitted else {}),
            **{column: epoch.candidate.labels.get(column, "") for column in columns},
        }
        for index, epoch in enumerate(contents.epochs)
    ]


def _write_fates(file: BinaryIO, contents: SetContents) -> None:
    """Every row of the ledger with its fate, and which row each epoch is."""
    from mne._fiff import write as fiff
    from mne._fiff.constants import FIFF

    rows = {(row.rule, row.trial, row.piece): place for place, row in enumerate(contents.ledger)}
    fates = [[] if row.kept else [row.fate.value] for row in contents.ledger]
    chosen = [
        rows[epoch.candidate.rule, epoch.candidate.trial, epoch.candidate.piece] for epoch in contents.epochs
    ]
    fiff.write_string(file, FIFF.FIFF_MNE_EPOCHS_DROP_LOG, json.dumps(fates))
    fiff.write_int(file, FIFF.FIFF_MNE_EPOCHS_SELECTION, np.array(chosen, np.int32))
