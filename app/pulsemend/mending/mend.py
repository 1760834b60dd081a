"""The one use case: recording, plan and marks become an epoch set."""

from __future__ import annotations

import importlib.metadata
import platform
from collections import Counter
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend import DATA_VERSION, __version__
from pulsemend.engine.bad_channels import found_bad, reasons, rebuilding
from pulsemend.engine.chain import Chain, Cut
from pulsemend.engine.leak import Leak, measure_leak
from pulsemend.engine.onsets import OnsetShift
from pulsemend.engine.steps import steps
from pulsemend.export.contents import ChannelStatus, SetChannel, SetContents, SetEpoch, Zero
from pulsemend.export.readiness import LEAK_LIMIT_UV
from pulsemend.export.set_writer import SetWriter, check_place
from pulsemend.mending.prepare import Prepared, Request, marked_only, need_epochs, prepare, set_channels
from pulsemend.model.epochs import NOT_AVAILABLE
from pulsemend.progress import Progress, Work
from pulsemend.readers.opening import open_recording
from pulsemend.trials.later import later_by_rule
from pulsemend.trials.mirrors import SEED_RULE, MirrorGaps
from pulsemend.units import v_to_uv

RANK_TOLERANCE = 1e-5
"""Directions of the set in which the amplitude is below this share of the strongest direction's do not count:
single precision leaves about 1e-7, electrodes differ by more than 1e-3 (common practice: none known)."""

_LIBRARIES = ("numpy", "scipy", "mne", "h5py", "tomlkit", "threadpoolctl")
_STAGE = "writing epochs"


@dataclass(frozen=True)
class MendResult:
    """What was written.

    Parameters
    ----------
    folder : Path
        The set.
    content_sha256 : str
        Identity of its data.
    prepared : Prepared
        What it rests on; its recording is closed.
    rank : int
        Of the data written.
    """

    folder: Path
    content_sha256: str
    prepared: Prepared
    rank: int


def mend(request: Request, out: Path, *, overwrite: bool = False) -> Work[MendResult]:
    """Turn a recording into an epoch set.

    Parameters
    ----------
    request : Request
        Recording, plan and marks.
    out : Path
        Parent folder of the set.
    overwrite : bool
        Whether a set that stands there is replaced.

    Yields
    ------
    Progress

    Returns
    -------
    MendResult

    Raises
    ------
    InputError
        Recording, plan or marks cannot be used, no epoch is kept, or the set exists. Nothing is written then.
    """
    recording = open_recording(request.recording)
    recording.close()
    check_place(out, recording.facts.stem, overwrite=overwrite)
    prepared = yield from prepare(request)
    try:
        need_epochs(prepared)
        cuts = cut_all(prepared)
        leak = yield from measure_leak(prepared.chain, prepared.estimates, cuts)
        contents = set_contents(prepared, cuts, leak)
        rank = _Rank(contents.shape)
        with SetWriter(contents, out, overwrite) as writer:
            for index, (cut, mirror) in enumerate(zip(cuts, prepared.mirrors, strict=True)):
                yield Progress(_STAGE, index, len(cuts))
                chain = chain_of(prepared, mirror)
                data = chain.samples(cut)
                rank.add(data)
                writer.write(index, data, chain.replaced(cut), chain.decay_fitted(cut))
            yield Progress("reading back", 0, 0)
            folder = writer.finish(rank.rank(), {}, prepared.estimates.save)
            yield Progress("reading back", 1, 1)
    finally:
        prepared.recording.close()
    return MendResult(folder, writer.content_sha256, prepared, rank.rank())


def dry_run(request: Request) -> Work[Prepared]:
    """Do everything but touch the samples of epochs: trials, fates and counts.

    Parameters
    ----------
    request : Request
        Recording, plan and marks.

    Yields
    ------
    Progress

    Returns
    -------
    Prepared
        Its recording is closed.
    """
    prepared = yield from prepare(request)
    prepared.recording.close()
    return prepared


def cut_all(prepared: Prepared) -> list[Cut]:
    """Lay every kept epoch onto the output grid."""
    n_times = round(prepared.plan.epochs.length_s * prepared.setup.rate_hz)
    return [
        prepared.chain.cut(candidate.anchor_sample, candidate.start_s, n_times)
        for candidate in prepared.kept
        if candidate.anchor_sample is not None
    ]


def chain_of(prepared: Prepared, mirror: MirrorGaps | None) -> Chain:
    """Give the chain that one epoch is read from: its own where it has mirror gaps, else the common one.

    Mirror gaps exist in this chain alone, and no other epoch is read from it.
    """
    return prepared.chain.with_gaps_at(mirror.onsets) if mirror else prepared.chain


