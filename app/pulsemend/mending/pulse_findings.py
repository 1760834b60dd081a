"""What the pulses of a recording tell about it: latencies and their drift, amplitudes, clipping, strays."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median

import numpy as np

from pulsemend.engine.estimates import Estimates
from pulsemend.engine.setup import Setup
from pulsemend.model.epochs import Pulse
from pulsemend.model.vocabulary import PulseState
from pulsemend.units import s_to_ms, s_to_us, v_to_uv

LATE_MS = 2.0
"""Marker and artifact further apart are told (common practice: triggers are right within a millisecond)."""

DRIFT_PPM = 20.0
"""A drift between marker and artifact beyond this, and beyond three standard errors, is told: two good
quartz clocks differ by less. Common practice: none known."""

UNUSUAL_SHARE = 0.25
UNUSUAL_SPREADS = 5.0
"""An amplitude stands out that is so far from the median: share of it, and robust standard deviations.
Common practice: none known."""

TRAIN_LONGEST_S = 1.0
"""Pulses no further apart belong to one train."""

_SPREAD_OF_MAD = 1.4826
_LEAST_FOR_DRIFT = 5


@dataclass(frozen=True)
class Drift:
    """How the latency of artifact against marker changes over the session.

    Parameters
    ----------
    slope_ppm : float
        Microseconds per second: straight line of least squares.
    error_ppm : float
        Its standard error.
    n_pulses : int
    """

    slope_ppm: float
    error_ppm: float
    n_pulses: int

    @property
    def is_large(self) -> bool:
        """Whether it is beyond chance and beyond what clocks do."""
        return abs(self.slope_ppm) > max(DRIFT_PPM, 3.0 * self.error_ppm)


@dataclass(frozen=True)
class Trains:
    """Pulses that follow each other closely.

    Parameters
    ----------
    n_single : int
        Pulses alone.
    sizes : mapping of int to int
        How many trains there are of so many pulses each.
    interval_s : float or None
        Median interval within trains.
    """

    n_single: int
    sizes: dict[int, int]
    interval_s: float | None

    @property
    def words(self) -> str:
        """Say it in a few words; empty where all pulses are alone."""
        if self.interval_s is None:
            return ""
        kinds = [_train_words(size, count) for size, count in sorted(self.sizes.items())]
        alone = f", {self.n_single} alone" if self.n_single else ""
        return f"{', '.join(kinds)}, {s_to_ms(self.interval_s):.4g} ms apart{alone}"


def _train_words(size: int, count: int) -> str:
    if size == 2:
        return _counted(count, "pair")
    return f"a train of {size}" if count == 1 else f"{count} trains of {size}"


def latency_drift(pulses: Sequence[Pulse], rate_hz: float) -> Drift | None:
    """Lay a line through the latencies of the aligned pulses over the session.

    Parameters
    ----------
    pulses : sequence of Pulse
        Only those that were found near their marker count.
    rate_hz : float
        Recorded rate.

    Returns
    -------
    Drift or None
        None with fewer than five such pulses.
    """
    aligned = [(one.sample, one.marked) for one in pulses if one.state is PulseState.ALIGNED]
    pairs = np.array([(sample, marked) for sample, marked in aligned if marked is not None])
    if len(pairs) < _LEAST_FOR_DRIFT:
        return None
    at_s, latency_s = pairs[:, 1] / rate_hz, (pairs[:, 0] - pairs[:, 1]) / rate_hz
    at_s = at_s - at_s.mean()
    power = float(at_s @ at_s)
    if power == 0.0:
        return None
    slope = float(at_s @ latency_s) / power
    left = latency_s - latency_s.mean() - slope * at_s
    error = math.sqrt(float(left @ left) / (len(pairs) - 2) / power)
    return Drift(s_to_us(slope), s_to_us(error), len(pairs))


def unusual_amplitudes(amplitudes_v: Sequence[float | None]) -> tuple[bool, ...]:
    """Tell which pulses are much weaker or stronger than the others: a moved coil, a misfire.

    Parameters
    ----------
    amplitudes_v : sequence of float or None
        One per pulse; None where it is not known.
    """
    known = [one for one in amplitudes_v if one is not None]
    if len(known) < _LEAST_FOR_DRIFT:
        return (False,) * len(amplitudes_v)
    usual = median(known)
    spread = _SPREAD_OF_MAD * median(abs(one - usual) for one in known)
    allowed = max(UNUSUAL_SHARE * usual, UNUSUAL_SPREADS * spread)
    return tuple(one is not None and abs(one - usual) > allowed for one in amplitudes_v)


def amplitude_change(amplitudes_v: Sequence[float | None]) -> tuple[float, float] | None:
    """Give the usual amplitude in the first and the last quarter of the pulses, if they differ much.

    Parameters
    ----------
    amplitudes_v : sequence of float or None
        In order of time.
    """
    known = [one for one in amplitudes_v if one is not None]
    quarter = len(known) // 4
    if quarter < _LEAST_FOR_DRIFT:
        return None
    first, last = median(known[:quarter]), median(known[-quarter:])
    return (first, last) if abs(last - first) > UNUSUAL_SHARE * max(first, last) else None


def trains(samples: Sequence[int], rate_hz: float) -> Trains:
    """Group pulses by their intervals.

    Parameters
    ----------
    samples : sequence of int
        Onsets in order of time.
    rate_hz : float
        Recorded rate.
    """
    within: list[float] = []
    groups: list[int] = []
    for place, sample in enumerate(samples):
        interval_s = (sample - samples[place - 1]) / rate_hz if place else math.inf
        if interval_s <= TRAIN_LONGEST_S:
            within.append(interval_s)
            groups[-1] += 1
        else:
            groups.append(1)
    sizes = {size: groups.count(size) for size in set(groups) if size > 1}
    return Trains(groups.count(1), sizes, median(within) if within else None)


def pulse_warnings(setup: Setup, estimates: Estimates) -> list[str]:
    """Say what a person should know about the pulses, one sentence each.

    Parameters
    ----------
    setup : Setup
        Gaps and rate.
    estimates : Estimates
        Pulses.
    """
    rate_hz, pulses = setup.facts.rate_hz, estimates.pulses
    lines = _strays(setup, estimates)
    late = [
        s_to_ms((one.sample - one.marked) / rate_hz)
        for one in pulses
        if one.state is PulseState.ALIGNED and one.marked is not None
    ]
    far = [one for one in late if abs(one) > LATE_MS]
    if far:
        lines.append(
            f"{len(far)} of {len(late)} artifacts are more than {LATE_MS:g} ms from their marker "
            f"(median of all {median(late):+.1f} ms, furthest {max(far, key=abs):+.1f} ms)"
        )
    drift = latency_drift(pulses, rate_hz)
    if drift is not None and drift.is_large:
        lines.append(
            f"markers and artifacts drift apart by {drift.slope_ppm:+.0f} +- {drift.error_ppm:.0f} "
            "microseconds per second"
        )
    lines += _amplitudes(pulses, rate_hz)
    lines += _beyond_gaps(setup, pulses)
    return lines


def _strays(setup: Setup, estimates: Estimates) -> list[str]:
    """Markers without a pulse and pulses without a marker."""
    rate_hz = setup.facts.rate_hz
    met = {one.marked for one in estimates.pulses}
    ghosts = [sample for sample in setup.to_match if sample not in met]
    found = [one.sample for one in estimates.pulses if one.state is PulseState.FOUND]
    lines = []
    if ghosts:
        verb = "counts" if len(ghosts) == 1 else "count"
        lines.append(
            f"{_counted(len(ghosts), 'pulse marker')} without a pulse in the signal {verb} for nothing, "
            f"the first at {ghosts[0] / rate_hz:.3f} s"
        )
    if found and (setup.to_match or setup.pulses):
        what = "has no marker and is" if len(found) == 1 else "have no marker and are"
        lines.append(
            f"{_counted(len(found), 'pulse')} in the signal {what} repaired, "
            f"the first at {found[0] / rate_hz:.3f} s"
        )
    return lines


def _amplitudes(pulses: Sequence[Pulse], rate_hz: float) -> list[str]:
    real = [one for one in pulses if one.state is not PulseState.MARKED_ONLY]
    amplitudes_v = [one.amplitude_v for one in real]
    unusual = [
        one for one, stands_out in zip(real, unusual_amplitudes(amplitudes_v), strict=True) if stands_out
    ]
    lines = []
    if unusual:
        first = unusual[0]
        usual_v = median(one for one in amplitudes_v if one is not None)
        lines.append(
            f"{_counted(len(unusual), 'pulse')} of unusual amplitude, "
            f"the first at {first.sample / rate_hz:.3f} s with {v_to_uv(first.amplitude_v or 0.0):.0f} uV "
            f"(usual: {v_to_uv(usual_v):.0f} uV)"
        )
    change = amplitude_change(amplitudes_v)
    if change is not None:
        lines.append(
            "the amplitude of the pulses changes over the session, from "
            f"{v_to_uv(change[0]):.0f} to {v_to_uv(change[1]):.0f} uV: did the coil move?"
        )
    return lines


def _beyond_gaps(setup: Setup, pulses: Sequence[Pulse]) -> list[str]:
    """Clipping after the gap and holds before it: neither is filled."""
    if not setup.groups:
        return []
    start_s = max(group.windows_s[0][0] for group in setup.groups)
    end_s = min(group.windows_s[0][1] for group in setup.groups)
    clipped = [one.clipped_s for one in pulses if one.clipped_s > end_s]
    held = [one.held_s for one in pulses if one.held_s > -start_s]
    lines = []
    if clipped:
        lines.append(
            f"the signal is clipped beyond the gap after {_counted(len(clipped), 'pulse')}, "
            f"up to {s_to_ms(max(clipped)):.1f} ms after the onset, and is kept so"
        )
    if held:
        lines.append(
            f"the amplifier holds its output from {s_to_ms(max(held)):.1f} ms before the onset, "
            f"before the gap begins, at {_counted(len(held), 'pulse')}"
        )
    return lines


def _counted(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"
