"""A behavioural log on disk, through the whole of `mend`: joined with the clock it was simulated with."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import pytest

from pulsemend.errors import InputError, LogError
from pulsemend.mending.mend import mend
from pulsemend.progress import finish
from pulsemend.simulate.lantern import LanternSpec
from pulsemend.simulate.sample import write_sample
from pulsemend.simulate.schedule import Question
from pulsemend.simulate.truth import LOG_DRIFT, LOG_ZERO_S
from support.lantern_log import (
    LOG,
    N_TRIALS,
    NO_LABELS_OF_LOG,
    PLAN,
    changed_rows,
    dry,
    markers_of,
    questions,
    write,
)
from support.small_lantern import SetOnDisk, changed, make_request, run_mend


@pytest.fixture(scope="module")
def recording(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write(tmp_path_factory.mktemp("recorded"))


@pytest.fixture(scope="module")
def written(recording: Path, tmp_path_factory: pytest.TempPathFactory) -> SetOnDisk:
    return SetOnDisk(run_mend(recording, PLAN, tmp_path_factory.mktemp("mended")).folder)


def truth(trial: int, number: int) -> Question:
    return next(one for one in questions() if (one.trial, one.number) == (trial, number))


def correct(question: Question) -> str:
    return "yes" if question.answer == question.probe else "no"


def test_clock_is_the_one_simulated(recording: Path, tmp_path: Path) -> None:
    """Issue: drift within 3 standard errors of the truth. The log's second is shorter by its drift."""
    decision = dry(recording, PLAN, tmp_path).decision
    assert decision.logged is not None
    join = decision.logged.join
    assert join is not None
    assert join.clock is not None
    assert len(join.pairs) == 2 * N_TRIALS
    clock = join.clock
    assert abs(clock.drift - (1 / (1 + LOG_DRIFT) - 1)) < 3 * clock.drift_se
    assert clock.drift_se < 2e-6  # else the line before would say nothing
    recorded_s = (clock.centre_s - LOG_ZERO_S) / (1 + LOG_DRIFT)
    assert abs(clock.recorded_s(clock.centre_s) - recorded_s) < 3 * clock.offset_se_s


def test_labels_of_the_log_are_those_of_the_question_asked(written: SetOnDisk) -> None:
    epochs = written.table("epochs.tsv")
    assert len(epochs["name"]) == 2 * N_TRIALS
    for place, (name, number) in enumerate(zip(epochs["name"], map(int, epochs["trial"]), strict=True)):
        own = truth(number, 1 if name == "delay1" else 2)
        assert epochs["correct"][place] == correct(own)
        assert epochs["cued"][place] == own.asked
        assert epochs["uncued"][place] == {"left": "right", "right": "left"}[own.asked]
        assert epochs["log.cue1.correct"][place] == correct(truth(number, 1))
        assert epochs["log.cue2.correct"][place] == correct(truth(number, 2))
        first, second = (truth(number, one) for one in (1, 2))
        assert epochs["second"][place] == ("stay" if first.asked == second.asked else "switch")
        reaction_s = float(epochs["log.cue2.reaction_s"][place])
        assert reaction_s == pytest.approx(second.answer_s - second.probe_s, abs=2e-4)
    assert set(epochs["correct"]) == {"yes", "no"}
    assert set(epochs["second"]) == {"stay", "switch"}


def test_labels_are_the_same_in_every_container(written: SetOnDisk) -> None:
    epochs = written.table("epochs.tsv")
    for column in ("log.cue1.correct", "log.cue2.reaction_s", "correct", "cued", "order", "second"):
        assert written.hdf5(f"labels/{column}").tolist() == epochs[column]
        assert [row[column] for row in written.metadata()] == epochs[column]
    ledger = written.table("ledger.tsv")
    assert ledger["log.cue1.correct"] == [correct(truth(int(n), 1)) for n in ledger["trial"]]


def test_labels_from_later_in_the_trial_say_so(written: SetOnDisk) -> None:
    """The answer comes after the delay, and the second arrow after the first."""
    provenance = json.loads(written.path("provenance.json").read_text(encoding="utf-8"))
    later = provenance["later_labels"]
    assert later["correct"] == ["delay1", "delay2"]
    assert later["log.cue1.correct"] == ["delay1"]
    assert "delay1" in later["second"]
    assert "delay1" in later["cue2.item"]
    assert "delay2" not in later["cue2.item"]
    assert not {"cued", "order", "cue1.item"} & set(later)
    for column in ("second", "cue2.item", "log.cue2.correct"):
        assert "later" in written.attributes(f"labels/{column}")
    for column in ("cued", "order", "cue1.item"):
        assert "later" not in written.attributes(f"labels/{column}")


