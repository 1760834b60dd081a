"""The session of a window: telling, editing, undoing, saving."""

from __future__ import annotations

import logging
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pulsemend.errors import ChangedOnDisk, InputError, MarksError, PlanError
from pulsemend.model.marks import NO_MARKS, BadStretch, Marks
from pulsemend.model.marks_file import read_marks
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan, read_plan
from pulsemend.model.recording import Fingerprint
from pulsemend.session.changed import Changed
from pulsemend.session.found import Found, Selected, Stage
from pulsemend.session.messages import Level, Message
from pulsemend.session.session import Session
from pulsemend.session.surroundings import MESSAGES_KEPT
from pulsemend.session.view import View
from support.session_desk import FACTS, PLAN, Desk


def plan_of(session: Session) -> Plan:
    assert session.plan is not None
    return session.plan


def with_window(plan: Plan, start_ms: float, stop_ms: float) -> Plan:
    return replace(plan, pulses=replace(plan.pulses, window_ms=(start_ms, stop_ms)))


def heard(session: Session) -> list[Changed]:
    """Every change the session tells, as it tells it."""
    told: list[Changed] = []
    for kind in Changed:
        session.subscribe(kind, lambda kind=kind: told.append(kind))  # type: ignore[misc]
    return told


def test_an_edit_is_told_after_it_happened(session: Session) -> None:
    seen: list[object] = []
    session.subscribe(Changed.PLAN, lambda: seen.append(plan_of(session).pulses.window_ms))
    told = heard(session)
    assert session.edit_plan("Gap from -3 to 15 ms", with_window(plan_of(session), -3, 15))
    assert seen == [(-3.0, 15.0)]
    assert told == [Changed.PLAN, Changed.HISTORY]


def test_an_edit_that_changes_nothing_is_no_entry(session: Session) -> None:
    told, before = heard(session), session.revision
    assert not session.edit_plan("nothing", plan_of(session))
    assert not session.edit_marks("nothing", NO_MARKS)
    assert (told, session.next_undo, session.revision) == ([], "", before)


def test_an_impossible_plan_changes_nothing(session: Session) -> None:
    plan, told, before = plan_of(session), heard(session), session.revision
    with pytest.raises(PlanError, match=r"epochs\.length_s: is no whole number") as refused:
        session.edit_plan("too fine", replace(plan, epochs=replace(plan.epochs, length_s=0.3337)))
    assert refused.value.line is None
    with pytest.raises(PlanError, match=r"pulses\.window_ms"):
        session.edit_plan("turned round", with_window(plan, 14, -2))
    with pytest.raises(PlanError, match=r"filter\.highpass_hz"):
        session.edit_plan("out of range", replace(plan, filter=replace(plan.filter, highpass_hz=-1.0)))
    assert (session.plan, told, session.next_undo, session.revision) == (plan, [], "", before)


def test_impossible_marks_change_nothing(session: Session) -> None:
    with pytest.raises(MarksError, match=r"bad_stretches\[1\]\.stop"):
        session.edit_marks("turned round", Marks(bad_stretches=(BadStretch(20, 10),)))
    assert (session.marks, session.next_undo) == (NO_MARKS, "")


def test_numbers_of_numpy_become_plain(session: Session) -> None:
    session.edit_plan("drag", with_window(plan_of(session), np.float64(-3.5), np.float64(20.5)))
    window_ms = plan_of(session).pulses.window_ms
    assert window_ms == (-3.5, 20.5)
    assert [type(edge) for edge in window_ms or ()] == [float, float]
    session.edit_marks("add", Marks(pulses_added=(int(np.int64(5)),)))
    assert session.marks.pulses_added == (5,)


def test_undo_and_redo_are_named_and_told(session: Session) -> None:
    first = plan_of(session)
    session.edit_plan("Gap wider", with_window(first, -3, 15))
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    assert (session.next_undo, session.next_redo) == ("C3 bad", "")
    told = heard(session)
    assert session.undo() == "C3 bad"
    assert session.marks == NO_MARKS
    assert session.undo() == "Gap wider"
    assert session.plan == first
    assert session.undo() == ""
    assert (session.next_undo, session.next_redo) == ("", "Gap wider")
    assert session.redo() == "Gap wider"
    assert plan_of(session).pulses.window_ms == (-3, 15)
    assert told == [Changed.MARKS, Changed.HISTORY, *[Changed.PLAN, Changed.HISTORY] * 2]


