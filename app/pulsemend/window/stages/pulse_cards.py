"""Cards of the Pulses stage that decide what is replaced, how, and to what effect."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from functools import partial

from PySide6.QtCore import QSignalBlocker, QSize, Qt, Signal
from PySide6.QtWidgets import QHBoxLayout, QLabel, QListWidget, QVBoxLayout, QWidget

from pulsemend.errors import PulsemendError
from pulsemend.mending.pulse_effect import Effect
from pulsemend.mending.pulse_gaps import (
    GapException,
    Source,
    exceptions,
    marks_with_exceptions,
    plan_with_exceptions,
)
from pulsemend.mending.pulse_view import LARGE_STEP_UV, PROPOSED_MS, StepLeft, edge_ms, on_sample_ms
from pulsemend.model.marks import Marks
from pulsemend.model.plan import OtherGap, Plan, Pulses, Window
from pulsemend.model.vocabulary import Fill, Format, Side
from pulsemend.signal.fills import default_flank_s
from pulsemend.units import s_to_ms, v_to_uv
from pulsemend.window.parts import Card, Choices, NumberField, ValueLine, button, set_kind, words
from pulsemend.window.workbench import Workbench

GAP_KEY = "gap"
"""Edits of the gap in one drag, or in one row of steps, become one entry."""


class Edits:
    """Changes plan and marks for all cards; what is refused is said, and the cards show the old value again.

    Parameters
    ----------
    bench : Workbench
        Session.
    refresh : callable
        Shows plan and marks again.
    """

    def __init__(self, bench: Workbench, refresh: Callable[[], None]) -> None:
        self.bench = bench
        self._refresh = refresh

    def pulses(self, label: str, pulses: Pulses, merge_key: str | None = None) -> None:
        """Change the plan's pulses."""
        plan = self.bench.session.plan
        if plan is not None:
            self.plan(label, replace(plan, pulses=pulses), merge_key)

    def plan(self, label: str, plan: Plan, merge_key: str | None = None) -> None:
        """Change the plan."""
        try:
            self.bench.session.edit_plan(label, plan, merge_key)
        except PulsemendError as error:
            self._refuse(error)

    def marks(self, label: str, marks: Marks, merge_key: str | None = None) -> None:
        """Change the marks."""
        try:
            self.bench.session.edit_marks(label, marks, merge_key)
        except PulsemendError as error:
            self._refuse(error)

    def end(self) -> None:
        """End a drag or a row of steps."""
        self.bench.session.end_merge()

    def _refuse(self, error: PulsemendError) -> None:
        self.bench.tell(error)
        self._refresh()


class SlimField(NumberField):
    """A number field that can be as narrow as what stands in it, whatever its range."""

    def minimumSizeHint(self) -> QSize:
        """Leave room for the text of now and the arrows."""
        shown = self.fontMetrics().horizontalAdvance(self.text() + "00")
        return QSize(shown + 2 * self.fontMetrics().height(), super().minimumSizeHint().height())

    def sizeHint(self) -> QSize:
        """Want no more than that."""
        return self.minimumSizeHint()


class MsField(SlimField):
    """Milliseconds from the onset: one step is one sample, and no more digits than there are."""

    def __init__(self, name: str, least: float = -1000.0, most: float = 5000.0) -> None:
        super().__init__(name, "ms", least, most, 1.0, decimals=3)

    def textFromValue(self, value: float) -> str:
        """Leave out zeros at the end."""
        text = super().textFromValue(value).rstrip("0")
        return text if text[-1:].isdigit() else f"{text}0"


