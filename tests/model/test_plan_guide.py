"""The guide's tables of keys are those of the readers."""

from __future__ import annotations

import re

import pytest

from pulsemend.model.plan_guide import GUIDE, PAGES, key_tables, with_tables
from pulsemend.model.plan_keys import PLAN_KEYS


@pytest.mark.parametrize("name", PAGES)
def test_page_is_up_to_date(name: str) -> None:
    """If not: ``python -m pulsemend.model.plan_guide``."""
    text = (GUIDE / name).read_text("utf-8")
    assert with_tables(text, PAGES[name]) == text


def test_every_key_has_a_row() -> None:
    rows = [line for line in key_tables(PLAN_KEYS).splitlines() if line.startswith("| `")]
    assert len(rows) == len(PLAN_KEYS)
    for row in rows:
        cells = re.split(r"(?<!\\)\|", row)[1:-1]
        assert len(cells) == 4
        assert all(cell.strip() for cell in cells)


def test_facts_of_a_key_are_printed() -> None:
    text = key_tables(PLAN_KEYS)
    for part in (
        "### [pulses]",
        "### [[epochs.rule]]",
        "`window_ms` | the gap",
        "two numbers, the second above the first, each from -1000 to 5000 ms",
        '"covariance"',
        '"hdf5", "fif" (more in a later version)',
        "### [bits.FIELD]",
        "`roles.VALUE`",
        "### [markers.CODE]",
        "### [group.NAME]",
        "### [labels.NAME]",
        "`values.VALUE`",
        "### [stimulation.columns]",
        "`FACT`",
        "`CHANNEL`",
        "`labels.NAME`",
        "must be given",
    ):
        assert part in text


def test_page_without_its_place_is_refused() -> None:
    with pytest.raises(ValueError, match="keys: begin"):
        with_tables("# a page\n", PLAN_KEYS)
