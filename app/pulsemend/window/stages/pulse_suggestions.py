"""What the signal suggests for gaps, beside the fields where they are decided, with buttons to take it."""

from __future__ import annotations

from functools import partial

from PySide6.QtWidgets import QVBoxLayout, QWidget

from pulsemend.mending.gap_suggestion import (
    NO_SUGGESTION,
    ChannelEnd,
    GapSuggestion,
    RechargeOffer,
    with_recharge,
    with_suggestion,
)
from pulsemend.mending.pulse_gaps import gap_of, plan_with_exceptions
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.window.parts import button, words
from pulsemend.window.stages.pulse_cards import Edits, in_micro, window_words


class SuggestedGap(QWidget):
    """The suggested gap, and the channels that need a longer one.

    Parameters
    ----------
    edits : Edits
        Changes the plan.
    """

    def __init__(self, edits: Edits) -> None:
        super().__init__()
        self._edits = edits
        self._suggestion = NO_SUGGESTION
        self._longer: tuple[str, ...] = ()
        self.text = words("", "quiet")
        self.channel = words("", "quiet")
        self.early = words("", "attention")
        self.early.setWordWrap(True)
        self.take = button("Take the suggested gap", self._take)
        self.longer = button("Longer gaps", self._add_longer)
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        for widget in (self.text, self.channel, self.take, self.longer, self.early):
            column.addWidget(widget)
        self.hide()

    def show_suggestion(self, suggestion: GapSuggestion, plan: Plan, marks: Marks, channel: str) -> None:
        """Show what is suggested, and what of it is still to be taken.

        Parameters
        ----------
        suggestion : GapSuggestion
            `NO_SUGGESTION` for none.
        plan, marks : Plan, Marks
            As they are edited.
        channel : str
            The channel of the picture; empty for all.
        """
        self._suggestion = suggestion
        self.setVisible(suggestion.n_pulses > 0)
        if not suggestion.n_pulses:
            return
        low, high = suggestion.window_ms
        self.text.setText(
            f"The signal suggests {window_words(suggestion.window_ms)}: "
            f"{len(suggestion.ends) - len(suggestion.exceptions)} of {len(suggestion.ends)} channels show "
            f"nothing later ({suggestion.words})."
        )
        own = next((end for end in suggestion.ends if end.channel == channel), None)
        self.channel.setText("" if own is None else _channel_words(own))
        self.channel.setVisible(own is not None)
        now = plan.pulses.window_ms
        self.take.setVisible(now != (low, high))
        self.take.setToolTip(f"{window_words(suggestion.window_ms)} for all channels without an exception")
        self._longer = tuple(
            name
            for name, (_, end_ms) in suggestion.exceptions.items()
            if (gap_of(plan, marks, name)[0] or (0.0, 0.0))[1] < end_ms
        )
        count = len(self._longer)
        self.longer.setText(f"Longer gaps for {count} channel{'' if count == 1 else 's'}")
        self.longer.setToolTip(
            ", ".join(f"{name} {window_words(suggestion.exceptions[name])}" for name in self._longer)
        )
        self.longer.setVisible(count > 0 and now is not None)
        early = suggestion.ringing if now is not None and low < now[0] and suggestion.ringing else ""
        self.early.setText(f"Before the gap: {in_micro(early)}." if early else "")
        self.early.setVisible(bool(early))

    def _take(self) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            self._edits.plan("Suggested gap", with_suggestion(plan, self._suggestion))

    def _add_longer(self) -> None:
        plan = self._edits.bench.session.plan
        if plan is None or plan.pulses.window_ms is None:
            return
        start_ms = min(plan.pulses.window_ms[0], self._suggestion.window_ms[0])
        changed = plan
        for name in self._longer:
            window_ms = (start_ms, self._suggestion.exceptions[name][1])
            changed = plan_with_exceptions(changed, [name], window_ms)
        self._edits.plan(self.longer.text(), changed)


class OfferedGaps(QWidget):
    """Deflections that come again after every pulse, each with a button that makes it a further gap.

    Parameters
    ----------
    edits : Edits
        Changes the plan.
    """

    def __init__(self, edits: Edits) -> None:
        super().__init__()
        self._edits = edits
        self._shown: tuple[RechargeOffer, ...] = ()
        self._column = QVBoxLayout(self)
        self._column.setContentsMargins(0, 0, 0, 0)
        self.hide()

    def show_offers(self, offers: tuple[RechargeOffer, ...]) -> None:
        """Show other offers."""
        self.setVisible(bool(offers))
        if offers == self._shown:
            return
        self._shown = offers
        while self._column.count():
            item = self._column.takeAt(0)
            old = None if item is None else item.widget()
            if old is not None:
                old.hide()
                old.deleteLater()
        for offer in offers:
            self._column.addWidget(words(f"In the signal: {in_micro(offer.words)}.", "quiet"))
            self._column.addWidget(button(f"Add {window_words(offer.window_ms)}", partial(self._add, offer)))

    def _add(self, offer: RechargeOffer) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            self._edits.plan("Further gap", with_recharge(plan, offer))


def _channel_words(end: ChannelEnd) -> str:
    if end.end_ms is None:
        return f"{end.channel}: nothing beyond the pulse itself."
    if end.goes_on:
        return f"{end.channel}: not over after {end.end_ms:.6g} ms ({end.sign}); a matter of the decay."
    return f"{end.channel}: until {end.end_ms:.6g} ms ({end.sign})."