def test_provenance_tells_the_log(written: SetOnDisk, recording: Path) -> None:
    log = json.loads(written.path("provenance.json").read_text(encoding="utf-8"))["log"]
    assert log["file"] == LOG
    assert log["joined"] == 2 * N_TRIALS
    assert len(log["sha256"]) == 64
    assert abs(log["clock"]["drift"] + LOG_DRIFT) < 3 * log["clock"]["drift_se"] + 1e-8
    assert "standard error" in log["words"]
    assert log["rows_excluded"] == []


def another_persons(tmp_path: Path) -> str:
    spec = LanternSpec(
        participant="lt07", trials=N_TRIALS, channels=("Cz",), rate_hz=500.0, faults=(), loud=""
    )
    return finish(write_sample(tmp_path / "another", spec=spec)).logs[0].read_text(encoding="utf-8")


def in_ms(rows: list[list[str]]) -> list[list[str]]:
    place = rows[0].index("arrow_s")
    for row in rows[1:]:
        row[place] = f"{float(row[place]) * 1000:.1f}"
    return rows


def without_column(rows: list[list[str]]) -> list[list[str]]:
    place = rows[0].index("correct")
    return [[cell for at, cell in enumerate(row) if at != place] for row in rows]


def twice_numbered(rows: list[list[str]]) -> list[list[str]]:
    place = rows[0].index("trial")
    rows[4][place] = rows[2][place]
    return rows


NUMBERED = changed(
    PLAN,
    ('time = "arrow_s"', 'time = "arrow_s"\ntrial = "trial"\nrecorded_trial = "sample.number"'),
    ("[markers.pulse]", "[bits.number]\nat = [0, 7]\n[markers.pulse]"),
)

BAD_LOGS = {
    "missing": ("", "cannot be opened (no such file or directory)"),
    "empty": ("  \n", ""),
    "header alone": (changed_rows(lambda rows: rows[:1]), "no rows"),
    "without the column": (changed_rows(without_column), "no column correct"),
    "in ms": (changed_rows(in_ms), 'write unit = "ms"'),
    "one row": (changed_rows(lambda rows: rows[:2]), "nothing joined"),
}


@pytest.mark.parametrize("case", [*BAD_LOGS, "another person's"])
def test_log_that_cannot_be_used_stops_mend_where_labels_need_it(case: str, tmp_path: Path) -> None:
    text, words = BAD_LOGS[case] if case in BAD_LOGS else (another_persons(tmp_path), "nothing joined")
    recording = write(tmp_path / "in", log=text)
    request = make_request(recording, PLAN, tmp_path / "study")
    with pytest.raises(LogError) as caught:
        finish(mend(request, tmp_path / "sets"))
    message = str(caught.value)
    assert "\n" not in message
    assert LOG in message
    assert words in message
    assert message.count(f"{LOG}:") == 1
    assert caught.value.exit_code == 3
    assert not (tmp_path / "sets").exists()


@pytest.mark.parametrize("case", ["missing", "empty", "in ms", "another person's"])
def test_log_that_nothing_needs_is_a_warning(case: str, tmp_path: Path) -> None:
    text = another_persons(tmp_path) if case == "another person's" else BAD_LOGS[case][0]
    recording = write(tmp_path / "in", log=text)
    prepared = dry(recording, NO_LABELS_OF_LOG, tmp_path / "study")
    (warning,) = (one for one in prepared.warnings if "the log was not joined" in one)
    assert LOG in warning
    assert prepared.decision.log_problem
    # Nothing is half joined.
    assert all(not trial.log for trial in prepared.trials.trials)
    assert len(prepared.kept) == 2 * N_TRIALS


