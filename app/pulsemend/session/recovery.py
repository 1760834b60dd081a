"""The offer to bring back what a crash left behind, in words."""

from __future__ import annotations

import time
from dataclasses import dataclass

from pulsemend.session.left_behind import LeftBehind


@dataclass(frozen=True)
class Recovery:
    """What can be brought back.

    Parameters
    ----------
    steps : int
        Changes, undos and redos since the window was opened.
    last : str
        Label of the last change in force; empty if there is none.
    written_s : float
        When the last step was made, seconds since 1970.
    plan_changed, marks_changed : bool
        The file was changed by somebody else since: what is brought back would replace that on saving.
    lost : int
        Steps after the last readable one, damaged on the disk.
    """

    steps: int
    last: str
    written_s: float
    plan_changed: bool = False
    marks_changed: bool = False
    lost: int = 0

    @classmethod
    def of(cls, left: LeftBehind, *, plan_changed: bool, marks_changed: bool) -> Recovery:
        """Describe a journal that was left behind.

        Parameters
        ----------
        left : LeftBehind
            The journal.
        plan_changed, marks_changed : bool
            Whether the files are others than the journal knows.
        """
        last = left.history.next_undo
        return cls(left.steps, last, left.written_s, plan_changed, marks_changed, left.lost)

    @property
    def needs_a_look(self) -> bool:
        """Whether the user should decide, instead of being told only."""
        return self.plan_changed or self.marks_changed or self.lost > 0

    @property
    def words(self) -> str:
        """What happened and what comes back, in a few sentences."""
        when = time.strftime("%Y-%m-%d %H:%M", time.localtime(self.written_s))
        steps = "1 step" if self.steps == 1 else f"{self.steps} steps"
        text = [f"Pulsemend ended unexpectedly; the work of {when} was kept ({steps})."]
        if self.last:
            text.append(f"The last change was: {self.last}.")
        changed = [
            name for name, is_so in (("plan", self.plan_changed), ("marks", self.marks_changed)) if is_so
        ]
        text += [f"The {name} file was changed by somebody else since." for name in changed]
        if self.lost:
            text.append(f"{self.lost} later steps are damaged and cannot be read.")
        return " ".join(text)
