"""How the alignment and the greedy matcher it replaced find trials among faults, and what both cost.

Run it as ``python tests/benchmarks/matching.py``. Every row is one recording of 1000 Lantern trials with that
share of lost, doubled or foreign markers, or of all three at once. Recall: true trials with all required
markers that were reported complete and as they were. Wrong: reported complete, without a doubt, and otherwise
than they were, per 1000 true trials. Doubtful: trials with two or more explanations that are equally good,
per 100 true trials; the greedy matcher has no doubts. Seconds are processor time.
"""

from __future__ import annotations

import gc
import random
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

from pulsemend.model.epochs import Trial, Trials
from pulsemend.model.plan import Group, MarkerPlan, Plan, Slot
from pulsemend.model.vocabulary import Role
from pulsemend.trials import alignment
from pulsemend.trials.matching import match_trials
from support import greedy_matcher
from support.marker_streams import BASE, LANTERN, RATE_HZ, Mix, Stream, draw_stream

N_TRIALS = 1000
SHARES = (0.02, 0.05, 0.10)


@dataclass(frozen=True)
class Score:
    """What one matcher made of one recording."""

    recall: float
    wrong: float
    doubtful: float
    time_s: float


def seconds(work: Callable[[], Trials]) -> tuple[float, Trials]:
    """Processor time of the quickest of three calls, each from nothing, and the result."""
    times = []
    for _ in range(3):
        alignment._aligned.cache_clear()
        gc.collect()
        before = time.process_time()
        found = work()
        times.append(time.process_time() - before)
    return min(times), found


def score(stream: Stream, work: Callable[[], Trials]) -> Score:
    """Compare what was found with the truth."""
    time_s, found = seconds(work)

    def as_set(trial: Trial) -> frozenset[tuple[str, float]]:
        return frozenset((name, marker.sample) for name, marker in trial.markers.items())

    runs = stream.true_runs()
    true = {
        frozenset((name, stream.markers[place].sample) for name, place in run.places)
        for run in runs
        if not run.missing
    }
    sure = {as_set(trial) for trial in found.trials if not trial.missing and not trial.doubts}
    n = len(stream.trials)
    return Score(
        recall=len(sure & true) / len(true),
        wrong=1000 * len(sure - true) / n,
        doubtful=100 * sum(bool(trial.doubts) for trial in found.trials) / n,
        time_s=time_s,
    )


def row(name: str, mix: Mix) -> str:
    """Measure one mix: a line of the table."""
    stream = draw_stream(random.Random(name), LANTERN, N_TRIALS, mix)
    aligned = score(stream, lambda: match_trials(stream.markers, LANTERN, RATE_HZ))
    greedy = score(stream, lambda: greedy_matcher.match_trials(stream.markers, LANTERN, RATE_HZ))
    return (
        f"{name:<16}{len(stream.markers):>8}"
        f"{aligned.recall:>9.3f}{greedy.recall:>8.3f}"
        f"{aligned.wrong:>9.1f}{greedy.wrong:>8.1f}"
        f"{aligned.doubtful:>10.1f}"
        f"{aligned.time_s:>9.2f}{greedy.time_s:>8.2f}{aligned.time_s / greedy.time_s:>7.1f}"
    )


def questions_plan() -> Plan:
    """Two kinds of trial that ask one to eight questions."""
    probe = ("stimulated", "plain")
    slots = (
        Slot("cue", Role.CUE),
        Slot("pulse", Role.PULSE, (0.5, 1.0), kinds=("stimulated",)),
        Slot("probe", Role.PROBE, (2.0, 3.0), after="cue", group="question", kinds=probe),
        Slot("answer", Role.RESPONSE, (0.2, 0.8), group="question"),
    )
    return replace(
        BASE,
        markers=tuple(MarkerPlan(slot.role.value, slot.role) for slot in slots),
        trial=slots,
        groups=(Group("question", (1, 8), (0.9, 2.0)),),
    )


def main() -> None:
    print(f"{N_TRIALS} Lantern trials; new: the alignment, old: the greedy matcher")
    print(
        f"{'faults':<16}{'markers':>8}{'recall':>9}{'':>8}{'wrong/1000':>12}{'':>5}{'doubtful %':>10}"
        f"{'seconds':>9}{'':>8}{'ratio':>7}"
    )
    print(f"{'':<16}{'':>8}{'new':>9}{'old':>8}{'new':>9}{'old':>8}{'new':>10}{'new':>9}{'old':>8}")
    print(row("none", Mix()))
    for share in SHARES:
        for kind, mix in (
            ("lost", Mix(lost=share)),
            ("doubled", Mix(doubled=share)),
            ("foreign", Mix(foreign=share)),
            ("all three", Mix(lost=share, doubled=share, foreign=share)),
        ):
            print(row(f"{share:.0%} {kind}", mix))
    print(f"\n{N_TRIALS} trials of two kinds with one to eight questions each")
    plan = questions_plan()
    for share in (0.0, *SHARES):
        mix = Mix(lost=share, doubled=share, foreign=share)
        stream = draw_stream(random.Random(1), plan, N_TRIALS, mix)
        found = score(stream, lambda stream=stream: match_trials(stream.markers, plan, RATE_HZ))  # type: ignore[misc]
        print(
            f"{share:.0%} of each: {len(stream.markers)} markers, recall {found.recall:.3f}, "
            f"wrong {found.wrong:.1f}, doubtful {found.doubtful:.1f} %, {found.time_s:.2f} s"
        )


if __name__ == "__main__":
    main()
