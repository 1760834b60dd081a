"""Trials made by hand with their candidates, for tests of lanes: 7 trials, 3 rules."""

from __future__ import annotations

from collections.abc import Sequence

from pulsemend.mending.epoch_lanes import Lanes, epoch_lanes
from pulsemend.mending.prepare import Decision
from pulsemend.model.epochs import Trial, Trials
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.progress import finish
from pulsemend.trials.balance import balanced
from pulsemend.trials.candidates import GapSpan, Geometry, candidates, set_order

PLAN = parse_plan(
    """
pulsemend = 1
[markers.S]
role = "sample"
[markers.L]
role = "cue"
labels = { item = "left" }
[markers.R]
role = "cue"
labels = { item = "right" }
[markers.T]
role = "pulse"
[[trial]]
slot = "sample"
role = "sample"
[[trial]]
slot = "cue1"
role = "cue"
after_s = [1.0, 2.0]
[[trial]]
slot = "pulse1"
role = "pulse"
after_s = [0.5, 3.0]
optional = true
[pulses]
window_ms = [-2, 14]
[filter]
rate_hz = 500
lowpass_hz = 100
[epochs]
length_s = 1
[[epochs.rule]]
name = "baseline"
anchor = "sample"
start_s = -1.0
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.5
labels = { asked = "cue1.item" }
[[epochs.rule]]
name = "after1"
anchor = "pulse1"
start_s = 0.0
count = 2
pulse = "accept filled"
"""
).plan

RATE = 1000.0


def trial(number: int, begin: int, cue: str = "L", pulse_after: int | None = 2500, **more: object) -> Trial:
    """Sample at `begin`, the cue 1.5 s after it."""
    markers = {"sample": Marker(begin, "S"), "cue1": Marker(begin + 1500, cue)}
    if pulse_after is not None:
        markers["pulse1"] = Marker(begin + pulse_after, "T")
    return Trial(number, markers, **more)  # type: ignore[arg-type]


def decided(trials: Sequence[Trial], plan: Plan = PLAN, excluded: tuple[int, ...] = ()) -> Decision:
    """Candidates of trials; every pulse's onset is 3 ms after its marker."""
    pulses = [one.markers["pulse1"].sample for one in trials if "pulse1" in one.markers]
    geometry = Geometry(
        recorded_hz=RATE,
        output_hz=500.0,
        segments=((0, max(200_000, 12_000 * len(trials) + 30_000)),),
        gaps=tuple(
            sorted(
                GapSpan(int(at) + low, int(at) + high, int(at) + 3) for at in pulses for low, high in _GAPS
            )
        ),
        onsets={at: int(at) + 3 for at in pulses},
        trials_excluded=excluded,
    )
    whole = Trials(tuple(trials))
    found = candidates(whole, plan, geometry)
    by = plan.balance
    ledger = balanced(found, by.by, by.choose, by.seed).candidates
    return Decision(
        trials=whole,
        markers=(),
        logged=None,
        log_problem="",
        geometry=geometry,
        ledger=ledger,
        kept=set_order(ledger, geometry),
        notes=(),
        warnings=(),
    )


_GAPS = ((1, 17), (1, 28), (251, 257))
"""Two windows of one pulse that overlap, and a recharge."""

TRIALS = (
    trial(1, 5_000),
    trial(2, 15_000, "R", pulse_after=3500),
    trial(3, 25_000, pulse_after=None),
    trial(4, 35_000, missing=("cue2",)),
    trial(5, 45_000, "R", doubts=("cue1 at 12.304 s or 12.391 s",)),
    trial(6, 55_000, set_aside="practice"),
    trial(7, 65_000),
)


def lanes_of(plan: Plan = PLAN) -> Lanes:
    """Lanes of the trials, the seventh excluded by hand."""
    return finish(epoch_lanes(decided(TRIALS, plan, excluded=(7,)), plan))


def many(count: int) -> tuple[Trial, ...]:
    """Trials at intervals of 12 s, pulses early and late."""
    return tuple(
        trial(number, 12_000 * number, pulse_after=2200 + 7 * (number % 200))
        for number in range(1, count + 1)
    )
