"""The words of the window about a check are those of the command."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

import pytest

from pulsemend.commands.check import check_lines
from pulsemend.mending.check import CheckItem, CheckResult
from pulsemend.mending.verdict import problem_of, verdict


@pytest.mark.parametrize("passed", [True, False])
@pytest.mark.parametrize("kind", ["integrity", "readiness"])
def test_words_are_the_commands(kind: Literal["integrity", "readiness"], passed: bool) -> None:
    item = CheckItem(
        "rank", "rank of the samples", "12", "at least 30", passed, kind, "" if passed else "here"
    )
    (line,) = [line for line in check_lines(CheckResult(Path("set"), (item,))) if "rank of" in line]
    assert line.strip().startswith(f"{verdict(item)}  ")


def test_a_problem_names_value_limit_and_place() -> None:
    item = CheckItem("rank", "rank of the samples", "12", "at least 30", False, "readiness", "C3 is flat")
    assert problem_of(item) == "LOOK AT: rank of the samples: 12; limit: at least 30 (C3 is flat)."
