"""A window's session on invented files."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

from pulsemend.model.plan_file import read_plan
from pulsemend.model.recording import Channel, Marker, RecordingFacts
from pulsemend.model.vocabulary import ChannelType
from pulsemend.session.session import Session

PLAN = """\
# how we cut the lanterns
pulsemend = 1

[about]
name = "Lantern"

[markers.lamp]
role = "sample"
[markers.tick]
role = "pulse"      # from the stimulator

[[trial]]
slot = "sample"
role = "sample"

[pulses]
window_ms = [-2.0, 14.0]      # seen on lt01

[epochs]
length_s = 1.0
[[epochs.rule]]
name = "baseline"
anchor = "sample"
start_s = -1.0
# a rule of its own
[[epochs.rule]]
name = "delay"
anchor = "sample"
start_s = 0.5
"""

FACTS = RecordingFacts(
    stem="lt01",
    format="triplet",
    rate_hz=1000.0,
    n_samples=60_000,
    channels=tuple(
        Channel(name, ChannelType.TRIGGER if name == "TRIG" else ChannelType.EEG)
        for name in ("C3", "Cz", "C4", "TRIG")
    ),
    markers=(Marker(2000, "lamp"), Marker(3000, "tick"), Marker(9000, "lamp")),
)


@dataclass
class Desk:
    """Files of one window, and the session on them."""

    folder: Path
    sessions: list[Session] = field(default_factory=list)

    @property
    def plan_path(self) -> Path:
        return self.folder / "lantern.toml"

    @property
    def marks_path(self) -> Path:
        return self.folder / "marks" / "lt01.marks.toml"

    @property
    def journals(self) -> Path:
        return self.folder / "data" / "journals"

    def journal_files(self) -> list[Path]:
        return sorted(self.journals.glob("*"))

    def new_session(self, *, with_plan: bool = True) -> Session:
        """Open another window on the same files."""
        session = Session(self.journals)
        self.sessions.append(session)
        session.open_recording(self.folder / "lt01.vhdr", FACTS, None, self.marks_path)
        if with_plan:
            session.open_plan(read_plan(self.plan_path), self.plan_path)
        return session

    def clear(self) -> None:
        """Close the files of every session, crashed or not."""
        for session in self.sessions:
            session._keeper.close()


def crash(session: Session) -> None:
    """End a session as a killed process would: files closed, nothing removed."""
    journal = session._keeper._journal
    assert journal is not None
    journal.leave()
