"""Card of the Pulses stage on what the repair costs: measured on request, told in words and a picture."""

from __future__ import annotations

from PySide6.QtWidgets import QCheckBox, QLabel, QVBoxLayout

from pulsemend.engine.transplants import TransplantConfig
from pulsemend.errors import PulsemendError
from pulsemend.mending.learned import Learned
from pulsemend.mending.repair_cost import RepairCost, repair_cost
from pulsemend.progress import Progress
from pulsemend.window.job import Job
from pulsemend.window.parts import Card, button, words
from pulsemend.window.repair_cost_plot import RepairCostPlot
from pulsemend.window.stages.pulse_cards import Edits
from pulsemend.window.theme import Theme

MEANING = (
    "Artifacts of this recording are planted where no pulse was given, repaired as planned and compared with "
    "what was there. Line: median of the errors; area: 95 % of them are below its edge; hatched: the gap."
)
CHANGED = "The settings have changed since; measure again."


class RepairCostCard(Card):
    """What the repair costs.

    Parameters
    ----------
    edits : Edits
        Its workbench measures.
    theme : Theme
        Colours of the picture.
    """

    def __init__(self, edits: Edits, theme: Theme) -> None:
        super().__init__("What the repair costs")
        self._edits = edits
        self._learned: Learned | None = None
        self._job: Job | None = None
        self._found: tuple[Learned, RepairCost] | None = None
        self.compare = QCheckBox("compare with the other fills")
        self.resets = QCheckBox("reset the background's phase at each")
        self.add(self.compare)
        self.add(self.resets)
        self.measure = button("Measure", self._measure)
        self.add(self.measure)
        self.stopper = button("Stop", self.stop)
        self.add(self.stopper)
        self.state = self.add_note()
        self._sentences = QVBoxLayout()
        self._sentences.setSpacing(4)
        self.body.addLayout(self._sentences)
        self.sentences: list[QLabel] = []
        self.plot = RepairCostPlot(theme)
        self.add(self.plot)
        self.add_note(MEANING)
        self._show()

    @property
    def found(self) -> RepairCost | None:
        """What is shown."""
        return None if self._found is None else self._found[1]

    def show_learned(self, learned: Learned) -> None:
        """Measure with these settings when asked; what was found with others goes."""
        if learned is not self._learned:
            self._learned = learned
            if self._found is not None and self._found[0] is not learned:
                self._found = None
                self.state.setText(CHANGED)
        self._show()

    def show_waiting(self, problem: str = "") -> None:
        """Say that nothing can be measured with the present settings yet, or why not at all."""
        self.stop()
        self._learned = None
        if problem:
            self._found = None
            self.state.setText(problem)
        self._show()

    def stop(self) -> None:
        """Measure nothing any more."""
        if self._job is not None:
            job, self._job = self._job, None
            job.cancel()
            self.state.setText("")
            self._show()

    def set_theme(self, theme: Theme) -> None:
        """Paint the picture in other colours."""
        self.plot.set_theme(theme)

    # Measuring

    def _measure(self) -> None:
        learned, compare = self._learned, self.compare.isChecked()
        if learned is None:
            return
        self.stop()
        config = TransplantConfig(resets=self.resets.isChecked())
        job = self._edits.bench.start(
            "what the repair costs",
            lambda recording: repair_cost(recording, learned, compare=compare, config=config),
            lambda cost: self._take(learned, cost),
            self._fail,
        )
        if job is None:
            return
        self._job = job
        self._found = None
        self.state.setText("waiting")
        job.progressed.connect(self._tell)
        job.cancelled.connect(lambda: self._end(job))
        # With the focus on a button that vanishes the keyboard would be nowhere.
        had_focus = self.measure.hasFocus()
        self._show()
        if had_focus:
            self.stopper.setFocus()

    def _tell(self, progress: Progress, _seconds: float | None) -> None:
        if self._job is not None:
            share = f", {100 * progress.done / progress.total:.0f} %" if progress.total else ""
            self.state.setText(f"{progress.stage}{share}")

    def _take(self, learned: Learned, cost: RepairCost) -> None:
        self._job, self._found = None, (learned, cost)
        self.state.setText("")
        self._show()

    def _fail(self, error: BaseException) -> None:
        self._job = None
        self.state.setText("")
        if isinstance(error, PulsemendError):
            self.state.setText(str(error))
        else:
            self._edits.bench.tell(error)
        self._show()

    def _end(self, job: Job) -> None:
        if job is self._job:
            self._job = None
            self.state.setText("")
            self._show()

    # Showing

    def _show(self) -> None:
        busy, had_focus = self._job is not None, self.stopper.hasFocus()
        self.measure.setVisible(not busy)
        self.measure.setEnabled(self._learned is not None)
        self.stopper.setVisible(busy)
        if had_focus and not busy:
            self.measure.setFocus()
        self.state.setVisible(bool(self.state.text()) or busy)
        cost = self.found
        self._show_sentences(() if cost is None else cost.words)
        self.plot.setVisible(cost is not None)
        if cost is not None:
            self.plot.show_cost(cost)

    def _show_sentences(self, texts: tuple[str, ...]) -> None:
        if tuple(label.text() for label in self.sentences) == texts:
            return
        for label in self.sentences:
            self._sentences.removeWidget(label)
            label.hide()
            label.deleteLater()
        self.sentences = []
        for text in texts:
            label = words(text)
            label.setWordWrap(True)
            self._sentences.addWidget(label)
            self.sentences.append(label)
