"""What the engine learned from one recording before it changes a sample."""

from __future__ import annotations

import hashlib
import json
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend import DATA_VERSION
from pulsemend.engine.bad_channels import load_judgement, save_judgement
from pulsemend.engine.decay import DecayEstimates
from pulsemend.engine.onsets import OnsetShift
from pulsemend.errors import SetError
from pulsemend.model.epochs import Pulse
from pulsemend.model.vocabulary import PulseKind, PulseState
from pulsemend.signal.channels import Judgement

SCHEMA = 1


@dataclass(frozen=True)
class Estimates:
    """Frozen result of a fit.

    Parameters
    ----------
    offset : array, shape (n_used,)
        Constant offset of every used channel, in stored units. Zeros where nothing is subtracted.
    pulses : tuple of Pulse
        Every pulse that is repaired, in order of time.
    usual_steepness : float
        Median over pulse-free signal of the steepness that onsets are judged by, in volts per sample.
    autocovariance : array, shape (n_used, n_lags), or None
        In volts squared; None where the fill does not need it.
    unmarked : tuple of int
        Recorded samples of pulse-like events, looked for only where no pulse is known.
    stimulus_onsets : tuple of OnsetShift
        Onsets of stimuli, measured in a sensor's channel, where the plan wants it.
    decay : DecayEstimates or None
        None where the plan wants none.
    level_left_v : array, shape (n_used,), or None
        How far from its level before a channel is at its gap's end, from `engine.level_left`; None without
        gaps, or where a decay is subtracted there.
    channels : Judgement or None
        What speaks against each used channel; None where bad ones are not looked for, or cannot be told.
    notes : tuple of str
        What the fit had to decide, one sentence each.
    rests_on : mapping of str to str
        For each of the above a hash of the settings it was learned with.
    """

    offset: NDArray[np.float64]
    pulses: tuple[Pulse, ...]
    usual_steepness: float
    autocovariance: NDArray[np.float64] | None = None
    unmarked: tuple[int, ...] = ()
    stimulus_onsets: tuple[OnsetShift, ...] = ()
    decay: DecayEstimates | None = None
    level_left_v: NDArray[np.float64] | None = None
    channels: Judgement | None = None
    notes: tuple[str, ...] = ()
    rests_on: dict[str, str] = field(default_factory=dict)

    @property
    def onsets(self) -> tuple[int, ...]:
        """Recorded samples of the pulses' onsets."""
        return tuple(pulse.sample for pulse in self.pulses)

    def save(self, path: Path) -> None:
        """Write the estimates as HDF5."""
        import h5py

        with h5py.File(path, "w") as file:
            file.attrs["schema"] = SCHEMA
            file.attrs["usual_steepness"] = self.usual_steepness
            file.attrs["rests_on"] = json.dumps(self.rests_on, sort_keys=True)
            file.attrs["notes"] = json.dumps(self.notes)
            file.attrs["stimulus_onsets"] = json.dumps([asdict(shift) for shift in self.stimulus_onsets])
            file["offset"] = self.offset
            file["unmarked"] = np.array(self.unmarked, dtype=np.int64)
            file["pulses/sample"] = np.array(self.onsets, dtype=np.int64)
            marked = [np.nan if p.marked is None else p.marked for p in self.pulses]
            file["pulses/marked"] = np.array(marked, dtype=np.float64)
            states = [p.state.value for p in self.pulses]
            kinds = ["" if p.kind is None else p.kind.value for p in self.pulses]
            for name, words in (("state", states), ("kind", kinds)):
                data_type = h5py.string_dtype()
                file.create_dataset(f"pulses/{name}", data=words, dtype=data_type, shape=(len(words),))
            amplitudes = [np.nan if p.amplitude_v is None else p.amplitude_v for p in self.pulses]
            file["pulses/amplitude_v"] = np.array(amplitudes, dtype=np.float64)
            file["pulses/clipped_s"] = np.array([p.clipped_s for p in self.pulses], dtype=np.float64)
            file["pulses/held_s"] = np.array([p.held_s for p in self.pulses], dtype=np.float64)
            if self.autocovariance is not None:
                file["autocovariance"] = self.autocovariance
            if self.decay is not None:
                self.decay.save(file.create_group("decay"))
            if self.level_left_v is not None:
                file["level_left_v"] = self.level_left_v
            if self.channels is not None:
                save_judgement(self.channels, file.create_group("channels"))

    @classmethod
    def load(cls, path: Path) -> Estimates:
        """Read estimates written by `save`.

        Raises
        ------
        SetError
            The file is none, or of another schema.
        """
        import h5py

        try:
            with h5py.File(path, "r") as file:
                if file.attrs["schema"] != SCHEMA:
                    raise SetError("estimates of another version", where=path.name)
                pulses = _pulses(file["pulses"])
                return cls(
                    offset=file["offset"][()],
                    pulses=pulses,
                    usual_steepness=float(file.attrs["usual_steepness"]),
                    autocovariance=file["autocovariance"][()] if "autocovariance" in file else None,
                    unmarked=tuple(int(n) for n in file["unmarked"][()]),
                    stimulus_onsets=_onset_shifts(str(file.attrs.get("stimulus_onsets", "[]"))),
                    decay=DecayEstimates.load(file["decay"]) if "decay" in file else None,
                    level_left_v=file["level_left_v"][()] if "level_left_v" in file else None,
                    channels=load_judgement(file["channels"]) if "channels" in file else None,
                    notes=tuple(json.loads(file.attrs["notes"])),
                    rests_on=json.loads(file.attrs["rests_on"]),
                )
        except (OSError, KeyError, ValueError) as error:
            raise SetError(f"no estimates can be read from it ({error})", where=path.name) from error


def _pulses(group: Any) -> tuple[Pulse, ...]:
    words = (group[name].asstr()[()] for name in ("state", "kind"))
    numbers = (group[name][()] for name in ("sample", "marked", "amplitude_v", "clipped_s", "held_s"))
    return tuple(
        Pulse(
            sample=int(sample),
            marked=None if np.isnan(marked) else float(marked),
            state=PulseState(state),
            kind=PulseKind(kind) if kind else None,
            amplitude_v=None if np.isnan(amplitude_v) else float(amplitude_v),
            clipped_s=float(clipped_s),
            held_s=float(held_s),
        )
        for state, kind, sample, marked, amplitude_v, clipped_s, held_s in zip(*words, *numbers, strict=True)
    )


def _onset_shifts(text: str) -> tuple[OnsetShift, ...]:
    written: list[dict[str, Any]] = json.loads(text)
    return tuple(
        OnsetShift(**{**shift, "shifts_s": tuple(shift["shifts_s"]), "notes": tuple(shift["notes"])})
        for shift in written
    )


def basis(*parts: object) -> str:
    """Hash of the settings an estimate rests on: anything that JSON, or a dataclass's fields, can show."""
    text = json.dumps([DATA_VERSION, *parts], sort_keys=True, default=_plain)
    return hashlib.sha256(text.encode()).hexdigest()


def _plain(value: object) -> object:
    if hasattr(value, "__dataclass_fields__"):
        return asdict(value)  # type: ignore[call-overload]
    if isinstance(value, np.ndarray):
        return value.tolist()
    return str(value)
