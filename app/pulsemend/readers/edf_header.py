"""The header of EDF, EDF+, BDF and BDF+ files, read strictly.

The reader library forgives what must not be forgiven here: it renames channels that share a name, stretches
channels of lower rates, ignores pauses and takes as many records as happen to be there.

References
----------
Kemp B, Olivan J (2003) European data format 'plus' (EDF+). Clin Neurophysiol 114:1755-1761.
DOI 10.1016/S1388-2457(03)00123-8
Kemp B et al. (1992) A simple format for exchange of digitized polygraphic recordings.
Electroencephalogr Clin Neurophysiol 82:391-393. DOI 10.1016/0013-4694(92)90009-7
"""

from __future__ import annotations

import math
import re
from collections import Counter
from dataclasses import dataclass, replace
from pathlib import Path

from pulsemend.errors import DamagedRecording, UnusableChannels
from pulsemend.model.recording import Channel
from pulsemend.model.vocabulary import ChannelType
from pulsemend.readers.channel_types import misc_notes, type_of
from pulsemend.readers.common import check_names, missing, power_of_ten

ANNOTATION_LABELS = ("EDF Annotations", "BDF Annotations")
_TRIGGER_LABELS = ("status", "trigger", "trig", "stim", "sti 014")
_FIXED_WIDTHS = (8, 80, 80, 8, 8, 8, 44, 8, 8, 4)
_SIGNAL_WIDTHS = (16, 80, 8, 8, 8, 8, 8, 80, 8, 32)
_VOLT_EXPONENTS = {"V": 0, "mV": -3, "uV": -6, "\u00b5V": -6, "\u03bcV": -6, "\x83\xcaV": -6, "nV": -9}
_HIGHPASS, _LOWPASS = (
    re.compile(rf"\b{kind}\s*:?\s*(?P<value>DC|\d*[.,]?\d+)\s*(?P<prefix>[mk]?)(?:Hz|\b)", re.IGNORECASE)
    for kind in ("HP", "LP")
)
_CONVERTED = ("mV", "uV", "\u00b5V", "\u03bcV", "\x83\xcaV")  # units that the reader library turns into volts
_COPY_AGAIN = "Copy the file again, or export it again"


@dataclass(frozen=True)
class Signal:
    """One signal of a file as its header describes it.

    ``library_label`` and ``library_unit`` are what the reader library makes of the same bytes.
    """

    label: str
    unit: str
    library_label: str
    library_unit: str
    prefilter: str
    physical: tuple[float, float]
    digital: tuple[int, int]
    per_record: int

    @property
    def holds_annotations(self) -> bool:
        """Whether it holds text instead of samples."""
        return self.label in ANNOTATION_LABELS

    @property
    def is_trigger(self) -> bool:
        """Whether its numbers are trigger levels."""
        if self.label.lower() in _TRIGGER_LABELS:
            return True
        return self.unit not in _VOLT_EXPONENTS and type_of(self.label, in_volts=False) is ChannelType.TRIGGER


@dataclass(frozen=True)
class EdfHeader:
    """What the header says.

    Parameters
    ----------
    path : Path
    sample_bytes : int
        2 (EDF) or 3 (BDF) bytes per stored number.
    interrupted : bool
        Whether there may be pauses between records (EDF+D).
    header_bytes, n_records : int
    record_s : float
        Length of one record.
    signals : tuple of Signal
        All of them, annotations included, in file order.
    notes : tuple of str
    """

    path: Path
    sample_bytes: int
    interrupted: bool
    header_bytes: int
    n_records: int
    record_s: float
    signals: tuple[Signal, ...]
    notes: tuple[str, ...] = ()

    @property
    def record_bytes(self) -> int:
        """Size of one record."""
        return sum(signal.per_record for signal in self.signals) * self.sample_bytes

    @property
    def per_record(self) -> int:
        """Samples per record of the channels that are read: the number that most channels in volts share."""
        in_volts = [signal for signal in self._sampled() if signal.unit in _VOLT_EXPONENTS]
        counts = Counter(signal.per_record for signal in in_volts or self._sampled())
        return max(counts, key=lambda per_record: (counts[per_record], per_record))

    @property
    def used(self) -> tuple[Signal, ...]:
        """Signals that become channels: all of the common rate."""
        return tuple(signal for signal in self._sampled() if signal.per_record == self.per_record)

    @property
    def left_out(self) -> tuple[Signal, ...]:
        """Signals of other rates."""
        return tuple(signal for signal in self._sampled() if signal.per_record != self.per_record)

    @property
    def left_out_names(self) -> tuple[str, ...]:
        """Names that the left out signals would have as channels."""
        return tuple(map(_name, self.left_out))

    @property
    def rate_hz(self) -> float:
        """Sampling rate of the used signals."""
        return self.per_record / self.record_s

    def channels(self) -> tuple[Channel, ...]:
        """Describe the used signals; numbers in volts where the reader library converts the unit."""
        return tuple(map(_channel, self.used))

    def _sampled(self) -> list[Signal]:
        return [signal for signal in self.signals if not signal.holds_annotations]


