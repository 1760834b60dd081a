"""The plan: everything decided for all recordings of a study, as frozen values.

Files are read and written by `plan_file`; limits and defaults of every key stand in `plan_keys`.
Times keep the units of their keys (`_s`, `_ms`, `_uv`, `_hz`).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from pulsemend.model.numbers import bit_field, number_of
from pulsemend.model.vocabulary import (
    AcrossPulses,
    Choose,
    Decay,
    Fill,
    Format,
    OnsetUse,
    Precision,
    PulseRule,
    PulseTimes,
    Role,
    Side,
    StandIn,
    TimeUnit,
)

Window = tuple[float, float]


@dataclass(frozen=True)
class About:
    """The study: its name, and the mains frequency to remove (0: no line removal)."""

    name: str = ""
    line_hz: float = 0.0


@dataclass(frozen=True)
class MarkerPlan:
    """What one code stands for, and the labels it carries."""

    code: str
    role: Role
    labels: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class BitField:
    """A field of bits in codes that are numbers: a label of every marker, and a role where it tells one.

    Parameters
    ----------
    name : str
        Name of the label.
    at : tuple of 2 int
        Lowest and highest bit, from 0.
    names : mapping of str to str
        Label of a value (written as text); other values label as their number.
    roles : mapping of str to Role
        Role of codes with a value, where the plan does not name the code itself.
    """

    name: str
    at: tuple[int, int]
    names: Mapping[str, str] = field(default_factory=dict)
    roles: Mapping[str, Role] = field(default_factory=dict)

    def value(self, code: str) -> str | None:
        """Value of the field in a code, as text; None for a code that is no number."""
        found = number_of(code)
        return None if found is None else str(bit_field(found[1], *self.at))


@dataclass(frozen=True)
class Slot:
    """One expected marker of a trial.

    Parameters
    ----------
    slot : str
        Its name.
    role : Role
    after_s : tuple of 2 float or None
        Allowed time since the slot `after`; None for the first slot.
    after : str
        Empty: the nearest earlier slot that is not optional.
    optional : bool
    kinds : tuple of str
        Kinds of trial that have this slot; empty: all.
    group : str
        Group that is repeated; slots of one group stand together. Empty: none.
    stand_in : StandIn
        What becomes the anchor where the slot was not found.
    stand_in_s : float or None
        Time since the slot's reference, for `StandIn.FIXED`.
    stand_in_seed : int
        For `StandIn.DRAWN`.
    from_signal : bool
        Whether a pulse found in the signal may take the place of a lost marker.
    """

    slot: str
    role: Role
    after_s: Window | None = None
    after: str = ""
    optional: bool = False
    kinds: tuple[str, ...] = ()
    group: str = ""
    stand_in: StandIn = StandIn.NONE
    stand_in_s: float | None = None
    stand_in_seed: int = 1
    from_signal: bool = False


@dataclass(frozen=True)
class Group:
    """Slots that are repeated: how often, and the time from one repeat's last required slot to the next."""

    name: str
    times: tuple[int, int]
    between_s: Window | None = None


@dataclass(frozen=True)
class Blocks:
    """Where blocks begin, and which trials are set aside.

    Parameters
    ----------
    codes : tuple of str
        Each marker of these codes begins a block.
    pause_s : float
        A longer time between two trials begins a block; 0: never.
    practice_first : int
        First trials of the recording that are practice.
    practice_codes : tuple of str
        A block begun by one of these codes is practice.
    practice_column : str
        Column of the log that tells practice trials; empty: none.
    practice_values : tuple of str
        Its values that mean practice.
    after_pause : int
        First trials of every block that are set aside.
    """

    codes: tuple[str, ...] = ()
    pause_s: float = 0.0
    practice_first: int = 0
    practice_codes: tuple[str, ...] = ()
    practice_column: str = ""
    practice_values: tuple[str, ...] = ()
    after_pause: int = 0


