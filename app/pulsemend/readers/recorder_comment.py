"""What a recorder writes as free text behind a triplet's header: filters, impedances, reference.

The layouts in use differ in their columns, so columns are found by their titles; what is not understood is
left unknown, never guessed.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace

from pulsemend.model.recording import Channel
from pulsemend.readers.common import power_of_ten

_TITLES = re.compile(
    r"#|Name|Phys\. Chn\.|Resolution(?: / Unit| \[[^\]]*\])?|(?:Low|High) Cutoff \[\w+\]|Notch \[\w+\]"
    r"|Series Res\. \[\w+\]|Gradient|Offset|Gain|Coupling|Unit"
)
_MEASURED = re.compile(r"impedances? \[(k?)ohm\] at .*:", re.IGNORECASE)
_REFERENCE = re.compile(r"reference(?: electrode| channel)?(?: name)?\s*[:=]\s*(\S.*)", re.IGNORECASE)
_NOT_MEASURED = "???"


@dataclass(frozen=True)
class RecorderComment:
    """What a comment says.

    Parameters
    ----------
    by_name, by_number : mapping
        Cells of the tables of channels by title: the amplifier's by channel name, those without names by the
        channel's number, from 1.
    impedances_ohm : mapping of str to float or None
        By electrode; None where it was out of range.
    reference : str
        Name of the reference, or empty.
    """

    by_name: Mapping[str, Mapping[str, str]] = field(default_factory=dict)
    by_number: Mapping[int, Mapping[str, str]] = field(default_factory=dict)
    impedances_ohm: Mapping[str, float | None] = field(default_factory=dict)
    reference: str = ""


def read_comment(lines: Sequence[str]) -> RecorderComment:
    """Read the lines behind ``[Comment]``.

    Parameters
    ----------
    lines : sequence of str
        Without line ends.
    """
    by_name: dict[str, Mapping[str, str]] = {}
    by_number: dict[int, Mapping[str, str]] = {}
    for cells in _table_rows(lines):
        if "Name" in cells:
            by_name[cells["Name"]] = cells
        else:
            by_number[int(cells["#"])] = cells
    found = (_REFERENCE.fullmatch(line.strip()) for line in lines)
    named = [match.group(1).strip() for match in found if match]
    return RecorderComment(by_name, by_number, _impedances(lines), named[0] if named else "")


def with_comment(channels: Sequence[Channel], comment: RecorderComment) -> tuple[Channel, ...]:
    """Give channels what the comment says of them.

    A filter that the recorder computed counts like one of its amplifier: the samples went through both.
    """
    described = []
    for number, channel in enumerate(channels, start=1):
        tables = [comment.by_name.get(channel.name, {}), comment.by_number.get(number, {})]
        highpass = [one for cells in tables if (one := _highpass_hz(cells)) is not None]
        lowpass = [one for cells in tables if (one := _cutoff(cells, "High Cutoff")) is not None]
        low_words = {
            text.upper() for cells in tables for title, text in cells.items() if title.startswith("Low")
        }
        gain = _number(tables[0].get("Gain", ""))
        described.append(
            replace(
                channel,
                highpass_hz=max(highpass, default=channel.highpass_hz),
                lowpass_hz=min(lowpass, default=channel.lowpass_hz),
                coupling=tables[0].get("Coupling", "DC" if "DC" in low_words else ""),
                gain=gain,
                impedance_ohm=_impedance(channel.name, comment.impedances_ohm),
            )
        )
    return tuple(described)


def _table_rows(lines: Sequence[str]) -> Iterator[dict[str, str]]:
    """Rows of all tables of channels: cells by title."""
    titles: list[str] = []
    for line in map(str.strip, lines):
        if line.startswith("#"):
            titles = _TITLES.findall(line)
            continue
        cells = re.split(r"\s{2,}|\t", line)
        if titles and cells[0].isdecimal() and len(cells) > 1:
            yield dict(zip(titles, cells, strict=False))
        elif line:
            titles = []


def _highpass_hz(cells: Mapping[str, str]) -> float | None:
    if any(title.startswith("Low") and text.upper() == "DC" for title, text in cells.items()):
        return 0.0
    return _cutoff(cells, "Low Cutoff")


def _cutoff(cells: Mapping[str, str], start: str) -> float | None:
    """Corner frequency; a high-pass may be given as its time constant in seconds."""
    for title, text in cells.items():
        value = _number(text)
        if title.startswith(start) and value is not None and value > 0:
            return 1 / (2 * math.pi * value) if title.endswith("[s]") else value
    return None


def _impedances(lines: Sequence[str]) -> dict[str, float | None]:
    """Last known impedance of every electrode, in ohm."""
    found: dict[str, float | None] = {}
    kilo: float | None = None
    for line in map(str.strip, lines):
        head = _MEASURED.fullmatch(line)
        name, colon, text = line.rpartition(":")
        if head:
            kilo = power_of_ten(3 if head.group(1) else 0)
        elif kilo is None or not colon or "impedance" in line.lower():
            kilo = kilo if line == "" else None
        elif (value := _number(text)) is not None:
            found[name.strip()] = value * kilo
        elif text.strip() != _NOT_MEASURED:
            found[name.strip()] = None
    return found


def _impedance(name: str, impedances: Mapping[str, float | None]) -> float | None:
    """Impedance of a channel: of two electrodes, the worse one."""
    if name in impedances:
        return impedances[name]
    both = [
        impedances[key]
        for key in (f"{name}{gap}{sign}" for gap in ("", " ") for sign in "+-")
        if key in impedances
    ]
    known = [value for value in both if value is not None]
    return max(known) if known and len(known) == len(both) else None


def _number(text: str) -> float | None:
    """Read a number; a decimal comma is understood, a word is none."""
    try:
        value = float(text.strip().replace(",", "."))
    except ValueError:
        return None
    return value if math.isfinite(value) and value >= 0 else None
