"""`channels.tsv`: what the recorder did stands behind the columns that were there before."""

from __future__ import annotations

from pathlib import Path

from pulsemend.export.contents import SetChannel
from pulsemend.export.tables import channels_text, read_table
from pulsemend.model.vocabulary import ChannelType
from support.written_sets import make_contents


def test_columns_and_values(tmp_path: Path) -> None:
    channels = (
        SetChannel(
            "Cz",
            ChannelType.EEG,
            impedance_ohm=4500.0,
            hardware_highpass_hz=0.0159,
            hardware_lowpass_hz=1000.0,
            recorded_reference="FCz",
        ),
        SetChannel("VEOG", ChannelType.EOG, hardware_highpass_hz=0.0),
    )
    text = channels_text(make_contents(channels=channels))
    (tmp_path / "channels.tsv").write_text(text, "utf-8")
    table = read_table(tmp_path / "channels.tsv")
    assert list(table)[:8] == [
        "name", "type", "units", "status", "status_description", "x_m", "y_m", "z_m"
    ]  # fmt: skip
    assert {column: table[column] for column in list(table)[8:]} == {
        "impedance_ohm": ("4500.0", "n/a"),
        "hardware_highpass_hz": ("0.0159", "0.0"),
        "hardware_lowpass_hz": ("1000.0", "n/a"),
        "recorded_reference": ("FCz", "n/a"),
    }
