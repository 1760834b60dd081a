"""The safety notice, in one place: for provenance files, reports, the first start, About and the README."""

from __future__ import annotations

SAFETY_NOTICE = (
    "Pulsemend works on recordings that already exist. It does not control, time or advise stimulation and "
    "is no medical device. Stimulation parameters, participant screening, hearing protection, electrode "
    "heating and emergency plans follow the local protocol, ethics approval, device instructions and current "
    "consensus guidelines, and are the responsibility of trained and licensed staff.",
    "Filled samples are estimates, not measurements. Early responses near the pulse need independent "
    "confirmation, and after about 60 ms auditory and touch responses to stimulation cannot be told apart "
    "without a control condition.",
)
"""Paragraphs in plain words, in reading order."""
