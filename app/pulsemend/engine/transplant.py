"""Transplant test: artifacts are planted where no pulse was given, repaired, and compared with the truth.

Three recordings are made of the same pulse-free stretches: with artifacts, which go through the whole plan;
without, which go through it as if it had no pulses: the truth; and test responses alone, to see what the
repair takes of them. Everything else of the plan is the same for all.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.chain import Chain
from pulsemend.engine.decay import DecayEstimates, learn_decay
from pulsemend.engine.decay_stretches import BackgroundSum
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import quiet_windows
from pulsemend.engine.planted import PlantedRecording, Responses, levels_of, planted_setup
from pulsemend.engine.reading import read_stored
from pulsemend.engine.setup import Setup
from pulsemend.engine.transplants import (
    TransplantConfig,
    draw_artifacts,
    draw_responses,
    gap_reach,
    lay_out,
    seen_s,
)
from pulsemend.errors import InputError
from pulsemend.model.epochs import Pulse
from pulsemend.model.recording import Recording
from pulsemend.model.vocabulary import AcrossPulses, Decay, Fill, PulseState, Side
from pulsemend.progress import Progress, Work
from pulsemend.signal.autocovariance import AutocovarianceSum
from pulsemend.signal.fills import default_flank_s, flank_samples, lags_needed
from pulsemend.signal.gaps import window_to_samples
from pulsemend.signal.repair_error import BANDS, rhythm_weights

SHOWN_S = (-0.05, 0.3)
"""Around the onset: errors are told from here to there, or further where gaps are."""

STEP_S = 0.001
"""Between two latencies, or one output sample if that is longer."""

RHYTHM_S = (0.0, 0.05, 0.1, 0.2)
"""Latencies at which rhythms are compared."""

_STAGE = "repairing planted artifacts"

Singles = NDArray[np.float32]


@dataclass(frozen=True)
class Method:
    """A way to fill.

    Parameters
    ----------
    fill : Fill
    side : Side
    flank : int
        Recorded samples.
    """

    fill: Fill
    side: Side
    flank: int


def own_method(setup: Setup) -> Method:
    """Give the plan's own way to fill."""
    return Method(setup.fill, setup.side, setup.flank)


def other_methods(setup: Setup) -> tuple[Method, ...]:
    """List the other fills with the plan's side, each with its usual flank."""
    rate_hz = setup.facts.rate_hz
    return tuple(
        Method(fill, setup.side, flank_samples(default_flank_s(fill), rate_hz))
        for fill in Fill
        if fill not in (setup.fill, Fill.LEAVE)
    )


@dataclass(frozen=True, eq=False)
class Errors:
    """What one method did to every gap.

    Parameters
    ----------
    method : Method
    error_v : float32 array, shape (n_gaps, n_channels, n_latencies)
        Repaired minus true.
    rhythms : complex64 array, shape (n_gaps, n_channels, n_bands, len(RHYTHM_S))
        Complex amplitudes in the repaired signal, in volts.
    taken_v2 : array, shape (n_gaps, n_channels)
        Product of error and test response, summed over time; over `Truth.response_v2` and negative it is the
        share of the response that is gone.
    """

    method: Method
    error_v: Singles
    rhythms: NDArray[np.complex64]
    taken_v2: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Truth:
    """What is true of every gap.

    Parameters
    ----------
    latencies_s : array, shape (n_latencies,)
        Of the errors, since the onset.
    variance_v2 : array, shape (n_gaps, n_channels)
        Of the true signal over time.
    rhythms : complex64 array
        As in `Errors`.
    response_v2 : array, shape (n_gaps, n_channels)
        Square of the test response, summed over time.
    responses : Responses or None
        Which stretch holds which.
    """

    latencies_s: NDArray[np.float64]
    variance_v2: NDArray[np.float64]
    rhythms: NDArray[np.complex64]
    response_v2: NDArray[np.float64]
    responses: Responses | None


