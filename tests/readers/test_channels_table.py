"""Tables of channels and electrodes beside a recording: types, status, filters, positions; bad tables."""

from __future__ import annotations

import json
from contextlib import closing
from pathlib import Path

import mne
import mne_bids  # type: ignore[import-untyped]
import numpy as np
import pytest
import spharapy.datasets

from pulsemend.errors import DamagedRecording
from pulsemend.model.recording import Channel, RecordingFacts
from pulsemend.readers.names import standard_positions
from pulsemend.readers.opening import open_recording
from support.written_recordings import EVENTS, FORMATS, NAMES, RATE_HZ, counts, fif_raw, triplet_by_hand

COLUMNS = "name type units low_cutoff high_cutoff reference status status_description"


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return triplet_by_hand(tmp_path, counts(), "INT_16")


def write(folder: Path, name: str, head: str, rows: list[str]) -> None:
    lines = [head, *rows]
    text = "".join("\t".join(line.split(" ")).replace("~", " ") + "\n" for line in lines)
    (folder / name).write_text(text, "utf-8")


def facts_of(path: Path) -> RecordingFacts:
    with closing(open_recording(path)) as opened:
        return opened.facts


def channel(path: Path, name: str) -> Channel:
    return next(one for one in facts_of(path).channels if one.name == name)


def rows(**changed: str) -> list[str]:
    usual = dict.fromkeys(NAMES, "EEG uV 0.1 250 FCz good n/a")
    return [f"{name} {text}" for name, text in (usual | changed).items()]


def noted(facts: RecordingFacts, text: str) -> str:
    found = [note for note in facts.notes if text in note]
    assert len(found) == 1, facts.notes
    return found[0]


def test_everything_that_a_table_says(path: Path, tmp_path: Path) -> None:
    bad = "EEG \u00b5V n/a n/a n/a bad loose~contact"
    write(tmp_path, "lt01_channels.tsv", COLUMNS, rows(C3=bad, VEOG="VEOG mV 0 100 below good n/a"))
    facts = facts_of(path)
    assert facts.channels[0] == Channel(
        "Fz", facts.channels[0].type, facts.channels[0].scale_v, None, "uV",
        highpass_hz=0.1, lowpass_hz=250.0, reference="FCz", status="good",
        range_v=facts.channels[0].range_v,
    )  # fmt: skip
    assert [one.status for one in facts.channels] == ["good", "bad", "good", "good"]
    assert channel(path, "C3").highpass_hz is None
    assert (channel(path, "VEOG").highpass_hz, channel(path, "VEOG").reference) == (0.0, "below")
    assert "C3 (loose contact)" in noted(facts, "Bad according to lt01_channels.tsv")
    assert "VEOG (mV, the file says uV)" in noted(facts, "contradict")
    assert facts.parts[-1].name == "lt01_channels.tsv"
    assert facts.reference == ""  # of C3 the table says nothing
    write(tmp_path, "lt01_channels.tsv", COLUMNS, rows())
    assert facts_of(path).reference == "FCz"


@pytest.mark.parametrize(
    ("word", "kind"),
    [
        ("EEG", "eeg"), ("HEOG", "eog"), ("EOG", "eog"), ("ECG", "ecg"), ("EMG", "emg"), ("TRIG", "trigger"),
        ("MISC", "misc"), ("AUDIO", "misc"), ("GSR", "misc"), ("RESP", "misc"), ("REF", "misc"),
        ("eog", "eog"), ("n/a", "eeg"),
    ],
)  # fmt: skip
def test_types(path: Path, tmp_path: Path, word: str, kind: str) -> None:
    lines = [*(f"{name} {word}" for name in NAMES[:3]), "VEOG EEG"]
    write(tmp_path, "lt01_channels.tsv", "name type", lines)
    assert channel(path, "C4").type.value == kind
    assert channel(path, "VEOG").type.value == "eeg"


def test_unknown_types_are_kept_out_and_told(path: Path, tmp_path: Path) -> None:
    write(tmp_path, "lt01_channels.tsv", "name type", ["Fz EEG", "C3 EEG", "C4 BRAIN", "VEOG EOG"])
    facts = facts_of(path)
    assert facts.channels[2].type.value == "misc"
    assert "BRAIN" in noted(facts, "not known")


def test_a_word_does_not_make_volts(path: Path, tmp_path: Path) -> None:
    path.write_text(path.read_text("utf-8").replace("Ch3=C4,,0.1,uV", "Ch3=C4,,0.1,BS"), "utf-8")
    write(tmp_path, "lt01_channels.tsv", "name type", ["Fz EEG", "C3 EEG", "C4 EEG", "VEOG EOG"])
    facts = facts_of(path)
    assert facts.channels[2].type.value == "misc"
    assert "C4" in noted(facts, "do not fit")