class WindowFields(QWidget):
    """From and to.

    Parameters
    ----------
    name : str
        What of, for screen readers.
    least, most : float
        Allowed milliseconds.

    Attributes
    ----------
    committed : Signal(float, float)
        The user chose another window.
    ended : Signal()
        Typing or stepping is over.
    """

    committed = Signal(float, float)
    ended = Signal()

    def __init__(self, name: str, least: float = -1000.0, most: float = 5000.0) -> None:
        super().__init__()
        self.rate_hz = 1000.0
        self.start = MsField(f"Start of {name}", least, most)
        self.stop = MsField(f"End of {name}", least, most)
        row = QHBoxLayout(self)
        row.setContentsMargins(0, 0, 0, 0)
        row.addWidget(self.start, 1)
        row.addWidget(words("to"))
        row.addWidget(self.stop, 1)
        for field in (self.start, self.stop):
            field.committed.connect(self._commit)
            field.editingFinished.connect(self.ended)

    @property
    def window_ms(self) -> Window:
        """What stands there, on samples where these are meant."""
        return on_sample_ms(self.start.value(), self.rate_hz), on_sample_ms(self.stop.value(), self.rate_hz)

    def show_window(self, window_ms: Window) -> None:
        """Show another window."""
        self.start.show_value(window_ms[0])
        self.stop.show_value(window_ms[1])

    def set_rate(self, rate_hz: float) -> None:
        """Step by the samples of another rate."""
        self.rate_hz = rate_hz
        for field in (self.start, self.stop):
            field.setSingleStep(edge_ms(1, rate_hz))

    def _commit(self, _value: float) -> None:
        self.committed.emit(*self.window_ms)


