"""The stage Export by hand: what would be written, writing and checking with the real commands, refusals."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from PySide6.QtCore import Qt, QUrl
from PySide6.QtGui import QDesktopServices
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QFileDialog, QPushButton
from pytestqt.qtbot import QtBot
from shiboken6 import isValid

from pulsemend.export import set_writer
from pulsemend.mending.mend import mend
from pulsemend.mending.prepare import Request
from pulsemend.mending.verdict import BROKEN, HOLDS
from pulsemend.model.marks import Marks
from pulsemend.model.plan_file import read_plan
from pulsemend.model.vocabulary import Fill, Format, Precision
from pulsemend.progress import Progress, finish
from pulsemend.session.found import Stage
from pulsemend.session.messages import Level
from pulsemend.session.stages import State, export_state
from pulsemend.window.desk import Desk
from pulsemend.window.job import Job
from pulsemend.window.set_runner import NOT_CHECKED, run_words
from pulsemend.window.set_tables import size_words
from pulsemend.window.stages.export import ExportStage
from pulsemend.window.theme import DARK
from pulsemend.window.workbench import Workbench
from support.small_lantern import Study, write_study
from support.stage_bench import new_bench, open_only, open_study, wait_learned

RUN_MS = 60_000
"""More than the commands take on a slow machine."""


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    return write_study(tmp_path_factory.mktemp("export"))


@pytest.fixture(scope="module")
def written(study: Study, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A set that no test changes."""
    return finish(mend(Request(study.recording, study.plan), tmp_path_factory.mktemp("written"))).folder


@pytest.fixture
def bench(qtbot: QtBot) -> Iterator[Workbench]:
    bench = new_bench()
    yield bench
    for desk in bench.__dict__.get("desks", ()):
        page = desk.pages[Stage.EXPORT]
        page.close()
        if isValid(desk):
            page.runner.stop()
            wait_done(qtbot, page)
            desk.close()
            desk.deleteLater()
    bench.close()


def put_up(qtbot: QtBot, bench: Workbench) -> ExportStage:
    desk = Desk({Stage.EXPORT: lambda: ExportStage(bench)})
    # A test holds the page only, and a window that nobody holds is gone.
    bench.__dict__.setdefault("desks", []).append(desk)
    desk.resize(1280, 900)
    page = desk.open_stage(Stage.EXPORT)
    desk.show()
    qtbot.waitExposed(desk)
    assert isinstance(page, ExportStage)
    return page


@pytest.fixture
def page(qtbot: QtBot, bench: Workbench, study: Study, tmp_path: Path) -> ExportStage:
    open_study(bench, study, tmp_path)
    page = put_up(qtbot, bench)
    wait_learned(qtbot, bench)
    qtbot.waitUntil(page.write_button.isEnabled)
    return page


def click(button: QPushButton) -> None:
    QTest.mouseClick(button, Qt.MouseButton.LeftButton)


def wait_done(qtbot: QtBot, page: ExportStage) -> None:
    qtbot.waitUntil(lambda: page.runner.job is None, timeout=RUN_MS)


def choose_folder(page: ExportStage, folder: Path) -> None:
    page.folder.setFocus()
    page.folder.selectAll()
    QTest.keyClicks(page.folder, str(folder))
    QTest.keyClick(page.folder, Qt.Key.Key_Return)


def content(folder: Path) -> dict[str, str]:
    return {path.name: hashlib.sha256(path.read_bytes()).hexdigest() for path in sorted(folder.iterdir())}


# Beforehand


def test_what_will_be_written_is_said_beforehand(page: ExportStage, tmp_path: Path) -> None:
    assert page.folder.text() == str(tmp_path / "sets")
    assert page.shape.value.text() == "5 \u00d7 8 \u00d7 1000"
    assert page.rate.value.text() == "1000 Hz"
    assert page.left.value.text().endswith("GB")
    files = [page.tables.files.text(row, 0) for row in range(page.tables.files.n_rows())]
    assert len(files) == 11
    assert files[0].endswith("_epochs.h5")
    assert page._evidence[Format.FIF].text().startswith("at most ")
    assert not (tmp_path / "sets").exists()