def test_a_drag_is_one_entry(session: Session) -> None:
    first = plan_of(session)
    for stop_ms in (15, 16, 17):
        session.edit_plan(f"Gap to {stop_ms} ms", with_window(first, -2, stop_ms), "gap edge")
    session.end_merge()
    session.edit_plan("Gap to 18 ms", with_window(first, -2, 18), "gap edge")
    assert session.undo() == "Gap to 18 ms"
    assert plan_of(session).pulses.window_ms == (-2, 17)
    assert session.undo() == "Gap to 17 ms"
    assert session.plan == first


def test_another_edit_ends_a_drag(session: Session) -> None:
    first = plan_of(session)
    session.edit_plan("a", with_window(first, -2, 15), "edge")
    session.edit_marks("b", Marks(bad=("C3",)), "edge")
    session.edit_plan("c", with_window(first, -2, 16), "edge")
    assert [session.undo() for _ in range(4)] == ["c", "b", "a", ""]


def test_a_drag_back_to_its_start_leaves_no_entry(session: Session) -> None:
    first = plan_of(session)
    session.edit_plan("there", with_window(first, -2, 15), "edge")
    session.edit_plan("back", first, "edge")
    assert session.next_undo == ""
    assert session.plan_is_saved


def test_each_change_raises_the_revision(session: Session) -> None:
    seen = [session.revision]
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    seen.append(session.revision)
    session.undo()
    seen.append(session.revision)
    session.redo()
    seen.append(session.revision)
    assert seen == sorted(set(seen))


def test_view_selection_stage_and_findings_are_no_history(session: Session) -> None:
    told, before = heard(session), session.revision
    session.set_view(replace(session.view, start_s=5.0))
    session.set_view(session.view)
    session.select(Selected(pulse=3000))
    session.select(Selected(pulse=3000))
    session.open_stage(Stage.PULSES)
    session.set_found(Found(n_pulses=1))
    session.set_estimates_revision(before)
    session.set_estimates_revision(before)
    assert told == [Changed.VIEW, Changed.VIEW, Changed.STAGE, Changed.STAGE, Changed.ESTIMATES]
    assert (session.next_undo, session.revision, session.estimates_revision) == ("", before, before)