def read_edf_header(path: Path) -> EdfHeader:
    """Read and check the header of an EDF or BDF file.

    Raises
    ------
    MissingPart, DamagedRecording, UnusableChannels
    """
    try:
        with path.open("rb") as file:
            fixed = file.read(sum(_FIXED_WIDTHS))
            if len(fixed) < sum(_FIXED_WIDTHS):
                raise _damaged(path, "the file ends inside its header")
            n_signals = max(_number(path, "number of signals", fixed[-4:]), 0)
            per_signal = file.read(n_signals * sum(_SIGNAL_WIDTHS))
        size = path.stat().st_size
    except OSError as error:
        raise missing(path, error) from error
    if len(per_signal) < n_signals * sum(_SIGNAL_WIDTHS):
        raise _damaged(path, "the file ends inside its header")
    fields = _cut(fixed, _FIXED_WIDTHS)
    signals = _signals(path, per_signal, n_signals)
    sample_bytes = 3 if fixed[0] == 0xFF else 2
    header = EdfHeader(
        path=path,
        sample_bytes=sample_bytes,
        interrupted=fields[6][:5] in (b"EDF+D", b"BDF+D"),
        header_bytes=_number(path, "size of the header", fields[5]),
        n_records=_number(path, "number of records", fields[7]),
        record_s=_decimal(path, "length of a record", fields[8]),
        signals=signals,
    )
    if header.header_bytes != sum(_FIXED_WIDTHS) + len(per_signal):
        raise _damaged(path, f"its header says that it is {header.header_bytes} bytes long, but it is not")
    check_names([_name(signal) for signal in signals if not signal.holds_annotations], path.name)
    if not (math.isfinite(header.record_s) and header.record_s > 0):
        raise UnusableChannels("its records have no length, so it holds annotations alone", where=path.name)
    return _with_counted_records(header, size)


def _with_counted_records(header: EdfHeader, size: int) -> EdfHeader:
    """Compare the number of records with the size of the file."""
    n_records, rest = divmod(size - header.header_bytes, header.record_bytes)
    notes = []
    if header.n_records == -1 and rest == 0:
        notes.append(f"The recording was not ended properly; its {n_records} whole records were taken.")
    elif rest or n_records != header.n_records:
        raise _damaged(
            header.path,
            f"its header announces {header.n_records} records of {header.record_bytes} bytes, "
            f"there are {n_records} and {rest} bytes",
        )
    if n_records == 0:
        raise _damaged(header.path, "it holds no samples")
    if header.left_out:
        rates = (f"{signal.label} ({signal.per_record / header.record_s:g} Hz)" for signal in header.left_out)
        notes.append(f"Left out, because their rate is not {header.rate_hz:g} Hz: {', '.join(rates)}.")
    notes += misc_notes(header.channels(), _VOLT_EXPONENTS)
    return replace(header, n_records=n_records, notes=tuple(notes))


def _signals(path: Path, text: bytes, n_signals: int) -> tuple[Signal, ...]:
    columns: list[list[bytes]] = []
    at = 0
    for width in _SIGNAL_WIDTHS:
        columns.append(_cut(text[at : at + width * n_signals], [width] * n_signals))
        at += width * n_signals
    return tuple(_signal(path, fields) for fields in zip(*columns, strict=True))


