"""The journal: what comes back after a crash, after torn lines, and beside living windows."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest

from pulsemend.errors import ChangedOnDisk
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.marks_file import read_marks
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan, read_plan
from pulsemend.session import journal
from pulsemend.session.left_behind import find_left_behind
from pulsemend.session.messages import Level
from pulsemend.session.session import Session
from support.session_desk import FACTS, PLAN, Desk, crash


def window(session: Session) -> tuple[float, float] | None:
    assert session.plan is not None
    return session.plan.pulses.window_ms


def gap(session: Session, stop_ms: float, merge_key: str | None = None) -> None:
    plan = session.plan
    assert plan is not None
    changed = replace(plan, pulses=replace(plan.pulses, window_ms=(-2.0, stop_ms)))
    session.edit_plan(f"Gap to {stop_ms:g} ms", changed, merge_key)


def only_journal(desk: Desk) -> Path:
    (path,) = desk.journal_files()
    return path


def test_a_crash_loses_nothing_and_says_so(desk: Desk, session: Session) -> None:
    gap(session, 15)
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    gap(session, 16, "edge")
    gap(session, 17, "edge")
    session.undo()
    crash(session)

    again = desk.new_session()
    offer = again.recovery
    assert offer is not None
    assert (offer.steps, offer.last, offer.needs_a_look) == (5, "C3 bad", False)
    assert re.fullmatch(
        r"Pulsemend ended unexpectedly; the work of \d{4}-\d\d-\d\d \d\d:\d\d was kept \(5 steps\)\. "
        r"The last change was: C3 bad\.",
        offer.words,
    )
    again.recover()
    assert (window(again), again.marks.bad) == ((-2, 15), ("C3",))
    told = f"{offer.words} It was brought back; undo takes it back step by step."
    assert [(message.level, message.text) for message in again.messages] == [(Level.NOTE, told)]
    assert not again.is_saved
    assert again.redo() == "Gap to 17 ms"
    assert window(again) == (-2, 17)
    assert [again.undo() for _ in range(4)] == ["Gap to 17 ms", "C3 bad", "Gap to 15 ms", ""]
    assert again.is_saved
    again.close()
    assert desk.journal_files() == []


def test_what_came_back_is_safe_from_the_next_crash(desk: Desk, session: Session) -> None:
    gap(session, 15)
    for stop_ms in (16, 17, 18):
        crash(session)
        session = desk.new_session()
        session.recover()
        gap(session, stop_ms)
        only_journal(desk)
    assert [session.undo() for _ in range(5)] == [*(f"Gap to {stop} ms" for stop in (18, 17, 16, 15)), ""]


def test_what_can_be_redone_survives_a_second_crash(desk: Desk, session: Session) -> None:
    gap(session, 15)
    gap(session, 16)
    session.undo()
    for _ in range(2):
        crash(session)
        session = desk.new_session()
        session.recover()
        assert (window(session), session.next_redo) == ((-2, 15), "Gap to 16 ms")
    session.redo()
    assert window(session) == (-2, 16)


def test_a_clean_end_leaves_no_journal(desk: Desk, session: Session) -> None:
    gap(session, 15)
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    assert desk.journal_files()
    session.close()
    assert desk.journal_files() == []
    assert read_marks(desk.marks_path).marks.bad == ("C3",)
    assert desk.plan_path.read_text() == PLAN
    assert desk.new_session().recovery is None


def test_a_window_in_which_nothing_was_done_leaves_nothing_to_decide(desk: Desk, session: Session) -> None:
    session.save_plan()
    crash(session)
    again = desk.new_session()
    assert again.recovery is None
    assert len(desk.journal_files()) == 1


def test_recovery_after_a_save_knows_what_is_saved(desk: Desk, session: Session) -> None:
    gap(session, 15)
    session.save_plan()
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    session.save_marks()
    crash(session)
    again = Session(desk.journals)
    desk.sessions.append(again)
    again.open_recording(desk.folder / "lt01.vhdr", FACTS, read_marks(desk.marks_path), desk.marks_path)
    again.open_plan(read_plan(desk.plan_path), desk.plan_path)
    assert again.recovery is not None
    assert not again.recovery.needs_a_look
    again.recover()
    assert again.is_saved
    assert [again.undo(), again.undo()] == ["C3 bad", "Gap to 15 ms"]
    again.save_plan()
    assert desk.plan_path.read_text() == PLAN


def test_a_plan_changed_meanwhile_is_offered_with_a_word(desk: Desk, session: Session) -> None:
    gap(session, 15)
    crash(session)
    theirs = PLAN.replace("length_s = 1.0", "length_s = 2.0")
    desk.plan_path.write_text(theirs)
    again = desk.new_session()
    assert again.recovery is not None
    assert again.recovery.needs_a_look
    assert "The plan file was changed by somebody else since." in again.recovery.words
    assert window(again) == (-2, 14)
    again.recover()
    assert again.messages[-1].level is Level.ATTENTION
    assert window(again) == (-2, 15)
    with pytest.raises(ChangedOnDisk) as refused:
        again.save_plan()
    assert refused.value.theirs == theirs


def test_marks_changed_meanwhile_are_offered_with_a_word(desk: Desk, session: Session) -> None:
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    crash(session)
    desk.marks_path.parent.mkdir()
    desk.marks_path.write_text('pulsemend_marks = 1\nbad = ["Cz"]\n')
    again = Session(desk.journals)
    desk.sessions.append(again)
    again.open_recording(desk.folder / "lt01.vhdr", FACTS, read_marks(desk.marks_path), desk.marks_path)
    again.open_plan(read_plan(desk.plan_path), desk.plan_path)
    assert again.recovery is not None
    assert "The marks file was changed by somebody else since." in again.recovery.words
    again.recover()
    assert again.marks.bad == ("C3",)
    with pytest.raises(ChangedOnDisk):
        again.save_marks()


def test_marks_made_before_the_offer_are_told(desk: Desk, session: Session) -> None:
    gap(session, 15)
    crash(session)
    again = desk.new_session(with_plan=False)
    again.edit_marks("C3 bad", Marks(bad=("C3",)))
    offer = again.open_plan(read_plan(desk.plan_path), desk.plan_path)
    assert offer is not None
    assert offer.marks_changed
    again.drop_recovery()
    assert again.marks.bad == ("C3",)
    crash(again)
    third = desk.new_session()
    third.recover()
    assert (third.marks.bad, window(third)) == (("C3",), (-2, 14))


def test_an_offer_can_be_thrown_away(desk: Desk, session: Session) -> None:
    gap(session, 15)
    crash(session)
    again = desk.new_session()
    again.drop_recovery()
    assert (again.recovery, window(again), again.next_undo) == (None, (-2, 14), "")
    gap(again, 16)
    crash(again)
    third = desk.new_session()
    third.recover()
    assert window(third) == (-2, 16)


def test_an_offer_nobody_decided_about_comes_again(desk: Desk, session: Session) -> None:
    gap(session, 15)
    crash(session)
    desk.new_session().close()
    again = desk.new_session()
    assert again.recovery is not None
    with pytest.raises(RuntimeError):
        gap(again, 16)
    with pytest.raises(RuntimeError):
        again.undo()


def test_a_drafted_plan_comes_back(desk: Desk) -> None:
    session = desk.new_session(with_plan=False)
    session.open_plan(parse_plan(PLAN), None)
    crash(session)
    again = desk.new_session(with_plan=False)
    again.recover()
    assert again.plan == parse_plan(PLAN).plan
    assert not again.plan_is_saved
    again.save_plan_as(desk.folder / "drafted.toml")
    assert (desk.folder / "drafted.toml").read_text() == PLAN


def test_marks_made_before_the_plan_was_opened_come_back_with_it(desk: Desk) -> None:
    session = desk.new_session(with_plan=False)
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    session.open_plan(read_plan(desk.plan_path), desk.plan_path)
    crash(session)
    again = desk.new_session()
    again.recover()
    assert again.undo() == "C3 bad"
    assert again.marks == NO_MARKS


def test_the_journal_is_cut_at_every_byte_of_its_last_entry(desk: Desk, session: Session) -> None:
    gap(session, 15)
    path = only_journal(desk)
    before = path.stat().st_size
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    crash(session)
    whole = path.read_bytes()
    assert len(whole) > before
    key = path.name.partition("-")[0]
    for length in range(before, len(whole) + 1):
        path.write_bytes(whole[:length])
        left = find_left_behind(desk.journals, key)
        assert left is not None
        assert left.lost == 0
        assert left.values.plan is not None
        assert left.values.plan.pulses.window_ms == (-2, 15)
        assert left.values.marks.bad == (("C3",) if length == len(whole) else ())
        assert left.history.next_undo == ("C3 bad" if length == len(whole) else "Gap to 15 ms")
        left.remove()
    assert desk.journal_files() == []


def test_a_journal_cut_in_its_first_line_is_left_alone(desk: Desk, session: Session) -> None:
    gap(session, 15)
    crash(session)
    path = only_journal(desk)
    path.write_bytes(path.read_bytes()[:100])
    again = desk.new_session()
    assert again.recovery is None
    again.close()
    assert desk.journal_files() == [path]


@pytest.mark.parametrize(
    "damage",
    [
        b'{"do": "edit"}\n',
        b'{"do": "dance"}\n',
        b"\0\0\0\0\n",
        b'{"do": "redo"}\n',
        b"[1]\n",
        b'{"do": "edit", "what": "plan", "label": "", "value": "x = 1", "merge": null, "into_last": false}\n',
        b'{"do": "edit", "what": 5, "label": "", "value": 5, "merge": null, "into_last": false}\n',
    ],
)
def test_a_damaged_line_ends_what_comes_back_and_is_told(desk: Desk, session: Session, damage: bytes) -> None:
    gap(session, 15)
    path = only_journal(desk)
    cut = path.stat().st_size
    gap(session, 16)
    crash(session)
    whole = path.read_bytes()
    path.write_bytes(whole[:cut] + damage + whole[cut:])
    again = desk.new_session()
    assert again.recovery is not None
    assert again.recovery.lost == 2
    assert again.recovery.needs_a_look
    assert "2 later steps are damaged" in again.recovery.words
    again.recover()
    assert window(again) == (-2, 15)


def test_a_journal_of_a_later_version_is_left_alone(desk: Desk, session: Session) -> None:
    gap(session, 15)
    crash(session)
    path = only_journal(desk)
    start, rest = path.read_bytes().split(b"\n", 1)
    path.write_bytes(json.dumps(json.loads(start) | {"journal": 2}).encode() + b"\n" + rest)
    assert desk.new_session().recovery is None
    assert path.exists()


def test_two_living_windows_leave_each_other_alone(desk: Desk, session: Session) -> None:
    gap(session, 15)
    second = desk.new_session()
    assert second.recovery is None
    gap(second, 16)
    assert len(desk.journal_files()) == 2
    crash(second)
    third = desk.new_session()
    third.recover()
    assert window(third) == (-2, 16)
    third.close()
    session.close()
    assert desk.journal_files() == []


def test_an_offer_is_made_to_one_window_only(desk: Desk, session: Session) -> None:
    gap(session, 15)
    crash(session)
    first, second = desk.new_session(), desk.new_session()
    assert first.recovery is not None
    assert second.recovery is None


def test_journals_of_other_plans_are_nobody_elses_business(desk: Desk, session: Session) -> None:
    gap(session, 15)
    crash(session)
    other = desk.folder / "other.toml"
    other.write_text(PLAN)
    again = desk.new_session(with_plan=False)
    assert again.open_plan(read_plan(other), other) is None


def test_a_long_journal_is_begun_anew(desk: Desk, session: Session, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(journal, "LONG_BYTES", 20_000)
    monkeypatch.setattr("pulsemend.session.journal.os.fsync", lambda _number: None)
    session.drop_recovery()
    session.save_plan_as(desk.plan_path)
    sizes = []
    for number in range(200):
        gap(session, 10 + number % 7 + 0.5, "edge")
        sizes.append(only_journal(desk).stat().st_size)
    assert max(sizes) < 40_000
    crash(session)
    again = desk.new_session()
    again.recover()
    assert window(again) == (-2, 10 + 199 % 7 + 0.5)
    assert [again.undo(), again.undo()] == [f"Gap to {10 + 199 % 7 + 0.5:g} ms", ""]
    assert window(again) == (-2, 14)


def test_a_full_disk_is_told_once_and_work_goes_on(
    desk: Desk, session: Session, monkeypatch: pytest.MonkeyPatch
) -> None:
    gap(session, 15)
    with monkeypatch.context() as patch:

        def full(_number: int) -> None:
            raise OSError(28, "No space left on device")

        patch.setattr("pulsemend.session.journal.os.fsync", full)
        gap(session, 16)
        gap(session, 17)
        assert window(session) == (-2, 17)
        assert [(message.level, message.details) for message in session.messages] == [
            (Level.PROBLEM, "No space left on device")
        ]
    gap(session, 18)
    crash(session)
    again = desk.new_session()
    again.recover()
    assert [again.undo() for _ in range(5)] == [*(f"Gap to {stop} ms" for stop in (18, 17, 16, 15)), ""]


def test_a_line_torn_by_a_full_disk_is_followed_by_none(
    desk: Desk, session: Session, monkeypatch: pytest.MonkeyPatch
) -> None:
    gap(session, 15)
    with monkeypatch.context() as patch:

        def torn(self: journal.Journal, _line: object, *, sync: bool = True) -> None:
            self._file.write(b'{"do": "ed')
            self._file.flush()
            raise OSError(28, "No space left on device")

        patch.setattr(journal.Journal, "_append", torn)
        gap(session, 16)
    gap(session, 17)
    crash(session)
    again = desk.new_session()
    assert again.recovery is not None
    assert again.recovery.lost == 0
    again.recover()
    assert window(again) == (-2, 17)


def test_a_journal_killed_before_it_was_whole_is_swept_up(desk: Desk, session: Session) -> None:
    gap(session, 15)
    begun = only_journal(desk).with_suffix(".part")
    begun.write_bytes(b'{"jour')
    crash(session)
    again = desk.new_session()
    assert not begun.exists()
    again.recover()
    assert window(again) == (-2, 15)


def test_journals_that_cannot_be_opened_or_locked_are_passed_over(
    desk: Desk, session: Session, monkeypatch: pytest.MonkeyPatch
) -> None:
    gap(session, 15)
    crash(session)
    path = only_journal(desk)

    def no_locks(_file: object) -> bool:
        raise OSError(37, "No locks available")

    with monkeypatch.context() as patch:
        patch.setattr("pulsemend.session.left_behind.try_lock", no_locks)
        desk.new_session().close()
    whole = path.read_bytes()
    path.unlink()
    path.mkdir()
    desk.new_session().close()
    path.rmdir()
    path.write_bytes(whole)
    assert desk.new_session().recovery is not None


def test_journals_are_private(desk: Desk, session: Session) -> None:
    gap(session, 15)
    assert only_journal(desk).stat().st_mode & 0o777 == 0o600
    assert desk.journals.stat().st_mode & 0o777 == 0o700
    assert "lt01" not in only_journal(desk).name


EDITOR = """
import sys
from pathlib import Path
from support.session_desk import Desk
from dataclasses import replace
desk = Desk(Path(sys.argv[1]))
session = desk.new_session()
session.recover()
plan = session.plan
for number in range(1000):
    changed = replace(plan, pulses=replace(plan.pulses, window_ms=(-2.0, 20.0 + number)))
    session.edit_plan(f"Gap to {20 + number} ms", changed, "edge" if number % 3 else None)
    print(number, flush=True)
"""


def test_a_killed_process_loses_no_edit_it_had_finished(desk: Desk) -> None:
    tests = Path(__file__).resolve().parents[1]
    environment = os.environ | {"PYTHONPATH": str(tests)}
    command = [sys.executable, "-c", EDITOR, str(desk.folder)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True, env=environment) as editor:
        assert editor.stdout is not None
        done = -1
        while done < 25:
            done = int(editor.stdout.readline())
        editor.send_signal(signal.SIGKILL)
        rest = editor.stdout.read().splitlines()
        done = int(rest[-1]) if rest else done
    assert editor.returncode == -signal.SIGKILL

    session = desk.new_session()
    session.recover()
    edge = window(session)
    assert edge is not None
    # The one after the last that was reported may have been written already.
    assert edge[1] - 20 - done in (0, 1)
    assert session.next_undo == f"Gap to {edge[1]:g} ms"
    while session.undo():
        pass
    plan: Plan | None = parse_plan(PLAN).plan
    assert session.plan == plan