def test_a_failing_observer_is_logged_and_the_others_are_told(
    session: Session, caplog: pytest.LogCaptureFixture
) -> None:
    told: list[str] = []
    session.subscribe(Changed.MARKS, lambda: told.append(str(1 // 0)))
    session.subscribe(Changed.MARKS, lambda: told.append("second"))
    with caplog.at_level(logging.ERROR):
        session.edit_marks("C3 bad", Marks(bad=("C3",)))
    assert told == ["second"]
    assert "an observer of marks failed" in caplog.text
    assert "ZeroDivisionError" in caplog.text


def test_who_has_left_is_told_no_more_even_in_the_midst(session: Session) -> None:
    told: list[str] = []
    leave = [session.subscribe(Changed.MARKS, lambda: leave[1]())]
    leave.append(session.subscribe(Changed.MARKS, lambda: told.append("closed widget")))
    session.subscribe(Changed.MARKS, lambda: told.append("open widget"))
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    leave[0]()
    leave[0]()
    session.undo()
    assert told == ["open widget", "open widget"]


def test_messages_are_kept_until_put_away(session: Session) -> None:
    first = Message(Level.NOTE, "first")
    session.say(first)
    session.say(Message(Level.PROBLEM, "second", "details"))
    session.put_away(first)
    assert [message.text for message in session.messages] == ["second"]
    for number in range(MESSAGES_KEPT + 5):
        session.say(Message(Level.NOTE, str(number)))
    assert len(session.messages) == MESSAGES_KEPT
    assert session.messages[-1].text == str(MESSAGES_KEPT + 4)


def test_opening_a_recording_shows_its_channels(session: Session) -> None:
    assert session.view.rows == ("C3", "Cz", "C4")
    assert session.recording is not None
    assert session.recording.facts == FACTS
    session.set_view(View(start_s=50.0, width_s=20.0, row_uv=30.0, rows=("C3",)))
    session.open_recording(session.recording.path, replace(FACTS, n_samples=5000))
    assert session.view == View(width_s=5.0, row_uv=30.0, rows=("C3", "Cz", "C4"))


def test_opening_another_recording_keeps_the_plans_entries_only(desk: Desk, session: Session) -> None:
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    session.edit_plan("Gap wider", with_window(plan_of(session), -3, 15))
    session.edit_marks("Cz bad too", Marks(bad=("C3", "Cz")))
    session.open_recording(desk.folder / "lt02.vhdr", FACTS)
    assert read_marks(desk.marks_path).marks.bad == ("C3", "Cz")
    assert session.marks == NO_MARKS
    assert [session.undo(), session.undo()] == ["Gap wider", ""]


def test_edits_without_a_plan_are_refused_in_words() -> None:
    session, plan = Session(), parse_plan(PLAN).plan
    for attempt in (
        lambda: session.edit_plan("gap", plan),
        session.save_plan,
        lambda: session.save_plan_as(Path("never-written.toml")),
        session.take_plan_from_disk,
        session.save_marks,
    ):
        with pytest.raises(InputError):
            attempt()


def test_saving_the_plan_keeps_its_comments(desk: Desk, session: Session) -> None:
    session.edit_plan("Gap wider", with_window(plan_of(session), -3, 15))
    assert not session.plan_is_saved
    assert desk.plan_path.read_text() == PLAN
    session.save_plan()
    assert desk.plan_path.read_text() == PLAN.replace("[-2.0, 14.0]", "[-3.0, 15.0]")
    assert session.is_saved


def test_undoing_a_removal_brings_its_comments_back(desk: Desk, session: Session) -> None:
    plan = plan_of(session)
    session.edit_plan("One rule", replace(plan, epochs=replace(plan.epochs, rule=plan.epochs.rule[:1])))
    session.save_plan()
    assert "delay" not in desk.plan_path.read_text()
    session.undo()
    assert not session.plan_is_saved
    session.save_plan()
    assert desk.plan_path.read_text() == PLAN


def test_a_plan_changed_on_disk_is_not_written_over(desk: Desk, session: Session) -> None:
    theirs = PLAN.replace("length_s = 1.0", "length_s = 2.0")
    desk.plan_path.write_text(theirs)
    session.edit_plan("Gap wider", with_window(plan_of(session), -3, 15))
    with pytest.raises(ChangedOnDisk) as refused:
        session.save_plan()
    assert refused.value.theirs == theirs
    assert refused.value.ours == PLAN.replace("[-2.0, 14.0]", "[-3.0, 15.0]")
    assert refused.value.path == str(desk.plan_path)
    assert desk.plan_path.read_text() == theirs
    session.save_plan(overwrite=True)
    assert desk.plan_path.read_text() == refused.value.ours
    assert session.plan_is_saved


def test_a_plan_that_is_no_text_any_more_is_not_written_over(desk: Desk, session: Session) -> None:
    desk.plan_path.write_bytes(b"\xff\xfe\x00")
    session.edit_plan("Gap wider", with_window(plan_of(session), -3, 15))
    with pytest.raises(ChangedOnDisk):
        session.save_plan()


def test_a_plan_touched_or_changed_to_the_same_is_saved_without_asking(desk: Desk, session: Session) -> None:
    session.edit_plan("Gap wider", with_window(plan_of(session), -3, 15))
    desk.plan_path.write_text(PLAN)
    session.save_plan()
    session.edit_plan("Gap back", with_window(plan_of(session), -2, 14))
    desk.plan_path.write_text(PLAN)
    session.save_plan()
    assert session.plan_is_saved


def test_a_plan_removed_from_disk_is_written_again(desk: Desk, session: Session) -> None:
    desk.plan_path.unlink()
    session.save_plan()
    assert desk.plan_path.read_text() == PLAN


def test_their_plan_can_be_taken_and_that_undone(desk: Desk, session: Session) -> None:
    session.edit_plan("Gap wider", with_window(plan_of(session), -3, 15))
    ours = session.plan
    desk.plan_path.write_text(PLAN.replace("length_s = 1.0", "length_s = 2.0  # longer"))
    assert session.take_plan_from_disk()
    assert session.plan == read_plan(desk.plan_path).plan
    assert session.plan_is_saved
    session.undo()
    assert session.plan == ours
    session.save_plan()
    assert read_plan(desk.plan_path).plan == ours
    assert "# longer" in desk.plan_path.read_text()


def test_their_plan_is_not_taken_if_it_is_none(desk: Desk, session: Session) -> None:
    before = session.plan
    desk.plan_path.write_text("pulsemend = 1\n")
    with pytest.raises(PlanError):
        session.take_plan_from_disk()
    assert session.plan == before


def test_save_as_goes_on_with_the_new_file(desk: Desk, session: Session) -> None:
    session.edit_plan("Gap wider", with_window(plan_of(session), -3, 15))
    other = desk.folder / "other" / "second.toml"
    other.parent.mkdir()
    session.save_plan_as(other, other.parent / "marks" / "lt01.marks.toml")
    assert session.plan_path == other
    assert (desk.plan_path.read_text(), read_plan(other).plan) == (PLAN, session.plan)
    assert session.is_saved
    assert session.next_undo == "Gap wider"
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    session.save_marks()
    assert read_marks(other.parent / "marks" / "lt01.marks.toml").marks == session.marks


def test_save_as_to_an_impossible_place_changes_nothing(desk: Desk, session: Session) -> None:
    with pytest.raises(FileNotFoundError):
        session.save_plan_as(desk.folder / "nowhere" / "second.toml")
    assert session.plan_path == desk.plan_path


def test_a_drafted_plan_is_unsaved_until_it_has_a_file(desk: Desk) -> None:
    session = desk.new_session(with_plan=False)
    session.open_plan(parse_plan(PLAN), None)
    assert not session.plan_is_saved
    session.save_plan_as(desk.folder / "drafted.toml")
    assert session.plan_is_saved
    assert (desk.folder / "drafted.toml").read_text() == PLAN


def test_marks_are_saved_whole_with_fingerprint_and_comments(desk: Desk, session: Session) -> None:
    session.set_fingerprint(Fingerprint((("lt01.vhdr", 3, "a" * 64),)))
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    assert not session.marks_are_saved
    session.save_marks()
    assert session.marks_are_saved
    saved = read_marks(desk.marks_path)
    assert saved.marks == Marks(Fingerprint((("lt01.vhdr", 3, "a" * 64),)), bad=("C3",))
    assert [path.name for path in desk.marks_path.parent.iterdir()] == [desk.marks_path.name]

    desk.marks_path.write_text("# loose electrode\n" + saved.text)
    again = Session()
    again.open_recording(desk.folder / "lt01.vhdr", FACTS, read_marks(desk.marks_path), desk.marks_path)
    again.edit_marks("Cz bad too", replace(again.marks, bad=("C3", "Cz")))
    again.save_marks()
    assert desk.marks_path.read_text().startswith("# loose electrode\n")
    assert read_marks(desk.marks_path).marks == again.marks


def test_marks_of_another_recording_are_refused(session: Session) -> None:
    session.edit_marks("read", Marks(Fingerprint((("lt01.vhdr", 3, "a" * 64),))))
    with pytest.raises(MarksError, match="another recording"):
        session.set_fingerprint(Fingerprint((("lt01.vhdr", 3, "b" * 64),)))


def test_marks_changed_on_disk_are_not_written_over(desk: Desk, session: Session) -> None:
    desk.marks_path.parent.mkdir()
    desk.marks_path.write_text('pulsemend_marks = 1\nbad = ["Cz"]\n')
    session.edit_marks("C3 bad", Marks(bad=("C3",)))
    with pytest.raises(ChangedOnDisk):
        session.save_marks()
    with pytest.raises(ChangedOnDisk):
        session.close()
    assert desk.journal_files()
    session.save_marks(overwrite=True)
    assert read_marks(desk.marks_path).marks.bad == ("C3",)


def test_a_failed_save_leaves_the_old_file(
    desk: Desk, session: Session, monkeypatch: pytest.MonkeyPatch
) -> None:
    session.edit_plan("Gap wider", with_window(plan_of(session), -3, 15))

    def full(_number: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("pulsemend.model.toml_tables.os.fsync", full)
    with pytest.raises(OSError, match="No space"):
        session.save_plan()
    assert desk.plan_path.read_text() == PLAN
    assert not session.plan_is_saved
    assert sorted(path.name for path in desk.folder.iterdir()) == ["data", "lantern.toml"]


def test_a_long_history_forgets_its_oldest(desk: Desk) -> None:
    session = Session(longest=3)
    session.open_plan(read_plan(desk.plan_path), desk.plan_path)
    for number in range(5):
        session.edit_plan(f"to {number}", with_window(plan_of(session), -2, 20 + number))
    assert [session.undo() for _ in range(4)] == ["to 4", "to 3", "to 2", ""]
    assert plan_of(session).pulses.window_ms == (-2, 21)