class Bench:
    """Everything planted, ready to be repaired in any way; made by `prepare`.

    Parameters
    ----------
    setup : Setup
        Bound to the planted recordings.
    estimates : Estimates
        For them.
    with_artifacts, without : Recording
    responses_alone : Recording or None
    responses : Responses or None
    """

    def __init__(
        self,
        setup: Setup,
        estimates: Estimates,
        with_artifacts: Recording,
        without: Recording,
        responses_alone: Recording | None,
        responses: Responses | None,
    ) -> None:
        self.setup, self.estimates, self.responses = setup, estimates, responses
        self._with_artifacts = with_artifacts
        # As if no pulse were known.
        untouched = replace(setup, groups=(), decay=Decay.NONE, across_pulses=AcrossPulses.FILLED, pulses=())
        nothing = replace(estimates, pulses=(), autocovariance=None, decay=None)
        self._truth = Chain(without, untouched, nothing)
        self._alone: Chain | None = None
        if responses_alone is not None:
            no_offset = replace(nothing, offset=np.zeros_like(estimates.offset))
            self._alone = Chain(responses_alone, untouched, no_offset)
        rate_hz = setup.rate_hz
        first_s, last_s = seen_s(setup)
        self._first = -math.floor(-first_s * rate_hz)
        self.times_s = np.arange(self._first, math.floor(last_s * rate_hz)) / rate_hz
        step = max(1, math.floor(STEP_S * rate_hz + 1e-6))
        begin, end = gap_reach(setup)
        begin_s = min(SHOWN_S[0], begin / setup.facts.rate_hz + SHOWN_S[0])
        end_s = max(SHOWN_S[1], end / setup.facts.rate_hz - 2 * SHOWN_S[0])
        # The onset itself is one of them.
        numbers = np.arange(math.ceil(begin_s * rate_hz / step), math.floor(end_s * rate_hz / step) + 1)
        self._shown = numbers * step - self._first
        weights = [rhythm_weights(self.times_s, band.frequency_hz, s) for band in BANDS for s in RHYTHM_S]
        joined = np.stack(weights, axis=1)
        # The far ends of the windows would only make products too small for the processor to be quick with.
        joined[np.abs(joined) < 1e-7 * np.abs(joined).max(axis=0)] = 0.0
        self._weights = np.hstack([joined.real, joined.imag]).astype(np.float32)

    @property
    def n_gaps(self) -> int:
        """Planted gaps."""
        return len(self.estimates.pulses)

    def measure(
        self, methods: Sequence[Method], places: Sequence[int] | None = None
    ) -> Work[tuple[Truth, tuple[Errors, ...]]]:
        """Repair gaps by several methods and compare each with the truth.

        Parameters
        ----------
        methods : sequence of Method
            To be compared.
        places : sequence of int or None
            Which gaps, in which order; every gap's numbers are the same whatever is asked beside it.

        Yields
        ------
        Progress
        """
        chosen = range(self.n_gaps) if places is None else places
        chains = [self.repaired_by(method) for method in methods]
        shape = (len(chosen), len(self.setup.names))
        bands = (len(BANDS), len(RHYTHM_S))
        truth = Truth(
            self.times_s[self._shown],
            np.zeros(shape),
            np.zeros((*shape, *bands), np.complex64),
            np.zeros(shape),
            self.responses if self.responses is None else self.responses.chosen(chosen),
        )
        found = [
            Errors(
                method,
                np.zeros((*shape, self._shown.size), np.float32),
                np.zeros_like(truth.rhythms),
                np.zeros(shape),
            )
            for method in methods
        ]
        for row, place in enumerate(chosen):
            yield Progress(_STAGE, row, len(chosen))
            onset = self.estimates.onsets[place]
            true = self._seen(self._truth, onset)
            about_mean = true - true.mean(axis=1, keepdims=True)
            truth.variance_v2[row] = np.einsum("ct,ct->c", about_mean, about_mean) / about_mean.shape[1]
            truth.rhythms[row] = self._rhythms(about_mean)
            response = None if self._alone is None else self._seen(self._alone, onset)
            if response is not None:
                truth.response_v2[row] = np.einsum("ct,ct->c", response, response)
            for chain, of_method in zip(chains, found, strict=True):
                error = self._seen(chain, onset) - true
                of_method.error_v[row] = error[:, self._shown]
                of_method.rhythms[row] = truth.rhythms[row] + self._rhythms(error)
                if response is not None:
                    of_method.taken_v2[row] = np.einsum("ct,ct->c", error, response)
        return truth, tuple(found)

    def repaired_by(self, method: Method) -> Chain:
        """Chain of the whole plan on the planted recording."""
        setup = replace(self.setup, fill=method.fill, side=method.side, flank=method.flank)
        return Chain(self._with_artifacts, setup, self.estimates)

    def _rhythms(self, volts: NDArray[np.float64]) -> NDArray[np.complex64]:
        """Complex amplitudes of all bands at all latencies, shape (n_channels, n_bands, len(RHYTHM_S))."""
        found = volts.astype(np.float32) @ self._weights
        half = found.shape[1] // 2
        return np.asarray(found[:, :half] + 1j * found[:, half:]).reshape(-1, len(BANDS), len(RHYTHM_S))

    def _seen(self, chain: Chain, onset: int) -> NDArray[np.float64]:
        """Output samples around an onset, in volts, shape (n_channels, n_times)."""
        cut = chain.cut(float(onset), self._first / self.setup.rate_hz, self.times_s.size)
        return chain.samples(cut).astype(np.float64)


