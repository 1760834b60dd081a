"""What the repair costs, in the Pulses stage through real events: asked for, stopped, shown, outdated."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
import pytest
from PySide6.QtCore import QPointF, Qt
from PySide6.QtTest import QTest
from pytestqt.qtbot import QtBot

from pulsemend.engine.transplants import TransplantConfig
from pulsemend.mending.learned import learn
from pulsemend.mending.repair_cost import BEST_CASE, RepairCost, repair_cost
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan_file import parse_plan
from pulsemend.progress import finish
from pulsemend.readers.opening import open_recording
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.window.repair_cost_card import CHANGED, RepairCostCard
from pulsemend.window.repair_cost_plot import RepairCostPlot
from pulsemend.window.stages.pulses import PulsesStage
from pulsemend.window.theme import DARK, LIGHT
from pulsemend.window.workbench import Workbench
from support.small_lantern import PLAN, Study, write_study

WAIT_MS = 60_000
LEFT = Qt.MouseButton.LeftButton


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    """A small recording; it is only read."""
    return write_study(tmp_path_factory.mktemp("costs"))


@pytest.fixture(scope="module")
def measured(study: Study) -> RepairCost:
    """The result, without a window."""
    recording = open_recording(study.recording)
    try:
        learned = finish(learn(recording, parse_plan(PLAN).plan, NO_MARKS))
        return finish(repair_cost(recording, learned, config=TransplantConfig()))
    finally:
        recording.close()


@dataclass
class Room:
    """The stage with a session and workers."""

    qtbot: QtBot
    session: Session
    bench: Workbench
    page: PulsesStage

    @property
    def card(self) -> RepairCostCard:
        return self.page.cost_card

    def wait(self, condition: Callable[[], bool]) -> None:
        self.qtbot.waitUntil(condition, timeout=WAIT_MS)

    def wait_learned(self) -> None:
        self.wait(lambda: self.bench.learned is not None and not self.bench.provisional)
        self.wait(lambda: self.card.measure.isEnabled())


@pytest.fixture
def room(qtbot: QtBot, study: Study) -> Iterator[Room]:
    session = Session()
    bench = Workbench(session, Settings())
    page = PulsesStage(bench)
    qtbot.addWidget(page.picture)
    page.settings.resize(400, 3600)
    qtbot.addWidget(page.settings)
    page.show_stage()
    source = open_recording(study.recording)
    session.open_recording(study.recording, source.facts)
    source.close()
    session.open_plan(parse_plan(PLAN), None)
    page.settings.show()
    qtbot.waitExposed(page.settings)
    made = Room(qtbot, session, bench, page)
    made.wait_learned()
    yield made
    page.close()
    bench.close()


def test_it_is_measured_on_request_and_told_in_words_and_picture(room: Room, measured: RepairCost) -> None:
    card = room.card
    assert card.found is None
    assert not card.plot.isVisible()
    assert not card.stopper.isVisible()
    seen: list[str] = []
    card.measure.clicked.connect(
        lambda: card._job and card._job.progressed.connect(lambda *_: seen.append(card.state.text()))
    )
    QTest.mouseClick(card.measure, LEFT)
    assert card.stopper.isVisible()
    assert not card.measure.isVisible()
    room.wait(lambda: card.found is not None)
    assert card.found is not None
    assert card.found.words == measured.words
    assert [label.text() for label in card.sentences] == list(measured.words)
    assert card.sentences[0].text() == BEST_CASE
    assert card.plot.isVisible()
    assert card.measure.isVisible()
    assert not card.state.isVisible()
    assert any("repairing planted artifacts" in text for text in seen)
    # Another gap: what was measured is of earlier settings.
    assert room.session.plan is not None
    wider = replace(room.session.plan.pulses, window_ms=(-2.0, 20.0))
    room.session.edit_plan("gap", replace(room.session.plan, pulses=wider))
    room.wait(lambda: card.state.text() == CHANGED)
    assert card.found is None
    assert card.sentences == []
    assert not card.plot.isVisible()


def test_it_can_be_stopped_and_is_with_another_stage(room: Room) -> None:
    card = room.card
    card.measure.setFocus()
    QTest.mouseClick(card.measure, LEFT)
    QTest.mouseClick(card.stopper, LEFT)
    assert card.measure.isVisible()
    assert not card.state.isVisible()
    QTest.mouseClick(card.measure, LEFT)
    room.page.hide_stage()
    assert card._job is None
    room.wait(lambda: not room.bench.jobs.under_way)
    assert card.found is None


def test_other_fills_are_compared_on_request(room: Room) -> None:
    card = room.card
    card.compare.setChecked(True)
    card.resets.setChecked(True)
    QTest.mouseClick(card.measure, LEFT)
    room.wait(lambda: card.found is not None)
    assert card.found is not None
    assert len(card.found.methods) == 5
    assert card.found.config.resets
    assert any(text.text().startswith(("Equal", "Smallest")) for text in card.sentences)


def test_what_cannot_be_measured_is_said(room: Room) -> None:
    assert room.session.plan is not None
    long = replace(room.session.plan.pulses, also=(), window_ms=(-2.0, 2000.0))
    room.session.edit_plan("gap", replace(room.session.plan, pulses=long))
    room.wait_learned()
    QTest.mouseClick(room.card.measure, LEFT)
    room.wait(lambda: "stretches of" in room.card.state.text())
    assert room.card.state.isVisible()
    assert room.card.measure.isVisible()


# The plot alone


@pytest.fixture
def plot(qtbot: QtBot, measured: RepairCost) -> RepairCostPlot:
    plot = RepairCostPlot(LIGHT)
    plot.resize(320, 200)
    qtbot.addWidget(plot)
    plot.show()
    qtbot.waitExposed(plot)
    plot.show_cost(measured)
    return plot


def test_plot_is_read_off_by_keys_and_pointer(plot: RepairCostPlot, measured: RepairCost) -> None:
    assert plot.accessibleDescription().startswith("Largest at ")
    plot.setFocus()
    QTest.keyClick(plot, Qt.Key.Key_Right)
    at = int(np.argmin(np.abs(measured.latencies_s - measured.gap_s[1])))
    most_uv = 1e6 * measured.methods[0].most_v[at]
    assert plot.reading().startswith(f"{1e3 * measured.latencies_s[at]:.0f} ms: ")
    assert plot.reading().endswith(f"95 % below {most_uv:.2f} \u00b5V")
    QTest.keyClick(plot, Qt.Key.Key_Right)
    assert plot.reading().startswith(f"{1e3 * measured.latencies_s[at + 1]:.0f} ms: ")
    assert plot.accessibleDescription() == plot.reading()
    QTest.keyClick(plot, Qt.Key.Key_End)
    QTest.keyClick(plot, Qt.Key.Key_Right)
    assert plot.reading().startswith(f"{1e3 * measured.latencies_s[-1]:.0f} ms: ")
    QTest.mouseMove(plot, QPointF(float(plot._x(0.1)), plot._area.center().y()).toPoint())
    assert 95 <= int(plot.reading().split()[0]) <= 105


def test_gap_is_hatched_and_the_latency_has_a_line(plot: RepairCostPlot, measured: RepairCost) -> None:
    earliest_s = measured.methods[0].earliest_s
    assert earliest_s is not None

    def colours(since_s: float) -> set[int]:
        image = plot.grab().toImage()
        x = round(float(plot._x(since_s)))
        return {image.pixel(x + dx, y) for dx in (-1, 0, 1) for y in range(round(plot._area.top()) + 20, 120)}

    assert len(colours(0.006)) > 1
    assert len(colours(earliest_s)) > len(colours(earliest_s + 0.05))
    before = plot.grab().toImage()
    plot.set_theme(DARK)
    assert plot.grab().toImage() != before