class GapCard(Card):
    """The gap around every pulse, and the channels that have another one.

    Parameters
    ----------
    edits : Edits
        Changes plan and marks.
    """

    def __init__(self, edits: Edits) -> None:
        super().__init__("Gap")
        self._edits = edits
        self._shown: tuple[GapException, ...] = ()
        self.channel = ""
        self.gap_fields = WindowFields("the gap")
        self.add(self.gap_fields)
        self.add_note("Since the onset of each pulse; both ends are replaced too.")
        self.left = words("", "attention")
        self.left.setWordWrap(True)
        self.left.hide()
        self.add(self.left)
        self.propose = button("Take the proposed gap", self._take_proposed, main=True)
        self.add(self.propose)
        self.add(words("Exceptions of single channels"))
        self.list = QListWidget()
        self.list.setAccessibleName("Gap: exceptions of single channels")
        self.list.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self.add(self.list)
        self.own = WindowFields("the exception")
        self.add(self.own)
        self.place = Choices(
            "Where the exception holds",
            [(source.value, source.value) for source in (Source.PLAN, Source.MARKS)],
        )
        self.place.show_choice(Source.PLAN.value)
        self.add(self.place)
        self._wanted = Source.PLAN
        row = QHBoxLayout()
        self.add_picked = button("Add", self._add)
        self.remove = button("Remove", self._remove, tooltip="The channel gets the gap of all others again")
        row.addWidget(self.add_picked)
        row.addWidget(self.remove)
        row.addStretch(1)
        self.body.addLayout(row)
        self.hint = self.add_note()
        self.gap_fields.committed.connect(self._commit)
        self.gap_fields.ended.connect(edits.end)
        self.own.committed.connect(self._commit_own)
        self.own.ended.connect(edits.end)
        self.place.chosen.connect(self._choose_place)
        self.list.currentRowChanged.connect(lambda _row: self._show_current())

    def show_values(self, plan: Plan, marks: Marks, rate_hz: float, picked: Sequence[str]) -> None:
        """Show what holds now."""
        decided = plan.pulses.window_ms is not None
        self.note.setText("" if decided else "proposed, not decided yet")
        set_kind(self.note, "quiet" if decided else "attention")
        self.propose.setVisible(not decided)
        for fields in (self.gap_fields, self.own):
            fields.set_rate(rate_hz)
        self.gap_fields.show_window(plan.pulses.window_ms or PROPOSED_MS)
        self._show_list(exceptions(plan, marks))
        names = picked or ([self.channel] if self.channel else [])
        self.add_picked.setEnabled(bool(names) and decided)
        wanted = f"Add {_listed(names)}" if names else "Add"
        room = self.fontMetrics().averageCharWidth() * 20
        self.add_picked.setText(self.fontMetrics().elidedText(wanted, Qt.TextElideMode.ElideRight, room))
        self.add_picked.setAccessibleName(wanted)
        self.add_picked.setToolTip(f"{wanted}: a gap of its own" if names else "")
        text = (
            "" if names else "Pick channels by their names, or choose one in the picture, to add them here."
        )
        self.hint.setText(text)
        self.hint.setVisible(bool(text))
        self._names = tuple(names)

    def put_beside_edges(self, widget: QWidget) -> None:
        """Give a widget its place just below the edges of the gap."""
        self.body.insertWidget(self.body.indexOf(self.gap_fields) + 1, widget)

    def show_left(self, left: StepLeft | None) -> None:
        """Say beside the gap what it leaves in the worst channel, if that is much."""
        step_uv = 0.0 if left is None else v_to_uv(left.step_v)
        large = left is not None and step_uv > LARGE_STEP_UV
        self.left.setText(
            f"{left.channel}: {step_uv:.0f} \u00b5V step left at the gap's end: decay outlasts the gap"
            if left is not None and large
            else ""
        )
        self.left.setVisible(large)

    def _show_list(self, shown: tuple[GapException, ...]) -> None:
        current = self._current
        with QSignalBlocker(self.list):
            if shown != self._shown:
                self.list.clear()
                self.list.addItems([_exception_words(one) for one in shown])
                for row, one in enumerate(shown):
                    self.list.item(row).setToolTip(_exception_words(one))
                self._shown = shown
            row = -1
            if current is not None:
                same = [i for i, one in enumerate(shown) if one.channel == current.channel]
                row = next((i for i in same if shown[i].source is current.source), same[0] if same else -1)
            self.list.setCurrentRow(row if row >= 0 else (0 if shown else -1))
        self.list.setVisible(bool(shown))
        rows = min(max(len(shown), 1), 5)
        self.list.setFixedHeight(rows * (self.list.fontMetrics().height() + 6) + 8)
        self._show_current()

    @property
    def _current(self) -> GapException | None:
        row = self.list.currentRow()
        return self._shown[row] if 0 <= row < len(self._shown) else None

    def _show_current(self) -> None:
        current = self._current
        self.own.setVisible(current is not None)
        self.remove.setVisible(current is not None)
        if current is not None:
            self.own.show_window(current.window_ms)
            self.place.show_choice(current.source.value)
            self._wanted = current.source

    def _commit(self, start_ms: float, stop_ms: float) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            window = _ordered(
                (start_ms, stop_ms), plan.pulses.window_ms or PROPOSED_MS, self.gap_fields.rate_hz
            )
            self._edits.pulses("Gap", replace(plan.pulses, window_ms=window), GAP_KEY)
            # An edge that could not pass the other may change nothing: then nobody else corrects the field.
            now = self._edits.bench.session.plan or plan
            self.gap_fields.show_window(now.pulses.window_ms or window)

    def _take_proposed(self) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            self._edits.pulses("Gap", replace(plan.pulses, window_ms=PROPOSED_MS))

    def _commit_own(self, start_ms: float, stop_ms: float) -> None:
        current = self._current
        if current is not None:
            window = _ordered((start_ms, stop_ms), current.window_ms, self.own.rate_hz)
            set_exceptions(self._edits, [current.channel], window, current.source, GAP_KEY)
            self.own.show_window((self._current or current).window_ms)

    def _choose_place(self, key: str) -> None:
        """Let the exception hold elsewhere; both files change, so these are two entries."""
        self._wanted = Source(key)
        current = self._current
        if current is not None and current.source is not self._wanted:
            set_exceptions(self._edits, [current.channel], current.window_ms, self._wanted)
            set_exceptions(self._edits, [current.channel], None, current.source)

    def _add(self) -> None:
        session = self._edits.bench.session
        if session.plan is not None and session.plan.pulses.window_ms is not None:
            set_exceptions(self._edits, self._names, session.plan.pulses.window_ms, self._wanted)
            for row, one in enumerate(self._shown):
                if one.channel == self._names[0] and one.source is self._wanted:
                    self.list.setCurrentRow(row)

    def _remove(self) -> None:
        current = self._current
        if current is not None:
            set_exceptions(self._edits, [current.channel], None, current.source)


