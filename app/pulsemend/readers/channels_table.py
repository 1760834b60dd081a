"""The table of channels beside a recording: types, status, recorder's filters and reference."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from pulsemend.model.recording import Channel
from pulsemend.model.vocabulary import ChannelType
from pulsemend.readers.channel_types import TABLE_TYPES
from pulsemend.readers.tables_beside import Row, read_rows

_STATUS = ("good", "bad")
_MU = str.maketrans({"\u00b5": "u", "\u03bc": "u"})
VOLTS = ("V", "mV", "uV", "nV")
_OWN_UNITS = ("V", "no unit")  # what readers write that do not know the file's


@dataclass(frozen=True)
class Described:
    """Channels as a table describes them.

    Parameters
    ----------
    channels : tuple of Channel
    notes : tuple of str
    used : bool
        Whether the table was taken.
    """

    channels: tuple[Channel, ...]
    notes: tuple[str, ...]
    used: bool


def describe_channels(path: Path, channels: tuple[Channel, ...], left_out: Collection[str] = ()) -> Described:
    """Give channels what a table says of them; the table counts only if it is one of this recording.

    Parameters
    ----------
    path : Path
        The table.
    channels : tuple of Channel
        Of the recording, as its file describes them.
    left_out : collection of str
        Names of further signals of the file that are not read.

    Raises
    ------
    MissingPart, DamagedRecording
        The table cannot be read whole.
    """
    rows = {row.text("name"): row for row in _named_rows(path)}
    names = {channel.name for channel in channels}
    lost = [channel.name for channel in channels if channel.name not in rows]
    others = [name for name in rows if name not in names and name not in left_out]
    if lost or others:
        differ = [f"it lacks {_some(lost)}"] if lost else []
        differ += [f"the recording lacks {_some(others)}"] if others else []
        note = f"{path.name} is not used, because its rows are not this recording's channels: "
        return Described(channels, (note + "; ".join(differ) + ".",), used=False)
    described = tuple(_described(channel, rows[channel.name]) for channel in channels)
    return Described(described, tuple(_notes(path.name, channels, described, rows)), used=True)


def _named_rows(path: Path) -> list[Row]:
    rows = read_rows(path, ["name", "type"])
    seen: set[str] = set()
    for row in rows:
        name = row.text("name")
        if not name or name in seen:
            raise row.refused(f"channel {name} stands there twice" if name else "it names no channel")
        if row.text("status").lower() not in ("", *_STATUS):
            raise row.refused(f"the status of {name} is {row.text('status')}, neither good nor bad")
        for column in ("low_cutoff", "high_cutoff"):
            if (row.number(column) or 0.0) < 0:
                raise row.refused(f"{column} of {name} is below 0")
        seen.add(name)
    return rows


def _described(channel: Channel, row: Row) -> Channel:
    highpass_hz, lowpass_hz = row.number("low_cutoff"), row.number("high_cutoff")
    return replace(
        channel,
        type=_type(channel, row.text("type")),
        highpass_hz=channel.highpass_hz if highpass_hz is None else highpass_hz,
        lowpass_hz=channel.lowpass_hz if lowpass_hz is None else lowpass_hz,
        reference=row.text("reference") or channel.reference,
        status=row.text("status").lower() or channel.status,
    )


def _type(channel: Channel, word: str) -> ChannelType:
    """Type by the table's word, as far as the samples allow it."""
    kind = TABLE_TYPES.get(word.upper(), ChannelType.MISC) if word else channel.type
    if channel.type is ChannelType.TRIGGER:
        return channel.type  # its markers are known already; none may be lost by a word
    in_volts = channel.unit.translate(_MU) in VOLTS
    return kind if in_volts or kind in (ChannelType.TRIGGER, ChannelType.MISC) else channel.type


def _notes(
    name: str, before: Sequence[Channel], after: Sequence[Channel], rows: Mapping[str, Row]
) -> list[str]:
    changed = [
        f"{new.name} ({new.type.value})"
        for old, new in zip(before, after, strict=True)
        if new.type is not old.type
    ]
    unknown = sorted({row.text("type") for row in rows.values()} - {""})
    unknown = [word for word in unknown if word.upper() not in TABLE_TYPES]
    kept = [
        channel.name
        for channel in after
        if (word := rows[channel.name].text("type"))
        and TABLE_TYPES.get(word.upper(), ChannelType.MISC) is not channel.type
    ]
    bad = [
        channel.name + (f" ({why})" if (why := rows[channel.name].text("status_description")) else "")
        for channel in after
        if rows[channel.name].text("status").lower() == "bad"
    ]
    units = [
        f"{channel.name} ({written}, the file says {channel.unit})"
        for channel in after
        if (written := rows[channel.name].text("units"))
        and channel.unit not in _OWN_UNITS
        and written.translate(_MU) != channel.unit.translate(_MU)
    ]
    notes = {
        f"Types from {name}": changed,
        f"Types that {name} gives and that are not known, taken as misc": unknown,
        f"Types of {name} that do not fit what the file holds, not taken": kept,
        f"Bad according to {name}, which alone leaves nothing out (name them in the plan or the marks)": bad,
        f"Units in {name} that contradict the file's, not taken": units,
    }
    return [f"{what}: {', '.join(which)}." for what, which in notes.items() if which]


def _some(names: Sequence[str]) -> str:
    return ", ".join(names[:6]) + (f" and {len(names) - 6} more" if len(names) > 6 else "")
