"""Reading a set back, for whoever must not know the export room."""

from __future__ import annotations

from pulsemend.export.read_set import CheckItem, CheckResult, check_set

__all__ = ["CheckItem", "CheckResult", "check_set"]