def test_a_trigger_channel_keeps_its_markers(tmp_path: Path) -> None:
    raw = fif_raw(())
    levels = np.zeros((1, 1500))
    levels[0, 70:90] = 5
    raw.set_annotations(None)
    raw.add_channels(
        [mne.io.RawArray(levels, mne.create_info(["STI"], RATE_HZ, "stim"), verbose="error")], True
    )
    raw.save(tmp_path / "lt01_eeg.fif", verbose="error")
    write(tmp_path, "lt01_channels.tsv", "name type", ["Fz EEG", "C3 EEG", "C4 TRIG", "VEOG EOG", "STI MISC"])
    facts = facts_of(tmp_path / "lt01_eeg.fif")
    assert [one.type.value for one in facts.channels] == ["eeg", "eeg", "trigger", "eog", "trigger"]
    assert [(marker.sample, marker.code) for marker in facts.markers] == [(70, "5")]


def test_rows_of_another_recording(path: Path, tmp_path: Path) -> None:
    write(tmp_path, "lt01_channels.tsv", "name type", ["Fz MISC", "C3 MISC", "P4 MISC", "VEOG EOG"])
    facts = facts_of(path)
    assert [one.type.value for one in facts.channels] == ["eeg", "eeg", "eeg", "eog"]
    note = noted(facts, "lt01_channels.tsv is not used")
    assert "it lacks C4" in note
    assert "the recording lacks P4" in note
    assert len(facts.parts) == 3


@pytest.mark.parametrize(
    ("head", "lines", "place", "what"),
    [
        ("name units", ["Fz uV"], 1, "no column type"),
        ("name type", ["Fz EEG", "C3"], 3, "1 cells, but there are 2 columns"),
        ("name type", ["Fz EEG", "Fz EEG"], 3, "Fz stands there twice"),
        ("name type", ["n/a EEG"], 2, "names no channel"),
        ("name type status", ["Fz EEG broken"], 2, "neither good nor bad"),
        ("name type low_cutoff", ["Fz EEG low"], 2, "low_cutoff is not a number"),
        ("name type high_cutoff", ["Fz EEG -1"], 2, "below 0"),
    ],
)
def test_bad_tables_of_channels(
    path: Path, tmp_path: Path, head: str, lines: list[str], place: int, what: str
) -> None:
    write(tmp_path, "lt01_channels.tsv", head, lines)
    with pytest.raises(DamagedRecording, match=what) as caught:
        open_recording(path)
    assert caught.value.where == f"lt01_channels.tsv, line {place}"


def coordsystem(folder: Path, unit: object, name: str = "lt01_coordsystem.json") -> None:
    tree = {
        "EEGCoordinateSystem": "Other",
        "EEGCoordinateUnits": unit,
        "EEGCoordinateSystemDescription": "RAS",
    }
    (folder / name).write_text(json.dumps(tree), "utf-8")


@pytest.mark.parametrize(("unit", "scale"), [("m", 1.0), ("cm", 100.0), ("mm", 1000.0)])
def test_positions_in_every_unit(path: Path, tmp_path: Path, unit: str, scale: float) -> None:
    places = {"Fz": (0.001, 0.061, 0.07), "C3": (-0.065, -0.01, 0.06)}
    lines = [f"{name} {' '.join(str(x * scale) for x in place)}" for name, place in places.items()]
    write(tmp_path, "lt01_electrodes.tsv", "name x y z impedance", [f"{line} 4.5" for line in lines] + [
        "C4 n/a n/a n/a n/a", "GND 0 0 0 2"
    ])  # fmt: skip
    coordsystem(tmp_path, unit)
    facts = facts_of(path)
    for one in facts.channels[:2]:
        np.testing.assert_allclose(np.array(one.position_m), places[one.name], rtol=1e-12)
    assert facts.channels[2].position_m is None
    assert [one.impedance_ohm for one in facts.channels] == [4500.0, 4500.0, None, None]
    assert [part.name for part in facts.parts[-2:]] == ["lt01_electrodes.tsv", "lt01_coordsystem.json"]
    noted(facts, "Positions from lt01_electrodes.tsv: 2 channels")