def set_exceptions(
    edits: Edits,
    channels: Sequence[str],
    window_ms: Window | None,
    source: Source,
    merge_key: str | None = None,
) -> None:
    """Give channels a gap of their own in plan or marks; None takes it back.

    Parameters
    ----------
    edits : Edits
        Changes plan and marks.
    channels : sequence of str
        Names.
    window_ms : tuple of 2 float or None
        The gap.
    source : Source
        Plan or marks.
    merge_key : str or None
        Of a drag.
    """
    session = edits.bench.session
    label = f"Gap of {_listed(channels)}"
    if source is Source.MARKS:
        edits.marks(label, marks_with_exceptions(session.marks, channels, window_ms), merge_key)
    elif session.plan is not None:
        edits.plan(label, plan_with_exceptions(session.plan, channels, window_ms), merge_key)


def _ordered(new: Window, old: Window, rate_hz: float) -> Window:
    """Keep one sample between the edges: the edge that was not touched stays."""
    if new[0] < new[1]:
        return new
    least = edge_ms(1, rate_hz)
    return (new[1] - least, new[1]) if new[1] == old[1] else (new[0], new[0] + least)


def _listed(names: Sequence[str]) -> str:
    return ", ".join(names) if len(names) <= 2 else f"{len(names)} channels"


def _exception_words(one: GapException) -> str:
    return f"{one.channel}: {window_words(one.window_ms)}, {one.source}"


def in_micro(text: str) -> str:
    """Write a sentence made for plain files as the window writes units."""
    return text.replace(" uV", " \u00b5V").replace(" +- ", " \u00b1 ")


def window_words(window_ms: Window) -> str:
    """Put a window into words."""
    return f"{window_ms[0]:.6g} to {window_ms[1]:.6g} ms"


_FILLS: Mapping[Fill, tuple[str, str]] = {
    Fill.LINE: ("straight line", "A straight line between the means of both flanks."),
    Fill.CUBIC: ("one smooth curve", "One cubic curve, fitted to both flanks."),
    Fill.MONOTONE: ("curve, no overshoot", "A smooth curve that stays between the levels of both flanks."),
    Fill.AUTOREGRESSIVE: (
        "predicted, cross-faded",
        "What the signal on either side predicts, one prediction fading into the other.",
    ),
    Fill.COVARIANCE: (
        "likeliest, given both sides",
        "The likeliest signal between the flanks, given how each channel usually varies in time.",
    ),
    Fill.LEAVE: (
        "no samples",
        "Gaps stay empty. FIF files cannot hold empty samples and refuse such a set; HDF5 files hold it.",
    ),
}

_SIDES: Mapping[Side, str] = {
    Side.BOTH: "both flanks",
    Side.BEFORE: "only the flank before",
    Side.AFTER: "only the flank after",
}


