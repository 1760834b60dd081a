"""What files that are read through the reader library say of themselves, before their samples are read."""

from __future__ import annotations

import gzip
import math
import zlib
from collections.abc import Iterable
from dataclasses import replace
from pathlib import Path
from typing import IO, Any, cast

import numpy as np

from pulsemend.errors import DamagedRecording, UnknownFormat
from pulsemend.model.recording import Channel
from pulsemend.model.vocabulary import ChannelType
from pulsemend.readers.channel_types import LIBRARY_TYPES, type_by_name
from pulsemend.readers.codes import Found, set_aside, split_at_slash, sync_notes, whole_if_close
from pulsemend.readers.common import check_names, missing, power_of_ten
from pulsemend.readers.edf_header import EdfHeader
from pulsemend.readers.source import Source
from pulsemend.readers.tal import Timeline, read_timeline

_FIF_CHANNEL, _FIF_LAST = 203, -1  # kind of a channel's entry; link of the last entry of a file
_FIF_ROLE, _FIF_FOLLOWS = 115, bytes((0, 0, 0, 1))  # kind and content of the entry that names an earlier part
_PACKED_CHUNK = 1 << 20
_JOINS = ("bad boundary", "edge boundary", "boundary")
_SKIP = "bad_acq_skip"
_WHOLE_WITHIN = 1e-6  # samples; what a product of seconds and rate may miss a whole number by


def edf_source(header: EdfHeader) -> Source:
    """Describe an EDF or BDF file.

    Raises
    ------
    DamagedRecording
        Its annotations cannot be read.
    """
    timeline = read_timeline(header)
    n_samples = header.n_records * header.per_record
    marks = [(_sample_at(mark.onset_s, header, timeline), mark.text) for mark in timeline.annotations]
    found, joints, outside = _inside(marks, n_samples)
    jumps = np.abs(np.diff(timeline.record_onsets_s) - header.record_s) * header.rate_hz > 0.5
    paused = {int(record + 1) * header.per_record for record in np.flatnonzero(jumps)}
    boundaries = sorted(joint for joint in paused | joints if 0 < joint < n_samples)
    pauses = [f"Pauses in the recording: {len(boundaries)}; nothing is joined across a pause."]
    kind = "EDF" if header.sample_bytes == 2 else "BDF"
    return Source(
        format=kind + "+" if any(signal.holds_annotations for signal in header.signals) else kind,
        rate_hz=header.rate_hz,
        n_samples=n_samples,
        channels=header.channels(),
        found=found,
        boundaries=tuple(boundaries),
        paths=(header.path,),
        notes=(*header.notes, *(pauses if boundaries else ()), *outside),
        left_out=header.left_out_names,
    )


def raw_source(
    path: Path, raw: Any, kind: str, paths: tuple[Path, ...], warned: tuple[str, ...] = (), unit: str = "V"
) -> Source:
    """Describe a recording that the reader library has opened.

    Parameters
    ----------
    path : Path
        The file that was named.
    raw : mne.io.Raw
        The same, opened.
    kind : str
        The kind of file, in words.
    paths : tuple of Path
        All files it consists of.
    warned : tuple of str
        Further notes.
    unit : {"V", "uV"}
        What the library's numbers of electrodes really are.

    Raises
    ------
    UnusableChannels
    """
    rate_hz, n_samples = float(raw.info["sfreq"]), int(raw.n_times)
    check_names(raw.ch_names, path.name)
    channels = _with_info(map(_library_channel, raw.info["chs"], raw.get_channel_types()), raw.info)
    if unit == "uV":
        micro = power_of_ten(-6)
        channels = tuple(
            replace(one, scale_v=micro, unit=unit) if one.unit == "V" else one for one in channels
        )
    marks: list[tuple[float | None, str]] = []
    boundaries: set[int] = set()
    coarsest = 0.0
    for entry in raw.annotations:
        text, onset_s = str(entry["description"]), float(entry["onset"])
        # Onsets are kept in 32 bits: a whole sample within their rounding is that sample.
        rounding = float(np.spacing(np.float32(onset_s))) * rate_hz / 2
        sample = whole_if_close(onset_s * rate_hz - raw.first_samp, max(rounding, _WHOLE_WITHIN))
        if text.lower() in _JOINS:
            # Some write the joint between two samples: the later one starts the next segment.
            boundaries.add(math.ceil(sample))
            continue
        if text.lower() == _SKIP:
            boundaries |= {round(sample), round(sample + float(entry["duration"]) * rate_hz)}
            continue
        coarsest = max(coarsest, rounding)
        marks.append((sample, text))
    found, joints, notes = _inside(marks, n_samples)
    if coarsest > 0.25:
        notes.append(f"Annotation times are rounded in the file, by up to {coarsest:.1f} samples.")
    others = [channel.name for channel in channels if channel.type is ChannelType.MISC]
    if others:
        notes.append(f"Taken as misc: {', '.join(others)}.")
    if raw.info["bads"]:
        notes.append(
            "Bad according to the file, which alone leaves nothing out (name them in the plan or the marks): "
            f"{', '.join(raw.info['bads'])}."
        )
    return Source(
        format=kind,
        rate_hz=rate_hz,
        n_samples=n_samples,
        channels=channels,
        found=found,
        boundaries=tuple(sorted(sample for sample in boundaries | joints if 0 < sample < n_samples)),
        paths=paths,
        notes=(*warned, *notes),
    )


