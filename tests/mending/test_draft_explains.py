"""What a draft says besides roles and slots: faults with their cures, a log beside it, kinds of trial."""

from __future__ import annotations

import re
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pulsemend.mending.draft import draft_plan, write_draft
from pulsemend.mending.draft_log import guess_log, logs_beside
from pulsemend.mending.prepare import marks_path
from pulsemend.mending.study_log import read_study_log
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan, read_plan
from pulsemend.model.recording import Channel, Marker, RecordingFacts
from pulsemend.model.vocabulary import ChannelType
from pulsemend.progress import finish
from pulsemend.readers.opening import open_recording
from pulsemend.resources import sample_folder
from pulsemend.simulate.lantern import make_lantern
from pulsemend.simulate.truth import log_text
from pulsemend.trials.logged import with_log
from pulsemend.trials.matching import match_trials
from support.lantern_log import LOG, N_TRIALS, RATE_HZ, STEM, changed_rows, markers_of, recoded, spec, write

NUMBERS = {"lanterns up": 1, "arrow left": 2, "arrow right": 6, "pulse": 8}


def facts_with(*markers: Marker) -> RecordingFacts:
    return RecordingFacts(
        stem=STEM,
        format="made up",
        rate_hz=1000.0,
        n_samples=round(markers[-1].sample) + 2000,
        channels=(Channel("Cz", ChannelType.EEG),),
        markers=markers,
    )


def uncommented(text: str, section: str) -> str:
    """Take the signs away from a section that is a comment, up to the next empty line."""
    start = text.index(f"# [{section}]\n")
    stop = text.index("\n\n", start)
    return text[:start] + re.sub(r"^# ", "", text[start:stop], flags=re.MULTILINE) + text[stop:]


def draft_of(recording: Path, out: Path) -> str:
    return finish(write_draft(recording, out)).read_text(encoding="utf-8")


def test_faults_are_named_with_the_keys_that_accept_their_cures(tmp_path: Path) -> None:
    stuck = [replace(one, code=str(int(one.code) | 128)) for one in recoded(markers_of(), NUMBERS)]
    recording = write(tmp_path / "in", stuck)
    (tmp_path / "study").mkdir()
    text = draft_of(recording, tmp_path / "study" / "first.toml")
    assert {marker.code for marker in parse_plan(text).plan.markers} == {one.code for one in stuck}
    assert re.search(r"^# - .*[Bb]it 7", text, re.MULTILINE)
    assert re.search(r"^#   cure: ", text, re.MULTILINE)
    cures = tomllib.loads(uncommented(text, "cures"))["cures"]
    assert cures == {"accepted": ["stuck bit 7"]}
    # Accepted as the draft says, the next draft shows the codes as they were meant.
    place = marks_path(tmp_path / "study" / "first.toml", STEM)
    place.parent.mkdir()
    place.write_text('pulsemend_marks = 1\n[cures]\naccepted = ["stuck bit 7"]\n', encoding="utf-8")
    text = draft_of(recording, tmp_path / "study" / "second.toml")
    assert {marker.code for marker in parse_plan(text).plan.markers} == {"1", "2", "6", "8"}
    assert "# By this recording's marks: cure of stuck bit 7 was applied to 60 markers." in text
    assert "# [cures]" not in text


def test_every_cure_is_named_in_full_however_many_there_are() -> None:
    codes = [f"S {number}" for number in range(20, 40)]
    markers = [
        Marker(float(500 + 9000 * round_ + 400 * place + more), code)
        for round_ in range(4)
        for place, code in enumerate(codes)
        for more in (0, 3)
    ]
    cures = tomllib.loads(uncommented(draft_plan(facts_with(*markers)), "cures"))["cures"]
    assert sorted(cures["accepted"]) == sorted(f"doubled marker {code}" for code in codes)


def test_healthy_markers_have_no_word_about_faults(tmp_path: Path) -> None:
    text = draft_of(write(tmp_path / "in"), tmp_path / "plan.toml")
    assert "ault" not in text.replace("default", "")
    assert "[cures]" not in text


@pytest.mark.parametrize("code", ['quote " and \\', "[[x]]", "a = 1 # b", "ü \u2028 \x01 \x85", "\ttab"])
def test_odd_codes_in_faults_keep_a_draft_readable(code: str) -> None:
    markers = [Marker(float(500 + 700 * place + more), code) for place in range(30) for more in (0, 3)]
    text = draft_plan(facts_with(*markers))
    assert "doubled" in text or "less than" in text
    (key,) = tomllib.loads(uncommented(text, "cures"))["cures"]["accepted"]
    assert key == f"doubled marker {code}"
    assert {marker.code for marker in parse_plan(text).plan.markers} == {code}


def with_every_role(text: str) -> Plan:
    return parse_plan(text.replace('role = "undecided"', 'role = "other"')).plan


