"""Between the session and the traces: overlays, overview, repaired stretches. The traces know none of it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QObject, Signal

from pulsemend.engine.chain import Chain
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.pyramid import Patch, Pyramid, patch, pyramid
from pulsemend.engine.setup import GapGroup
from pulsemend.engine.store import Store
from pulsemend.mending.learned import Learned, repaired_stored
from pulsemend.mending.pulse_view import PulseRequest, ground_of, sketch
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import Role
from pulsemend.progress import Progress, Work
from pulsemend.session.changed import Changed
from pulsemend.session.session import Session
from pulsemend.session.view import View
from pulsemend.signal.gaps import merge_spans, window_to_samples
from pulsemend.window.traces.model import Bands, Events, Overlays
from pulsemend.window.traces.source import RepairedStretch
from pulsemend.window.traces.widget import TracesWidget
from pulsemend.window.workbench import Workbench

PULSE_KEYS_FROM = 1_000_000_000
"""Keys of events from here on are pulses' onsets; below, places among the markers."""


class SessionView:
    """The session as the traces' view model."""

    def __init__(self, session: Session) -> None:
        self._session = session

    @property
    def view(self) -> View:
        """The part in view."""
        return self._session.view

    def set_view(self, view: View) -> None:
        """Replace the view."""
        self._session.set_view(view)

    def subscribe(self, listener: Callable[[], None]) -> Callable[[], None]:
        """Have a function called after every change of the view."""
        return self._session.subscribe(Changed.VIEW, listener)


def overlays(session: Session, learned: Learned | None) -> Overlays:
    """Put together everything that lies over the traces."""
    opened = session.recording
    if opened is None:
        return Overlays()
    rate_hz = opened.facts.rate_hz
    plan, marks = session.plan, session.marks
    gaps, own_gaps = _gap_bands(learned)
    stretches = sorted((s.start / rate_hz, s.stop / rate_hz, s.kind) for s in marks.bad_stretches)
    return Overlays(
        events=_events(session, learned),
        gaps=gaps,
        own_gaps=own_gaps,
        bad_stretches=Bands(
            np.array([s[0] for s in stretches]),
            np.array([s[1] for s in stretches]),
            tuple(s[2] or "bad" for s in stretches),
        ),
        epochs=_epoch_bands(learned),
        bad=_bad(plan, marks, learned),
    )


def _bad(plan: Plan | None, marks: Marks, learned: Learned | None) -> frozenset[str]:
    """Channels that are bad by the plan or the search, unless the marks say good; and by the marks."""
    in_plan = plan.channels.bad if plan is not None else ()
    found = () if learned is None else (name for name, one in learned.against.items() if one.is_found)
    return (frozenset((*in_plan, *found)) - frozenset(marks.good)) | frozenset(marks.bad)


def _events(session: Session, learned: Learned | None) -> Events:
    """Markers by role and labels; pulses stand at their onsets where these are known."""
    opened, plan = session.recording, session.plan
    if opened is None:
        return Events()
    rate_hz = opened.facts.rate_hz
    rows: list[tuple[float, Role, str, int]] = []
    pulses_known = learned is not None and bool(learned.estimates.pulses)
    # Cures, decisions by hand and measured onsets count as soon as they are worked out.
    markers = opened.facts.markers if learned is None else learned.decision.markers
    for place, marker in enumerate(markers):
        role = Role.OTHER if plan is None else plan.role_of(marker.code)
        if role is Role.IGNORE or (role is Role.PULSE and pulses_known):
            continue
        labels = {} if plan is None else plan.labels_of(marker.code)
        text = " ".join((role.value, *labels.values())) if labels else marker.code
        rows.append((marker.sample / rate_hz, role, text, place))
    if learned is not None:
        rows += [
            (pulse.sample / rate_hz, Role.PULSE, "pulse", PULSE_KEYS_FROM + pulse.sample)
            for pulse in learned.estimates.pulses
        ]
    rows.sort(key=lambda row: row[0])
    return Events(
        np.array([row[0] for row in rows], dtype=np.float64),
        tuple(row[1] for row in rows),
        tuple(row[2] for row in rows),
        tuple(row[3] for row in rows),
    )


def _gap_bands(learned: Learned | None) -> tuple[Bands, Mapping[str, Bands]]:
    """Gaps that most channels have, and those of the channels that have others or are not processed."""
    if learned is None or not learned.setup.groups:
        return Bands(), {}
    setup = learned.setup
    usual = max(setup.groups, key=lambda group: group.columns.size)
    nothing = Bands()
    used = {channel.name for channel in setup.channels}
    own = {channel.name: nothing for channel in setup.facts.channels if channel.name not in used}
    for group in setup.groups:
        if group is not usual:
            bands = _bands_of(group, learned)
            own.update((setup.channels[column].name, bands) for column in group.columns)
    return _bands_of(usual, learned), own


def _bands_of(group: GapGroup, learned: Learned) -> Bands:
    rate_hz = learned.setup.facts.rate_hz
    spans = merge_spans(
        [
            window_to_samples(onset, window_s, rate_hz)
            for onset in learned.estimates.onsets
            for window_s in group.windows_s
        ]
    )
    return Bands(np.array([a / rate_hz for a, _ in spans]), np.array([b / rate_hz for _, b in spans]))


