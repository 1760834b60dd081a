"""The questions that are asked before work could be lost."""

from __future__ import annotations

import difflib

from PySide6.QtGui import QFontDatabase
from PySide6.QtWidgets import QPlainTextEdit, QWidget

from pulsemend.errors import ChangedOnDisk
from pulsemend.session.lock import Holder
from pulsemend.session.recovery import Recovery
from pulsemend.session.session import Session
from pulsemend.window.dialogs.sheet import Question

SAVE, GIVE_UP, STAY = "save", "give up", "stay"
WRITE_OVER, TAKE_THEIRS, SAVE_AS = "write over", "take theirs", "save as"
BRING_BACK, THROW_AWAY = "bring back", "throw away"
OPEN_ANYWAY, STOP_AND_CLOSE = "open anyway", "stop and close"


def unsaved_question(session: Session, parent: QWidget | None = None, *, closes: bool = True) -> Question:
    """Ask what becomes of unsaved changes of the plan when the window closes, or opens another plan.

    Parameters
    ----------
    session : Session
        The window's.
    parent : QWidget or None
        The window.
    closes : bool
        Whether the window closes; otherwise another plan is opened.

    Returns
    -------
    Question
        Answers `SAVE`, `GIVE_UP` or `STAY`.
    """
    does, what = ("close", "the window closes") if closes else ("open", "another is opened")
    name = session.plan_path.name if session.plan_path else "The plan"
    last = f" The last change was: {session.next_undo}." if session.next_undo else ""
    has_file = session.plan_path is not None
    text = (
        f"{name} was changed and not saved.{last} Marks are saved by themselves."
        if has_file
        else f"The plan was never saved to a file.{last} Marks are saved by themselves."
    )
    return Question(
        f"Save the plan before {what}?",
        text,
        (
            (
                GIVE_UP,
                f"{does.capitalize()} without saving",
                "The plan's file stays as it is; the changes are lost",
            ),
            (STAY, "Stay here", f"{does.capitalize()} nothing"),
            (
                SAVE,
                f"Save and {does}" if has_file else f"Save as and {does}...",
                "Write the plan to its file",
            ),
        ),
        STAY,
        parent=parent,
    )


def running_question(what: str, parent: QWidget | None = None) -> Question:
    """Ask whether a running job is stopped because the window closes.

    Parameters
    ----------
    what : str
        What is running, in words.
    parent : QWidget or None
        The window.

    Returns
    -------
    Question
        Answers `STOP_AND_CLOSE` or `STAY`.
    """
    return Question(
        "Stop what is running?",
        f"Still running: {what}. If it is stopped now, no half file stays behind.",
        (
            (STOP_AND_CLOSE, "Stop it and close", "What it did so far is thrown away"),
            (STAY, "Let it run", "Close nothing"),
        ),
        STAY,
        parent=parent,
    )


def changed_question(
    error: ChangedOnDisk, *, is_plan: bool = True, parent: QWidget | None = None
) -> Question:
    """Ask which of two versions of a file counts, with what differs between them.

    Parameters
    ----------
    error : ChangedOnDisk
        Holds both texts.
    is_plan : bool
        Whether it is the plan, which can be taken from the disk or saved elsewhere; marks cannot.
    parent : QWidget or None
        The window.

    Returns
    -------
    Question
        Answers `WRITE_OVER`, `STAY` and, for a plan, `TAKE_THEIRS` and `SAVE_AS`.
    """
    answers = [(WRITE_OVER, "Write over it", "What somebody else changed is lost")]
    if is_plan:
        answers.append((TAKE_THEIRS, "Take theirs", "Go on with the file's version; undo brings yours back"))
        answers.append((SAVE_AS, "Save yours as...", "Keep both under two names"))
    answers.append((STAY, "Decide later", "Nothing is written"))
    return Question(
        "The file was changed by somebody else",
        f"{error.path} is no longer what was read. Lines with - are in the file, with + in this window.",
        answers,
        STAY,
        _difference(error),
        parent,
    )


def recovery_question(recovery: Recovery, parent: QWidget | None = None) -> Question:
    """Ask whether work that a crash left behind comes back.

    Parameters
    ----------
    recovery : Recovery
        The session's offer.
    parent : QWidget or None
        The window.

    Returns
    -------
    Question
        Answers `BRING_BACK` or `THROW_AWAY`.
    """
    return Question(
        "Bring back the work that was not saved?",
        f"{recovery.words} What is brought back can be undone step by step, and no file changes until it is "
        "saved.",
        (
            (THROW_AWAY, "Throw it away", "Go on from the files as they are"),
            (BRING_BACK, "Bring it back", "Go on where the work ended"),
        ),
        BRING_BACK,
        parent=parent,
    )


def second_window_question(holder: Holder, parent: QWidget | None = None) -> Question:
    """Warn of a second window on the same recording.

    Parameters
    ----------
    holder : Holder
        Who has it open.
    parent : QWidget or None
        The window.

    Returns
    -------
    Question
        Answers `OPEN_ANYWAY` or `STAY`.
    """
    return Question(
        "Open the recording a second time?",
        f"{holder.words}. Whoever saves last is asked before the other's changes are written over.",
        (
            (OPEN_ANYWAY, "Open it here too", "Both windows can change plan and marks"),
            (STAY, "Do not open it", "Go to the other window instead"),
        ),
        STAY,
        parent=parent,
    )


def _difference(error: ChangedOnDisk) -> QPlainTextEdit:
    lines = difflib.unified_diff(
        error.theirs.splitlines(), error.ours.splitlines(), "the file", "this window", n=1, lineterm=""
    )
    shown = QPlainTextEdit("\n".join(lines))
    shown.setReadOnly(True)
    shown.setTabChangesFocus(True)
    shown.setFont(QFontDatabase.systemFont(QFontDatabase.SystemFont.FixedFont))
    shown.setLineWrapMode(QPlainTextEdit.LineWrapMode.NoWrap)
    shown.setMinimumSize(520, 160)
    shown.setAccessibleName("What differs")
    return shown
