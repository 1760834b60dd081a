"""Pulsemend: recordings with magnetic pulses become checked, labelled epoch sets."""

from __future__ import annotations

__version__ = "0.1.0"

DATA_VERSION = 2
"""Rises whenever output samples may change for the same recording, plan and marks."""