def _epoch_bands(learned: Learned | None) -> Bands:
    """Kept epochs, with rule and trial as their label."""
    if learned is None:
        return Bands()
    geometry, length_s = learned.decision.geometry, learned.plan.epochs.length_s
    rate_hz = learned.setup.facts.rate_hz
    starts = [
        geometry.first_sample(candidate.anchor_sample or 0.0, candidate.start_s) / rate_hz
        for candidate in learned.decision.kept
    ]
    labels = tuple(f"{c.rule} \u00b7 trial {c.trial}" for c in learned.decision.kept)
    return Bands(np.array(starts), np.array(starts) + length_s, labels)


class TracesLink(QObject):
    """Asks workers for what the traces need, and hands it over.

    Parameters
    ----------
    bench : Workbench
        Session and workers.
    cache : Path
        Folder of the store.

    Attributes
    ----------
    pyramid_ready : Signal(object)
        The Pyramid of the open recording.
    """

    pyramid_ready = Signal(object)

    def __init__(self, bench: Workbench, cache: Path, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self._bench = bench
        self._cache = cache
        self._traces: TracesWidget | None = None
        self._overlays: tuple[tuple[object, ...], Overlays] | None = None
        self._pyramid: Pyramid | None = None

    def attach(self, traces: TracesWidget | None) -> None:
        """Serve other traces from now on; their overview is asked for at once."""
        self._traces = traces
        self._pyramid = None
        opened = self._bench.session.recording
        if traces is None or opened is None:
            return
        path, store = opened.path, Store(self._cache)
        job = self._bench.jobs.submit("overview", lambda shelf: pyramid(shelf.recording(path), store))
        job.returned.connect(self._take_pyramid)
        job.failed.connect(self._bench.tell)

    @property
    def overlays(self) -> Overlays:
        """What lies over the traces now; put together once for each state of plan, marks and estimates."""
        session, learned = self._bench.session, self._bench.learned
        rests_on = (session.recording, session.plan, session.marks, learned)
        held = self._overlays
        if held is None or any(a is not b for a, b in zip(held[0], rests_on, strict=True)):
            held = self._overlays = (rests_on, overlays(session, learned))
        return held[1]

    def show_learned(self) -> None:
        """Show overlays of now, and have the repaired signal computed anew."""
        if self._traces is None:
            return
        bench = self._bench
        self._traces.set_overlays(self.overlays)
        self._traces.set_revision(self._stamp)
        if not bench.provisional:
            self._patch_overview()

    @property
    def _stamp(self) -> int:
        """Number of the state that repaired samples belong to: a learned one follows its provisional one."""
        return 2 * self._bench.session.revision + (not self._bench.provisional)

    def request_repaired(self, start: int, stop: int) -> None:
        """Let a worker repair a stretch; until the present settings are learned with earlier estimates."""
        bench, session, stamp = self._bench, self._bench.session, self._stamp
        learned, plan, marks = bench.learned, session.plan, session.marks
        if learned is None or plan is None:
            return
        if bench.provisional:
            bench.start(
                "repaired stretch",
                lambda recording: _sketched(recording, plan, marks, learned, (start, stop), stamp),
                self._take_repaired,
                _nothing,
                urgent=True,
            )
            return
        bench.start(
            "repaired stretch",
            lambda recording: _repaired(recording, learned, (start, stop), stamp),
            self._take_repaired,
            urgent=True,
        )

    def _take_pyramid(self, ready: Pyramid) -> None:
        self._pyramid = ready
        if self._traces is not None:
            self._traces.set_pyramid(ready)
            self._patch_overview()
        self.pyramid_ready.emit(ready)

    def _take_repaired(self, stretch: RepairedStretch) -> None:
        if self._traces is not None:
            self._traces.set_repaired(stretch)

    def _patch_overview(self) -> None:
        """Work out what repair changes in the overview, as soon as both are known."""
        learned, of, stamp = self._bench.learned, self._pyramid, self._stamp
        if learned is None or of is None or self._bench.provisional:
            return

        def take(found: Patch) -> None:
            if self._traces is not None:
                self._traces.set_repaired_overview(found, stamp)

        self._bench.start("repaired overview", lambda recording: _patched(recording, learned, of), take)


def _repaired(
    recording: Recording, learned: Learned, span: tuple[int, int], stamp: int
) -> Work[RepairedStretch]:
    yield Progress("repairing what is in view", 0, 1)
    return _stretch(learned.chain(recording), learned.estimates, span, stamp)


def _sketched(
    recording: Recording, plan: Plan, marks: Marks, learned: Learned, span: tuple[int, int], stamp: int
) -> Work[RepairedStretch]:
    ground = yield from sketch(recording, plan, marks, ground_of(learned), PulseRequest())
    return _stretch(Chain(recording, ground.setup, ground.estimates), ground.estimates, span, stamp)


def _stretch(chain: Chain, estimates: Estimates, span: tuple[int, int], stamp: int) -> RepairedStretch:
    return RepairedStretch(span[0], repaired_stored(chain, estimates, *span), chain.setup.used, stamp)


def _nothing(_error: BaseException) -> None:
    """Plan and marks may not go together while they are edited; learning says so in its place."""


def _patched(recording: Recording, learned: Learned, of: Pyramid) -> Work[Patch]:
    chain = learned.chain(recording)
    channels = learned.setup.used

    def read(start: int, stop: int) -> NDArray[np.float32]:
        stored = np.empty((stop - start, len(recording.facts.channels)), np.float32)
        recording.read(start, stop, stored)
        stored[:, channels] = repaired_stored(chain, learned.estimates, start, stop)
        return stored

    spans = [(gap.start, gap.stop) for gap in learned.decision.geometry.gaps]
    inside = [(max(0, a), min(b, recording.facts.n_samples)) for a, b in spans]
    return (yield from patch(of, [span for span in inside if span[0] < span[1]], read))
