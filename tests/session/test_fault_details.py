"""Details for a fault report: of use, and without names, texts or paths of the user."""

from __future__ import annotations

from dataclasses import replace

from pulsemend.model.marks import BadStretch
from pulsemend.session.details import fault_details
from pulsemend.session.libraries import Library
from pulsemend.session.messages import Level, Message
from pulsemend.session.session import Session
from pulsemend.session.settings import Recent, Settings
from support.session_desk import FACTS, Desk

LIBRARIES = (Library("numpy", "2.4.6", "BSD-3-Clause"),)


def full_session(desk: Desk) -> Session:
    session = desk.new_session()
    plan = session.plan
    assert plan is not None
    session.edit_plan(
        "a label of the user's: Zubeneschamali",
        replace(
            plan,
            about=replace(plan.about, name="Zubeneschamali"),
            pulses=replace(plan.pulses, channels={"C3": (-2.0, 25.0)}),
            channels=replace(plan.channels, bad=("Cz",), recorded_reference="FCz", reference=("C3", "C4")),
        ),
    )
    session.edit_marks(
        "bad",
        replace(session.marks, bad=("C4",), bad_stretches=(BadStretch(1, 9, "Zubeneschamali sneezed"),)),
    )
    session.say(Message(Level.PROBLEM, "/data/zubeneschamali.vhdr is damaged", "at /data/zubeneschamali"))
    return session


def test_nothing_of_the_user_is_in_it(desk: Desk) -> None:
    settings = Settings(recent=(Recent("/data/zubeneschamali.vhdr"),), export_folder="/data/zubeneschamali")
    text = fault_details(full_session(desk), settings, LIBRARIES, "1920x1080").casefold()
    rules = ("baseline", "delay")
    codes = {marker.code for marker in FACTS.markers}
    channels = {channel.name.casefold() for channel in FACTS.channels} | {"fcz"}
    for word in ("zubeneschamali", "lantern", FACTS.stem, str(desk.folder).casefold(), "/", *rules, *codes):
        assert word not in text, word
    assert channels.isdisjoint(text.replace(",", " ").split())


def test_what_helps_is_in_it(desk: Desk) -> None:
    text = fault_details(full_session(desk), Settings(text_percent=125), LIBRARIES, "1920x1080 at 2")
    for part in (
        "Pulsemend 0.1.0",
        "Python 3.",
        "1920x1080 at 2",
        "text 125 %",
        "numpy 2.4.6",
        "1000 Hz, 60000 samples",
        "3 eeg, 1 trigger",
        "3 of 2 codes",
        "window_ms -2 14",
        "fill covariance",
        "channels 1 entries",
        "reference 2 entries",
        "bad_stretches 1",
        "1 problem",
        "revision",
    ):
        assert part in text, part


def test_of_an_empty_window(desk: Desk) -> None:
    text = fault_details(Session(), Settings(), ())
    assert "recording: none" in text
    assert "plan: none" in text
    assert "messages: none" in text
