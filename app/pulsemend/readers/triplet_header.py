"""The text files of a triplet: header (.vhdr) and markers (.vmrk), an INI dialect of their own.

Two things keep a general INI parser from reading them: free text after ``[Comment]``, and commas inside
values that are written as a backslash and a one.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path, PureWindowsPath

import numpy as np

from pulsemend.errors import DamagedRecording, MissingPart, UnknownFormat
from pulsemend.model.recording import Channel
from pulsemend.readers.channel_types import misc_notes, type_of
from pulsemend.readers.common import check_names, missing, power_of_ten
from pulsemend.readers.recorder_comment import read_comment, with_comment

SampleType = np.dtype[np.int16] | np.dtype[np.int32] | np.dtype[np.float32]

_VOLTS: dict[str, float] = {
    unit: power_of_ten(exponent)
    for unit, exponent in {"V": 0, "mV": -3, "uV": -6, "\u00b5V": -6, "\u03bcV": -6, "nV": -9}.items()
}
_SAMPLE_TYPES = {"INT_16": "i2", "INT_32": "i4", "IEEE_FLOAT_32": "f4"}
_HEAD_RADIUS_M = 0.095  # for directions without a distance; only the direction is used further on
_EXPORT_AGAIN = "Export the recording again as binary, in the time domain"

Sections = dict[str, dict[str, str]]
_ENOUGH_DECIMALS = 3
_CODEPAGE = re.compile(rb"^\s*codepage\s*=\s*([\w-]+)", re.IGNORECASE | re.MULTILINE)
_ONE_BYTE = re.compile(r"(windows-|cp|iso-?8859-|koi8-)\w+")


@dataclass(frozen=True)
class _Content:
    """A file in parts: sections of entries, the lines of its comment, and how it is written."""

    sections: Sections
    comment: tuple[str, ...]
    codepage: str


@dataclass(frozen=True)
class TripletHeader:
    """What a header file says.

    Parameters
    ----------
    rate_hz : float
    channels : tuple of Channel
    sample_type : dtype
        How one stored number is written, byte order included.
    by_channel : bool
        Whether each channel stands in one piece (vectorized) instead of each instant (multiplexed).
    n_samples : int or None
        Number of samples, if the header gives it.
    data_name, marker_name : str
        File names as written, without folder; ``marker_name`` empty if there is none.
    notes : tuple of str
    reference : str
        Name of the reference of all channels, if the header gives one.
    codepage : str
        How its text is written, in Python's words; empty for UTF-8.
    """

    rate_hz: float
    channels: tuple[Channel, ...]
    sample_type: SampleType
    by_channel: bool
    n_samples: int | None
    data_name: str
    marker_name: str
    notes: tuple[str, ...]
    reference: str = ""
    codepage: str = ""


@dataclass(frozen=True)
class MarkerLine:
    """One entry of a marker file; ``position`` counts samples from 1."""

    type: str
    text: str
    position: int


def read_header(path: Path) -> TripletHeader:
    """Read a header file.

    Raises
    ------
    MissingPart, UnknownFormat, DamagedRecording, UnusableChannels
    """
    content = _content(path, "Header File")
    entries = _Entries(path, content.sections)
    if entries.word("Common Infos", "DataFormat", "BINARY") != "BINARY":
        raise UnknownFormat("its samples are written as text", where=path.name, todo=_EXPORT_AGAIN)
    if entries.word("Common Infos", "DataType", "TIMEDOMAIN") != "TIMEDOMAIN":
        raise UnknownFormat("its data are not samples over time", where=path.name, todo=_EXPORT_AGAIN)
    orientation = entries.word("Common Infos", "DataOrientation", "MULTIPLEXED")
    if orientation not in ("MULTIPLEXED", "VECTORIZED"):
        raise UnknownFormat(f"unknown data orientation {orientation}", where=path.name, todo=_EXPORT_AGAIN)
    interval_us = entries.number("Common Infos", "SamplingInterval")
    if not (math.isfinite(interval_us) and interval_us > 0):
        raise entries.damaged(f"SamplingInterval is {interval_us}")
    rate_hz, rate_notes = _rate(entries.text("Common Infos", "SamplingInterval"), interval_us)
    data_points = entries.text("Common Infos", "DataPoints", "")
    data_name = entries.text("Common Infos", "DataFile", "")
    if not data_name:
        raise entries.damaged("it names no DataFile")
    channels, notes = _channels(entries)
    comment = read_comment(content.comment)
    return TripletHeader(
        rate_hz=rate_hz,
        channels=with_comment(channels, comment),
        sample_type=_sample_type(entries),
        by_channel=orientation == "VECTORIZED",
        n_samples=entries.whole("Common Infos", "DataPoints") if data_points else None,
        data_name=_file_name(data_name, path),
        marker_name=_file_name(entries.text("Common Infos", "MarkerFile", ""), path),
        notes=(*notes, *rate_notes),
        reference=comment.reference,
        codepage=content.codepage,
    )


def _rate(written: str, interval_us: float) -> tuple[float, list[str]]:
    """Turn an interval into a rate; one that is a whole rate's, to its last digit, stands for that rate."""
    rate_hz = power_of_ten(6) / interval_us
    whole = math.floor(rate_hz + 0.5)
    decimals = len(written.partition(".")[2])
    if (
        whole == rate_hz
        or whole == 0
        or decimals < _ENOUGH_DECIMALS
        or not written.replace(".", "").isdecimal()
    ):
        return rate_hz, []
    if f"{power_of_ten(6) / whole:.{decimals}f}" != written:
        return rate_hz, []
    return float(whole), [f"The sampling interval, {written} microseconds, stands for {whole} Hz."]


