"""The examples of the guide's page on trials are read as they are printed, and mean what the page says."""

from __future__ import annotations

import re

from pulsemend.model.label_columns import known_columns, rule_columns
from pulsemend.model.marks_file import parse_marks
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.plan_guide import GUIDE
from pulsemend.model.trial_kinds import kinds, slot_names, variants
from pulsemend.model.vocabulary import Role

PAGE = (GUIDE / "trials.md").read_text("utf-8")
BLOCKS = re.findall(r"^```toml\n(.*?)^```", PAGE, re.DOTALL | re.MULTILINE)
MARKS = [block for block in BLOCKS if block.startswith("pulsemend_marks")]
FILE = parse_plan("\n".join(block for block in BLOCKS if block not in MARKS))
PLAN = FILE.plan


def test_every_fenced_example_is_read() -> None:
    assert PAGE.count("```") == 2 * len(BLOCKS)
    assert FILE.warnings == ()
    assert len(MARKS) == 1
    assert parse_marks(MARKS[0]).marks.cures_accepted == ("stuck bit 7", "doubled marker arrow left")


def test_kinds_and_repeats() -> None:
    assert kinds(PLAN) == ("one arrow", "two arrows")
    numbered = [f"{name}{repeat}" for repeat in (1, 2, 3) for name in ("probe", "answer")]
    assert slot_names(PLAN) == ("sample", "cue1", "pulse1", *numbered, "cue2")
    assert {(one.kind, one.repeats["attempt"], one.slots[-1].slot) for one in variants(PLAN)} == {
        *(("one arrow", times, f"answer{times}") for times in (1, 2, 3)),
        *(("two arrows", times, "cue2") for times in (1, 2, 3)),
    }


def test_bits() -> None:
    assert [PLAN.role_of(code) for code in ("16", "S 17", "32")] == [Role.PROBE, Role.PROBE, Role.RESPONSE]
    assert [PLAN.labels_of(code)["match"] for code in ("16", "S 17")] == ["different", "same"]


def test_columns_that_the_page_names() -> None:
    assert {"kind", "block", "pulse1.source", "cue1.item", "second", "before"} <= {*known_columns(PLAN)}
    assert rule_columns(PLAN) == ("cued", "order", "uncued")
