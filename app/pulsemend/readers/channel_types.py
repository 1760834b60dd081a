"""What a channel records, from its name and from the words of files and tables.

A name of the extended 10-20 system is EEG and nothing else can be read into it; only then are the usual names
of eye, muscle, heart, sensor and trigger channels looked for.
"""

from __future__ import annotations

import re
from collections.abc import Container, Iterable

from pulsemend.model.recording import Channel
from pulsemend.model.vocabulary import ChannelType
from pulsemend.readers.names import standard_positions

# Longer words may stand anywhere in a name; short ones only at the start of a word, so that they cannot be
# found inside another. Order matters: "ECG pulse" is heart, "Trig mic" a trigger.
_WORDS = (
    (ChannelType.EOG, r"eog|ocul", r"[hv]eo|eye ?[lrhv]?\d?|[lr]oc|[ils]o[12]"),
    (ChannelType.ECG, r"ecg|ekg|cardi|heart", ""),
    (ChannelType.EMG, r"emg|musc|masseter|chin", r"fdi|apb|adm|fcr|ecr"),
    (ChannelType.TRIGGER, r"trig|sti ?\d{3}", r"status|stim|marker|events?|ttl"),
    (
        ChannelType.MISC,
        r"photo|diode|audio|micro|accel|gyro|pleth|breath|thermis|gaze|pupil|joystick|spo2|sao2|sensor",
        r"mic|acc|gsr|eda|scr|ppg|resp(?:iration)?|temp(?:erature)?|light|sound|force|button|aux|bip|exg|misc",
    ),
)
_PATTERNS = tuple(
    # A word ends where its letters end, or is followed by a side or an axis ("VEOGl", "AccX").
    (kind, re.compile(anywhere + (rf"|(?<![a-z])(?:{starts})(?![a-z]{{2}})" if starts else "")))
    for kind, anywhere, starts in _WORDS
)
_EYE_MOVES = re.compile(r"gaze|pupil|eye[ _-]?[xy]")

LIBRARY_TYPES = {
    "eeg": ChannelType.EEG,
    "eog": ChannelType.EOG,
    "ecg": ChannelType.ECG,
    "emg": ChannelType.EMG,
    "stim": ChannelType.TRIGGER,
}
"""Words of the reader library; everything else is misc."""

TABLE_TYPES = {
    "EEG": ChannelType.EEG,
    **dict.fromkeys(("EOG", "HEOG", "VEOG"), ChannelType.EOG),
    "ECG": ChannelType.ECG,
    "EMG": ChannelType.EMG,
    "TRIG": ChannelType.TRIGGER,
    **dict.fromkeys(
        ("AUDIO", "EYEGAZE", "GSR", "MISC", "OTHER", "PPG", "PUPIL", "REF", "RESP", "SYSCLOCK", "TEMP"),
        ChannelType.MISC,
    ),
}
"""Words of the tables of channels beside a recording."""


def type_by_name(name: str) -> ChannelType:
    """Type of a voltage channel whose file says no more than its name."""
    if standard_positions([name]):
        return ChannelType.EEG
    text = name.strip().lower().replace("_", " ")
    if _EYE_MOVES.search(text):
        return ChannelType.MISC
    return next((kind for kind, pattern in _PATTERNS if pattern.search(text)), ChannelType.EEG)


def type_of(name: str, *, in_volts: bool) -> ChannelType:
    """Type of a channel from its name and whether its unit is one of volts."""
    kind = type_by_name(name)
    return kind if in_volts or kind is ChannelType.TRIGGER else ChannelType.MISC


def misc_notes(channels: Iterable[Channel], volts: Container[str]) -> tuple[str, ...]:
    """Say which channels were taken as misc, because of their unit or their name.

    Parameters
    ----------
    channels : iterable of Channel
        Of one recording.
    volts : container of str
        Units of volts.
    """
    misc = [channel for channel in channels if channel.type is ChannelType.MISC]
    by_unit = [f"{channel.name} ({channel.unit})" for channel in misc if channel.unit not in volts]
    by_name = [channel.name for channel in misc if channel.unit in volts]
    notes = []
    if by_unit:
        notes.append(f"Not in volts, so taken as misc with the numbers as written: {', '.join(by_unit)}.")
    if by_name:
        notes.append(f"Taken as misc by their names, so not part of a set: {', '.join(by_name)}.")
    return tuple(notes)
