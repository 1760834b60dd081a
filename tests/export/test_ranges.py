"""Readiness names epochs far larger than the others: a pulse that nobody marked looks like one."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from pulsemend.export.check_items import CheckItem
from pulsemend.export.contents import SetContents
from pulsemend.export.read_set import check_set
from pulsemend.model.vocabulary import ChannelType
from pulsemend.progress import finish
from support.written_sets import make_contents, make_data, write_set


def item_of(contents: SetContents, tops_v: list[float], channel: int, parent: Path) -> CheckItem:
    """Write a set of sines of 10 uV, with one larger sample per epoch in one channel, and check it."""
    shape = contents.shape
    _, replaced = make_data(contents)
    data = np.tile(10e-6 * np.sin(np.linspace(0, 20, shape[2])), (shape[0], shape[1], 1))
    data[:, channel, 5] = tops_v
    folder = write_set(contents, parent, data, replaced)
    result = finish(check_set(folder))
    (item,) = (one for one in result.items if one.id == "ranges")
    return item


def good_eeg(contents: SetContents) -> list[int]:
    return [
        place
        for place, one in enumerate(contents.channels)
        if one.type is ChannelType.EEG and one.status == "good"
    ]


@pytest.mark.parametrize(("top_v", "passed"), [(100e-6, True), (900e-6, False)])
def test_an_epoch_that_stands_out_is_named(top_v: float, passed: bool, tmp_path: Path) -> None:
    contents = make_contents()
    n_epochs = contents.shape[0]
    tops = [0.0] * (n_epochs - 1) + [top_v]
    item = item_of(contents, tops, good_eeg(contents)[0], tmp_path)
    last = contents.epochs[-1].candidate
    assert item.passed is passed
    assert item.kind == "readiness"
    named = f"{last.rule} trial {last.trial} piece {last.piece}: 910 uV"
    assert item.detail == ("" if passed else named)
    assert item.value == f"{0 if passed else 1} of {n_epochs}; usual range 20 uV"


def test_bad_channels_do_not_count(tmp_path: Path) -> None:
    contents = make_contents()
    bad = [place for place, one in enumerate(contents.channels) if one.status == "bad"]
    assert bad
    item = item_of(contents, [0.0] * (contents.shape[0] - 1) + [5e-3], bad[0], tmp_path)
    assert item.passed
