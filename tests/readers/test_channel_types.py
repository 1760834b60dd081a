"""Types by name: electrodes stay EEG whatever their spelling; other channels are kept out of EEG averages."""

from __future__ import annotations

from contextlib import closing
from pathlib import Path

import mne
import numpy as np
import pytest

from pulsemend.engine.setup import bind
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.vocabulary import ChannelType
from pulsemend.readers.channel_types import type_by_name
from pulsemend.readers.names import _sites
from pulsemend.readers.opening import open_recording
from support.written_recordings import counts, triplet_by_hand

_LISTED = "colin27_1005" if "colin27_1005" in mne.channels.get_builtin_montages() else "standard_1005"
ELECTRODES = [
    *mne.channels.make_standard_montage(_LISTED).ch_names,
    *("A1", "A2", "M1", "M2", "T3", "T4", "T5", "T6"),
]


def test_no_site_of_the_extended_system_is_taken_for_something_else() -> None:
    """Facts 4.3: 345 sites; outside reference: the reader library's spelling of all of them."""
    assert len(_sites()) == 345
    assert len(set(map(str.lower, ELECTRODES)) - set(_sites())) <= 8
    for name in (*ELECTRODES, *_sites()):
        for spelled in (name, name.upper(), name.lower(), f" {name} "):
            assert type_by_name(spelled) is ChannelType.EEG, spelled


@pytest.mark.parametrize(
    "name", ["E1", "E128", "A32", "EEG 001", "Ch7", "REF", "GND", "C3-A2", "Fp1-Ref", "ReRef"]
)
def test_other_electrode_names_stay_eeg(name: str) -> None:
    assert type_by_name(name) is ChannelType.EEG


@pytest.mark.parametrize(
    ("names", "kind"),
    [
        ("HEOG VEOG VEOGl hEOGr EOGleft EOG_1 leftEOG HEO VEO LO1 IO2 SO1 LOC ROC Eye EyeL", ChannelType.EOG),
        ("ECG EKG ecg1 II_ECG Heart", ChannelType.ECG),
        ("EMG FDI FDI_r APB ADM EMG-chin Chin1 leftEMG", ChannelType.EMG),
        ("Status STATUS TRIG Trigger trig1 STI014 STI_101 Stim TTL Marker", ChannelType.TRIGGER),
        (
            "Photo Diode photodiode Mic Microphone Acc AccX acc_z X_ACC ACC1 GSR EDA Resp Respiration Temp "
            "Audio Light Sound GazeX Eye_X pupil_left Force Button AUX1 BIP2 EXG3 SpO2 PPG Joystick",
            ChannelType.MISC,
        ),
    ],
)
def test_usual_names(names: str, kind: ChannelType) -> None:
    assert {name: type_by_name(name) for name in names.split()} == dict.fromkeys(names.split(), kind)


def test_only_eeg_enters_the_average(tmp_path: Path) -> None:
    names = ["Fz", "HEOG", "ECG", "FDI", "Photo", "TRIG", "Cz"]
    stored = np.resize(counts(), (len(names), 1500))
    with closing(open_recording(triplet_by_hand(tmp_path, stored, "INT_16", names=names))) as recording:
        facts = recording.facts
    plan = parse_plan(
        'pulsemend = 1\n[about]\nname = "x"\n[pulses]\ntimes = "none"\n'
        "[channels]\nfind_bad = false\nrebuild_bad = false\n"
        '[markers."arrow left"]\nrole = "cue"\n[[trial]]\nslot = "cue1"\nrole = "cue"\n'
        '[epochs]\nlength_s = 1.0\n[[epochs.rule]]\nname = "a"\nanchor = "cue1"\nstart_s = 0.0\n'
        "[filter]\nrate_hz = 500.0\n"
    ).plan
    setup = bind(facts, plan, NO_MARKS)
    assert [c.name for c in setup.channels] == ["Fz", "HEOG", "ECG", "FDI", "Cz"]
    assert [c.name for c, used in zip(setup.channels, setup.reference_from, strict=True) if used] == [
        "Fz",
        "Cz",
    ]
