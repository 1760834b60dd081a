"""Readiness compares replaced shares: between rules, and between the conditions within a rule."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from pulsemend.export.check_items import CheckItem
from pulsemend.export.contents import SetContents
from pulsemend.export.read_set import check_set
from pulsemend.progress import finish
from support.written_sets import make_contents, make_data, write_set


def item_of(contents: SetContents, counts: tuple[int, int, int], parent: Path) -> CheckItem:
    """Write a set in which so many samples of each epoch's 400 are replaced, and check it."""
    data, _ = make_data(contents)
    replaced = np.zeros(contents.shape, bool)
    epochs = []
    for place, (epoch, count) in enumerate(zip(contents.epochs, counts, strict=True)):
        replaced[place, -1, :count] = True
        epochs.append(dataclasses.replace(epoch, replaced_share=count / 400))
    folder = write_set(dataclasses.replace(contents, epochs=tuple(epochs)), parent, data, replaced)
    result = finish(check_set(folder))
    assert result.ok
    (item,) = (one for one in result.items if one.id == "replaced_by_rule")
    return item


def with_item(items: tuple[str, str, str]) -> SetContents:
    """The small set: one epoch of the rule delay, two of baseline, with their labels."""
    contents = make_contents()
    kept = iter(items)
    ledger = tuple(
        dataclasses.replace(row, labels={"cue1.item": next(kept) if row.kept else "left"})
        for row in contents.ledger
    )
    rows = {(row.rule, row.trial): row for row in ledger}
    epochs = tuple(
        dataclasses.replace(epoch, candidate=rows[epoch.candidate.rule, epoch.candidate.trial])
        for epoch in contents.epochs
    )
    return dataclasses.replace(contents, ledger=ledger, epochs=epochs)


def test_equal_rules_with_unequal_conditions_are_to_be_looked_at(tmp_path: Path) -> None:
    item = item_of(with_item(("left", "left", "right")), (20, 10, 30), tmp_path)
    assert item.value == "delay 5.00%, baseline 5.00%"
    assert not item.passed
    assert item.detail == "baseline, cue1.item: right 7.50%, left 2.50%"
    assert item.kind == "readiness"


@pytest.mark.parametrize(
    ("items", "counts", "passed"),
    [
        (("left", "left", "right"), (20, 18, 22), True),  # 1 percentage point apart
        (("left", "left", "right"), (20, 17, 22), False),
        (("left", "left", "left"), (20, 10, 30), True),  # one condition: nothing is compared
        (("left", "left", "n/a"), (20, 10, 30), True),
        (("left", "left", "left"), (26, 20, 20), False),  # rules alone, as before
    ],
)
def test_limit(
    items: tuple[str, str, str], counts: tuple[int, int, int], passed: bool, tmp_path: Path
) -> None:
    assert item_of(with_item(items), counts, tmp_path).passed == passed