def set_contents(prepared: Prepared, cuts: Sequence[Cut], leak: Leak) -> SetContents:
    """Describe the set before its first sample.

    Parameters
    ----------
    prepared : Prepared
        The recording, opened and decided.
    cuts : sequence of Cut
        One for each kept epoch.
    leak : Leak
        Of the same epochs.
    """
    plan, setup = prepared.plan, prepared.setup
    recorded_hz = setup.facts.rate_hz
    mirrors = prepared.mirrors
    epochs = tuple(
        SetEpoch(
            candidate=candidate,
            onset_s=(candidate.anchor_sample or 0.0) / recorded_hz,
            start_s=candidate.start_s,
            shift_s=cut.shift_s or cut.remainder_s,
            replaced_share=chain_of(prepared, mirror).replaced_share(cut),
            decay_share=prepared.chain.decay_share(cut),
            leak=_leak_text(leak, peak_v),
            mirror_latencies_s=mirror.latencies_s if mirror else (),
        )
        for candidate, cut, mirror, peak_v in zip(
            prepared.kept, cuts, mirrors, leak.peaks_v.tolist(), strict=True
        )
    )
    starts = {round(candidate.start_s * setup.rate_hz) for candidate in prepared.kept}
    zero: Zero = "anchor" if len(starts) == 1 else "epoch start"
    first = starts.pop() if zero == "anchor" else 0
    reduced_lowpass_hz = 0.4 * setup.rate_hz if setup.antialias is not None else 0.0
    return SetContents(
        stem=setup.facts.stem,
        channels=_channels(prepared),
        rate_hz=setup.rate_hz,
        recorded_rate_hz=recorded_hz,
        times=(first + np.arange(cuts[0].n_times)) / setup.rate_hz,
        zero=zero,
        epochs=epochs,
        ledger=prepared.ledger,
        pulses=prepared.estimates.pulses,
        plan_text=prepared.plan_file.text,
        marks_text=prepared.marks_text,
        source_sha256=prepared.fingerprint.digest,
        precision=plan.export.precision,
        formats=plan.export.formats,
        fill=plan.pulses.fill,
        rereferenced=bool(setup.reference_from.any()),
        highpass_hz=plan.filter.highpass_hz,
        lowpass_hz=plan.filter.lowpass_hz or reduced_lowpass_hz,
        replaced_reach_s=setup.replaced_reach_s,
        decay_fitted=prepared.estimates.decay is not None,
        mirror_gaps=any(rule.mirror_gaps for rule in plan.epochs.rule),
        provenance={
            **provenance(prepared),
            "leak": _leak_provenance(leak),
            "mirror_gaps": _mirror_provenance(prepared, mirrors),
        },
        later=later_labels(prepared),
    )


def provenance(prepared: Prepared) -> dict[str, Any]:
    """Tell where the set comes from: recording, versions, steps, counts."""
    facts = prepared.setup.facts
    return {
        "program": {"name": "pulsemend", "version": __version__, "data_version": DATA_VERSION},
        "written": datetime.now(UTC).isoformat(timespec="seconds"),
        "versions": {
            "python": platform.python_version(),
            **{name: importlib.metadata.version(name) for name in _LIBRARIES},
        },
        "recording": {
            "stem": facts.stem,
            "format": facts.format,
            "rate_hz": facts.rate_hz,
            "samples": facts.n_samples,
            "segments": [list(segment) for segment in facts.segments],
            "fingerprint": [
                {"file": name, "size": size, "sha256": sha256}
                for name, size, sha256 in prepared.fingerprint.parts
            ],
            "notes": list(facts.notes),
        },
        "steps": [asdict(step) for step in steps(prepared.setup, prepared.estimates)],
        "trials": {
            "found": len(prepared.trials.trials),
            "incomplete": sum(bool(trial.missing) for trial in prepared.trials.trials),
            "doubtful": sum(bool(trial.doubts) for trial in prepared.trials.trials),
            "set_aside": sum(bool(trial.set_aside) for trial in prepared.trials.trials),
            "markers_in_no_trial": len(prepared.trials.extra),
        },
        "cures": list(prepared.marks.cures_accepted),
        "log": _log_provenance(prepared),
        "stimulus_onsets": [_onset_provenance(shift) for shift in prepared.estimates.stimulus_onsets],
        "balance": asdict(prepared.plan.balance) if prepared.plan.balance.by else None,
        "stimulation": {
            name: value
            for name, value in vars(prepared.plan.stimulation).items()
            if value not in (None, "") and (name != "columns" or value)
        },
        "later_labels": later_labels(prepared),
        "pulses_marked_not_in_signal": marked_only(prepared.estimates),
        "kept_per_rule": kept_per_rule(prepared),
        "rank_tolerance": RANK_TOLERANCE,
        "warnings": list(prepared.warnings),
    }


def _leak_text(leak: Leak, peak_v: float) -> str:
    return f"{v_to_uv(peak_v):.4f}" if leak.n_pulses else NOT_AVAILABLE


