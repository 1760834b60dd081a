"""The binding: a plan made to fit one recording. Turns names and words into indices, spans and taps.

The only place where the plan meets the signal room's numbers; from here on nothing knows a channel name.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.scan import FindRules
from pulsemend.errors import PlanError, UnusableChannels
from pulsemend.model.epochs import nearest_sample
from pulsemend.model.marks import Marks
from pulsemend.model.plan import OnsetRule, Plan
from pulsemend.model.recording import Channel, RecordingFacts
from pulsemend.model.vocabulary import (
    AcrossPulses,
    ChannelType,
    Decay,
    Fill,
    Precision,
    PulseState,
    PulseTimes,
    Role,
    Side,
)
from pulsemend.signal import design
from pulsemend.signal.apply_fir import rate_ratio
from pulsemend.signal.fills import default_flank_s, flank_samples
from pulsemend.signal.gaps import Gap, lay_gaps, window_to_samples
from pulsemend.units import ms_to_s, uv_to_v

RECORDED_TYPES = (ChannelType.EEG, ChannelType.EOG, ChannelType.EMG, ChannelType.ECG)
"""Channel types that become part of a set. Trigger channels and other quantities do not."""


@dataclass(frozen=True)
class GapGroup:
    """Channels whose gaps are the same.

    Parameters
    ----------
    columns : array of int
        Places among the used channels.
    windows_s : tuple of (float, float)
        Every window around a pulse's onset that is replaced in them, seconds, closed.
    """

    columns: NDArray[np.intp]
    windows_s: tuple[tuple[float, float], ...]


@dataclass(frozen=True)
class ExpectedPulse:
    """A pulse before its onset is known: from its marker, or placed by hand.

    Parameters
    ----------
    sample : float
        Recorded sample of the marker, or of the onset if it was set by hand.
    marked : float or None
        Recorded sample of the marker, if it has one.
    placed : PulseState or None
        How it was set by hand; None where the onset is to be found near the marker.
    """

    sample: float
    marked: float | None
    placed: PulseState | None = None


@dataclass(frozen=True)
class Setup:
    """Everything the engine needs to know of plan and marks, for one recording.

    Attributes
    ----------
    facts : RecordingFacts
    used : array of int
        Channels of the file that are processed, in file order; "used channels" below count in these.
    channels : tuple of Channel
        The used channels, types as the marks have them.
    bad, eeg : bool arrays, shape (n_used,)
    good : bool array, shape (n_used,)
        Channels that are never found bad, by the marks.
    finds_bad, rebuilds : bool
        Whether bad channels are searched for, and whether they are rebuilt.
    line_hz : float
        Mains frequency; 0: none is removed.
    ratio : Fraction
        Output over recorded rate.
    rate_hz : float
        Output rate.
    groups : tuple of GapGroup
        Empty without pulses.
    fill, side, flank
        How gaps are filled; `flank` in recorded samples.
    decay : Decay
        What is fitted to the signal after gaps and subtracted there.
    decay_s, decay_least_v : float
        Length of the stretch it is fitted to; channels where it is smaller at the gap's end are left alone.
    search_s : (float, float)
        Where a pulse's artifact may be, from its marker.
    pulses : tuple of ExpectedPulse
        In order of time.
    pulses_known : bool
        Whether the plan says where pulses come from; False with ``times = "none"``.
    seeks_pulses : bool
        Whether pulses without a marker are looked for in the signal.
    find_rules : FindRules
        What counts as a pulse there.
    to_match : tuple of float
        Pulse markers that are only compared with what the signal shows: with ``times = "signal"``.
    no_pulses : tuple of int
        Recorded samples at which somebody said that there is no pulse.
    onset_rules : tuple of OnsetRule
        Codes whose onsets are measured in a sensor's channel.
    barriers : tuple of (int, int)
        Bad stretches.
    antialias, band : arrays or None
        Taps at recorded rate x the ratio's numerator, and at the output rate; None where nothing is filtered.
    band_steps : tuple of (str, dict)
        What `band` is made of, for the provenance.
    reference_from, reference_to : bool arrays, shape (n_used + extra,)
        Channels whose mean is subtracted, and from which; all False as recorded.
    averages : bool
        Whether the reference is the mean of all good channels: it leaves out what is found bad.
    restored : str
        Name of the recorded reference that is put back as a further channel; empty for none.
    work, out : numpy dtypes of processing and of the result.
    highpass_on : bool
        Whether a high-pass removes the channels' offsets.
    as_recorded : bool
        Whether nothing at all is done to the samples.
    across_pulses : AcrossPulses
        Whether each stretch between pulses is filtered alone.
    """

    facts: RecordingFacts
    used: NDArray[np.intp]
    channels: tuple[Channel, ...]
    bad: NDArray[np.bool_]
    eeg: NDArray[np.bool_]
    good: NDArray[np.bool_]
    finds_bad: bool
    rebuilds: bool
    line_hz: float
    ratio: Fraction
    rate_hz: float
    groups: tuple[GapGroup, ...]
    fill: Fill
    side: Side
    flank: int
    decay: Decay
    decay_s: float
    decay_least_v: float
    search_s: tuple[float, float]
    pulses: tuple[ExpectedPulse, ...]
    pulses_known: bool
    seeks_pulses: bool
    find_rules: FindRules
    to_match: tuple[float, ...]
    no_pulses: tuple[int, ...]
    onset_rules: tuple[OnsetRule, ...]
    barriers: tuple[tuple[int, int], ...]
    antialias: design.Taps | None
    band: design.Taps | None
    band_steps: tuple[tuple[str, dict[str, object]], ...]
    reference_from: NDArray[np.bool_]
    reference_to: NDArray[np.bool_]
    averages: bool
    restored: str
    work: np.dtype[np.floating]
    out: np.dtype[np.floating]
    highpass_on: bool
    as_recorded: bool
    across_pulses: AcrossPulses

    @property
    def scale_v(self) -> NDArray[np.float64]:
        """Volts per stored unit of the used channels."""
        return np.array([channel.scale_v for channel in self.channels])

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the output channels."""
        restored = (self.restored,) if self.restored else ()
        return (*(channel.name for channel in self.channels), *restored)

    @property
    def removes_offset(self) -> bool:
        """Whether every channel's constant offset is subtracted first, and put back where no high-pass is.

        Single precision would be wasted on it; and gaps left open are zero while filtering, which without it
        would be a step of millivolts.
        """
        return bool(self.work == np.float32 or (self.groups and self.fill is Fill.LEAVE))

    @property
    def replaced_reach_s(self) -> float:
        """How far the filters spread a replaced sample, to either side."""
        reach = 0.0
        if self.antialias is not None:
            reach += (self.antialias.size // 2) / (self.facts.rate_hz * self.ratio.numerator)
        if self.band is not None:
            reach += (self.band.size // 2) / self.rate_hz
        return reach

    def lay(self, group: GapGroup, onsets: Sequence[int], segment: tuple[int, int]) -> list[Gap]:
        """Lay the gaps of a group of channels within one contiguous segment (recorded samples)."""
        spans = [
            window_to_samples(onset, window_s, self.facts.rate_hz)
            for onset in onsets
            for window_s in group.windows_s
        ]
        inside = [span for span in spans if span[0] < segment[1] and span[1] > segment[0]]
        return lay_gaps(inside, self.flank, *segment, self.barriers)


def bind(facts: RecordingFacts, plan: Plan, marks: Marks) -> Setup:
    """Make the plan and the marks fit a recording.

    Raises
    ------
    PlanError
        Rates that cannot be reached, filters that do not fit the rate.
    UnusableChannels
        No channel of a usable type.
    """
    typed = tuple(
        replace(channel, type=marks.types.get(channel.name, channel.type)) for channel in facts.channels
    )
    used = np.array([i for i, c in enumerate(typed) if c.type in RECORDED_TYPES], dtype=np.intp)
    if not used.size:
        raise UnusableChannels(
            "no EEG, eye, muscle or heart channel", where=facts.stem, todo="Set channel types in the marks."
        )
    channels = tuple(typed[i] for i in used)
    names = [c.name for c in channels]
    good = np.isin(names, marks.good)
    bad = (np.isin(names, plan.channels.bad) & ~good) | np.isin(names, marks.bad)
    eeg = np.array([c.type is ChannelType.EEG for c in channels])
    ratio, rate_hz = _rates(plan, facts.rate_hz)
    antialias, band, steps = _filters(plan, facts.rate_hz, ratio, rate_hz)
    restored, mean_of, subtract_from = _reference(plan, names, bad, eeg)
    groups = _gap_groups(plan, marks, names)
    as_recorded = (
        antialias is None
        and band is None
        and not (groups or restored or subtract_from.any() or plan.channels.rebuild_bad)
    )
    single = plan.export.precision is Precision.SINGLE
    return Setup(
        facts=facts,
        used=used,
        channels=channels,
        bad=bad,
        eeg=eeg,
        good=good,
        finds_bad=plan.channels.find_bad,
        rebuilds=plan.channels.rebuild_bad,
        line_hz=plan.about.line_hz,
        ratio=ratio,
        rate_hz=rate_hz,
        groups=groups,
        fill=plan.pulses.fill,
        side=plan.pulses.side,
        flank=flank_samples(_flank_s(plan), facts.rate_hz),
        decay=plan.pulses.decay if groups else Decay.NONE,
        decay_s=ms_to_s(plan.pulses.decay_ms),
        decay_least_v=uv_to_v(plan.pulses.decay_least_uv),
        search_s=(ms_to_s(plan.pulses.search_ms[0]), ms_to_s(plan.pulses.search_ms[1])),
        pulses=_expected_pulses(facts, plan, marks),
        to_match=_markers_to_match(facts, plan, marks),
        no_pulses=marks.pulses_removed if plan.seeks_pulses else (),
        find_rules=FindRules(plan.pulses.onset_factor, ms_to_s(plan.pulses.min_spacing_ms)),
        pulses_known=plan.pulses.times is not PulseTimes.NONE,
        seeks_pulses=plan.seeks_pulses,
        onset_rules=plan.onset,
        barriers=tuple((stretch.start, stretch.stop) for stretch in marks.bad_stretches),
        antialias=antialias,
        band=band,
        band_steps=steps,
        reference_from=mean_of,
        reference_to=subtract_from,
        averages=plan.channels.reference == "average",
        restored=restored,
        work=np.dtype(np.float32 if single and not as_recorded else np.float64),
        out=np.dtype(np.float32 if single else np.float64),
        highpass_on=plan.filter.highpass_hz > 0.0,
        as_recorded=as_recorded,
        across_pulses=plan.filter.across_pulses,
    )


def _flank_s(plan: Plan) -> float:
    if plan.pulses.flank_ms is not None:
        return ms_to_s(plan.pulses.flank_ms)
    return 0.0 if plan.pulses.fill is Fill.LEAVE else default_flank_s(plan.pulses.fill)


def _expected_pulses(facts: RecordingFacts, plan: Plan, marks: Marks) -> tuple[ExpectedPulse, ...]:
    """Every pulse marker, as the marks have changed them, and the pulses added by hand."""
    if plan.pulses.times is PulseTimes.NONE:
        return ()
    moved = {pulse.sample: pulse.to for pulse in marks.pulses_moved}
    expected = [ExpectedPulse(float(sample), None, PulseState.ADDED) for sample in marks.pulses_added]
    for marker in facts.markers:
        near = nearest_sample(marker.sample)
        if plan.role_of(marker.code) is not Role.PULSE or near in marks.pulses_removed:
            continue
        if near in moved:
            expected.append(ExpectedPulse(float(moved[near]), marker.sample, PulseState.MOVED))
        elif plan.pulses.times is not PulseTimes.SIGNAL:
            expected.append(ExpectedPulse(marker.sample, marker.sample))
    return tuple(sorted(expected, key=lambda pulse: pulse.sample))


def _markers_to_match(facts: RecordingFacts, plan: Plan, marks: Marks) -> tuple[float, ...]:
    """Pulse markers whose pulses the signal has to show, in order of time."""
    if plan.pulses.times is not PulseTimes.SIGNAL:
        return ()
    by_hand = {*marks.pulses_removed, *(pulse.sample for pulse in marks.pulses_moved)}
    return tuple(
        marker.sample
        for marker in facts.markers
        if plan.role_of(marker.code) is Role.PULSE and nearest_sample(marker.sample) not in by_hand
    )


def _rates(plan: Plan, recorded_hz: float) -> tuple[Fraction, float]:
    wanted = plan.filter.rate_hz or recorded_hz
    ratio = rate_ratio(recorded_hz, wanted)
    if ratio is None or ratio > 1:
        raise PlanError(
            "filter.rate_hz",
            "cannot be reached from the recorded rate",
            allowed=f"0 (as recorded), or a simple fraction of {recorded_hz:g} Hz",
            received=f"{wanted:g}",
        )
    return ratio, wanted


def _filters(
    plan: Plan, recorded_hz: float, ratio: Fraction, rate_hz: float
) -> tuple[design.Taps | None, design.Taps | None, tuple[tuple[str, dict[str, object]], ...]]:
    """Anti-alias taps, band taps and what the latter are made of."""
    high, low = plan.filter.highpass_hz, plan.filter.lowpass_hz
    reduced = ratio < 1
    if reduced and low == 0.0:
        low = 0.4 * rate_hz
    top = low + 0.5 * design.lowpass_transition_hz(low) if low else 0.5 * rate_hz
    if low and top > 0.5 * rate_hz:
        raise PlanError(
            "filter.lowpass_hz",
            "too near half the output rate for its transition",
            allowed=f"0, or up to {min(0.5 * rate_hz / 1.125, 0.5 * rate_hz - 1.0):g}",
            received=f"{low:g}",
        )
    antialias = None
    if reduced:
        antialias = design.antialias(recorded_hz * ratio.numerator, top, rate_hz - top)
    filters: list[design.Taps] = []
    steps: list[tuple[str, dict[str, object]]] = []
    if high:
        width = design.highpass_transition_hz(high)
        filters.append(design.highpass(rate_hz, high, width))
        steps.append(("high-pass", {"cutoff_hz": high, "transition_hz": width, "taps": filters[-1].size}))
    lines = design.harmonics(plan.about.line_hz, top, rate_hz)
    if lines:
        filters.append(design.notch(rate_hz, lines))
        steps.append(("line removal", {"lines_hz": lines, "half_width_hz": 1.0, "taps": filters[-1].size}))
    if low:
        width = design.lowpass_transition_hz(low)
        filters.append(design.lowpass(rate_hz, low, width))
        steps.append(("low-pass", {"cutoff_hz": low, "transition_hz": width, "taps": filters[-1].size}))
    return antialias, design.in_series(filters) if filters else None, tuple(steps)


def _reference(
    plan: Plan, names: Sequence[str], bad: NDArray[np.bool_], eeg: NDArray[np.bool_]
) -> tuple[str, NDArray[np.bool_], NDArray[np.bool_]]:
    """Name of the channel put back, channels whose mean is subtracted, channels it is subtracted from."""
    wanted = plan.channels.reference
    if wanted == "as recorded":
        nothing = np.zeros(len(names), dtype=np.bool_)
        return "", nothing, nothing
    restored = plan.channels.recorded_reference
    if restored in names:
        raise PlanError(
            "channels.recorded_reference",
            "is a channel of the recording already",
            allowed="the name of a channel that was the reference and was not recorded",
            received=restored,
        )
    extra = np.ones(1 if restored else 0, dtype=np.bool_)
    to = np.concatenate([eeg, extra])
    if wanted == "average":
        mean_of = np.concatenate([eeg & ~bad, extra])
        if not mean_of.any():
            raise UnusableChannels(
                "no good EEG channel is left for the average reference",
                where="channels.reference",
                todo='Choose reference = "as recorded", or call fewer channels bad',
            )
        return restored, mean_of, to
    all_names = [*names, restored] if restored else list(names)
    mean_of = np.isin(all_names, wanted)
    missing = [name for name in wanted if name not in all_names]
    if missing:
        raise PlanError(
            "channels.reference", "names channels that are not recorded", received=", ".join(missing)
        )
    return restored, mean_of, to


def _gap_groups(plan: Plan, marks: Marks, names: Sequence[str]) -> tuple[GapGroup, ...]:
    """Channels with the same windows, in the order of their first channel."""
    if plan.pulses.times is PulseTimes.NONE or plan.pulses.window_ms is None:
        return ()
    own = {**plan.pulses.channels, **marks.gaps_ms}
    members: dict[tuple[float, float], list[int]] = {}
    for place, name in enumerate(names):
        members.setdefault(own.get(name, plan.pulses.window_ms), []).append(place)
    also = tuple(other.window_ms for other in plan.pulses.also)
    return tuple(
        GapGroup(
            np.array(places, dtype=np.intp),
            tuple((ms_to_s(start), ms_to_s(stop)) for start, stop in (window, *also)),
        )
        for window, places in members.items()
    )
