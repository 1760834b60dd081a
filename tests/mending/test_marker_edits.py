"""Edits of the Markers stage: roles and labels in the plan, cures, markers and the log in the marks."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsemend.errors import PlanError
from pulsemend.mending.marker_edits import (
    Verdict,
    labels_text,
    own_labels,
    parse_labels,
    verdict_on,
    with_ignored,
    with_labels,
    with_log_file,
    with_role,
    with_rows_excluded,
    with_verdict,
    without_codes,
    without_ignored,
    without_rows_excluded,
)
from pulsemend.model.marks import NO_MARKS, MarkerKey
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.vocabulary import Role
from support.marker_study import PLAN


def test_a_role_for_known_and_unknown_codes() -> None:
    plan = parse_plan(PLAN).plan
    changed = with_role(plan, ["S 11", "new"], Role.PROBE)
    assert [(one.code, one.role) for one in changed.markers if one.role is Role.PROBE] == [
        ("S 11", Role.PROBE),
        ("S 31", Role.PROBE),
        ("new", Role.PROBE),
    ]
    assert own_labels(changed, "S 11") == {"item": "left"}
    assert without_codes(changed, ["new"]).role_of("new") is Role.OTHER


def test_labels_of_a_code_that_has_no_table_yet() -> None:
    plan = parse_plan(PLAN).plan
    changed = with_labels(plan, "S 0", {"kind": "rest"})
    assert changed.role_of("S 0") is Role.OTHER
    assert own_labels(changed, "S 0") == {"kind": "rest"}
    assert own_labels(with_labels(plan, "S 11", {}), "S 11") == {}
    assert own_labels(plan, "nobody") == {}


@pytest.mark.parametrize(
    ("text", "labels"),
    [
        ("", {}),
        ("   ", {}),
        ("item = left", {"item": "left"}),
        ("item=left,match = the same ", {"item": "left", "match": "the same"}),
        ('item = "a, b = c", n = 2', {"item": "a, b = c", "n": "2"}),
        ("item = left,", {"item": "left"}),
    ],
)
def test_labels_are_read(text: str, labels: dict[str, str]) -> None:
    assert parse_labels(text) == labels


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("item", "cannot be read"),
        ("item = left right = 2", "cannot be read"),
        ("= left", "cannot be read"),
        ("item = ", "item has no value"),
        ('item = ""', "item has no value"),
        ("item = a, item = b", "item stands there twice"),
        ('item = "a', "cannot be read"),
    ],
)
def test_other_lines_are_refused_in_words(text: str, words: str) -> None:
    with pytest.raises(PlanError, match=words):
        parse_labels(text)


@given(
    st.dictionaries(
        st.from_regex(r"[a-z_]{1,6}", fullmatch=True),
        st.text(
            st.characters(exclude_characters='"', exclude_categories=["C", "Z"]) | st.just(" "), min_size=1
        ),
        max_size=4,
    )
)
def test_labels_come_back_as_written(labels: dict[str, str]) -> None:
    assert parse_labels(labels_text(labels)) == labels


def test_a_cure_is_decided_once() -> None:
    marks = with_verdict(NO_MARKS, "burst", Verdict.REFUSED)
    assert verdict_on(marks, "burst") is Verdict.REFUSED
    marks = with_verdict(marks, "burst", Verdict.ACCEPTED)
    assert (marks.cures_accepted, marks.cures_refused) == (("burst",), ())
    assert with_verdict(marks, "burst", Verdict.OPEN) == NO_MARKS


def test_markers_and_rows() -> None:
    keys = [MarkerKey(9, "b"), MarkerKey(3, "a")]
    marks = with_ignored(with_ignored(NO_MARKS, keys), keys)
    assert marks.markers_ignored == (MarkerKey(3, "a"), MarkerKey(9, "b"))
    assert without_ignored(marks, keys[:1]).markers_ignored == (MarkerKey(3, "a"),)
    marks = with_rows_excluded(with_rows_excluded(NO_MARKS, [7]), [2, 7])
    assert marks.log_rows_excluded == (2, 7)
    assert without_rows_excluded(marks, [7]).log_rows_excluded == (2,)


def test_a_log_beside_the_recording_is_named_by_its_name(tmp_path: Path) -> None:
    recording = tmp_path / "lt01.vhdr"
    assert with_log_file(NO_MARKS, tmp_path / "log.tsv", recording).log_file == "log.tsv"
    other = tmp_path / "other" / "log.tsv"
    marks = with_log_file(NO_MARKS, other, recording)
    assert marks.log_file == str(other)
    assert with_log_file(marks, None, recording) == NO_MARKS