def read_markers(path: Path, codepage: str = "") -> Iterator[MarkerLine]:
    """Read the entries of a marker file in file order.

    Parameters
    ----------
    path : Path
        The file.
    codepage : str
        That of the header, for a marker file that names none.

    Raises
    ------
    MissingPart, UnknownFormat, DamagedRecording
    """
    for key, value in _content(path, "Marker File", codepage).sections.get("marker infos", {}).items():
        fields = [field.replace("\\1", ",") for field in value.split(",")]
        if not key.startswith("mk"):
            continue
        if len(fields) < 3 or not _is_whole(fields[2]):
            raise DamagedRecording(
                f"entry {key.capitalize()} has no position: {value}",
                where=path.name,
                todo="Correct the entry or copy the file again",
            )
        yield MarkerLine(fields[0], fields[1], int(fields[2]))


class _Entries:
    """Typed look-ups in the sections of one file, with its name for errors."""

    def __init__(self, path: Path, sections: Sections) -> None:
        self.path = path
        self.sections = sections

    def damaged(self, what: str) -> DamagedRecording:
        return DamagedRecording(what, where=self.path.name, todo="Correct the header or export again")

    def text(self, section: str, key: str, default: str | None = None) -> str:
        value = self.sections.get(section.lower(), {}).get(key.lower(), default)
        if value is None:
            raise self.damaged(f"the entry {key} of [{section}] is missing")
        return value

    def word(self, section: str, key: str, default: str | None = None) -> str:
        return self.text(section, key, default).upper()

    def number(self, section: str, key: str) -> float:
        value = self.text(section, key)
        try:
            return float(value)
        except ValueError:
            raise self.damaged(f"{key} is not a number: {value}") from None

    def whole(self, section: str, key: str) -> int:
        value = self.text(section, key)
        if not _is_whole(value):
            raise self.damaged(f"{key} is not a whole number: {value}")
        return int(value)


def _is_whole(text: str) -> bool:
    return text.strip().removeprefix("-").isdecimal()


def _content(path: Path, kind: str, codepage: str = "") -> _Content:
    """Split a file into sections of entries, names and keys in lower case, and the comment behind them."""
    try:
        written = path.read_bytes()
    except OSError as error:
        raise missing(path, error) from error
    text, codepage = _decoded(written, codepage)
    lines = text.splitlines()
    if not lines or f"data {kind}".lower() not in lines[0].lower().replace("exchange ", ""):
        raise UnknownFormat(
            f"the first line does not say that this is a {kind.lower()} of a triplet",
            where=path.name,
            todo="Check that the right file was copied",
        )
    sections: Sections = {}
    entries: dict[str, str] = {}
    for number, line in enumerate(map(str.strip, lines[1:]), start=2):
        if line.lower() == "[comment]":
            return _Content(sections, tuple(lines[number:]), codepage)
        if line.startswith("[") and line.endswith("]"):
            entries = sections.setdefault(line[1:-1].strip().lower(), {})
        elif line and not line.startswith(";"):
            key, _, value = line.partition("=")
            entries[key.strip().lower()] = value.strip()
    _check_last_line(path, text, lines[-1])
    return _Content(sections, (), codepage)


def _decoded(written: bytes, codepage: str) -> tuple[str, str]:
    """Text and the code page it took: UTF-8 if it can be that, else the one stated, else Latin-1."""
    try:
        return written.decode("utf-8-sig"), ""
    except UnicodeDecodeError:
        stated = _CODEPAGE.search(written)
        name = stated.group(1).decode("latin-1").lower() if stated else codepage
        name = f"cp{name}" if name.isdecimal() else name
    try:
        if _ONE_BYTE.fullmatch(name):
            return written.decode(name), name
    except (LookupError, UnicodeDecodeError):
        pass  # a name or a byte that the code page does not know: every byte is a letter in Latin-1
    return written.decode("latin-1"), "latin-1"