def _leak_provenance(leak: Leak) -> dict[str, Any] | None:
    if not leak.n_pulses:
        return None
    peaks_uv = v_to_uv(leak.peaks_v)
    return {
        "median_of_pulses": leak.n_pulses,
        "limit_uv": LEAK_LIMIT_UV,
        "largest_uv": round(float(peaks_uv.max(initial=0.0)), 4),
        "epochs_above": int((peaks_uv > LEAK_LIMIT_UV).sum()),
        "epochs": len(peaks_uv),
    }


def _mirror_provenance(prepared: Prepared, mirrors: Sequence[MirrorGaps | None]) -> dict[str, Any] | None:
    rules = [rule.name for rule in prepared.plan.epochs.rule if rule.mirror_gaps]
    if not rules:
        return None
    counts = Counter(
        candidate.rule for candidate, mirror in zip(prepared.kept, mirrors, strict=True) if mirror is not None
    )
    return {
        "epochs_per_rule": {rule: counts[rule] for rule in rules},
        "latencies_from": SEED_RULE,
        "handling": "windows, exceptions and fill as for a pulse; each epoch is filled and filtered for "
        "itself, no decay is subtracted at a mirror gap and no filter stops there",
    }


def later_labels(prepared: Prepared) -> dict[str, list[str]]:
    """Name label columns taken from later in the trial than an epoch, with the rules of these epochs."""
    found = later_by_rule(prepared.kept, prepared.trials.trials, prepared.plan, prepared.decision.geometry)
    return {column: list(rules) for column, rules in found.items()}


def _log_provenance(prepared: Prepared) -> dict[str, Any] | None:
    logged, table = prepared.decision.logged, prepared.log.table
    if logged is None or table is None:
        return None
    clock = None if logged.join is None else logged.join.clock
    return {
        "file": table.name,
        "sha256": table.sha256,
        "joined": 0 if logged.join is None else len(logged.join.pairs),
        "words": logged.problem or (logged.join.words if logged.join else ""),
        "clock": None if clock is None else asdict(clock),
        "rows_excluded": list(prepared.marks.log_rows_excluded),
    }


def _onset_provenance(shift: OnsetShift) -> dict[str, Any]:
    """Everything about a measured onset but its single shifts: those are in the estimates."""
    return {name: value for name, value in asdict(shift).items() if name != "shifts_s"}


def kept_per_rule(prepared: Prepared) -> dict[str, int]:
    """Count kept epochs per rule, rules without any included."""
    counts = Counter(candidate.rule for candidate in prepared.kept)
    return {rule.name: counts[rule.name] for rule in prepared.plan.epochs.rule}


def _channels(prepared: Prepared) -> tuple[SetChannel, ...]:
    setup, judgement = prepared.setup, prepared.estimates.channels
    found = found_bad(setup, judgement)
    rebuilt = set(rebuilding(setup, found).rows.tolist())
    channels = []
    for place, channel in enumerate(set_channels(setup)):
        note = ""
        if place < setup.bad.size and setup.bad[place]:
            where = "marks" if channel.name in prepared.marks.bad else "plan"
            note = f"named bad in the {where}"
        elif place < setup.bad.size and found[place]:
            note = f"found: {', '.join(reasons(judgement, place))}"
        bad: ChannelStatus = "rebuilt" if place in rebuilt else "bad"
        channels.append(
            SetChannel(
                channel.name,
                channel.type,
                bad if note else "good",
                note,
                channel.position_m,
                impedance_ohm=channel.impedance_ohm,
                hardware_highpass_hz=channel.highpass_hz,
                hardware_lowpass_hz=channel.lowpass_hz,
                recorded_reference=channel.reference or setup.facts.reference,
            )
        )
    return tuple(channels)


class _Rank:
    """Rank of everything written, from second moments over enough of its samples.

    Parameters
    ----------
    shape : tuple of int
        (n_epochs, n_channels, n_times) of the set.
    """

    ENOUGH = 50_000
    """Samples looked at, at least, where there are as many: all would cost more than they tell."""

    def __init__(self, shape: tuple[int, int, int]) -> None:
        n_epochs, n_channels, n_times = shape
        self._moments = np.zeros((n_channels, n_channels))
        self._every = max(1, n_epochs * n_times // self.ENOUGH)

    def add(self, data: NDArray[np.floating]) -> None:
        """Take in one epoch, shape (n_channels, n_times)."""
        some = data[:, :: self._every].astype(np.float64)
        whole = some[:, np.isfinite(some).all(axis=0)]
        self._moments += whole @ whole.T

    def rank(self) -> int:
        """Count the directions that carry signal."""
        strengths = np.linalg.eigvalsh(self._moments)
        return int(np.count_nonzero(strengths > strengths[-1] * RANK_TOLERANCE**2))