def test_formats_and_precision_are_edits_of_the_plan(qtbot: QtBot, page: ExportStage) -> None:
    session = page.bench.session
    QTest.keyClick(page.boxes[Format.FIF], Qt.Key.Key_Space)
    assert session.plan is not None
    assert session.plan.export.formats == (Format.HDF5,)
    assert session.next_undo == "Formats: hdf5"
    QTest.keyClick(page.boxes[Format.HDF5], Qt.Key.Key_Space)
    assert "one format at least" in page.refusal.text()
    assert page.refusal.isVisible()
    assert page.boxes[Format.HDF5].isChecked()
    double = page.precision._buttons[Precision.DOUBLE.value]
    QTest.mouseClick(double, Qt.MouseButton.LeftButton)
    assert session.plan.export.precision is Precision.DOUBLE
    assert not page.refusal.isVisible()
    qtbot.waitUntil(lambda: page.tables.files.n_rows() == 10)
    session.undo()
    session.undo()
    assert page.boxes[Format.FIF].isChecked()


def test_open_gaps_and_fif_are_refused_where_they_are_chosen(page: ExportStage) -> None:
    session = page.bench.session
    QTest.keyClick(page.boxes[Format.FIF], Qt.Key.Key_Space)
    assert session.plan is not None
    session.edit_plan("Leave", replace(session.plan, pulses=replace(session.plan.pulses, fill=Fill.LEAVE)))
    QTest.keyClick(page.boxes[Format.FIF], Qt.Key.Key_Space)
    assert "FIF cannot hold" in page.refusal.text()
    assert not page.boxes[Format.FIF].isChecked()
    assert session.plan.export.formats == (Format.HDF5,)