class FillCard(Card):
    """How gaps are filled.

    Parameters
    ----------
    edits : Edits
        Changes the plan.
    """

    def __init__(self, edits: Edits) -> None:
        super().__init__("Fill")
        self._edits = edits
        self.fill = Choices("Fill", [(fill.value, _fill_name(fill)) for fill in _FILLS])
        for fill, (short, _) in _FILLS.items():
            self.fill.show_evidence(fill.value, short)
        for label in self.fill.findChildren(QLabel):
            # In a narrow column these words may be cut; they are said again below.
            label.setMinimumWidth(1)
            label.setToolTip(label.text())
        self.add(self.fill)
        self.meaning = self.add_note()
        self.without_fif = button("Leave gaps empty, without FIF", self._leave_without_fif)
        self.add(self.without_fif)
        self.add(words("Learns from"))
        self.side = Choices(
            "Flanks a fill learns from", [(side.value, text) for side, text in _SIDES.items()]
        )
        self.add(self.side)
        self.flank = SlimField("Fill: length of a flank", "ms", 0.0, 10_000.0, 1.0, decimals=2)
        self.add_field("Length of a flank", self.flank)
        self.flank.setToolTip("0 ms means the usual length of this fill")
        self.fill.chosen.connect(self._choose_fill)
        self.side.chosen.connect(self._choose_side)
        self.flank.committed.connect(self._choose_flank)
        self.flank.editingFinished.connect(edits.end)

    def show_values(self, pulses: Pulses) -> None:
        """Show what holds now."""
        self.fill.show_choice(pulses.fill.value)
        self.without_fif.hide()
        self.meaning.setText(_FILLS[pulses.fill][1])
        set_kind(self.meaning, "attention" if pulses.fill is Fill.LEAVE else "quiet")
        self.meaning.setWordWrap(True)
        self.side.show_choice(pulses.side.value)
        learns = pulses.fill is not Fill.LEAVE
        self.side.setEnabled(learns)
        self.flank.setEnabled(learns)
        self.flank.setSpecialValueText(_usual_flank(pulses.fill))
        self.flank.show_value(pulses.flank_ms or 0.0)

    def _choose_fill(self, key: str) -> None:
        plan = self._edits.bench.session.plan
        if plan is None:
            return
        if Fill(key) is Fill.LEAVE and Format.FIF in plan.export.formats:
            self.show_values(plan.pulses)
            self.meaning.setText("FIF files cannot hold empty samples, and the plan asks for FIF.")
            set_kind(self.meaning, "attention")
            self.meaning.setWordWrap(True)
            self.without_fif.show()
            return
        self._edits.pulses(f"Fill: {key}", replace(plan.pulses, fill=Fill(key)))

    def _leave_without_fif(self) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            formats = tuple(one for one in plan.export.formats if one is not Format.FIF) or (Format.HDF5,)
            pulses = replace(plan.pulses, fill=Fill.LEAVE)
            export = replace(plan.export, formats=formats)
            self._edits.plan("Gaps left empty, no FIF", replace(plan, pulses=pulses, export=export))

    def _choose_side(self, key: str) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            self._edits.pulses(f"Flanks: {key}", replace(plan.pulses, side=Side(key)))

    def _choose_flank(self, value_ms: float) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            self._edits.pulses("Flank", replace(plan.pulses, flank_ms=value_ms or None), "flank")


def _fill_name(fill: Fill) -> str:
    return "leave empty" if fill is Fill.LEAVE else fill.value


def _usual_flank(fill: Fill) -> str:
    if fill is Fill.LEAVE:
        return "none"
    usual_ms = s_to_ms(default_flank_s(fill))
    return f"usual: {usual_ms:g} ms" if usual_ms else "usual: one sample"


