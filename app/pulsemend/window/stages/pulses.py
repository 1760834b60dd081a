"""The Pulses stage: where pulses are, what is replaced around them and how, with the result at once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from PySide6.QtCore import QTimer

from pulsemend.errors import PulsemendError
from pulsemend.mending.gap_suggestion import NO_SUGGESTION, GapSuggestion, suggested_gaps
from pulsemend.mending.pulse_effect import Effect, effect
from pulsemend.mending.pulse_findings import latency_drift, pulse_warnings, trains
from pulsemend.mending.pulse_gaps import Source, gap_of
from pulsemend.mending.pulse_list import pulse_rows
from pulsemend.mending.pulse_view import (
    PROPOSED_MS,
    Ground,
    Pick,
    PulseRequest,
    PulseView,
    first_batch,
    gather,
    ground_of,
    sketch,
)
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan, Window
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import ChannelType, PulseState, PulseTimes
from pulsemend.progress import Work
from pulsemend.session.changed import Changed
from pulsemend.session.found import Stage
from pulsemend.window.decay_card import DecayCard
from pulsemend.window.leak_card import LeakCard
from pulsemend.window.parts import scrolling_column
from pulsemend.window.pulse_canvas import Shown
from pulsemend.window.pulse_picture import PulsePicture
from pulsemend.window.repair_cost_card import RepairCostCard
from pulsemend.window.stages.base import StagePage
from pulsemend.window.stages.pulse_cards import (
    GAP_KEY,
    Edits,
    EffectCard,
    FillCard,
    GapCard,
    OtherGapsCard,
    set_exceptions,
)
from pulsemend.window.stages.pulse_list_card import PulseListCard
from pulsemend.window.stages.pulse_suggestions import OfferedGaps, SuggestedGap
from pulsemend.window.theme import Theme
from pulsemend.window.workbench import Workbench

Sketched = tuple[Ground, PulseView | None]
_SHOWN = (ChannelType.EEG, ChannelType.EOG, ChannelType.EMG, ChannelType.ECG)

SOON_MS = 15
"""Edits and zoom steps within this time of each other become one request."""

_NO_RECORDING = "Open a recording: its pulses are shown here, aligned at zero."
_NO_PLAN = "Open a plan or draft one from the recording; it says which markers are pulses."
_NONE = "The plan says that there are no pulses. Choose \u201cat their markers\u201d beside if there are."
_TOO_NEAR = "Every pulse is too near an end of the recording to be shown with so much time around it."
_NOT_KNOWN = (
    "No pulse is known. Give the markers of pulses the role \u201cpulse\u201d in the plan, "
    "or add pulses beside."
)


class PulsesStage(StagePage):
    """Where pulses are, gap, fill and other gaps; below, all pulses at zero.

    Parameters
    ----------
    bench : Workbench
        Session, workers, theme.
    """

    stage = Stage.PULSES

    def __init__(self, bench: Workbench) -> None:
        super().__init__(bench)
        self._ground: Ground | None = None
        self._view_of: tuple[int, PulseRequest] | None = None
        self._held_channel = ""
        self._edits = Edits(bench, self._show_values)
        self.list_card = PulseListCard(self._edits)
        self.gap_card = GapCard(self._edits)
        self.fill_card = FillCard(self._edits)
        self.decay_card = DecayCard(self._edits, bench.theme)
        self.other_card = OtherGapsCard(self._edits)
        self.leak_card = LeakCard(self._edits)
        self.effect_card = EffectCard()
        self.cost_card = RepairCostCard(self._edits, bench.theme)
        self.suggested = SuggestedGap(self._edits)
        self.gap_card.put_beside_edges(self.suggested)
        self.offered = OfferedGaps(self._edits)
        self.other_card.add(self.offered)
        self._suggestion: GapSuggestion = NO_SUGGESTION
        self._suggestion_of: object = None
        self._cards = (
            self.list_card,
            self.gap_card,
            self.fill_card,
            self.decay_card,
            self.other_card,
            self.leak_card,
            self.effect_card,
            self.cost_card,
        )
        self.settings = scrolling_column(*self._cards, name="Pulses")
        self.picture: PulsePicture = PulsePicture(bench.theme)
        self._soon = QTimer(self.picture)
        self._soon.setSingleShot(True)
        self._soon.setInterval(SOON_MS)
        self._soon.timeout.connect(self._ask)
        self.picture.gap_moved.connect(self._move_gap)
        self.picture.gap_released.connect(self._release_gap)
        self.picture.wanted.connect(self._want)
        self.follow(self._on_edit, Changed.PLAN, Changed.MARKS)
        self.follow(self._on_recording, Changed.RECORDING)
        self.follow(self._on_view, Changed.VIEW)
        self.hear(bench.learned_changed, self._on_learned)
        self._on_recording()

    # The window's side

    def show_stage(self) -> None:
        """Bring everything up to date; while another stage is open nothing is computed."""
        super().show_stage()
        self._on_recording(keep=True)

    def hide_stage(self) -> None:
        """Ask for nothing any more."""
        super().hide_stage()
        self._soon.stop()
        self.leak_card.stop()
        self.cost_card.stop()

    def close(self) -> None:
        """Listen to nobody and ask for nothing any more."""
        super().close()
        self.hide_stage()

    def set_theme(self, theme: Theme) -> None:
        """Paint the picture in other colours."""
        self.picture.set_theme(theme)
        self.decay_card.set_theme(theme)
        self.cost_card.set_theme(theme)

    # What changes

    def _on_recording(self, *, keep: bool = False) -> None:
        opened = self.bench.session.recording
        if not keep:
            self._ground, self._view_of = None, None
            self._suggestion, self._suggestion_of = NO_SUGGESTION, None
            self.picture.canvas.show_view(None)
        if opened is not None:
            shown = [c.name for c in opened.facts.channels if c.type in _SHOWN]
            self.picture.rate_hz = opened.facts.rate_hz
            self.picture.show_channels(shown)
        self._on_learned()

    def _on_edit(self) -> None:
        if not self.shown:
            return
        self._show_values()
        self._soon.start()

    def _on_learned(self) -> None:
        if self.bench.learned is not None and not self.bench.provisional:
            self._ground = _remembering(ground_of(self.bench.learned), self._ground)
        if not self.shown:
            return
        self._show_values()
        self._ask_effect()
        self._ask_suggestion()
        self._soon.start()

    def _on_view(self) -> None:
        if self.shown:
            self._follow_view()
            self._show_gap_card()

    def _want(self) -> None:
        self._show_over()
        self._show_gap_card()
        self._soon.start()

    # Showing values

    def _show_values(self) -> None:
        session = self.bench.session
        plan, opened = session.plan, session.recording
        usable = plan is not None and opened is not None
        for card in self._cards:
            card.setEnabled(usable)
        if plan is None or opened is None:
            self.picture.show_over(None)
            self.picture.show_message(_NO_RECORDING if opened is None else _NO_PLAN)
            self.list_card.show_unmarked(())
            self.effect_card.show_effect(None)
            self.gap_card.show_left(None)
            return
        facts = opened.facts
        known = () if self._ground is None else self._ground.estimates.pulses
        rows = pulse_rows(facts, plan, session.marks, known)
        self.list_card.show_values(rows, facts.rate_hz, facts.n_samples, plan.pulses.times)
        unmarked = () if self._ground is None or rows else self._ground.estimates.unmarked
        self.list_card.show_unmarked(unmarked if plan.pulses.times is not PulseTimes.NONE else ())
        self._show_findings(plan)
        self.fill_card.show_values(plan.pulses)
        self.decay_card.show_values(plan.pulses)
        self.leak_card.show_values(plan)
        self.other_card.show_values(plan.pulses, facts.rate_hz)
        self._show_gap_card()
        self._follow_view()
        self._show_over()
        if plan.pulses.times is PulseTimes.NONE:
            self.picture.show_message(_NONE)
        elif all(row.is_removed for row in rows):
            self.picture.show_message(_NOT_KNOWN)

    def _show_gap_card(self) -> None:
        session = self.bench.session
        if session.plan is None or session.recording is None:
            return
        picked = [name for name in session.view.rows if name in session.view.picked]
        self.gap_card.channel = self._channel
        self.decay_card.show_channel(self._channel)
        self.gap_card.show_values(session.plan, session.marks, self.picture.rate_hz, picked)
        self.suggested.show_suggestion(self._suggestion, session.plan, session.marks, self._channel)
        self.offered.show_offers(self._suggestion.recharges)

    def _follow_view(self) -> None:
        session = self.bench.session
        self.list_card.show_selected(session.selected, session.view.start_s + session.view.width_s / 2.0)

    def _show_over(self) -> None:
        """Show gap and handles as plan and marks have them now, whatever the curves are."""
        session = self.bench.session
        plan = session.plan
        if plan is None or plan.pulses.times is PulseTimes.NONE:
            self.picture.show_over(None)
            return
        window_ms, _ = gap_of(plan, session.marks, self._channel)
        self.picture.show_over(
            Shown(
                window_ms=window_ms or PROPOSED_MS,
                others_ms=tuple(gap.window_ms for gap in plan.pulses.also),
                decided=window_ms is not None,
                waiting=self._is_waiting(plan),
            )
        )

    @property
    def _channel(self) -> str:
        """The channel of the picture, also if it is there as the worst; empty for all."""
        if self.picture.pick is Pick.ALL:
            return ""
        if self._held_channel:
            return self._held_channel
        view = self.picture.canvas.view
        worst = "" if view is None or view.request.pick is not Pick.WORST else view.channel
        return self.picture.channel or worst

    def _is_waiting(self, plan: Plan) -> bool:
        return (
            self.picture.canvas.view is not None
            and plan.pulses.window_ms is not None
            and (self._view_of is None or self._view_of[0] != self.bench.session.revision)
        )

    # Dragging

    def _move_gap(self, start_ms: float, stop_ms: float) -> None:
        """Change the gap that the picture shows: that of its channel, or that of all."""
        session = self.bench.session
        plan, window = session.plan, (start_ms, stop_ms)
        if plan is None:
            return
        if self.picture.pick is Pick.WORST and not self._held_channel:
            # Another gap may make another channel the worst; not under the hand.
            self._held_channel = self._channel
        _, source = gap_of(plan, session.marks, self._channel)
        if source is Source.ALL:
            self._edits.pulses("Gap", replace(plan.pulses, window_ms=window), GAP_KEY)
        else:
            set_exceptions(self._edits, [self._channel], window, source, GAP_KEY)

    def _release_gap(self) -> None:
        self._edits.end()
        if self._held_channel:
            self._held_channel = ""
            self._soon.start()

    # Asking workers

    @property
    def _request(self) -> PulseRequest:
        picture = self.picture
        span: Window = picture.canvas.span_ms
        if self._held_channel:
            return PulseRequest(Pick.ONE, self._held_channel, span)
        return PulseRequest(picture.pick, picture.channel, span)

    def _ask(self) -> None:
        """Ask for a first batch at once, and for all pulses as soon as they can be had."""
        bench = self.bench
        session, plan, marks = bench.session, bench.session.plan, bench.session.marks
        if not self.shown or plan is None or plan.pulses.times is PulseTimes.NONE:
            return
        request, earlier = self._request, self._ground
        first = first_batch(request)
        if bench.learned is not None and not bench.provisional:
            ground = ground_of(bench.learned)
            if _is_part(first, ground) and self._view_of != (session.revision, first):
                self._start_first(lambda recording: _with_ground(recording, ground, first))
            self._ask_all(ground, request)
            return
        self._start_first(lambda recording: _sketched(recording, plan, marks, earlier, first))

    def _start_first(self, work: Callable[[Recording], Work[Sketched]]) -> None:
        self.bench.start("first pulses", work, self._take_first, self._fail, urgent=True)

    def _ask_all(self, ground: Ground, request: PulseRequest) -> None:
        self.bench.start(
            "all pulses", lambda recording: gather(recording, ground, request), self._take, self._fail
        )

    def _take_first(self, sketched: Sketched) -> None:
        ground, view = sketched
        whole = None if view is None else replace(view.request, most=None)
        if self._view_of == (self.bench.session.revision, whole):
            return
        self._take(view)
        if self._ground is None:
            self._ground = ground
            self._show_values()
            self._ask_suggestion()
        # Where the workbench cannot learn yet, this is all there will be.
        can_learn = ground.decided and not self.bench.problem
        if whole is not None and not can_learn and _is_part(first_batch(whole), ground):
            self._ask_all(ground, whole)

    def _take(self, view: PulseView | None) -> None:
        if view is None:
            self.picture.show_message(_NOT_KNOWN if self._no_pulse_known else _TOO_NEAR)
            return
        if replace(view.request, most=None) != self._request:
            return
        self._view_of = (self.bench.session.revision, view.request)
        self.picture.show_view(view)
        self._show_over()
        self._show_gap_card()

    @property
    def _no_pulse_known(self) -> bool:
        return self._ground is None or not self._ground.estimates.pulses

    def _fail(self, error: BaseException) -> None:
        if isinstance(error, PulsemendError):
            self.picture.show_message(str(error))
        else:
            self.bench.tell(error)

    def _ask_effect(self) -> None:
        learned = self.bench.learned
        if learned is None or self.bench.provisional:
            waiting = self.bench.problem or "being computed"
            self.effect_card.show_effect(None, waiting if self.bench.session.plan is not None else "")
            self.decay_card.show_waiting(self.bench.problem)
            self.leak_card.show_waiting(self.bench.problem)
            self.cost_card.show_waiting(self.bench.problem)
            if self.bench.problem:
                self.gap_card.show_left(None)
            # Otherwise what was left before stays until it is measured anew: nothing moves under the hand.
            return
        self.decay_card.show_learned(learned)
        self.bench.start(
            "effect of the gaps", lambda recording: effect(recording, learned), self._take_effect
        )
        self.leak_card.show_learned(learned)
        self.cost_card.show_learned(learned)

    def _show_findings(self, plan: Plan) -> None:
        ground = self._ground
        if ground is None or plan.pulses.times is PulseTimes.NONE:
            self.list_card.show_findings(None, None, ())
            return
        pulses, rate_hz = ground.estimates.pulses, ground.setup.facts.rate_hz
        real = [one.sample for one in pulses if one.state is not PulseState.MARKED_ONLY]
        told = pulse_warnings(ground.setup, ground.estimates) if ground.decided else []
        self.list_card.show_findings(latency_drift(pulses, rate_hz), trains(real, rate_hz), told)

    def _ask_suggestion(self) -> None:
        """Look around the pulses again, if they or the channels are others than before."""
        ground = self._ground
        if ground is None or not ground.estimates.pulses:
            return
        wanted = (ground.estimates.pulses, ground.setup.bad.tobytes(), _windows_of(ground))
        if wanted == self._suggestion_of:
            return
        self.bench.start(
            "suggested gaps",
            lambda recording: suggested_gaps(recording, ground.setup, ground.estimates),
            lambda found: self._take_suggestion(found, wanted),
        )

    def _take_suggestion(self, found: GapSuggestion, of: object) -> None:
        self._suggestion, self._suggestion_of = found, of
        self._show_gap_card()

    def _take_effect(self, found: Effect) -> None:
        self.effect_card.show_effect(found)
        self.gap_card.show_left(found.left)
        self.decay_card.show_left(found.left)


def _windows_of(ground: Ground) -> tuple[tuple[Window, ...], ...]:
    """Every group's gaps: recharges within them are not offered again."""
    return tuple(group.windows_s for group in ground.setup.groups)


def _remembering(new: Ground, old: Ground | None) -> Ground:
    """Keep an autocovariance that the present fill does not need, for a fast picture when it does again."""
    if old is None or new.estimates.autocovariance is not None:
        return new
    return replace(new, estimates=replace(new.estimates, autocovariance=old.estimates.autocovariance))


def _is_part(first: PulseRequest, ground: Ground) -> bool:
    return first.most is not None and len(ground.estimates.pulses) > first.most


def _sketched(
    recording: Recording, plan: Plan, marks: Marks, earlier: Ground | None, request: PulseRequest
) -> Work[Sketched]:
    ground = yield from sketch(recording, plan, marks, earlier, request)
    return ground, (yield from gather(recording, ground, request))


def _with_ground(recording: Recording, ground: Ground, request: PulseRequest) -> Work[Sketched]:
    return ground, (yield from gather(recording, ground, request))
