"""Random edits, drags, undos and redos against a model that keeps every state in a list."""

from __future__ import annotations

import random
from dataclasses import dataclass, field, replace

import pytest

from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.session.history import LONGEST
from pulsemend.session.session import Session
from support.session_desk import Desk, crash

CHANNELS = ("C3", "Cz", "C4", "Fz", "Pz")


@dataclass
class Model:
    """All states since the oldest that can be reached, and where we are among them."""

    states: list[tuple[Plan | None, Marks]]
    labels: list[str] = field(default_factory=list)
    at: int = 0
    open_drag: str | None = None

    @property
    def state(self) -> tuple[Plan | None, Marks]:
        return self.states[self.at]

    def edit(self, label: str, state: tuple[Plan | None, Marks], drag: str | None) -> None:
        if state == self.state:
            return
        if drag is not None and drag == self.open_drag and self.at:
            self.at -= 1
        del self.states[self.at + 1 :], self.labels[self.at :]
        self.open_drag = drag
        if state == self.state:
            # A drag back to its start: the next move must not swallow the entry before.
            self.open_drag = None
            return
        self.states.append(state)
        self.labels.append(label)
        self.at += 1
        if self.at > LONGEST:
            del self.states[0], self.labels[0]
            self.at -= 1

    def undo(self) -> None:
        self.open_drag = None
        self.at = max(self.at - 1, 0)

    def redo(self) -> None:
        self.open_drag = None
        self.at = min(self.at + 1, len(self.labels))


@dataclass
class Walk:
    """One random walk of a session and its model."""

    session: Session
    model: Model
    draw: random.Random

    def step(self, number: int) -> None:
        kind = self.draw.choices(
            ["plan", "marks", "drag plan", "drag marks", "end", "undo", "redo"], [4, 4, 6, 6, 1, 5, 4]
        )[0]
        session, model, plan = self.session, self.model, self.session.plan
        assert plan is not None
        if kind.endswith("plan"):
            drag = self.draw.choice(["gap", "other"]) if kind.startswith("drag") else None
            stop_ms = float(self.draw.randint(5, 12))
            new = replace(plan, pulses=replace(plan.pulses, window_ms=(-2.0, stop_ms)))
            session.edit_plan(f"step {number}", new, drag)
            model.edit(f"step {number}", (new, model.state[1]), drag and f"plan {drag}")
        elif kind.endswith("marks"):
            drag = self.draw.choice(["gap", "other"]) if kind.startswith("drag") else None
            marks = replace(session.marks, bad=tuple(self.draw.sample(CHANNELS, self.draw.randint(0, 2))))
            session.edit_marks(f"step {number}", marks, drag)
            model.edit(f"step {number}", (model.state[0], marks), drag and f"marks {drag}")
        elif kind == "end":
            session.end_merge()
            model.open_drag = None
        elif kind == "undo":
            for _ in range(self.draw.choice([1, 1, 2, 5])):
                session.undo()
                model.undo()
        else:
            session.redo()
            model.redo()

    def check(self) -> None:
        session, model = self.session, self.model
        assert (session.plan, session.marks) == model.state
        assert session.next_undo == (model.labels[model.at - 1] if model.at else "")
        assert session.next_redo == (model.labels[model.at] if model.at < len(model.labels) else "")


@pytest.mark.parametrize("seed", [1, *(pytest.param(seed, marks=pytest.mark.slow) for seed in (2, 3, 4))])
def test_random_steps_lose_no_undo(desk: Desk, seed: int, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("pulsemend.session.journal.os.fsync", lambda _number: None)
    session = desk.new_session()
    walk = Walk(session, Model([(session.plan, session.marks)]), random.Random(seed))
    for number in range(2000):
        walk.step(number)
        walk.check()
        if number % 400 == 399:
            # A crash in between; the walk goes on with what came back.
            crash(walk.session)
            walk.session = desk.new_session()
            assert walk.session.recovery is not None
            walk.session.recover()
            walk.model.open_drag = None
            walk.session.end_merge()
            walk.check()
    while walk.model.at:
        walk.session.undo()
        walk.model.undo()
        walk.check()
    assert walk.session.undo() == ""
    walk.session.close()
    assert desk.journal_files() == []