def test_a_log_beside_the_recording_is_proposed_as_it_joins(tmp_path: Path) -> None:
    recording = write(tmp_path / "in")
    text = draft_of(recording, tmp_path / "plan.toml")
    assert "[log]" not in re.sub(r"^#.*$", "", text, flags=re.MULTILINE)
    assert f'Beside the recording stands "{LOG}": 24 rows, columns "trial", "question"' in text
    assert "24 of 24 rows find their trial" in text
    assert '"arrow_s", "probe_s", "answer_s"' in text
    plan = with_every_role(uncommented(text, "log"))
    assert plan.log.file == "{stem}_log.tsv"
    assert plan.log.time == "arrow_s"
    assert plan.log.columns == ("trial", "question", "asked", "probe", "answer", "correct", "reaction_s")
    opened = open_recording(recording)
    log = read_study_log(opened, plan, NO_MARKS)
    opened.close()
    assert log.table is not None
    trials = match_trials(markers_of(), plan, RATE_HZ).trials
    join = with_log(trials, log.table, plan, NO_MARKS, RATE_HZ).join
    assert join is not None
    assert len(join.pairs) == 2 * N_TRIALS


def test_two_rows_of_a_trial_go_to_two_slots_of_one_role(tmp_path: Path) -> None:
    """With a start of its own, a trial has both arrows."""
    markers = [
        replace(one, code="sample") if one.code == "lanterns up" else one
        for one in markers_of()
        if one.code != "dot"
    ]
    text = draft_of(write(tmp_path / "in", markers), tmp_path / "plan.toml")
    plan = with_every_role(uncommented(text, "log"))
    assert plan.log.slots == ("cue1", "cue2")
    assert plan.log.time == "arrow_s"


def test_times_in_milliseconds_and_with_decimal_comma_are_seen(tmp_path: Path) -> None:
    def changed(rows: list[list[str]]) -> list[list[str]]:
        place = rows[0].index("arrow_s")
        return [
            ["at", *rows[0][:1]],
            *([f"{float(row[place]) * 1000:.1f}".replace(".", ","), row[0]] for row in rows[1:]),
        ]

    recording = write(tmp_path / "in", log=changed_rows(changed))
    text = draft_of(recording, tmp_path / "plan.toml")
    log = with_every_role(uncommented(text, "log")).log
    assert (log.time, log.unit, log.columns) == ("at", "ms", ("trial",))


@pytest.mark.parametrize("first", [0, 100])
def test_a_long_log_is_found_wherever_it_begins(first: int, tmp_path: Path) -> None:
    """Its first rows tell the way, unless the recording began long before."""
    lantern = make_lantern(replace(spec(), trials=110))
    rows = log_text(lantern.schedule.questions).splitlines()
    (tmp_path / f"{STEM}_log.tsv").write_text("\n".join([rows[0], *rows[1 + first :]]), encoding="utf-8")
    (table,) = logs_beside(tmp_path, STEM)
    plan = read_plan(sample_folder() / "lantern.toml").plan
    facts = replace(facts_with(*lantern.markers), rate_hz=RATE_HZ)
    found = guess_log(table, facts, plan)
    assert found is not None
    assert found.times == ("arrow_s", "probe_s", "answer_s")
    assert found.joined == found.rows == len(rows) - 1 - first


def test_another_log_is_named_but_not_joined(tmp_path: Path) -> None:
    rng = np.random.default_rng(3)
    times = np.cumsum(rng.uniform(2.0, 9.0, 24))
    log = "onset,answer\n" + "".join(f"{time:.3f},a\n" for time in times)
    recording = write(tmp_path / "in", log=log)
    text = draft_of(recording, tmp_path / "plan.toml")
    assert "No column of it could be joined" in text
    assert parse_plan(uncommented(text, "log").replace('"undecided"', '"other"')).plan.log.file


def test_what_is_no_log_is_not_taken_for_one(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", log="")
    for name, content in {
        f"{STEM}_events.tsv": "onset\tduration\n1\t0\n",
        f"{STEM}_channels.tsv": "name\ttype\nCz\tEEG\n",
        f"{STEM}b_log.tsv": "trial\ttime\n1\t2\n",
        "other_log.tsv": "trial\ttime\n1\t2\n",
        f"{STEM}_notes.txt": "",
        f"{STEM}_log.json": "{}",
    }.items():
        (tmp_path / "in" / name).write_text(content, encoding="utf-8")
    assert logs_beside(recording.parent, STEM) == ()
    for name in ("_log.csv", ".txt", "_beh.tsv"):
        (tmp_path / "in" / f"{STEM}{name}").write_text("trial\ttime\n1\t2\n", encoding="utf-8")
    assert [table.name.removeprefix(STEM) for table in logs_beside(recording.parent, STEM)] == [
        ".txt", "_beh.tsv", "_log.csv"
    ]  # fmt: skip


def named_trials(*lacking: tuple[str, ...]) -> list[Marker]:
    """Trials of fixation, sample, cue, pulse, probe and response, some without some of them."""
    at = {"fixation": 0, "sample": 1500, "cue": 3200, "pulse": 4900, "probe": 6700, "response": 7400}
    return [
        Marker(float(1000 + 10_000 * place + late + 13 * (place % 7)), name)
        for place, missing in enumerate(lacking)
        for name, late in at.items()
        if name not in missing
    ]


def test_trials_that_run_otherwise_are_told_with_their_counts() -> None:
    text = draft_plan(facts_with(*named_trials(*([()] * 14 + [("pulse",)] * 6))))
    assert "# decide: trials do not all run alike." in text
    assert "# 14 trials: fixation, sample, cue, pulse, probe" in text
    assert "# 6 trials: fixation, sample, cue, probe" in text
    parse_plan(text)


def test_missing_answers_and_single_losses_are_no_kinds() -> None:
    text = draft_plan(facts_with(*named_trials(*([()] * 14 + [("response",)] * 5 + [("cue",)]))))
    assert "do not all run alike" not in text