@dataclass(frozen=True)
class Log:
    """The behavioural log, and how it is joined.

    Parameters
    ----------
    file : str
        Its place beside the recording, ``{stem}`` standing for the recording's name; empty: no log.
    slots : tuple of str
        Slots whose instants the rows' times are: one for a row per trial, several for a row per slot.
    time : str
        Column of times on the log's own clock; empty: joined without times.
    unit : TimeUnit
    trial : str
        Column of trial numbers; empty: none.
    recorded_trial : str
        Label that holds the recording's trial number (``slot.label``); empty: none.
    columns : tuple of str
        Columns that become labels; empty: all but time and trial.
    """

    file: str = ""
    slots: tuple[str, ...] = ()
    time: str = ""
    unit: TimeUnit = TimeUnit.SECONDS
    trial: str = ""
    recorded_trial: str = ""
    columns: tuple[str, ...] = ()


@dataclass(frozen=True)
class DerivedLabel:
    """A label column made from others: exactly one of compare, copy, map, bin, position, previous.

    Parameters
    ----------
    name : str
        Name of the column.
    compare : tuple of str
        Columns that are all the same or not: `same` or `different`.
    copy, map, bin, previous : str
        A column: as it is, with its values renamed, cut at edges, or of the trial before (in the same block).
    values : mapping of str to str
        New values for `map`; others become `otherwise`, or stay where that is empty.
    edges : tuple of float
        For `bin`, rising; a value at an edge belongs above it.
    names : tuple of str
        Of the bins, one more than edges; empty: written from the edges.
    position : str
        "block" or "recording": place of the trial in it, from 1.
    """

    name: str
    compare: tuple[str, ...] = ()
    same: str = "same"
    different: str = "different"
    copy: str = ""
    map: str = ""
    values: Mapping[str, str] = field(default_factory=dict)
    otherwise: str = ""
    bin: str = ""
    edges: tuple[float, ...] = ()
    names: tuple[str, ...] = ()
    position: str = ""
    previous: str = ""

    @property
    def sources(self) -> tuple[str, ...]:
        """Columns it is made from."""
        return self.compare + tuple(filter(None, (self.copy, self.map, self.bin, self.previous)))

    @property
    def ways(self) -> tuple[str, ...]:
        """Ways it is made in; one in a valid plan."""
        found = {
            "compare": bool(self.compare),
            "copy": bool(self.copy),
            "map": bool(self.map),
            "bin": bool(self.bin),
            "position": bool(self.position),
            "previous": bool(self.previous),
        }
        return tuple(way for way, is_used in found.items() if is_used)


@dataclass(frozen=True)
class OnsetRule:
    """Codes whose markers move to the onset that a sensor channel shows; never pulses.

    Parameters
    ----------
    channel : str
        The channel of the photodiode or microphone.
    codes : tuple of str
    search_ms : tuple of 2 float
        Where the onset may be, onset minus marker.
    use : OnsetUse
    """

    channel: str
    codes: tuple[str, ...]
    search_ms: Window = (-20.0, 100.0)
    use: OnsetUse = OnsetUse.MEDIAN


@dataclass(frozen=True)
class Balance:
    """Equal numbers of epochs per condition, within every rule.

    Parameters
    ----------
    by : tuple of str
        Label columns whose combinations are the conditions; empty: no balance.
    choose : Choose
    seed : int
    """

    by: tuple[str, ...] = ()
    choose: Choose = Choose.SPREAD
    seed: int = 1


@dataclass(frozen=True)
class StimulationFacts:
    """What was given, in the user's own words; carried to labels and report, never judged.

    ``columns`` names log columns for facts that differ from trial to trial.
    """

    intensity: float | None = None
    unit: str = ""
    target: str = ""
    coil: str = ""
    orientation: str = ""
    waveform: str = ""
    recharge_delay_ms: float | None = None
    masking: str = ""
    condition: str = ""
    notes: str = ""
    columns: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class OtherGap:
    """A further gap at a fixed latency from every pulse, e.g. the stimulator's recharge."""

    window_ms: Window