def test_duplicate_trial_numbers_are_refused(tmp_path: Path) -> None:
    """The recording's own numbers: every sample marker carries its trial."""
    markers, number = [], 0
    for one in markers_of():
        is_sample = one.code == "lanterns up"
        number += is_sample
        markers.append(replace(one, code=str(number)) if is_sample else one)
    numbers = "".join(f'[markers."{place}"]\nrole = "sample"\n' for place in range(1, N_TRIALS + 1))
    plan = changed(NUMBERED, ('[markers."lanterns up"]\nrole = "sample"\n', numbers))
    good = write(tmp_path / "good", markers)
    join = dry(good, plan, tmp_path / "study").decision.logged
    assert join is not None
    assert join.join is not None
    assert join.join.by == "number and time"
    assert len(join.join.pairs) == 2 * N_TRIALS
    bad = write(tmp_path / "bad", markers, log=changed_rows(twice_numbered))
    with pytest.raises(LogError, match="trial number 1 more than 2 times"):
        dry(bad, plan, tmp_path / "study")


def test_row_excluded_by_hand_is_not_joined(tmp_path: Path) -> None:
    """A row that was written twice is doubtful until one of both is excluded."""
    doubled = changed_rows(lambda rows: [*rows[:4], rows[3], *rows[4:]])
    recording = write(tmp_path / "in", log=doubled)
    open_ = dry(recording, PLAN, tmp_path / "study")
    assert "doubtful" in " ".join(open_.warnings).lower()
    assert "cue1.correct" not in open_.trials.trials[1].log
    decided = dry(recording, PLAN, tmp_path / "study", "[log]\nrows_excluded = [4, 99]\n")
    assert decided.trials.trials[1].log["cue1.correct"] == correct(truth(2, 1))
    words = " ".join(decided.warnings)
    assert "Excluded by hand: row 4." in words
    assert "Excluded by hand, but not in the file: row 99." in words
    assert decided.decision.logged is not None
    assert decided.decision.logged.join is not None
    assert len(decided.decision.logged.join.pairs) == 2 * N_TRIALS


def test_marks_name_another_log(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", log="")
    (tmp_path / "elsewhere.tsv").write_text(changed_rows(lambda rows: rows), encoding="utf-8")
    place = (tmp_path / "elsewhere.tsv").as_posix()
    prepared = dry(recording, PLAN, tmp_path / "study", f'[log]\nfile = "{place}"\n')
    assert prepared.log.path == tmp_path / "elsewhere.tsv"
    assert len(prepared.kept) == 2 * N_TRIALS
    assert {one.labels["correct"] for one in prepared.kept} == {"yes", "no"}


def test_rows_lost_and_added_are_listed_and_cost_only_themselves(tmp_path: Path) -> None:
    """Row 6 is lost, and a row that nothing belongs to is added: their trials alone have no label."""

    def fault(rows: list[list[str]]) -> list[list[str]]:
        stray = list(rows[11])
        stray[rows[0].index("arrow_s")] = f"{float(stray[rows[0].index('arrow_s')]) + 2.0:.4f}"
        return [*rows[:6], *rows[7:12], stray, *rows[12:]]

    prepared = dry(write(tmp_path / "in", log=changed_rows(fault)), PLAN, tmp_path / "study")
    words = " ".join(prepared.warnings)
    assert "23 of 24 rows joined with 23 of 24 slots of the trials, by time" in words
    assert "Rows without a trial: 11." in words
    assert "Without a row: trial 3 cue2." in words
    for number, trial in enumerate(prepared.trials.trials, start=1):
        for cue in (1, 2):
            found = trial.log.get(f"cue{cue}.correct")
            assert found == (None if (number, cue) == (3, 2) else correct(truth(number, cue)))
    lost = [one for one in prepared.kept if (one.trial, one.rule) == (3, "delay2")]
    assert [one.labels["correct"] for one in lost] == ["n/a"]


def test_practice_by_the_log_is_set_aside_also_where_columns_are_named(tmp_path: Path) -> None:
    def with_kind(rows: list[list[str]]) -> list[list[str]]:
        return [[*row, kind] for row, kind in zip(rows, ["part", *["try"] * 4, *["main"] * 20], strict=True)]

    recording = write(tmp_path / "in", log=changed_rows(with_kind))
    blocks = '[blocks]\npractice_column = "part"\npractice_values = ["try"]\n[labels]'
    plan = changed(NO_LABELS_OF_LOG, ("[labels]", blocks))
    prepared = dry(recording, plan, tmp_path / "study")
    assert [bool(trial.set_aside) for trial in prepared.trials.trials] == [True] * 2 + [False] * 10
    assert len(prepared.ledger) == 24
    assert len(prepared.kept) == 20
    (tmp_path / "in" / LOG).unlink()
    with pytest.raises(InputError, match="cannot be opened"):
        dry(recording, plan, tmp_path / "study")
