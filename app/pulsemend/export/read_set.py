"""Reading an epoch set back: `check_set` for the command, `read_back` for the writer before it publishes.

A set that was damaged, cut short or edited gives items that are not passed, never a traceback.
"""

from __future__ import annotations

from pathlib import Path

from pulsemend.export.check_items import CheckItem, CheckResult
from pulsemend.export.found_set import find_prefix, read_found
from pulsemend.export.integrity import check_checksums, check_integrity, check_name
from pulsemend.export.readiness import check_readiness
from pulsemend.progress import Work

__all__ = ["CheckItem", "CheckResult", "check_set", "read_back"]


def check_set(folder: Path) -> Work[CheckResult]:
    """Read a set back and check it.

    Parameters
    ----------
    folder : Path
        The set's folder.

    Returns
    -------
    CheckResult

    Raises
    ------
    SetError
        The folder is no set.
    """
    found = yield from read_found(folder, find_prefix(folder))
    items = [check_name(found), check_checksums(found), *check_integrity(found), *check_readiness(found)]
    return CheckResult(folder, tuple(items))


def read_back(folder: Path, prefix: str) -> Work[tuple[list[CheckItem], dict[str, str]]]:
    """Check a set that has no checksums yet.

    Parameters
    ----------
    folder : Path
        Where it lies now.
    prefix : str
        What its files' names start with.

    Returns
    -------
    items : list of CheckItem
        Of integrity.
    digests : dict of str to str
        SHA-256 of every file, by name.
    """
    found = yield from read_found(folder, prefix)
    return check_integrity(found), found.digests