def test_the_table_goes_before_the_files_own_positions(path: Path, tmp_path: Path) -> None:
    text = path.read_text("utf-8") + "[Coordinates]\nCh1=1,45,90\nCh2=1,45,180\n"
    path.write_text(text, "utf-8")
    write(tmp_path, "lt01_electrodes.tsv", "name x y z", ["Fz 0 0.06 0.07"])
    coordsystem(tmp_path, "m")
    assert channel(path, "Fz").position_m == (0.0, 0.06, 0.07)
    np.testing.assert_allclose(np.array(channel(path, "C3").position_m), (-0.0672, 0, 0.0672), atol=1e-4)


@pytest.mark.parametrize("turns", [0, 1, 2, 3])
def test_axes_are_turned_to_where_the_names_say(tmp_path: Path, turns: int) -> None:
    """Many systems count front and left; outside truth: the ideal sphere of facts 4.3, off by 5 mm each."""
    names = ["Fp1", "F4", "C3", "P7", "O2", "Cz"]
    stored = np.resize(counts(), (len(names), 1500))
    path = triplet_by_hand(tmp_path, stored, "INT_16", names=names)
    ideal = standard_positions(names)
    off = np.random.default_rng(6).normal(0, 0.005, (len(names), 3))
    real = {name: np.array(ideal[name]) + shift for name, shift in zip(names, off, strict=True)}
    lines = []
    for name, (x, y, z) in real.items():
        for _ in range(turns):
            x, y = y, -x
        lines.append(f"{name} {x} {y} {z}")
    write(tmp_path, "lt01_electrodes.tsv", "name x y z", lines)
    coordsystem(tmp_path, "m")
    facts = facts_of(path)
    for one in facts.channels:
        np.testing.assert_allclose(np.array(one.position_m), real[one.name], atol=1e-12)
    turned = [note for note in facts.notes if "were turned by" in note]
    assert len(turned) == (turns > 0)
    assert all(f"turned by {90 * turns} degrees" in note for note in turned)


@pytest.mark.parametrize(
    ("unit", "why"),
    [
        (None, "no description of its axes and units"),
        ("n/a", "gives EEGCoordinateUnits as n/a"),
        (3, "gives EEGCoordinateUnits as nothing"),
        ("m", "more than half a metre away"),
    ],
)
def test_electrodes_without_meaning_are_ignored_with_a_note(
    path: Path, tmp_path: Path, unit: object, why: str
) -> None:
    """Facts T-4.5: a table of electrodes without its coordinate system is not used."""
    write(tmp_path, "lt01_electrodes.tsv", "name x y z", ["Fz 0 61 70"])
    if unit is not None:
        coordsystem(tmp_path, unit)
    facts = facts_of(path)
    assert facts.channels[0].position_m is None
    assert why in noted(facts, "lt01_electrodes.tsv is not used")
    assert len(facts.parts) == 3


@pytest.mark.parametrize(
    ("lines", "place", "what"),
    [
        (["Fz 0 61"], "lt01_electrodes.tsv, line 2", "3 cells, but there are 4 columns"),
        (["Fz 0 61 up"], "lt01_electrodes.tsv, line 2", "z is not a number: up"),
        (["Fz 0 61 70", "Fz 0 61 70"], "lt01_electrodes.tsv, line 3", "twice"),
    ],
)
def test_bad_tables_of_electrodes(
    path: Path, tmp_path: Path, lines: list[str], place: str, what: str
) -> None:
    write(tmp_path, "lt01_electrodes.tsv", "name x y z", lines)
    coordsystem(tmp_path, "mm")
    with pytest.raises(DamagedRecording, match=what) as caught:
        open_recording(path)
    assert caught.value.where == place


def test_a_broken_coordinate_system(path: Path, tmp_path: Path) -> None:
    write(tmp_path, "lt01_electrodes.tsv", "name x y z", ["Fz 0 61 70"])
    for text in ("{", "[" * 100_000):
        (tmp_path / "lt01_coordsystem.json").write_text(text)
        with pytest.raises(DamagedRecording, match="JSON") as caught:
            open_recording(path)
        assert caught.value.where == "lt01_coordsystem.json"


def test_electrodes_may_leave_out_task_and_run(tmp_path: Path) -> None:
    first = triplet_by_hand(tmp_path, counts(), "INT_16")
    path = first.rename(tmp_path / "sub-lt01_task-lantern_run-2_eeg.vhdr")
    for stem, height in (("sub-lt01", 0.07), ("sub-lt02", 0.01), ("sub-lt01_task-other", 0.02)):
        write(tmp_path, f"{stem}_electrodes.tsv", "name x y z", [f"Fz 0 0.06 {height}"])
        coordsystem(tmp_path, "m", f"{stem}_coordsystem.json")
    assert channel(path, "Fz").position_m == (0.0, 0.06, 0.07)
    write(tmp_path, "sub-lt01_task-lantern_electrodes.tsv", "name x y z", ["Fz 0 0.06 0.08"])
    assert channel(path, "Fz").position_m == (0.0, 0.06, 0.08)
    for space in ("a", "b"):
        write(
            tmp_path,
            f"sub-lt01_task-lantern_run-2_space-{space}_electrodes.tsv",
            "name x y z",
            ["Fz 0 0 0.1"],
        )
    facts = facts_of(path)
    assert facts.channels[0].position_m is None
    noted(facts, "fit equally well")


