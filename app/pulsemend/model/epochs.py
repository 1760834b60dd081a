"""Trials, candidate epochs and the ledger, as frozen values."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fate, PulseKind, PulseState

NOT_AVAILABLE = "n/a"
"""What a label column holds where there is no label."""

FIXED_COLUMNS = (
    "index",
    "onset",
    "onset_s",
    "name",
    "rule",
    "trial",
    "piece",
    "anchor",
    "start_s",
    "shift",
    "shift_s",
    "replaced_share",
    "decay_share",
    "leak",
    "leak_uv",
    "mirror_latency_s",
    "fate",
    "detail",
)
"""Columns of a set and its ledger that no label column may be called."""


def nearest_sample(sample: float) -> int:
    """Whole sample nearest to an instant that may lie between samples; halves go up.

    Parameters
    ----------
    sample : float
        Recorded sample, from 0.
    """
    return math.floor(sample + 0.5)


@dataclass(frozen=True)
class Pulse:
    """One pulse that is repaired.

    Parameters
    ----------
    sample : int
        Recorded sample of its onset; gaps and pulse anchors count from here.
    marked : float or None
        Recorded sample of its marker, or None if it has none.
    state : PulseState
    kind : PulseKind or None
        What mark it left; None where the signal shows none, or was not looked at.
    amplitude_v : float or None
        Its largest deviation within 10 ms from the level before, median over the EEG channels.
    clipped_s : float
        From the onset to the end of clipping in the last channel.
    held_s : float
        How long before the onset the amplifier held all channels.
    """

    sample: int
    marked: float | None
    state: PulseState
    kind: PulseKind | None = None
    amplitude_v: float | None = None
    clipped_s: float = 0.0
    held_s: float = 0.0


@dataclass(frozen=True)
class Trial:
    """One trial: the marker of every slot that was found.

    Parameters
    ----------
    number : int
        From 1, in order of time.
    markers : mapping of str to Marker
        By slot name; slots that were not found are absent.
    missing : tuple of str
        Required slots that were not found.
    kind : str
        Empty where the plan has one kind of trial.
    doubts : tuple of str
        Where another explanation is as good, which: one phrase each, e.g. "cue1 at 12.304 s or 12.391 s".
    stand_ins : mapping of str to float
        Recorded sample of the anchor of slots that were not found, where the plan wants one.
    block : int
        From 1; 0 where the plan knows no blocks.
    place_in_block, place : int
        Place of the trial in its block and in the recording, from 1.
    set_aside : str
        Why the trial is none of the experiment's, e.g. "practice"; empty: it is.
    log : mapping of str to str
        Its row of the log, by column (``answer``, or ``cue1.answer`` where rows belong to slots).
    """

    number: int
    markers: Mapping[str, Marker]
    missing: tuple[str, ...] = ()
    kind: str = ""
    doubts: tuple[str, ...] = ()
    stand_ins: Mapping[str, float] = field(default_factory=dict)
    block: int = 0
    place_in_block: int = 0
    place: int = 0
    set_aside: str = ""
    log: Mapping[str, str] = field(default_factory=dict)

    @property
    def first_sample(self) -> float:
        """Recorded sample of the earliest marker."""
        return min((marker.sample for marker in self.markers.values()), default=0.0)


@dataclass(frozen=True)
class Trials:
    """All trials of a recording, and what is left over.

    ``extra`` holds markers with a trial role that belong to no trial, ``unnamed`` counts codes the plan does
    not name, ``absent`` lists codes the plan names and the recording lacks. ``run`` is the label of this run
    where several files belong together, or empty.
    """

    trials: tuple[Trial, ...]
    extra: tuple[Marker, ...] = ()
    unnamed: Mapping[str, int] = field(default_factory=dict)
    absent: tuple[str, ...] = ()
    run: str = ""


@dataclass(frozen=True)
class Candidate:
    """One epoch that the plan asks for, with its fate: a row of the ledger.

    Parameters
    ----------
    rule : str
        Name of its rule.
    rule_index : int
        Place of the rule in the plan, from 0.
    trial, piece : int
        From 1.
    anchor : str
        Slot of the anchor.
    anchor_sample : float or None
        Recorded sample of the anchor (a pulse's aligned onset, else its marker); None if the slot is missing.
    start_s : float
        First sample minus anchor, in seconds.
    fate : Fate
    detail : str
        What exactly, e.g. "pulse1 at 12.304 s" or "no probe1"; empty for kept epochs.
    labels : mapping of str to str
        Label columns (``cue1.item``, rule labels, ...); the same keys for every candidate.
    """

    rule: str
    rule_index: int
    trial: int
    piece: int
    anchor: str
    anchor_sample: float | None
    start_s: float
    fate: Fate
    detail: str = ""
    labels: Mapping[str, str] = field(default_factory=dict)

    @property
    def kept(self) -> bool:
        """Whether the epoch is part of the set."""
        return self.fate is Fate.KEPT
