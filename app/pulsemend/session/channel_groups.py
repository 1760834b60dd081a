"""Groups of channels to pick from: by side of the head, region and state. No Qt."""

from __future__ import annotations

import re
from collections.abc import Collection
from enum import StrEnum

from pulsemend.model.recording import Channel
from pulsemend.model.vocabulary import ChannelType

_SITE = re.compile(r"([A-Za-z]+?)(z|\d{1,2}h?)", re.IGNORECASE)
"""A name of the extended 10-20 system: letters of the region, then z or a number."""


class Group(StrEnum):
    """Groups, in the order they are offered."""

    ALL = "all channels"
    LEFT = "left"
    MIDLINE = "midline"
    RIGHT = "right"
    FRONT = "front"
    CENTRE = "centre"
    BACK = "back"
    BAD = "marked bad"
    PICKED = "picked now"


_REGIONS = {
    Group.FRONT: {"fp", "af", "f", "afp"},
    Group.CENTRE: {"fc", "ft", "c", "t", "cp", "tp", "fcc", "ccp"},
    Group.BACK: {"p", "po", "o", "i", "cpp", "ppo", "poo"},
}


def in_group(channel: Channel, group: Group, bad: Collection[str], picked: Collection[str]) -> bool:
    """Whether a channel belongs to a group.

    Parameters
    ----------
    channel : Channel
        Of the recording.
    group : Group
        Sides and regions go by the names of the extended 10-20 system.
    bad, picked : collection of str
        Names marked bad, and names picked now.
    """
    if group is Group.ALL:
        return True
    if group is Group.BAD:
        return channel.name in bad
    if group is Group.PICKED:
        return channel.name in picked
    if channel.type is not ChannelType.EEG or (site := _SITE.fullmatch(channel.name)) is None:
        return False
    region, place = site[1].lower(), site[2].lower()
    if group in _REGIONS:
        return region in _REGIONS[group]
    if place == "z":
        return group is Group.MIDLINE
    return group is (Group.LEFT if int(place.rstrip("h")) % 2 else Group.RIGHT)


def fits(channel: Channel, typed: str) -> bool:
    """Whether a channel's name fits what was typed: any of several parts of names.

    Parameters
    ----------
    channel : Channel
        Of the recording.
    typed : str
        Parts of names with blanks or commas between them; nothing fits everything.
    """
    parts = typed.casefold().replace(",", " ").split()
    return not parts or any(part in channel.name.casefold() for part in parts)