def test_a_signal_that_is_left_out_may_have_its_row(tmp_path: Path) -> None:
    import edfio

    signals = [
        edfio.EdfSignal(np.sin(np.arange(500.0)), 100, label=name, physical_dimension="uV") for name in "AB"
    ]
    slow = edfio.EdfSignal(np.sin(np.arange(50.0)), 10, label="slow", physical_dimension="uV")
    edfio.Edf([*signals, slow]).write(tmp_path / "lt01.edf")
    write(tmp_path, "lt01_channels.tsv", "name type status", ["A EEG good", "B EEG bad", "slow MISC n/a"])
    facts = facts_of(tmp_path / "lt01.edf")
    assert [one.status for one in facts.channels] == ["good", "bad"]


@pytest.mark.filterwarnings("ignore")
@pytest.mark.parametrize("fmt", ["BrainVision", "EDF"])
def test_a_folder_written_by_another_program(tmp_path: Path, fmt: str) -> None:
    """Outside reference: mne-bids writes recording and all tables."""
    raw = fif_raw()
    raw.set_channel_types({"C4": "misc"}, on_unit_change="ignore", verbose="error")
    places = {"Fz": (0.0, 0.06, 0.08), "C3": (-0.07, -0.01, 0.05)}
    ears = {"nasion": (0, 0.1, 0), "lpa": (-0.08, 0, 0), "rpa": (0.08, 0, 0)}
    montage = mne.channels.make_dig_montage(places, **ears, coord_frame="head")
    raw.set_montage(montage, on_missing="ignore")
    raw.info["line_freq"] = 50
    raw.info["bads"] = ["C3"]
    where = mne_bids.BIDSPath(subject="lt01", task="lantern", run="1", root=tmp_path, datatype="eeg")
    mne_bids.write_raw_bids(raw, where, format=fmt, allow_preload=True, verbose="error")
    suffix = {"BrainVision": ".vhdr", "EDF": ".edf"}[fmt]
    facts = facts_of(tmp_path / "sub-lt01" / "eeg" / f"sub-lt01_task-lantern_run-1_eeg{suffix}")
    assert [(m.sample, m.code, m.type) for m in facts.markers] == [(s, c, k) for s, k, c in EVENTS]
    assert [one.status for one in facts.channels] == ["good", "bad", "good", "good"]
    assert [one.type.value for one in facts.channels] == ["eeg", "eeg", "misc", "eog"]
    for one in facts.channels[:2]:
        np.testing.assert_allclose(np.array(one.position_m), places[one.name], atol=1e-6)
    assert len(facts.parts) == (3 if fmt == "BrainVision" else 1) + 4
    noted(facts, "counts from 0")


def test_every_format_is_described(tmp_path: Path) -> None:
    for kind, stem in (("EDF+", "lt01"), ("FIF", "lt01_raw")):
        folder = tmp_path / kind
        folder.mkdir()
        written = FORMATS[kind](folder, ())
        write(
            folder,
            f"{stem}_channels.tsv",
            "name type status",
            ["Fz EEG bad", "C3 EEG n/a", "C4 EMG good", "VEOG EOG good"],
        )
        assert channel(written.path, "Fz").status == "bad"
        assert channel(written.path, "C4").type.value == "emg"


def test_measured_positions_of_256_electrodes(tmp_path: Path) -> None:
    """Open data: names and positions, in millimetres, of a real cap, inside spharapy."""
    data = Path(spharapy.datasets.__file__).parent / "data"
    names = (data / "eeg_256_channels_label.csv").read_text("utf-8").split()
    places = np.loadtxt(data / "eeg_256_channels_vert.csv", delimiter=",")
    path = triplet_by_hand(tmp_path, np.resize(counts(), (256, 100)), "INT_16", names=names, events=())
    lines = [f"{name} {x} {y} {z}" for name, (x, y, z) in zip(names, places, strict=True)]
    write(tmp_path, "lt01_electrodes.tsv", "name x y z", lines)
    coordsystem(tmp_path, "mm")
    facts = facts_of(path)
    np.testing.assert_allclose(
        np.array([one.position_m for one in facts.channels]), places / 1000, rtol=1e-12
    )
