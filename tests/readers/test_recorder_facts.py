"""What headers say of the recorder: filters, impedances, reference; for triplets, EDF and further formats."""

from __future__ import annotations

import math
from contextlib import closing
from pathlib import Path

import edfio
import mne
import numpy as np
import pytest

from pulsemend.model.recording import Channel, RecordingFacts
from pulsemend.readers.opening import open_recording
from support.written_recordings import counts, fif_raw, triplet_by_hand

TITLES = (
    "#     Name      Phys. Chn.    Resolution / Unit   Low Cutoff [s]   High Cutoff [Hz]   Notch [Hz]    "
    "Series Res. [kOhm] Gradient         Offset"
)
ROW = "{}     {}         {}                0.1 \u00b5V             {}              {}            Off       0"
IMPEDANCES = """\
Data Electrodes Selected Impedance Measurement Range: 0 - 100 kOhm
Reference Electrode Selected Impedance Measurement Range: 0 - 10 kOhm
Impedance [kOhm] at 16:12:27 :
Fz:           3
C3:        Out of Range!
C4:         ???
VEOG +:       5
VEOG -:      12.5
Ref:          0
Gnd:          2
"""


def facts_of(path: Path) -> RecordingFacts:
    with closing(open_recording(path)) as opened:
        return opened.facts


def by_name(path: Path) -> dict[str, Channel]:
    return {channel.name: channel for channel in facts_of(path).channels}


def triplet(folder: Path, comment: str, encoding: str = "utf-8") -> Path:
    path = triplet_by_hand(folder, counts(), "INT_16")
    path.write_bytes((path.read_text("utf-8") + "[Comment]\n" + comment).encode(encoding))
    return path


def test_amplifier_table_and_impedances(tmp_path: Path) -> None:
    """Layout as in a recorder's own file: common practice; 10 s are a corner of 1 / (2 pi 10) Hz."""
    rows = [
        ROW.format(1, "Fz", 1, "10", "250"), ROW.format(2, "C3", 2, "DC", "1000"),
        ROW.format(3, "C4", 3, "0.3", "Off"), ROW.format(4, "VEOG", 4, "DC", "100"),
    ]  # fmt: skip
    path = triplet(
        tmp_path,
        "\nA m p l i f i e r  S e t u p\n====\nNumber of channels: 4\n\nChannels\n--------\n"
        + TITLES + "\n" + "\n".join(rows)
        + "\n\nS o f t w a r e  F i l t e r s\n==============================\nDisabled\n\n\n" + IMPEDANCES,
    )  # fmt: skip
    found = by_name(path)
    assert found["Fz"].highpass_hz == pytest.approx(0.0159155, rel=1e-5)
    assert found["C4"].highpass_hz == pytest.approx(1 / (2 * math.pi * 0.3))
    assert [found[name].highpass_hz for name in ("C3", "VEOG")] == [0.0, 0.0]
    assert [channel.coupling for channel in found.values()] == ["", "DC", "", "DC"]
    assert [channel.lowpass_hz for channel in found.values()] == [250.0, 1000.0, None, 100.0]
    assert [channel.impedance_ohm for channel in found.values()] == [3000.0, None, None, 12_500.0]
    assert facts_of(path).reference == ""


def test_cutoffs_in_hertz_gain_and_decimal_commas(tmp_path: Path) -> None:
    path = triplet(
        tmp_path,
        "#     Name      Phys. Chn.    Resolution [\u00b5V] Low Cutoff [Hz]  High Cutoff [Hz] Gain Coupling\n"
        "1     Fz        1             0,1                 0,016             280                150    AC\n"
        "2     C3        2             0,1                 Off               280,5              x      DC\n\n"
        "3     C4        3             0,1                 1                 280                150    AC\n",
    )
    found = by_name(path)
    assert (found["Fz"].highpass_hz, found["Fz"].lowpass_hz, found["Fz"].gain) == (0.016, 280.0, 150.0)
    assert (found["C3"].highpass_hz, found["C3"].lowpass_hz, found["C3"].gain) == (None, 280.5, None)
    assert [channel.coupling for channel in found.values()] == ["AC", "DC", "AC", ""]
    range_v = found["VEOG"].range_v
    assert range_v == pytest.approx((-0.0032768, 0.0032767))  # 16 bits of 0.1 uV
    assert found["VEOG"] == Channel(
        "VEOG", found["VEOG"].type, found["VEOG"].scale_v, unit="uV", range_v=range_v
    )


