"""Groups of channels by the names of the extended 10-20 system."""

from __future__ import annotations

import pytest

from pulsemend.model.recording import Channel
from pulsemend.model.vocabulary import ChannelType
from pulsemend.session.channel_groups import Group, fits, in_group

NAMES = ("Fp1", "AFz", "F8", "FC3", "Cz", "C4", "CP5", "T7", "P10", "POz", "O2", "Iz", "FFC1h", "EXTRA", "X1")
CAP = (*(Channel(name, ChannelType.EEG) for name in NAMES), Channel("P3", ChannelType.EOG))


@pytest.mark.parametrize(
    ("group", "names"),
    [
        (Group.LEFT, {"Fp1", "FC3", "CP5", "T7", "FFC1h", "X1"}),
        (Group.MIDLINE, {"AFz", "Cz", "POz", "Iz"}),
        (Group.RIGHT, {"F8", "C4", "P10", "O2"}),
        (Group.FRONT, {"Fp1", "AFz", "F8"}),
        (Group.CENTRE, {"FC3", "Cz", "C4", "CP5", "T7"}),
        (Group.BACK, {"P10", "POz", "O2", "Iz"}),
        (Group.BAD, {"T7"}),
        (Group.PICKED, {"P3", "Cz"}),
    ],
)
def test_groups(group: Group, names: set[str]) -> None:
    assert {one.name for one in CAP if in_group(one, group, ("T7",), ("P3", "Cz"))} == names


def test_all_takes_channels_without_a_site_too() -> None:
    assert all(in_group(one, Group.ALL, (), ()) for one in CAP)


@pytest.mark.parametrize(
    ("typed", "names"),
    [("fp", {"Fp1"}), ("c4, o2", {"C4", "O2"}), ("", {one.name for one in CAP}), ("nobody", set())],
)
def test_typed_parts_of_names(typed: str, names: set[str]) -> None:
    assert {one.name for one in CAP if fits(one, typed)} == names