class OtherGapsCard(Card):
    """Further gaps at a fixed latency from every pulse.

    Parameters
    ----------
    edits : Edits
        Changes the plan.
    """

    def __init__(self, edits: Edits) -> None:
        super().__init__("Recharge and other gaps")
        self._edits = edits
        self._shown: tuple[OtherGap, ...] | None = None
        self.rows: list[WindowFields] = []
        self._rate_hz = 1000.0
        self.empty = self.add_note(
            "None. The stimulator's recharge, for example, is seen some time after each pulse."
        )
        self._column = QVBoxLayout()
        self.body.addLayout(self._column)
        self.new = WindowFields("a further gap", -5000.0, 20_000.0)
        self.new.show_window((248.0, 254.0))
        self.add(words("One more, since the onset of each pulse"))
        self.add(self.new)
        self.add_button = button("Add this gap", self._add)
        self.add(self.add_button)

    def show_values(self, pulses: Pulses, rate_hz: float) -> None:
        """Show what holds now."""
        self._rate_hz = rate_hz
        self.new.set_rate(rate_hz)
        self.empty.setVisible(not pulses.also)
        if self._shown is None or len(self._shown) != len(pulses.also):
            self._build(len(pulses.also))
        for fields, gap in zip(self.rows, pulses.also, strict=True):
            fields.set_rate(rate_hz)
            fields.show_window(gap.window_ms)
        self._shown = pulses.also

    def _build(self, count: int) -> None:
        while self._column.count():
            item = self._column.takeAt(0)
            old = None if item is None else item.widget()
            if old is not None:
                old.hide()
                old.deleteLater()
        self.rows = []
        for place in range(count):
            line = QWidget()
            row = QHBoxLayout(line)
            row.setContentsMargins(0, 0, 0, 0)
            fields = WindowFields(f"further gap {place + 1}", -5000.0, 20_000.0)
            fields.committed.connect(lambda a, b, place=place: self._change(place, (a, b)))
            fields.ended.connect(self._edits.end)
            remove = button("\u00d7", partial(self._remove, place), tooltip="Remove this gap")
            remove.setAccessibleName(f"Remove further gap {place + 1}")
            row.addWidget(fields, 1)
            row.addWidget(remove)
            self._column.addWidget(line)
            self.rows.append(fields)

    def _add(self) -> None:
        self._set(
            "Further gap", (*self._now, OtherGap(_ordered(self.new.window_ms, (0.0, 0.0), self._rate_hz)))
        )

    def _change(self, place: int, window_ms: Window) -> None:
        gaps = list(self._now)
        gaps[place] = OtherGap(_ordered(window_ms, gaps[place].window_ms, self._rate_hz))
        self._set("Further gap", tuple(gaps), f"also {place}")
        self.rows[place].show_window(self._now[place].window_ms)

    def _remove(self, place: int) -> None:
        self._set("Further gap removed", tuple(gap for i, gap in enumerate(self._now) if i != place))

    @property
    def _now(self) -> tuple[OtherGap, ...]:
        plan = self._edits.bench.session.plan
        return () if plan is None else plan.pulses.also

    def _set(self, label: str, also: tuple[OtherGap, ...], merge_key: str | None = None) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            self._edits.pulses(label, replace(plan.pulses, also=also), merge_key)


class EffectCard(Card):
    """What gap and fill do to the recording and its epochs."""

    def __init__(self) -> None:
        super().__init__("What this does")
        self.gap = self.add_line("Gap around each pulse")
        self.n_gaps = self.add_line("Gaps in each channel")
        self.n_short = self.add_line("of these with a shortened flank")
        self._lines: dict[str, ValueLine] = {}
        self.lines = QVBoxLayout()
        self.body.addLayout(self.lines)
        self.add_note(
            "Replaced: share of a rule's kept epochs, over all channels, that rests on filled samples."
        )

    def show_effect(self, effect: Effect | None, words_instead: str = "") -> None:
        """Show counts and shares; without any, say why."""
        self.note.setText(words_instead)
        for line in (self.gap, self.n_gaps, self.n_short):
            line.setVisible(effect is not None)
        if effect is None:
            self._show_rules({})
            return
        self.gap.show_value(f"{effect.gap_samples} samples, {effect.gap_ms:.6g} ms")
        self.n_gaps.show_value(str(effect.n_gaps))
        self.n_short.show_value(str(effect.n_shortened), attention=effect.n_shortened > 0)
        self._show_rules(effect.replaced)

    def _show_rules(self, shares: Mapping[str, float | None]) -> None:
        if list(shares) != list(self._lines):
            for line in self._lines.values():
                line.hide()
                self.lines.removeWidget(line)
                line.deleteLater()
            self._lines = {name: ValueLine(f"Replaced in {name}") for name in shares}
            for line in self._lines.values():
                self.lines.addWidget(line)
        for name, share in shares.items():
            self._lines[name].show_value("no epoch kept" if share is None else f"{100.0 * share:.2g} %")