def test_filters_of_recorder_and_amplifier_both_count(tmp_path: Path) -> None:
    rows = "\n".join(
        ROW.format(n, name, n, "10", "250") for n, name in enumerate(("Fz", "C3", "C4"), start=1)
    )
    path = triplet(
        tmp_path,
        f"{TITLES}\n{rows}\n\nS o f t w a r e  F i l t e r s\n====\n"
        "#     Low Cutoff [s]   High Cutoff [Hz]   Notch [Hz]\n"
        "1      0.3              70                 50\n2      Disabled         Disabled           50\n\n",
    )
    found = by_name(path)
    assert found["Fz"].highpass_hz == pytest.approx(0.530516, rel=1e-5)
    assert found["Fz"].lowpass_hz == 70.0
    assert found["C3"].highpass_hz == pytest.approx(0.0159155, rel=1e-5)
    assert found["C3"].lowpass_hz == 250.0


def test_the_last_measurement_counts(tmp_path: Path) -> None:
    later = "\nImpedance [kOhm] at 17:00:00 :\nFz:    7\nC3:    4\nC4:    ???\nVEOG:    Out of Range!\n"
    found = by_name(triplet(tmp_path, IMPEDANCES + later))
    assert [channel.impedance_ohm for channel in found.values()] == [7000.0, 4000.0, None, None]
    found = by_name(triplet(tmp_path, "Impedance [Ohm] at 09:01:02 :\nFz: 3500\n\nsaid: 9\n"))
    assert found["Fz"].impedance_ohm == 3500.0


@pytest.mark.parametrize(
    "line", ["Reference Channel Name = FCz", "Reference: FCz", "reference electrode :  FCz"]
)
def test_reference_of_the_whole_recording(tmp_path: Path, line: str) -> None:
    assert facts_of(triplet(tmp_path, f"\n{line}\n")).reference == "FCz"


def test_reference_per_channel(tmp_path: Path) -> None:
    path = triplet_by_hand(tmp_path, counts(), "INT_16")
    text = path.read_text("utf-8")
    path.write_text(
        text.replace("Fz,,", "Fz,TP9,").replace("C3,,", "C3,TP9,").replace("C4,,", "C4,TP9,"), "utf-8"
    )
    assert [channel.reference for channel in facts_of(path).channels] == ["TP9", "TP9", "TP9", ""]
    assert facts_of(path).reference == "TP9"


@pytest.mark.parametrize(
    "comment",
    [
        "", "\n\n",
        "#\n1\n", "# Name\n1 2 3\n", f"{TITLES}\nx  y\n1     \n", "Impedance [kOhm] at :\n:\n: 3\nFz:\n",
        f"{TITLES}\n1     Fz\n2     C3      2", "# Low Cutoff [s]\n99999999999999999999  0\n", "Reference:\n",
        "#  Name  Low Cutoff [s]  High Cutoff [Hz]\n1  Fz  0  0\n2  C3  -1  nan\n3  C4  inf  1e999\n",
    ],
)  # fmt: skip
def test_comments_that_say_nothing(tmp_path: Path, comment: str) -> None:
    for channel in facts_of(triplet(tmp_path, comment)).channels:
        assert (channel.impedance_ohm, channel.highpass_hz, channel.lowpass_hz) == (None, None, None)


@pytest.mark.parametrize(
    ("prefilter", "highpass_hz", "lowpass_hz"),
    [
        ("HP:0.1Hz LP:75Hz N:50Hz", 0.1, 75.0),  # the standard's own example, facts 4.2
        ("HP:DC; LP:410Hz", 0.0, 410.0),
        ("HP: DC; LP: 113 Hz", 0.0, 113.0),
        ("LP:0.1kHz HP:16mHz", 0.016, 100.0),
        ("hp:0,5 lp:70", 0.5, 70.0),
        ("", None, None),
        ("None", None, None),
        ("HPF LPF", None, None),
    ],
)
def test_prefiltering_of_edf(
    tmp_path: Path, prefilter: str, highpass_hz: float | None, lowpass_hz: float | None
) -> None:
    signals = [
        edfio.EdfSignal(
            np.sin(np.arange(500.0)), 100, label=label, physical_dimension="uV", prefiltering=prefilter
        )
        for label in ("EEG Fpz-Cz", "EEG Oz", "C3-A2")
    ]
    edfio.Edf(signals).write(tmp_path / "lt01.edf")
    channels = facts_of(tmp_path / "lt01.edf").channels
    assert [channel.highpass_hz for channel in channels] == [highpass_hz] * 3
    assert [channel.lowpass_hz for channel in channels] == [lowpass_hz] * 3
    assert [channel.coupling for channel in channels] == ["DC" if highpass_hz == 0 else ""] * 3
    assert [channel.reference for channel in channels] == ["Cz", "", ""]