def prepare(
    recording: Recording,
    setup: Setup,
    estimates: Estimates,
    methods: Sequence[Method],
    config: TransplantConfig,
) -> Work[Bench]:
    """Plant artifacts and responses, and fit decays to what was planted.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    setup : Setup
        Plan and marks, bound to it.
    estimates : Estimates
        From `fit` with the same setup.
    methods : sequence of Method
        That are going to be measured.
    config : TransplantConfig
        How much is planted.

    Yields
    ------
    Progress

    Returns
    -------
    Bench

    Raises
    ------
    InputError
        There is no pulse or no gap, gaps are left open, or too few stretches are free of pulses.
    """
    if not setup.groups or not estimates.pulses:
        raise InputError(
            "no pulse is repaired, so there is nothing that a repair could cost", where=setup.facts.stem
        )
    if any(method.fill is Fill.LEAVE for method in methods):
        raise InputError(
            "gaps are left open, so there is no fill whose error could be measured", where=setup.facts.stem
        )
    layout = lay_out(setup, estimates, config)
    artifact = yield from draw_artifacts(recording, setup, estimates, layout, config.seed)
    responses = draw_responses(setup, len(layout.starts), config.seed) if config.responses else None
    yield Progress(_STAGE, 0, 0)
    levels = levels_of(recording, layout)
    planted = PlantedRecording(recording, setup, layout, levels, responses, artifact)
    without = PlantedRecording(recording, setup, layout, levels, responses)
    alone = None if responses is None else PlantedRecording(recording, setup, layout, None, responses)
    bound = planted_setup(setup, planted.facts, layout.onsets)
    autocovariance, background = yield from _learned_of_quiet(recording, setup, estimates, methods)
    decay: DecayEstimates | None = None
    if estimates.decay is not None:
        decay = yield from learn_decay(planted, bound, layout.onsets, background)
    found = replace(
        estimates,
        pulses=tuple(Pulse(onset, None, PulseState.ADDED) for onset in layout.onsets),
        autocovariance=autocovariance,
        decay=decay,
    )
    return Bench(bound, found, planted, without, alone, responses)


def _learned_of_quiet(
    recording: Recording, setup: Setup, estimates: Estimates, methods: Sequence[Method]
) -> Work[tuple[NDArray[np.float64] | None, NDArray[np.float64] | None]]:
    """Autocovariance for the fill, if one needs it and it is not known yet; and for the fit of decays."""
    flanks = [method.flank for method in methods if method.fill is Fill.COVARIANCE]
    total = None
    if flanks and estimates.autocovariance is None:
        spans = [window_to_samples(0, w, setup.facts.rate_hz) for g in setup.groups for w in g.windows_s]
        longest = max(stop - start for start, stop in spans)
        total = AutocovarianceSum(setup.used.size, lags_needed(longest, max(flanks)))
    background = BackgroundSum(setup) if estimates.decay is not None else None
    if total is None and background is None:
        return estimates.autocovariance, None
    windows = quiet_windows(setup, estimates.onsets)
    for done, (start, stop) in enumerate(windows):
        yield Progress("learning from the recording", done, len(windows))
        origin = read_stored(recording, setup, start, start + 1)[0]
        x = read_stored(recording, setup, start, stop, origin, np.float32)
        x = (x - x.mean(axis=0)) * setup.scale_v.astype(np.float32)
        for one in (total, background):
            if one is not None:
                one.add(x)
    found = estimates.autocovariance
    if total is not None:
        if not total.n_samples:
            raise InputError(
                "no stretch free of pulses is long enough to learn the signal's autocovariance from",
                where=setup.facts.stem,
            )
        found = total.result()
    return found, None if background is None else background.result()