@dataclass(frozen=True)
class Pulses:
    """Where pulses are and how they are blanked and filled."""

    times: PulseTimes = PulseTimes.MARKERS
    search_ms: Window = (-10.0, 10.0)
    onset_factor: float = 50.0
    min_spacing_ms: float = 50.0
    window_ms: Window | None = None
    fill: Fill = Fill.COVARIANCE
    side: Side = Side.BOTH
    flank_ms: float | None = None
    decay: Decay = Decay.NONE
    decay_ms: float = 80.0
    decay_least_uv: float = 20.0
    also: tuple[OtherGap, ...] = ()
    channels: Mapping[str, Window] = field(default_factory=dict)


@dataclass(frozen=True)
class Filter:
    """Filters and rate. 0: off, or as recorded."""

    highpass_hz: float = 1.0
    lowpass_hz: float = 100.0
    rate_hz: float = 1000.0
    across_pulses: AcrossPulses = AcrossPulses.FILLED


@dataclass(frozen=True)
class Channels:
    """Bad channels, reference and positions.

    ``reference`` is "average", "as recorded" or the names of channels whose mean is subtracted.
    """

    bad: tuple[str, ...] = ()
    find_bad: bool = True
    rebuild_bad: bool = True
    recorded_reference: str = ""
    reference: str | tuple[str, ...] = "average"
    positions: str = "10-05"


@dataclass(frozen=True)
class EpochRule:
    """How one kind of epoch is cut.

    With ``mirror_gaps`` those without a pulse receive the gaps of those with one.
    """

    name: str
    anchor: str
    start_s: float
    count: int = 1
    pulse: PulseRule = PulseRule.REFUSE
    clear_ms: Window = (0.0, 0.0)
    stop_before: str = ""
    labels: Mapping[str, str] = field(default_factory=dict)
    mirror_gaps: bool = False


@dataclass(frozen=True)
class Epochs:
    """One length for the whole set, and its rules."""

    length_s: float
    rule: tuple[EpochRule, ...]


@dataclass(frozen=True)
class Export:
    """Containers and precision."""

    formats: tuple[Format, ...] = (Format.HDF5, Format.FIF)
    precision: Precision = Precision.SINGLE


@dataclass(frozen=True)
class Plan:
    """Everything decided for all recordings of a study."""

    about: About
    markers: tuple[MarkerPlan, ...]
    trial: tuple[Slot, ...]
    pulses: Pulses
    filter: Filter
    channels: Channels
    epochs: Epochs
    export: Export
    bits: tuple[BitField, ...] = ()
    groups: tuple[Group, ...] = ()
    blocks: Blocks = Blocks()
    log: Log = Log()
    labels: tuple[DerivedLabel, ...] = ()
    onset: tuple[OnsetRule, ...] = ()
    balance: Balance = Balance()
    stimulation: StimulationFacts = field(default_factory=StimulationFacts)

    @property
    def seeks_pulses(self) -> bool:
        """Whether pulses without a marker are looked for: everywhere, or for slots with ``from_signal``."""
        if self.pulses.times is PulseTimes.NONE:
            return False
        return self.finds_pulses or any(slot.from_signal for slot in self.trial)

    @property
    def finds_pulses(self) -> bool:
        """Whether the signal tells where pulses are, alone or besides the markers."""
        return self.pulses.times in (PulseTimes.SIGNAL, PulseTimes.BOTH)

    def names(self, code: str) -> bool:
        """Whether the plan says what a code stands for, by itself or by a field of bits."""
        return any(marker.code == code for marker in self.markers) or self._bit_role(code) is not None

    def role_of(self, code: str) -> Role:
        """Role of a code; `Role.OTHER` where the plan does not name it."""
        for marker in self.markers:
            if marker.code == code:
                return marker.role
        return self._bit_role(code) or Role.OTHER

    def labels_of(self, code: str) -> Mapping[str, str]:
        """Labels of a code: of its fields of bits, then its own."""
        found: dict[str, str] = {}
        for bits in self.bits:
            value = bits.value(code)
            if value is not None:
                found[bits.name] = bits.names.get(value, value)
        for marker in self.markers:
            if marker.code == code:
                found.update(marker.labels)
        return found

    def _bit_role(self, code: str) -> Role | None:
        for bits in self.bits:
            role = bits.roles.get(bits.value(code) or "")
            if role is not None:
                return role
        return None