def _check_last_line(path: Path, text: str, last: str) -> None:
    """Refuse a file that ends inside an entry: a resolution or position that lost digits would be wrong."""
    key, _, value = last.partition("=")
    fields = value.split(",")
    wanted = {"ch": 4, "mk": 5}.get(key.strip().lower()[:2])
    if text.endswith(("\n", "\r")) or wanted is None or (len(fields) >= wanted and fields[-1].strip()):
        return
    raise DamagedRecording(
        f"the file ends inside its entry {key.strip()}",
        where=path.name,
        todo="Copy it again; if the entry is whole, end it with a line break",
    )


def _file_name(written: str, header: Path) -> str:
    """Name of a part: any folder written before it is ignored, ``$b`` stands for the header's own name."""
    return PureWindowsPath(written.replace("$b", header.stem)).name


def _sample_type(entries: _Entries) -> SampleType:
    written = entries.word("Binary Infos", "BinaryFormat", "INT_16")
    if written not in _SAMPLE_TYPES:
        raise UnknownFormat(
            f"samples of the type {written} are not read; known are {', '.join(_SAMPLE_TYPES)}",
            where=entries.path.name,
            todo=_EXPORT_AGAIN,
        )
    big = entries.word("Binary Infos", "UseBigEndianOrder", "NO") == "YES"
    sample_type: SampleType = np.dtype((">" if big else "<") + _SAMPLE_TYPES[written])
    return sample_type


def _channels(entries: _Entries) -> tuple[tuple[Channel, ...], tuple[str, ...]]:
    n_channels = entries.whole("Common Infos", "NumberOfChannels")
    channels = tuple(_channel(entries, number) for number in range(1, n_channels + 1))
    check_names([channel.name for channel in channels], entries.path.name)
    if f"ch{n_channels + 1}" in entries.sections.get("channel infos", {}):
        raise entries.damaged(f"it describes more channels than its NumberOfChannels, {n_channels}")
    return channels, misc_notes(channels, _VOLTS)


def _channel(entries: _Entries, number: int) -> Channel:
    fields = entries.text("Channel Infos", f"Ch{number}").split(",")
    if len(fields) < 3:
        raise entries.damaged(f"channel {number} is described by fewer than three fields")
    name, reference, resolution, unit = (
        field.replace("\\1", ",").strip() for field in (*fields, *[""] * 4)[:4]
    )
    if not name:
        raise entries.damaged(f"channel {number} has no name")
    unit = unit or "uV"
    try:
        per_step = float(resolution or 1)
    except ValueError:
        raise entries.damaged(f"the resolution of channel {name} is not a number: {resolution}") from None
    if not (math.isfinite(per_step) and per_step != 0):
        raise entries.damaged(f"the resolution of channel {name} is {resolution}")
    scale_v = per_step * _VOLTS.get(unit, 1.0)
    return Channel(
        name=name,
        type=type_of(name, in_volts=unit in _VOLTS),
        scale_v=scale_v,
        position_m=_position(entries, number),
        unit=unit,
        reference=reference,
        range_v=_range_v(_sample_type(entries), scale_v),
    )


def _range_v(sample_type: SampleType, scale_v: float) -> tuple[float, float] | None:
    """Range of whole numbers; floating ones have none."""
    if sample_type.kind != "i":
        return None
    half = 1 << (8 * sample_type.itemsize - 1)
    low, high = sorted((-half * scale_v, (half - 1) * scale_v))
    return low, high


def _position(entries: _Entries, number: int) -> tuple[float, float, float] | None:
    """Position from radius (mm, or 1 for a direction alone), inclination and azimuth in degrees."""
    written = entries.text("Coordinates", f"Ch{number}", "")
    if not written:
        return None
    try:
        radius, inclination, azimuth = (float(field) for field in written.split(",")[:3])
    except ValueError:
        raise entries.damaged(
            f"the coordinates of channel {number} are not three numbers: {written}"
        ) from None
    if radius == 0:  # written for channels that are not on the head
        return None
    radius_m = _HEAD_RADIUS_M if radius == 1 else radius * power_of_ten(-3)
    theta, phi = math.radians(inclination), math.radians(azimuth)
    return (
        radius_m * math.sin(theta) * math.cos(phi),
        radius_m * math.sin(theta) * math.sin(phi),
        radius_m * math.cos(theta),
    )


def find_part(header: Path, written: str, suffix: str) -> tuple[Path, str]:
    """Find a file that the header names, or the one beside it that bears the header's own name.

    Returns
    -------
    path : Path
    note : str
        Empty, or what was done about a name that leads nowhere.

    Raises
    ------
    MissingPart
    """
    named = header.with_name(written)
    if named.is_file():
        return named, ""
    own = header.with_suffix(suffix)
    if own.is_file():
        return own, f"The header names {written}, which is not there; {own.name} was taken instead."
    nor = "" if own.name == written else f", nor is {own.name}"
    raise MissingPart(
        f"the file {written}, named in the header, is not there{nor}",
        where=header.name,
        todo="Put all files of the recording into one folder",
    )