def _signal(path: Path, fields: tuple[bytes, ...]) -> Signal:
    label = _text(fields[0])
    signal = Signal(
        label=label,
        unit=_text(fields[2]),
        library_label=fields[0].strip().decode("latin-1"),
        library_unit=fields[2].strip().decode("latin-1"),
        prefilter=_text(fields[7]),
        physical=(
            _decimal(path, f"physical minimum of {label}", fields[3]),
            _decimal(path, f"physical maximum of {label}", fields[4]),
        ),
        digital=(
            _number(path, f"digital minimum of {label}", fields[5]),
            _number(path, f"digital maximum of {label}", fields[6]),
        ),
        per_record=_number(path, f"number of samples of {label}", fields[8]),
    )
    if signal.per_record < 1:
        raise _damaged(path, f"signal {label} has {signal.per_record} samples per record")
    if not signal.holds_annotations and (
        signal.physical[0] == signal.physical[1] or signal.digital[0] >= signal.digital[1]
    ):
        raise _damaged(path, f"signal {label} has no scale: its physical or digital range is empty")
    return signal


def _channel(signal: Signal) -> Channel:
    name, unit = _name(signal), signal.unit
    if signal.is_trigger:
        return Channel(name, ChannelType.TRIGGER, unit=unit)
    kind = type_of(name, in_volts=unit in _VOLT_EXPONENTS)
    if unit not in _VOLT_EXPONENTS:
        return Channel(name, kind, unit=unit or "no unit")
    scale_v = 1.0 if signal.library_unit in _CONVERTED else power_of_ten(_VOLT_EXPONENTS[unit])
    highpass_hz, lowpass_hz = (_cutoff(pattern, signal.prefilter) for pattern in (_HIGHPASS, _LOWPASS))
    per_unit = power_of_ten(_VOLT_EXPONENTS[unit])
    low, high = sorted(float(edge) * per_unit for edge in signal.physical)
    return Channel(
        name,
        kind,
        scale_v=scale_v,
        unit=unit,
        highpass_hz=highpass_hz,
        lowpass_hz=lowpass_hz,
        coupling="DC" if highpass_hz == 0 else "",
        reference=_reference(signal.label),
        range_v=(low, high),
    )


def _cutoff(pattern: re.Pattern[str], prefilter: str) -> float | None:
    """Corner frequency from a text like ``HP:0.1Hz LP:75Hz N:50Hz``; 0 for DC."""
    found = pattern.search(prefilter)
    if not found:
        return None
    if found["value"].upper() == "DC":
        return 0.0
    exponent = {"m": -3, "k": 3}.get(found["prefix"].lower(), 0)
    return float(found["value"].replace(",", ".")) * power_of_ten(exponent)


def _reference(label: str) -> str:
    """Second electrode of a label like ``EEG Fpz-Cz``, the standard's own way to name it."""
    first, dash, second = label.removeprefix("EEG ").partition("-")
    return second.strip() if dash and first and label.startswith("EEG ") else ""


def _text(field: bytes) -> str:
    """Text that should be ASCII: other alphabets come as UTF-8 or Latin-1."""
    try:
        return field.strip(b" \0").decode("utf-8")
    except UnicodeDecodeError:
        return field.strip(b" \0").decode("latin-1")


def _name(signal: Signal) -> str:
    """Name of a channel: EDF+ labels start with the kind of signal, which electrode names do not."""
    return signal.label.removeprefix("EEG ").strip() or signal.label


def _cut(text: bytes, widths: list[int] | tuple[int, ...]) -> list[bytes]:
    fields, at = [], 0
    for width in widths:
        fields.append(text[at : at + width])
        at += width
    return fields


def _number(path: Path, what: str, field: bytes) -> int:
    try:
        return int(_ascii(field))
    except ValueError:
        raise _damaged(path, f"the {what} in its header is no whole number: {_ascii(field)!r}") from None


def _decimal(path: Path, what: str, field: bytes) -> float:
    try:
        return float(_ascii(field))
    except ValueError:
        raise _damaged(path, f"the {what} in its header is no number: {_ascii(field)!r}") from None


def _ascii(field: bytes) -> str:
    return field.decode("latin-1").strip(" \0")


def _damaged(path: Path, what: str) -> DamagedRecording:
    return DamagedRecording(what, where=path.name, todo=_COPY_AGAIN)
