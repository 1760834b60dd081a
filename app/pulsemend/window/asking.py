"""Asking the user where nothing can go on before there is an answer."""

from __future__ import annotations

from PySide6.QtCore import Qt

from pulsemend.window.dialogs.sheet import Question


def answer(question: Question) -> str:
    """Show a question until it is answered, and return the key of the answer."""
    answers: list[str] = []
    question.answered.connect(answers.append)
    # Qt would delete it within `exec`, under the feet of Python.
    question.setAttribute(Qt.WidgetAttribute.WA_DeleteOnClose, on=False)
    question.exec()
    question.deleteLater()
    return answers[0]
