"""What the user is told, as frozen values."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class Level(StrEnum):
    """How much a message matters."""

    NOTE = "note"
    ATTENTION = "needs attention"
    PROBLEM = "problem"


@dataclass(frozen=True)
class Message:
    """One message: a sentence, and details on demand."""

    level: Level
    text: str
    details: str = ""