def check_fif(path: Path, *, first: bool = True) -> None:
    """Follow the entries of a FIF file to its last, and look at the channel names on the way.

    The reader library reads a file that was cut short as if it were whole, renames channels that share a
    name, and opens a later part of a split recording as if it were all of it.

    Parameters
    ----------
    path : Path
        The file.
    first : bool
        Whether it must not continue another file.

    Raises
    ------
    UnknownFormat, MissingPart, DamagedRecording, UnusableChannels
    """
    names: list[str] = []
    opener = gzip.open if path.name.lower().endswith(".gz") else open
    try:
        with cast("IO[bytes]", opener(path, "rb")) as file:
            link = 0
            while link != _FIF_LAST:
                kind, size, link = _fif_entry(file, path)
                content = file.read(size) if kind in (_FIF_CHANNEL, _FIF_ROLE) else b""
                if first and kind == _FIF_ROLE and content == _FIF_FOLLOWS:
                    raise UnknownFormat(
                        "it continues another file of the same recording",
                        where=path.name,
                        todo="Open the first file of the recording; the others are found by themselves",
                    )
                if kind == _FIF_CHANNEL:
                    names.append(content[80:96].split(b"\0")[0].decode("latin-1"))
                elif size and not content:
                    # Reading its last byte shows whether the entry is whole; seeking alone would not.
                    file.seek(size - 1, 1)
                    content = file.read(1)
                if size and not content:
                    raise _cut_short(path)
                if 0 < link < file.tell():
                    raise _cut_short(path)
                if link > 0:
                    file.seek(link)
            while opener is gzip.open and file.read(_PACKED_CHUNK):
                pass  # only behind the last byte stands the sum that tells whether it was packed whole
    except (EOFError, gzip.BadGzipFile, zlib.error) as error:
        raise _cut_short(path) from error
    except OSError as error:
        raise missing(path, error) from error
    check_names(names, path.name)


def _fif_entry(file: IO[bytes], path: Path) -> tuple[int, int, int]:
    """Read the head of one entry: kind, size and link."""
    head = file.read(16)
    if len(head) < 16:
        raise _cut_short(path)
    kind, _, size, link = (int(number) for number in np.frombuffer(head, ">i4"))
    if size < 0:
        raise _cut_short(path)
    return kind, size, link


def _cut_short(path: Path) -> DamagedRecording:
    return DamagedRecording(
        "the file ends before its last entry", where=path.name, todo="Copy it again, or save it again"
    )


def _library_channel(described: Any, kind: str) -> Channel:
    place = np.asarray(described["loc"][:3], dtype=np.float64)
    known = bool(np.isfinite(place).all() and place.any())
    name = str(described["ch_name"])
    kind_here = LIBRARY_TYPES.get(kind, ChannelType.MISC)
    unit = "no unit" if kind_here in (ChannelType.TRIGGER, ChannelType.MISC) else "V"
    if kind_here is ChannelType.EEG:  # what the library says where a file says nothing
        kind_here = type_by_name(name)
    return Channel(
        name=name,
        type=kind_here,
        position_m=(float(place[0]), float(place[1]), float(place[2])) if known else None,
        unit=unit,
    )


def _with_info(channels: Iterable[Channel], info: Any) -> tuple[Channel, ...]:
    """Add filters and status; the library writes 0 and half the rate where a file names no filter."""
    highpass_hz, lowpass_hz, bad = float(info["highpass"]), float(info["lowpass"]), set(info["bads"])
    return tuple(
        channel
        if channel.type is ChannelType.TRIGGER
        else replace(
            channel,
            highpass_hz=highpass_hz if highpass_hz > 0 else None,
            lowpass_hz=lowpass_hz if lowpass_hz < info["sfreq"] / 2 else None,
            status="bad" if channel.name in bad else "",
        )
        for channel in channels
    )


def _sample_at(onset_s: float, header: EdfHeader, timeline: Timeline) -> float | None:
    """Sample at a time on the file's clock; None inside a pause."""
    onsets_s = timeline.record_onsets_s
    record = max(
        int(np.searchsorted(onsets_s, onset_s + _WHOLE_WITHIN / header.rate_hz, side="right")) - 1, 0
    )
    inside = whole_if_close((onset_s - float(onsets_s[record])) * header.rate_hz, _WHOLE_WITHIN)
    last = record == header.n_records - 1
    if inside >= header.per_record and header.interrupted and not last:
        return None
    return record * header.per_record + inside


def _inside(
    marks: Iterable[tuple[float | None, str]], n_samples: int
) -> tuple[tuple[Found, ...], set[int], list[str]]:
    """Split annotations into markers on a recorded sample, joints of segments, and notes about the others."""
    found: list[Found] = []
    outside: list[str] = []
    for sample, text in marks:
        if sample is None or not 0 <= sample <= n_samples - 1:
            outside.append(" ".join(text.split()))
        else:
            found.append((sample, *split_at_slash(text)))
    kept, joints, n_sync = set_aside(found)
    notes = sync_notes(n_sync)
    if outside:
        notes.append(f"Left out, because they lie outside the recorded samples: {', '.join(outside)}.")
    return tuple(kept), joints, notes