def test_refusals_stop_the_button_and_say_why(
    qtbot: QtBot, page: ExportStage, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    (tmp_path / "file").write_text("")
    choose_folder(page, tmp_path / "file")
    qtbot.waitUntil(lambda: "no folder" in page.problems.text())
    assert not page.write_button.isEnabled()
    monkeypatch.setattr(set_writer, "LARGEST_BYTES", 1000)
    choose_folder(page, tmp_path / "other")
    qtbot.waitUntil(lambda: "FIF would take" in page.problems.text())
    assert page._evidence[Format.FIF].text() == "cannot hold it"
    assert not page.write_button.isEnabled()
    page.write()
    assert page.runner.job is None


def test_the_last_folder_is_offered_again(
    qtbot: QtBot, bench: Workbench, study: Study, tmp_path: Path
) -> None:
    bench.settings = replace(bench.settings, export_folder=str(tmp_path / "last time"))
    open_study(bench, study, tmp_path)
    page = put_up(qtbot, bench)
    assert page.folder.text() == str(tmp_path / "last time")
    choose_folder(page, tmp_path / "now")
    assert page.folder.text() == str(tmp_path / "now")
    choose_folder(page, Path(""))


def test_empty_states_say_what_to_do(qtbot: QtBot, bench: Workbench, study: Study, tmp_path: Path) -> None:
    page = put_up(qtbot, bench)
    assert "Open a recording" in page.tables.no_files.text.text()
    assert not page.write_button.isEnabled()
    open_only(bench, study, tmp_path / "plan.toml")
    assert "no plan yet" in page.tables.no_files.text.text()
    assert "Nothing was checked yet" in page.tables.no_check.text.text()
    assert page.check_button.isEnabled()


# Writing


@pytest.mark.slow  # the whole window's tests do the same through the real window
def test_a_set_is_written_and_checked_item_by_item(
    qtbot: QtBot, page: ExportStage, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    session = page.bench.session
    stages: list[str] = []
    page.runner.progressed.connect(lambda progress, _left: stages.append(progress.stage))
    page.write_button.setFocus()
    QTest.keyClick(page.write_button, Qt.Key.Key_Space)
    assert page.cancel.hasFocus()
    assert page.bar.isVisible()
    assert not page.write_button.isEnabled()
    wait_done(qtbot, page)
    assert page.write_button.hasFocus()
    assert "writing epochs" in stages
    (folder,) = (tmp_path / "sets").iterdir()
    assert len(list(folder.iterdir())) == 11
    checked = page.runner.checked
    assert checked is not None
    assert checked.folder == folder
    model = page.tables.checks
    assert model.n_rows() == len(checked.items) > 10
    verdicts = [model.text(row, 0) for row in range(model.n_rows())]
    kinds = [model.text(row, 1) for row in range(model.n_rows())]
    assert {word for word, kind in zip(verdicts, kinds, strict=True) if kind == "integrity"} == {HOLDS}
    assert "readiness" in kinds
    assert page.tables.check_table.isVisible()
    assert checked.summary in page.tables.about.text()
    # What the rail says rests on the same items.
    assert session.found.written is not None
    assert (session.found.written.folder, session.found.written.problems) == (folder, checked.problems)
    assert export_state(session).state is (State.ATTENTION if checked.problems else State.DONE)
    assert page.bench.settings.export_folder == str(tmp_path / "sets")
    # The set stands there now; nothing of it changes before the question is answered.
    qtbot.waitUntil(lambda: "stands there already" in page.set_name.text())
    before = content(folder)
    click(page.write_button)
    assert "Replace it?" in page.question.text.text()
    assert page.question.no.hasFocus()
    QTest.keyClick(page.question.no, Qt.Key.Key_Escape)
    assert not page.question.isVisible()
    assert page.runner.job is None
    assert content(folder) == before
    opened: list[QUrl] = []

    def open_url(url: QUrl) -> bool:
        opened.append(url)
        return True

    monkeypatch.setattr(QDesktopServices, "openUrl", open_url)
    click(page.show_button)
    assert opened == [QUrl.fromLocalFile(str(folder))]
    # Later marks do not make the written set another one, and that is said.
    session.edit_marks("Without one", Marks(trials_excluded=(1,)))
    session.open_stage(Stage.EXPORT)
    assert export_state(session).state is State.ATTENTION
    wait_learned(qtbot, page.bench)
    qtbot.waitUntil(lambda: page.shape.value.text().startswith("3 "))
    click(page.write_button)
    click(page.question.yes)
    # A set whose check was stopped stays one that nobody has checked.
    qtbot.waitUntil(lambda: page.runner.job is not None and page.runner.job.kind == "check", timeout=RUN_MS)
    click(page.cancel)
    wait_done(qtbot, page)
    assert page.run_words.text() == "The check was stopped."
    assert session.found.written.problems == (NOT_CHECKED,)
    assert content(folder) != before
    assert page.bench.session.marks_are_saved
    assert read_ledger_fates(folder) >= {"trial excluded by hand"}


def read_ledger_fates(folder: Path) -> set[str]:
    lines = (folder / f"{folder.name}_ledger.tsv").read_text().splitlines()
    column = lines[0].split("\t").index("fate")
    return {line.split("\t")[column] for line in lines[1:]}


def test_an_unsaved_plan_is_saved_first_or_nothing_happens(
    qtbot: QtBot, page: ExportStage, tmp_path: Path
) -> None:
    session = page.bench.session
    assert session.plan is not None
    before = (tmp_path / "plan.toml").read_text()
    QTest.keyClick(page.boxes[Format.FIF], Qt.Key.Key_Space)
    assert "not have" in page.problems.text()
    assert page.save.isVisible()
    wait_learned(qtbot, page.bench)
    qtbot.waitUntil(page.write_button.isEnabled)
    click(page.write_button)
    assert "does not have your changes" in page.question.text.text()
    QTest.keyClick(page.question.no, Qt.Key.Key_Return)
    assert page.runner.job is None
    assert (tmp_path / "plan.toml").read_text() == before
    click(page.write_button)
    click(page.question.yes)
    assert page.runner.job is not None
    assert session.plan_is_saved
    assert read_plan(tmp_path / "plan.toml").plan == session.plan
    page.runner.stop()
    wait_done(qtbot, page)


def test_a_plan_changed_on_the_disk_is_not_written_over(
    qtbot: QtBot, page: ExportStage, tmp_path: Path
) -> None:
    QTest.keyClick(page.boxes[Format.FIF], Qt.Key.Key_Space)
    theirs = (tmp_path / "plan.toml").read_text().replace("length_s = 1.0", "length_s = 0.5")
    (tmp_path / "plan.toml").write_text(theirs)
    wait_learned(qtbot, page.bench)
    click(page.save)
    assert "changed by somebody else" in page.run_words.text()
    assert (tmp_path / "plan.toml").read_text() == theirs
    assert page.bench.session.messages[-1].level is Level.PROBLEM


def test_a_draft_asks_where_to_save(
    qtbot: QtBot, bench: Workbench, study: Study, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    open_only(bench, study, tmp_path / "plan.toml")
    bench.session.open_plan(read_plan(study.plan), None)
    page = put_up(qtbot, bench)
    wait_learned(qtbot, bench)
    chosen = tmp_path / "study" / "mine.toml"
    chosen.parent.mkdir()
    answers = [("", ""), (str(chosen), "")]
    monkeypatch.setattr(QFileDialog, "getSaveFileName", lambda *_: answers.pop(0))
    click(page.save)
    assert bench.session.plan_path is None
    click(page.save)
    assert bench.session.plan_path == chosen
    assert (
        bench.session.marks_path
        == chosen.parent / "marks" / f"{study.recording.stem.removesuffix('_eeg')}.marks.toml"
    )
    assert not page.save.isVisible()


def test_cancelling_leaves_nothing_behind(qtbot: QtBot, page: ExportStage, tmp_path: Path) -> None:
    click(page.write_button)
    with qtbot.waitSignal(page.runner.progressed, timeout=RUN_MS):
        pass
    click(page.cancel)
    wait_done(qtbot, page)
    assert "nothing was left behind" in page.run_words.text()
    assert not (tmp_path / "sets").exists() or list((tmp_path / "sets").iterdir()) == []
    assert page.bench.session.found.written is None
    assert page.write_button.isEnabled()


def test_a_failed_run_is_said_in_words(qtbot: QtBot, page: ExportStage, study: Study, tmp_path: Path) -> None:
    # The recording is gone between the look ahead and the run.
    plan = (tmp_path / "plan.toml").read_text()
    (tmp_path / "plan.toml").write_text(plan.replace("pulsemend = 1", "pulsemend = 1\nnonsense = 2"))
    click(page.write_button)
    wait_done(qtbot, page)
    assert page.run_words.text().startswith("The set could not be written.")
    assert "nonsense" in page.run_words.text()
    assert page.bench.session.messages[-1].level is Level.PROBLEM
    assert page.bench.session.found.written is None


# Checking


def test_another_set_is_checked_and_changes_nothing_in_the_session(
    qtbot: QtBot, bench: Workbench, written: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    page = put_up(qtbot, bench)
    monkeypatch.setattr(QFileDialog, "getExistingDirectory", lambda *_: str(written))
    click(page.check_button)
    assert page.runner.job is not None
    wait_done(qtbot, page)
    assert page.runner.checked is not None
    assert page.tables.checks.n_rows() == len(page.runner.checked.items)
    assert bench.session.found.written is None


def test_a_broken_set_shows_every_item_not_a_failure(
    qtbot: QtBot, bench: Workbench, written: Path, tmp_path: Path
) -> None:
    import shutil

    broken = tmp_path / written.name
    shutil.copytree(written, broken)
    table = broken / f"{broken.name}_epochs.tsv"
    table.write_bytes(table.read_bytes().replace(b"delay1", b"delay9", 1))
    page = put_up(qtbot, bench)
    page.check_set(broken)
    wait_done(qtbot, page)
    model = page.tables.checks
    rows = {model.text(row, 2): model.text(row, 0) for row in range(model.n_rows())}
    assert BROKEN in rows.values()
    assert HOLDS in rows.values()
    # The first one is chosen, with its words below.
    first = page.tables.check_table.currentIndex().row()
    assert model.text(first, 0) == BROKEN
    assert page.tables.item_words.text().startswith(BROKEN)
    assert bench.session.messages[-1].level is Level.ATTENTION
    page.set_theme(DARK)
    assert model.index(first, 0).data(Qt.ItemDataRole.DecorationRole) is not None


def test_what_is_no_set_is_said(qtbot: QtBot, bench: Workbench, tmp_path: Path) -> None:
    page = put_up(qtbot, bench)
    page.check_set(tmp_path)
    wait_done(qtbot, page)
    assert page.run_words.text().startswith("The set could not be checked.")
    assert page.runner.checked is None


# Words


@pytest.mark.parametrize(
    ("n_bytes", "words"),
    [
        (0, "0 bytes"),
        (999, "999 bytes"),
        (13_900_000, "13.9 MB"),
        (1_800_000_000, "1.8 GB"),
        (76_200_000_000, "76.2 GB"),
        (999_400_000, "999 MB"),
        (5_000_000_000_000, "5000 GB"),
    ],
)
def test_sizes_in_words(n_bytes: int, words: str) -> None:
    assert size_words(n_bytes) == words


@pytest.mark.parametrize(
    ("progress", "left", "words"),
    [
        (None, None, "starting"),
        (Progress("fitting", 0, 0), None, "fitting"),
        (Progress("writing epochs", 5, 10), 12.4, "writing epochs 50%, about 12 s left"),
        (Progress("writing epochs", 5, 10), 125.0, "writing epochs 50%, about 2 min 5 s left"),
        (Progress("writing epochs", 10, 10), 0.0, "writing epochs 100%"),
    ],
)
def test_progress_in_words(progress: Progress | None, left: float | None, words: str) -> None:
    assert run_words(Job("mend"), progress, left) == words


def test_nobody_listens_after_the_end(
    qtbot: QtBot, bench: Workbench, page: ExportStage, caplog: pytest.LogCaptureFixture
) -> None:
    (desk,) = bench.__dict__["desks"]
    page.close()
    desk.deleteLater()
    qtbot.waitUntil(lambda: not isValid(page.settings) and not isValid(page.picture))
    bench.session.edit_marks("Without one", Marks(trials_excluded=(1,)))
    wait_learned(qtbot, bench)
    assert caplog.text == ""
