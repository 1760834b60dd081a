"""What an epoch set holds, as frozen values, and the names of its files."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.epochs import Candidate, Pulse
from pulsemend.model.vocabulary import ChannelType, Fate, Fill, Format, Precision

SCHEMA = 1
"""Schema of the set as a whole: layout of the folder, of the HDF5 file and of the tables."""

SUFFIX = "_desc-mended"

EPOCHS_H5 = "epochs.h5"
EPO_FIF = "epo.fif"
EPOCHS_TSV = "epochs.tsv"
LEDGER_TSV = "ledger.tsv"
PULSES_TSV = "pulses.tsv"
CHANNELS_TSV = "channels.tsv"
PLAN_TOML = "plan.toml"
MARKS_TOML = "marks.toml"
ESTIMATES_H5 = "estimates.h5"
PROVENANCE_JSON = "provenance.json"
CHECKSUMS = "checksums.sha256"

CONTAINERS = {Format.HDF5: EPOCHS_H5, Format.FIF: EPO_FIF}
SIDE_FILES = (
    EPOCHS_TSV,
    LEDGER_TSV,
    PULSES_TSV,
    CHANNELS_TSV,
    PLAN_TOML,
    MARKS_TOML,
    ESTIMATES_H5,
    PROVENANCE_JSON,
)
"""What stands beside the containers in every set; the checksums cover all of it."""

Zero = Literal["anchor", "epoch start"]
ChannelStatus = Literal["good", "bad", "rebuilt"]


@dataclass(frozen=True)
class SetChannel:
    """One channel of the set.

    Parameters
    ----------
    name : str
    type : ChannelType
    status : {"good", "bad", "rebuilt"}
    status_note : str
        Why, in words; empty for good channels.
    position_m : tuple of 3 float or None
        On the head, in metres (x right, y front, z up).
    impedance_ohm, hardware_highpass_hz, hardware_lowpass_hz : float or None
        What the recording says of the electrode and of the filters before the samples were stored.
    recorded_reference : str
        The electrode it was recorded against; empty where the recording does not say.
    """

    name: str
    type: ChannelType
    status: ChannelStatus = "good"
    status_note: str = ""
    position_m: tuple[float, float, float] | None = None
    impedance_ohm: float | None = None
    hardware_highpass_hz: float | None = None
    hardware_lowpass_hz: float | None = None
    recorded_reference: str = ""


@dataclass(frozen=True)
class SetEpoch:
    """One kept epoch.

    Parameters
    ----------
    candidate : Candidate
        Its row of the ledger.
    onset_s : float
        The anchor's instant: recorded sample, from 0, over recorded rate.
    start_s : float
        First sample minus anchor.
    shift_s : float
        Sub-sample shift that was applied, or, at the recorded rate, the remainder that was not.
    replaced_share : float
        Share of the epoch's samples, over all channels, that `/replaced` marks; 0 to 1.
    decay_share : float
        The same of `/decay_fitted`, in sets that have it.
    leak : str
        What pulses still contribute, in microvolts; "n/a" where no pulse is known.
    mirror_latencies_s : tuple of float
        Where mirror gaps were placed as if a pulse had its onset there, since the first sample; empty
        without.
    """

    candidate: Candidate
    onset_s: float
    start_s: float
    shift_s: float = 0.0
    replaced_share: float = 0.0
    decay_share: float = 0.0
    leak: str = "n/a"
    mirror_latencies_s: tuple[float, ...] = ()


@dataclass(frozen=True)
class SetContents:
    """Everything known about a set before its first sample.

    Parameters
    ----------
    stem : str
        The recording's name.
    channels : tuple of SetChannel
    rate_hz, recorded_rate_hz : float
        Of the set, and of the recording.
    times : array, shape (n_times,), float64
        Seconds from `zero`.
    zero : {"anchor", "epoch start"}
        "anchor" if all epochs share one start.
    epochs : tuple of SetEpoch
        Kept epochs in order of first sample, then of rule.
    ledger : tuple of Candidate
        All candidates.
    pulses : tuple of Pulse
    plan_text, marks_text : str
        The TOML texts; they are written as they are.
    precision : Precision
    formats : tuple of Format
    fill : Fill
        `Fill.LEAVE` means NaN where samples are replaced.
    rereferenced : bool
        Whether the reference is another than the recorded one.
    highpass_hz, lowpass_hz : float
        What the samples went through; 0 where no filter was used.
    replaced_reach_s : float
        How far the filters spread a replaced sample.
    decay_fitted : bool
        Whether decays were looked for, so that the set has `/decay_fitted`.
    mirror_gaps : bool
        Whether a rule wants them, so that the table of epochs has their latencies.
    source_sha256 : str
        Digest of the recording's fingerprint.
    provenance : mapping
        JSON-able; the writer adds the facts of the files and the safety notice.
    pulse_columns : mapping of str to tuple of str
        Further columns of the table of pulses, one text per pulse.
    later : mapping of str to sequence of str
        Label columns taken from later in the trial than an epoch, with the rules of these epochs.
    """

    stem: str
    channels: tuple[SetChannel, ...]
    rate_hz: float
    recorded_rate_hz: float
    times: NDArray[np.float64]
    zero: Zero
    epochs: tuple[SetEpoch, ...]
    ledger: tuple[Candidate, ...]
    pulses: tuple[Pulse, ...]
    plan_text: str
    marks_text: str
    source_sha256: str
    precision: Precision = Precision.SINGLE
    formats: tuple[Format, ...] = (Format.HDF5, Format.FIF)
    fill: Fill = Fill.COVARIANCE
    rereferenced: bool = False
    highpass_hz: float = 0.0
    lowpass_hz: float = 0.0
    replaced_reach_s: float = 0.0
    decay_fitted: bool = False
    mirror_gaps: bool = False
    provenance: Mapping[str, object] = field(default_factory=dict)
    pulse_columns: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    later: Mapping[str, Sequence[str]] = field(default_factory=dict)

    @property
    def length(self) -> int:
        """Samples per epoch and channel."""
        return len(self.times)

    @property
    def shape(self) -> tuple[int, int, int]:
        """(n_epochs, n_channels, n_times)."""
        return len(self.epochs), len(self.channels), self.length

    @property
    def dtype(self) -> np.dtype[np.float32] | np.dtype[np.float64]:
        """Type of the samples in the containers, little-endian."""
        return np.dtype("<f4") if self.precision is Precision.SINGLE else np.dtype("<f8")

    @property
    def label_columns(self) -> tuple[str, ...]:
        """Label columns besides the fixed ones, as first named."""
        return tuple(dict.fromkeys(column for row in self.ledger for column in row.labels))

    @property
    def fates(self) -> Mapping[Fate, int]:
        """Candidates per fate, in the order of the fates."""
        counts = Counter(row.fate for row in self.ledger)
        return {fate: counts[fate] for fate in Fate if counts[fate]}


@dataclass(frozen=True)
class Labels:
    """The columns of `/labels`: one row per epoch.

    Parameters
    ----------
    name, anchor : tuple of str
    trial, piece : tuple of int
    onset_s, start_s : tuple of float
    more : mapping of str to tuple of str
        The other columns.
    """

    name: tuple[str, ...]
    trial: tuple[int, ...]
    piece: tuple[int, ...]
    anchor: tuple[str, ...]
    onset_s: tuple[float, ...]
    start_s: tuple[float, ...]
    more: Mapping[str, tuple[str, ...]] = field(default_factory=dict)


def labels_of(contents: SetContents) -> Labels:
    """Collect the label columns of the kept epochs.

    Parameters
    ----------
    contents : SetContents
        The set.
    """
    rows = [epoch.candidate for epoch in contents.epochs]
    return Labels(
        name=tuple(row.rule for row in rows),
        trial=tuple(row.trial for row in rows),
        piece=tuple(row.piece for row in rows),
        anchor=tuple(row.anchor for row in rows),
        onset_s=tuple(float(epoch.onset_s) for epoch in contents.epochs),
        start_s=tuple(float(epoch.start_s) for epoch in contents.epochs),
        more={column: tuple(row.labels.get(column, "") for row in rows) for column in contents.label_columns},
    )


def zero_samples(
    onsets_s: tuple[float, ...], starts_s: tuple[float, ...], zero: Zero, rate_hz: float
) -> list[int]:
    """Find the output sample of every epoch's time zero; plus one while taken, so that each is unique.

    Parameters
    ----------
    onsets_s, starts_s : tuple of float
        Anchors, and first samples minus anchors.
    zero : {"anchor", "epoch start"}
        Which of the two is time zero.
    rate_hz : float
        Of the set.
    """
    taken: set[int] = set()
    samples = []
    for onset_s, start_s in zip(onsets_s, starts_s, strict=True):
        sample = round((onset_s if zero == "anchor" else onset_s + start_s) * rate_hz)
        while sample in taken:
            sample += 1
        taken.add(sample)
        samples.append(sample)
    return samples