def test_filters_and_bad_channels_of_fif(tmp_path: Path) -> None:
    raw = fif_raw()
    raw.save(tmp_path / "lt01_raw.fif", verbose="error")
    assert {
        (c.highpass_hz, c.lowpass_hz, c.status) for c in facts_of(tmp_path / "lt01_raw.fif").channels
    } == {(None, None, "")}
    with raw.info._unlock():
        raw.info["highpass"], raw.info["lowpass"] = 0.5, 120.0
    raw.info["bads"] = ["C4"]
    raw.save(tmp_path / "lt01_raw.fif", overwrite=True, verbose="error")
    facts = facts_of(tmp_path / "lt01_raw.fif")
    assert [(c.highpass_hz, c.lowpass_hz) for c in facts.channels] == [(0.5, 120.0)] * 4
    assert [c.status for c in facts.channels] == ["", "", "bad", ""]
    assert any(note.startswith("Bad according to the file") and "C4" in note for note in facts.notes)
    assert isinstance(raw, mne.io.BaseRaw)


ALPHABETS = [("utf-8", "UTF-8"), ("latin-1", "ANSI"), ("cp1251", "1251"), ("cp1251", "windows-1251"),
             ("iso8859-7", "ISO-8859-7"), ("latin-1", "")]  # fmt: skip
LETTERS = {
    "utf-8": "\u8111\u03b1",
    "latin-1": "Fr\u00f6",
    "cp1251": "\u0424\u0437",
    "iso8859-7": "\u03a6\u03b6",
}


@pytest.mark.parametrize(("encoding", "codepage"), ALPHABETS)
def test_names_and_codes_in_other_alphabets(tmp_path: Path, encoding: str, codepage: str) -> None:
    name = LETTERS[encoding]
    path = triplet_by_hand(tmp_path, counts(), "INT_16", events=[(50, "Stimulus", name)])
    stated = f"Codepage={codepage}\n" if codepage else ""
    header = path.read_text("utf-8").replace("Codepage=UTF-8\n", stated).replace("Ch2=C3", f"Ch2={name}")
    path.write_bytes(header.encode(encoding))
    vmrk = path.with_suffix(".vmrk")
    # The marker file does not say how it is written: it is written like its header.
    vmrk.write_bytes(vmrk.read_text("utf-8").replace("Codepage=UTF-8\n", "").encode(encoding))
    facts = facts_of(path)
    assert facts.channels[1].name == name
    assert [marker.code for marker in facts.markers] == [name]


def test_a_codepage_that_does_not_exist(tmp_path: Path) -> None:
    path = triplet_by_hand(tmp_path, counts(), "INT_16")
    for codepage in ("99999", "hex", "utf-16", "cp65001x"):
        text = path.read_text("latin-1")
        start = text.index("Codepage=")
        text = text.replace(text[start : text.index("\n", start)], f"Codepage={codepage}")
        path.write_bytes(text.replace("C3", "Fr\u00f6").encode("latin-1"))
        assert facts_of(path).channels[1].name == "Fr\u00f6"


@pytest.mark.parametrize("encoding", ["utf-8", "latin-1"])
def test_names_of_edf_in_other_alphabets(tmp_path: Path, encoding: str) -> None:
    signals = [
        edfio.EdfSignal(
            np.sin(np.arange(500.0)), 100, label=name, physical_dimension="uV", physical_range=(-1, 1)
        )
        for name in ("Fz", "XXXXXX")
    ]
    edfio.Edf(signals).write(tmp_path / "lt01.edf")
    content = (tmp_path / "lt01.edf").read_bytes()
    name = "Fr\u00f6h".encode(encoding)
    content = content.replace(b"XXXXXX", name.ljust(6)).replace(
        b"uV      ", "\u00b5V".encode(encoding).ljust(8)
    )
    (tmp_path / "lt01.edf").write_bytes(content)
    with closing(open_recording(tmp_path / "lt01.edf")) as opened:
        out = np.empty((500, 2))
        opened.read(0, 500, out)
        channels = opened.facts.channels
    assert channels[1].name == "Fr\u00f6h"
    assert channels[1].type.value == "eeg"
    np.testing.assert_allclose(out[:, 1] * channels[1].scale_v, np.sin(np.arange(500.0)) * 1e-6, atol=2e-11)


@pytest.mark.parametrize(
    ("interval", "rate_hz", "said"),
    [
        ("488.28125", 2048.0, False),
        ("1000", 1000.0, False),
        ("40", 25_000.0, False),
        ("208.333", 4800.0, True),
        ("208.33333333", 4800.0, True),
        ("33.33333", 30_000.0, True),
        ("1953.0784", 1e6 / 1953.0784, False),  # 512.0122 Hz
        ("1953.125", 512.0, False),
        ("333", 1e6 / 333, False),
        ("208.334", 1e6 / 208.334, False),
        ("2.0833333e2", 1e6 / 208.33333, False),
    ],
)
def test_odd_rates(tmp_path: Path, interval: str, rate_hz: float, said: bool) -> None:
    path = triplet_by_hand(tmp_path, counts(), "INT_16")
    path.write_text(
        path.read_text("utf-8").replace("SamplingInterval=2000", f"SamplingInterval={interval}"), "utf-8"
    )
    facts = facts_of(path)
    assert facts.rate_hz == rate_hz
    assert any("stands for" in note for note in facts.notes) is said


