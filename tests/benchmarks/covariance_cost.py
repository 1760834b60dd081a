"""What the fill `covariance` costs: processor time, memory of the weights, knots used.

Run it as ``python tests/benchmarks/covariance_cost.py``; figures are for one thread of the linear
algebra library if OMP_NUM_THREADS=1 is set.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np

from pulsemend.signal.autocovariance import AutocovarianceSum
from pulsemend.signal.fills import MOST_KNOTS, FillConfig, Filler, default_flank_s, flank_samples, lags_needed
from pulsemend.signal.gaps import Gap, window_to_samples

SETTINGS = [  # channels, rate_hz, window_s
    (62, 5_000.0, (-0.002, 0.012)),
    (62, 5_000.0, (-0.002, 0.025)),
    (128, 25_000.0, (-0.002, 0.014)),
    (128, 25_000.0, (-0.002, 0.025)),
]
QUIET_S = 60.0
N_GAPS = 20


def seconds(work: Callable[[], None], times: int = 1) -> float:
    """Processor time of all calls together."""
    before = time.process_time()
    for _ in range(times):
        work()
    return time.process_time() - before


def measure(n_channels: int, rate_hz: float, window_s: tuple[float, float]) -> str:
    """Measure one setting: a line of the table."""
    flank = flank_samples(default_flank_s("covariance"), rate_hz)
    start, stop = window_to_samples(2 * flank, window_s, rate_hz)
    gap = Gap(start, stop, flank, flank)
    rng = np.random.default_rng(1)
    quiet = np.cumsum(rng.standard_normal((int(2.0 * rate_hz), n_channels)), axis=0).astype(np.float32)
    collected = AutocovarianceSum(n_channels, lags_needed(gap.size, flank))
    learning_s = seconds(lambda: collected.add(quiet), int(QUIET_S / 2.0))
    config = FillConfig("covariance", "both", flank, rate_hz, collected.result())
    filler = Filler(config, n_channels, np.float32)
    x = quiet[: stop + 2 * flank].copy()
    first_s = seconds(lambda: filler.fill(x, 0, gap))
    each_s = seconds(lambda: filler.fill(x, 0, gap), N_GAPS) / N_GAPS
    knots = filler.held_bytes // (n_channels * gap.size * 4)
    return (
        f"{n_channels:4d} {rate_hz / 1e3:5.0f} {gap.size:8d} {knots:6d} {filler.held_bytes / 1e6:8.1f} "
        f"{learning_s:10.2f} {first_s:10.2f} {each_s * 1e3:10.2f}"
    )


if __name__ == "__main__":
    print(f"at most {MOST_KNOTS} knots; processor seconds; learning from {QUIET_S:.0f} s of signal")
    print("chan   kHz  samples  knots  held MB  learning s  weights s  per gap ms")
    for setting in SETTINGS:
        print(measure(*setting))
