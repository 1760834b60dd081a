"""What part of a recording is in view and how it is shown. View state is not history: it is never undone."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class Shown(StrEnum):
    """Which signal the traces show."""

    RECORDED = "as recorded"
    REPAIRED = "repaired"
    BOTH = "both"


@dataclass(frozen=True)
class View:
    """The part in view.

    Parameters
    ----------
    start_s : float
        Left edge, seconds from the recording's first sample.
    width_s : float
        Seconds across.
    row_uv : float
        Microvolts that one row's height stands for.
    shown : Shown
    rows : tuple of str
        Names of the channels shown, top to bottom; hidden ones are absent.
    picked : frozenset of str
        Channels the user has picked.
    """

    start_s: float = 0.0
    width_s: float = 10.0
    row_uv: float = 60.0
    shown: Shown = Shown.RECORDED
    rows: tuple[str, ...] = ()
    picked: frozenset[str] = frozenset()
