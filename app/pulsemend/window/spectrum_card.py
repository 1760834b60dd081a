"""The spectrum of the part in view: asked of a worker once the view rests, drawn as curves or spread."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from PySide6.QtWidgets import QSizePolicy, QWidget

from pulsemend.errors import PulsemendError
from pulsemend.mending.learned import Learned
from pulsemend.mending.view_spectrum import MOST_S, SpectrumRequest, ViewSpectrum, view_spectrum
from pulsemend.model.vocabulary import ChannelType, PulseTimes
from pulsemend.session.view import Shown
from pulsemend.units import v_to_uv
from pulsemend.window.channel_rows import ChannelRow, listed
from pulsemend.window.job import Job
from pulsemend.window.jobs import Debounce
from pulsemend.window.parts import Card
from pulsemend.window.spectrum_plot import MOST_CURVES, Curve, SpectrumPicture, SpectrumPlot, Spread
from pulsemend.window.traces.clock import duration
from pulsemend.window.workbench import Workbench

SETTLE_MS = 250
NOTHING_LEFT = "Too little signal is left of the part in view: show more time, or another part."
COMPUTING = "The spectrum is being computed."


class SpectrumCard(Card):
    """Spectrum of what is in view, while it is looked at.

    Parameters
    ----------
    bench : Workbench
        Session, workers, what is learned.
    """

    def __init__(self, bench: Workbench, parent: QWidget | None = None) -> None:
        super().__init__("Spectrum of the part in view", parent=parent)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self.bench = bench
        self.plot = SpectrumPlot(bench.theme)
        self.body.addWidget(self.plot, 1)
        self.settling = Debounce(SETTLE_MS, self._ask, self)
        self._rows: tuple[ChannelRow, ...] = ()
        self._is_open = False
        self._job: Job | None = None
        self._found: tuple[SpectrumRequest, ViewSpectrum | None] | None = None

    @property
    def found(self) -> ViewSpectrum | None:
        """What was computed last; None if nothing was."""
        return self._found[1] if self._found else None

    def set_open(self, is_open: bool) -> None:
        """Compute only while somebody looks."""
        self._is_open = is_open
        if is_open:
            self.request()
            return
        self.settling.drop()
        if self._job is not None:
            self._job.cancel()

    def forget(self) -> None:
        """Show nothing: another recording is open, or none."""
        self._found = None
        self._show()
        self.request()

    def request(self) -> None:
        """Compute anew once the hand rests, if anything that matters is another."""
        if self._is_open:
            self.settling.request()

    def show_rows(self, rows: tuple[ChannelRow, ...]) -> None:
        """Take note which channels are good."""
        if rows != self._rows:
            self._rows = rows
            self._show()

    def show_picked(self) -> None:
        """Draw the picked channels, or the spread of all good ones."""
        self._show()

    # The worker

    def _ask(self) -> None:
        request = self._request()
        if request is None or not self._is_open:
            return
        if self._found is not None and _same(self._found[0], request):
            self._show()
            return
        self._job = self.bench.start(
            "spectrum",
            lambda recording: view_spectrum(recording, request),
            lambda found: self._take(request, found),
            self._fail,
        )
        if self._found is None:
            self._show()

    def _request(self) -> SpectrumRequest | None:
        session, learned = self.bench.session, self.bench.learned
        if session.recording is None:
            return None
        facts, view = session.recording.facts, session.view
        start = min(max(0, round(view.start_s * facts.rate_hz)), facts.n_samples)
        stop = min(max(start, round((view.start_s + view.width_s) * facts.rate_hz)), facts.n_samples)
        closed = [(one.start, one.stop) for one in session.marks.bad_stretches]
        if learned is not None:
            closed += [(gap.start, gap.stop) for gap in learned.decision.geometry.gaps]
        inside = tuple((a, b) for a, b in closed if a < stop and b > start)
        return SpectrumRequest(start, stop, inside, self._repair(learned))

    def _repair(self, learned: Learned | None) -> Learned | None:
        return None if self.bench.session.view.shown is Shown.RECORDED else learned

    def _take(self, request: SpectrumRequest, found: ViewSpectrum | None) -> None:
        self._found = (request, found)
        self._show()

    def _fail(self, error: BaseException) -> None:
        self._found = None
        if isinstance(error, PulsemendError):
            self.note.setText("")
            self.plot.show_picture(SpectrumPicture(message=f"No spectrum: {error}"))
        else:
            self.bench.tell(error)

    # What is drawn

    def _show(self) -> None:
        if self.bench.session.recording is None or self._found is None:
            has = self.bench.session.recording is not None
            self.note.setText("")
            self.plot.show_picture(SpectrumPicture(message=COMPUTING if has else ""))
            return
        request, found = self._found
        if found is None:
            self.note.setText("")
            self.plot.show_picture(SpectrumPicture(message=NOTHING_LEFT))
            return
        plan = self.bench.session.plan
        root: NDArray[np.float64] = np.sqrt(found.density)
        values = v_to_uv(root)
        picture, of_what = self._picture(found, values, 0.0 if plan is None else plan.about.line_hz)
        self.plot.show_picture(picture)
        self.note.setText(" · ".join([of_what, *self._evidence(request, found)]))

    def _picture(
        self, found: ViewSpectrum, values: NDArray[np.float64], line_hz: float
    ) -> tuple[SpectrumPicture, str]:
        """Draw few picked channels one by one, and otherwise the spread of many."""
        place = {name: k for k, name in enumerate(found.names)}
        chosen = self.bench.session.view.picked & place.keys()
        picked = [row for row in self._rows if row.name in chosen]
        good = [
            row.name
            for row in self._rows
            if row.type is ChannelType.EEG and not row.is_bad and row.name in place
        ]
        if len(picked) > MOST_CURVES:
            names, text = [row.name for row in picked], f"{len(picked)} picked channels"
        else:
            names, text = good, f"{len(good)} good EEG channels"
        spread = _spread(values[[place[name] for name in names]]) if names else None
        curves: tuple[Curve, ...] = ()
        if 0 < len(picked) <= MOST_CURVES:
            curves = tuple(Curve(row.name, values[place[row.name]], row.is_bad) for row in picked)
            text = listed([row.name for row in picked])
        message = "" if curves or spread else "No good EEG channel: pick channels to see their spectrum."
        return SpectrumPicture(found.frequency_hz, spread, curves, line_hz, message), text

    def _evidence(self, request: SpectrumRequest, found: ViewSpectrum) -> list[str]:
        """Say what it was computed from."""
        session = self.bench.session
        if request.repaired is not None:
            signal = "repaired"
        elif session.view.shown is Shown.RECORDED:
            signal = "as recorded"
        else:
            signal = "as recorded: nothing is repaired yet"
        words = [signal, f"{duration(found.used_s)} in pieces of {duration(found.segment_s)}"]
        if found.thinned:
            words[-1] += f", spread evenly because more than {MOST_S:g} s are in view"
        if request.left_out:
            words.append("gaps and bad stretches left out")
        without_pulses = session.plan is not None and session.plan.pulses.times is PulseTimes.NONE
        if self.bench.learned is None and not without_pulses:
            words.append("pulses are not known yet and not left out")
        return words


def _spread(values: NDArray[np.float64]) -> Spread:
    lowest, low, median, high, highest = np.quantile(values, [0.0, 0.25, 0.5, 0.75, 1.0], axis=0)
    return Spread(lowest, low, median, high, highest)


def _same(a: SpectrumRequest, b: SpectrumRequest) -> bool:
    """Whether two requests have the same answer; a repair is compared by identity."""
    return (a.start, a.stop, a.left_out) == (b.start, b.stop, b.left_out) and a.repaired is b.repaired
