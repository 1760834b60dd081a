"""The closed lists of words: what may stand in a plan, what may become of a trial, an epoch or a check."""

from __future__ import annotations

from enum import StrEnum


class Role(StrEnum):
    """What a marker code stands for."""

    FIXATION = "fixation"
    SAMPLE = "sample"
    CUE = "cue"
    PULSE = "pulse"
    PROBE = "probe"
    RESPONSE = "response"
    OTHER = "other"
    IGNORE = "ignore"
    UNDECIDED = "undecided"


class PulseTimes(StrEnum):
    """Where the times of the pulses come from."""

    MARKERS = "markers"
    SIGNAL = "signal"
    BOTH = "both"
    NONE = "none"


class Fill(StrEnum):
    """How a gap is replaced."""

    LINE = "line"
    CUBIC = "cubic"
    MONOTONE = "monotone"
    AUTOREGRESSIVE = "autoregressive"
    COVARIANCE = "covariance"
    LEAVE = "leave"


class Side(StrEnum):
    """Which flanks a fill may use."""

    BOTH = "both"
    BEFORE = "before"
    AFTER = "after"


class Decay(StrEnum):
    """The shape of what a pulse leaves behind after its gap."""

    NONE = "none"
    EXPONENTIAL = "exponential"
    TWO_EXPONENTIALS = "two exponentials"
    POWER = "power"


class AcrossPulses(StrEnum):
    """What a filter sees at a gap."""

    FILLED = "filled"
    SPLIT = "split"


class PulseRule(StrEnum):
    """What an epoch rule makes of gaps inside an epoch."""

    REFUSE = "refuse"
    ACCEPT_FILLED = "accept filled"


class Format(StrEnum):
    """The containers of an epoch set."""

    HDF5 = "hdf5"
    FIF = "fif"
    MAT = "mat"


class Precision(StrEnum):
    """Floating-point width of the engine and of the samples written."""

    SINGLE = "single"
    DOUBLE = "double"


class ChannelType(StrEnum):
    """What a channel records."""

    EEG = "eeg"
    EOG = "eog"
    EMG = "emg"
    ECG = "ecg"
    MISC = "misc"
    TRIGGER = "trigger"


class Fate(StrEnum):
    """What became of a candidate epoch: kept, or left out for one named reason."""

    KEPT = "kept"
    TRIAL_INCOMPLETE = "trial incomplete"
    TRIAL_DOUBTFUL = "trial doubtful"
    TRIAL_EXCLUDED = "trial excluded by hand"
    SET_ASIDE = "trial set aside"
    NO_ANCHOR = "no anchor in this trial"
    OUTSIDE = "outside the recording"
    ACROSS_BREAK = "across a break in the recording"
    BAD_STRETCH = "touches a bad stretch"
    TOUCHES_GAP = "touches a gap"
    NOT_BEFORE_STOP = "does not end before its stop"
    BY_HAND = "left out by hand"
    BALANCE = "left out for balance"


class PulseState(StrEnum):
    """How a pulse came to be known, and whether the signal shows it."""

    ALIGNED = "marked and in the signal"
    MARKED_ONLY = "marked, not in the signal"
    ADDED = "added by hand"
    MOVED = "moved by hand"
    FOUND = "found in the signal, no marker"


class PulseKind(StrEnum):
    """What mark a pulse left in the signal."""

    SPIKE = "spike"
    CLIPPED = "clipped spike"
    SLOW = "slow recovery from clipping"
    HELD = "hold and step"


class StandIn(StrEnum):
    """What stands in as anchor for a slot that was not found."""

    NONE = "none"
    FIXED = "fixed"
    DRAWN = "drawn"


class TimeUnit(StrEnum):
    """How a log writes its times."""

    SECONDS = "s"
    MILLISECONDS = "ms"
    CLOCK = "clock"


class OnsetUse(StrEnum):
    """How a measured onset moves the markers of a code: all by their median, or each to its own."""

    MEDIAN = "median"
    EACH = "each"


class Choose(StrEnum):
    """How epochs are chosen where conditions are matched in number."""

    SPREAD = "spread"
    DRAWN = "drawn"


class Stimulation(StrEnum):
    """What was given; as the plan says, never judged."""

    ACTIVE = "active"
    SHAM = "sham"
    NONE = "none"
