"""The colours of the window, light and dark. Each role has a shape too, so meaning never rests on colour.

Role colours are from the palette of Okabe and Ito (2008), darkened or lightened for contrast where text or
thin lines need it.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass

from pulsemend.model.vocabulary import Role

ROLE_SHAPES: dict[Role, str] = {
    Role.FIXATION: "plus",
    Role.SAMPLE: "square",
    Role.CUE: "triangle",
    Role.PULSE: "star",
    Role.PROBE: "diamond",
    Role.RESPONSE: "circle",
    Role.OTHER: "bar",
    Role.IGNORE: "dot",
    Role.UNDECIDED: "ring",
}
"""Shape by which a role is known wherever it is drawn."""

_ROLES = {
    Role.FIXATION: "#7A6F9B",
    Role.SAMPLE: "#0072B2",
    Role.CUE: "#E69F00",
    Role.PULSE: "#D55E00",
    Role.PROBE: "#009E73",
    Role.RESPONSE: "#56B4E9",
    Role.OTHER: "#8A8F98",
    Role.IGNORE: "#B5BAC2",
    Role.UNDECIDED: "#CC79A7",
}


@dataclass(frozen=True)
class Theme:
    """One set of colours, as ``#rrggbb``.

    ``window`` lies behind everything, ``panel`` behind cards and traces, ``line`` is a border, ``accent``
    marks what is chosen, ``attention`` what needs a look. ``trace_recorded`` is the signal as recorded where
    it is shown behind the repaired one.
    """

    name: str
    window: str
    panel: str
    field: str
    line: str
    text: str
    quiet: str
    accent: str
    accent_soft: str
    attention: str
    attention_soft: str
    trace: str
    trace_bad: str
    trace_picked: str
    trace_recorded: str
    envelope: str
    gap: str
    flank: str
    bad_stretch: str
    roles: dict[Role, str] = dataclasses.field(default_factory=lambda: dict(_ROLES))


LIGHT = Theme(
    name="light",
    window="#F4F3EF",
    panel="#FFFEFB",
    field="#F4F4F1",
    line="#D9D8D2",
    text="#23262B",
    quiet="#5E636B",
    accent="#0B6E6E",
    accent_soft="#E3EEEC",
    attention="#AC4518",
    attention_soft="#F6E4DA",
    trace="#2A2D33",
    trace_bad="#AC4518",
    trace_picked="#0B6E6E",
    trace_recorded="#B4B8BE",
    envelope="#D3D6DA",
    gap="#F2D5A8",
    flank="#EAF1E6",
    bad_stretch="#EFD9E5",
)

DARK = Theme(
    name="dark",
    window="#15181B",
    panel="#1D2125",
    field="#262B30",
    line="#363C43",
    text="#E6E4DD",
    quiet="#9AA1AA",
    accent="#4FB8AE",
    accent_soft="#1F3A39",
    attention="#F08A54",
    attention_soft="#43291C",
    trace="#D5D3CC",
    trace_bad="#F08A54",
    trace_picked="#4FB8AE",
    trace_recorded="#5B626A",
    envelope="#3A4048",
    gap="#5A431F",
    flank="#233026",
    bad_stretch="#4A2F3E",
    roles={**_ROLES, Role.SAMPLE: "#4DA3DB", Role.PULSE: "#F07E2E", Role.PROBE: "#2CC296"},
)