def test_a_rate_of_512_0122() -> None:
    assert round(1e6 / 1953.0784, 4) == 512.0122


@pytest.mark.parametrize(
    ("per_record", "record_s"), [(2048, 1.0), (4800, 1.0), (256, 0.5), (100, 0.3), (7, 0.013672)]
)
def test_odd_rates_of_edf(tmp_path: Path, per_record: int, record_s: float) -> None:
    rate_hz = per_record / record_s
    signal = edfio.EdfSignal(
        np.sin(np.arange(per_record * 4.0)), rate_hz, label="Fz", physical_dimension="uV"
    )
    note = edfio.EdfAnnotation(per_record * 2 / rate_hz, None, "cue")
    edfio.Edf([signal], annotations=[note], data_record_duration=record_s).write(tmp_path / "lt01.edf")
    facts = facts_of(tmp_path / "lt01.edf")
    assert facts.rate_hz == rate_hz
    assert facts.n_samples == per_record * 4
    assert [marker.sample for marker in facts.markers] == [per_record * 2]


@pytest.mark.parametrize("rate_hz", [512.0122, 2048.0, 4800.0, 1e6 / 1953.0784])
def test_odd_rates_of_fif(tmp_path: Path, rate_hz: float) -> None:
    """The format keeps the rate in 32 bits."""
    raw = mne.io.RawArray(np.zeros((1, 9000)), mne.create_info(["Fz"], rate_hz, "eeg"), verbose="error")
    raw.set_annotations(mne.Annotations([4321 / rate_hz], [0], ["cue"]))
    raw.save(tmp_path / "lt01_raw.fif", verbose="error")
    facts = facts_of(tmp_path / "lt01_raw.fif")
    assert facts.rate_hz == np.float32(rate_hz)
    assert [marker.sample for marker in facts.markers] == [pytest.approx(4321, abs=0.02)]


SYNC = [(0.2, "Stimulus/S 1"), (0.4, "SyncStatus/Sync On"), (1.0, "New Segment/"),
        (1.4, "SyncStatus/Sync On"),
        (1.6, "Sync On"), (1.8, "Stimulus/S 2")]  # fmt: skip


@pytest.mark.parametrize("kind", ["FIF", "EDF+"])
def test_marks_of_the_clock_are_left_out_and_counted_once(tmp_path: Path, kind: str) -> None:
    if kind == "FIF":
        raw = fif_raw(())
        raw.set_annotations(
            mne.Annotations([t for t, _ in SYNC], [0.0] * len(SYNC), [text for _, text in SYNC])
        )
        path = tmp_path / "lt01_raw.fif"
        raw.save(path, verbose="error")
    else:
        signal = edfio.EdfSignal(np.sin(np.arange(1500.0)), 500, label="Fz", physical_dimension="uV")
        path = tmp_path / "lt01.edf"
        edfio.Edf([signal], annotations=[edfio.EdfAnnotation(t, None, text) for t, text in SYNC]).write(path)
    facts = facts_of(path)
    assert [(marker.sample, marker.code) for marker in facts.markers] == [(100, "S 1"), (900, "S 2")]
    assert facts.boundaries == (500,)
    assert [note for note in facts.notes if "SyncStatus" in note] == [
        "Markers of the amplifier's clock (SyncStatus), left out: 3."
    ]


@pytest.mark.parametrize(
    ("name", "code"), [("test_utf8.edf", "\u4e2d\u6587"), ("test_subsecond.edf", "Clip Note")]
)
def test_generated_files_of_strangers(name: str, code: str) -> None:
    """Open data: files that come inside pyedflib; outside reference: what pyedflib reads of their headers."""
    pyedflib = pytest.importorskip("pyedflib")
    path = Path(pyedflib.__file__).parent / "tests" / "data" / name
    facts = facts_of(path)
    with pyedflib.EdfReader(str(path)) as reader:
        onsets_s, _, texts = reader.readAnnotations()
        assert [channel.name for channel in facts.channels] == reader.getSignalLabels()
        assert facts.rate_hz == reader.getSampleFrequency(0)
    assert any(code in text for text in texts)
    assert [marker.code for marker in facts.markers] == [" ".join(text.split()) for text in texts]
    np.testing.assert_allclose([m.sample for m in facts.markers], onsets_s * facts.rate_hz, atol=0.5)
