"""Card of the Pulses stage on the decay after the gap: its shape, where it is fitted, and what that costs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

from PySide6.QtWidgets import QLabel, QVBoxLayout

from pulsemend.mending.decay_evidence import (
    AbsorptionView,
    DecaySummary,
    LeftAlone,
    absorption_view,
    decay_summary,
    why_not,
)
from pulsemend.mending.learned import Learned
from pulsemend.mending.pulse_view import StepLeft
from pulsemend.model.plan import Pulses
from pulsemend.model.vocabulary import Decay
from pulsemend.units import s_to_ms, v_to_uv
from pulsemend.window.absorption_plot import AbsorptionPlot
from pulsemend.window.parts import Card, Choices, set_kind, words
from pulsemend.window.stages.pulse_cards import Edits, SlimField
from pulsemend.window.theme import Theme

_SHAPES: Mapping[Decay, tuple[str, str]] = {
    Decay.NONE: ("none", "Nothing is subtracted after the gap."),
    Decay.EXPONENTIAL: ("one exponential", "Falls by the same share in the same time."),
    Decay.TWO_EXPONENTIALS: ("two exponentials", "A fast fall and a slow one, added."),
    Decay.POWER: ("power law", "Falls fast at first and ever more slowly later."),
}

NOTHING_FITTED = (
    "Nothing is fitted, so nothing of a response is taken away. Choose a shape above if the picture shows a "
    "decay after the gap; what it costs is then shown here."
)
WAITING = "Being fitted."
NONE_FITTED = "No channel has a fitted decay, so no response loses anything."
NO_PULSE = "No pulse is known, so there is nothing to fit. Say above where the pulses are."
MEANING = (
    "Test responses of 3 to 9 \u00b5V are added to the pulses of this recording and the fit is repeated: "
    "shown is the share that comes back; the band holds most of them. Where less than 80 % comes back, or as "
    "much too much, samples are marked "
    "as decay-fitted in every output."
)


@dataclass(frozen=True)
class _Tried:
    """What one shape did here, as long as nothing else has changed."""

    n_fitted: int
    left: StepLeft | None = None


class DecayCard(Card):
    """Shape, stretch and least size of the decay; the fit and its price.

    Parameters
    ----------
    edits : Edits
        Changes the plan.
    theme : Theme
        Colours of the picture.
    """

    def __init__(self, edits: Edits, theme: Theme) -> None:
        super().__init__("Decay after the gap")
        self._edits = edits
        self._learned: Learned | None = None
        self._problem = ""
        self._channel = ""
        self._tried_with: object = None
        self._tried: dict[Decay, _Tried] = {}
        self.shape = Choices("Decay", [(kind.value, name) for kind, (name, _) in _SHAPES.items()])
        self.shape.setToolTip("On the right: channels with a fit, and the largest step then left at a gap")
        for label in self.shape.findChildren(QLabel):
            # In a narrow column these words may be cut; the tooltip has them whole.
            label.setMinimumWidth(1)
        self.add(self.shape)
        self.meaning = self.add_note()
        self.length = SlimField("Decay: length of the stretch fitted", "ms", 5.0, 1000.0, 5.0, decimals=2)
        self.add_field("Stretch fitted", self.length)
        self.length.setToolTip("Counted from the gap's end; the decay is subtracted on until it is over")
        self.least = SlimField("Decay: least size at the gap's end", "\u00b5V", 0.0, 1e5, 5.0, decimals=2)
        self.add_field("Smallest fitted", self.least)
        self.least.setToolTip("Channels whose median decay at the gap's end is smaller are left alone")
        self.fitted = self.add_line("Fitted")
        self.largest = self.add_line("Largest at the gap's end")
        self._reasons = QVBoxLayout()
        self._reasons.setSpacing(2)
        self.body.addLayout(self._reasons)
        self.reasons: list[QLabel] = []
        self.what = words("")
        self.what.setWordWrap(True)
        self.add(self.what)
        self.plot = AbsorptionPlot(theme)
        self.add(self.plot)
        self.marked = words("", "attention")
        self.marked.setWordWrap(True)
        self.add(self.marked)
        self.note_below = self.add_note(MEANING)
        self.shape.chosen.connect(self._choose)
        self.length.committed.connect(self._choose_length)
        self.least.committed.connect(self._choose_least)
        for field in (self.length, self.least):
            field.editingFinished.connect(edits.end)

    # What holds

    def show_values(self, pulses: Pulses) -> None:
        """Show what the plan says now."""
        self.shape.show_choice(pulses.decay.value)
        self.meaning.setText(_SHAPES[pulses.decay][1])
        self.length.show_value(pulses.decay_ms)
        self.least.show_value(pulses.decay_least_uv)
        for field in (self.length, self.least):
            field.setEnabled(pulses.decay is not Decay.NONE)
        self._show_tried()
        self._show_fit()

    def show_learned(self, learned: Learned) -> None:
        """Show the fit with the present settings."""
        self._learned, self._problem = learned, ""
        self.note.setText("")
        decay = learned.estimates.decay
        kind = Decay.NONE if decay is None else decay.kind
        n_fitted = 0 if decay is None else int(decay.columns.size)
        tried = self._tried_now()
        if kind not in tried or tried[kind].n_fitted != n_fitted:
            tried[kind] = _Tried(n_fitted)
        self._show_tried()
        self._show_fit()

    def show_waiting(self, problem: str = "") -> None:
        """Say that nothing is known of the present settings yet, or why nothing can be.

        Without a problem, what was shown stays until it is known anew: nothing moves under the hand.
        """
        self._problem = problem
        if problem:
            self._learned = None
        self._show_fit()

    def show_left(self, left: StepLeft | None) -> None:
        """Show beside the shape of now what it leaves at the gap's end in the worst channel."""
        plan, tried = self._edits.bench.session.plan, self._tried_now()
        if plan is not None and plan.pulses.decay in tried:
            tried[plan.pulses.decay] = replace(tried[plan.pulses.decay], left=left)
            self._show_tried()

    def show_channel(self, channel: str) -> None:
        """Show the price in one channel; empty for the median over all fitted ones."""
        if channel != self._channel:
            self._channel = channel
            self._show_fit()

    def set_theme(self, theme: Theme) -> None:
        """Paint in other colours."""
        self.plot.set_theme(theme)

    # Beside the choice

    def _tried_now(self) -> dict[Decay, _Tried]:
        """Keep what was tried as long as all else that it rests on is as it is now."""
        session = self._edits.bench.session
        if session.plan is not None:
            pulses = replace(session.plan.pulses, decay=Decay.NONE)
            rest = pulses, session.plan.markers, session.plan.channels.bad, session.marks
            if rest != self._tried_with:
                self._tried_with, self._tried = rest, {}
        return self._tried

    def _show_tried(self) -> None:
        tried = self._tried_now()
        for kind in _SHAPES:
            self.shape.show_evidence(kind.value, _tried_words(kind, tried.get(kind)))

    # The fit

    def _show_fit(self) -> None:
        learned, plan = self._learned, self._edits.bench.session.plan
        kind = Decay.NONE if plan is None else plan.pulses.decay
        decay = None if learned is None else learned.estimates.decay
        if decay is not None and decay.kind is not kind:
            decay = None
        self.note.setText(self._waiting_words(kind))
        for part in (self.fitted, self.largest, self.what, self.marked, self.note_below):
            part.setVisible(decay is not None)
        if learned is None or decay is None:
            self._show_reasons(())
            self.plot.show_view(None, self._empty_words(kind))
            return
        summary = decay_summary(learned.setup, decay)
        self._show_summary(summary)
        view = absorption_view(learned.setup, decay, self._channel)
        reason = "" if view else why_not(learned.setup, decay, self._channel)
        view = view or absorption_view(learned.setup, decay)
        self.plot.show_view(view, "" if view else NONE_FITTED)
        self._show_marked(view, reason)

    def _waiting_words(self, kind: Decay) -> str:
        is_old = kind is not Decay.NONE and self._edits.bench.provisional and not self._problem
        return "being fitted" if is_old else ""

    def _empty_words(self, kind: Decay) -> str:
        """Say what to do where there is no fit."""
        if kind is Decay.NONE:
            return NOTHING_FITTED
        learned = self._learned
        if learned is not None and learned.plan.pulses.decay is kind and not self._edits.bench.provisional:
            return NO_PULSE
        return self._problem or WAITING

    def _show_summary(self, summary: DecaySummary) -> None:
        self.fitted.show_value(f"{summary.n_fitted} of {summary.n_channels} channels")
        self.largest.setVisible(summary.n_fitted > 0)
        self.largest.show_value(f"{summary.largest}, {v_to_uv(summary.largest_v):.0f} \u00b5V")
        self._show_reasons(summary.left_alone)

    def _show_reasons(self, left_alone: tuple[LeftAlone, ...]) -> None:
        texts = [f"{len(one.channels)} left alone: {self._said(one.reason)}" for one in left_alone]
        listed = [", ".join(one.channels) for one in left_alone]
        if [(label.text(), label.toolTip()) for label in self.reasons] == [*zip(texts, listed, strict=True)]:
            return
        for label in self.reasons:
            label.hide()
            self._reasons.removeWidget(label)
            label.deleteLater()
        self.reasons = []
        for text, names in zip(texts, listed, strict=True):
            label = words(text, "quiet")
            label.setToolTip(names)
            label.setAccessibleDescription(names)
            self._reasons.addWidget(label)
            self.reasons.append(label)

    def _said(self, reason: str) -> str:
        """Put the number of now where a reason names the plan's key."""
        learned = self._learned
        least_uv = 0.0 if learned is None else learned.plan.pulses.decay_least_uv
        return reason.replace("decay_least_uv", f"{least_uv:g} \u00b5V")

    def _show_marked(self, view: AbsorptionView | None, reason: str) -> None:
        for label in (self.what, self.marked, self.note_below):
            label.setVisible(view is not None)
        if view is None:
            return
        of_all = f"median over {view.n_channels} fitted channels" if view.n_channels > 1 else "fitted channel"
        not_this = f"{self._channel} is left alone: {self._said(reason)}. " if reason else ""
        self.what.setText(f"{not_this}Share of a test response that comes back, {view.channel or of_all}:")
        spans = ", ".join(f"{s_to_ms(a):.0f} to {s_to_ms(b):.0f}" for a, b in view.marked_s)
        where = "" if view.channel else " in at least half of them"
        self.marked.setText(
            f"Marked decay-fitted{where}: {spans} ms after the pulse"
            if spans
            else f"No sample is marked decay-fitted{where}."
        )
        set_kind(self.marked, "attention" if spans else "quiet")

    # Changing

    def _choose(self, key: str) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            self._edits.pulses(f"Decay: {key}", replace(plan.pulses, decay=Decay(key)))

    def _choose_length(self, value_ms: float) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            self._edits.pulses("Stretch of the decay", replace(plan.pulses, decay_ms=value_ms), "decay_ms")

    def _choose_least(self, value_uv: float) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            pulses = replace(plan.pulses, decay_least_uv=value_uv)
            self._edits.pulses("Least size of a decay", pulses, "decay_least_uv")


def _tried_words(kind: Decay, tried: _Tried | None) -> str:
    if tried is None:
        return ""
    parts = [] if kind is Decay.NONE else [f"{tried.n_fitted} ch."]
    if tried.left is not None:
        parts.append(f"leaves {v_to_uv(tried.left.step_v):.1f} \u00b5V")
    return ", ".join(parts)
