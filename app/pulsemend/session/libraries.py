"""The libraries at work, with versions and licences as their packages state them. No Qt."""

from __future__ import annotations

import re
from dataclasses import dataclass
from importlib.metadata import Distribution, PackageNotFoundError, distribution
from pathlib import Path

from pulsemend.progress import Progress, Work

PROGRAM = "pulsemend"
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]*")
_LICENCE_FILE = re.compile(r"(?:^|/)(?:LICEN[CS]E|COPYING|NOTICE)[^/]*$", re.IGNORECASE)
_SHORT = 80


@dataclass(frozen=True)
class Library:
    """One library.

    Parameters
    ----------
    name, version : str
    licence : str
        In short, as the package's metadata has it.
    """

    name: str
    version: str
    licence: str


def libraries(program: str = PROGRAM) -> Work[tuple[Library, ...]]:
    """List every library that the program needs, directly or through another, in order of names.

    Parameters
    ----------
    program : str
        Name of the package to begin with; optional needs of packages do not count.

    Yields
    ------
    Progress

    Returns
    -------
    tuple of Library
    """
    found: dict[str, Library] = {}
    waiting = [program]
    while waiting:
        name = waiting.pop()
        key = re.sub(r"[-_.]+", "-", name).lower()
        if key in found:
            continue
        try:
            package = distribution(name)
        except PackageNotFoundError:
            # Needed on another system or Python only.
            continue
        yield Progress("reading licences", len(found), 0)
        found[key] = Library(package.metadata["Name"], package.version, _licence(package))
        waiting += [
            match.group()
            for need in package.requires or ()
            if "extra ==" not in need and (match := _NAME.match(need))
        ]
    found.pop(program, None)
    return tuple(found[key] for key in sorted(found))


def licence_text(name: str) -> str:
    """Full text of a library's licences, as far as its package holds them.

    Parameters
    ----------
    name : str
        Name of the package.
    """
    try:
        package = distribution(name)
    except PackageNotFoundError:
        return f"{name} is not installed."
    texts = [
        text
        for file in package.files or ()
        if _LICENCE_FILE.search(str(file)) and (text := _read(package, file.as_posix()))
    ]
    return "\n\n".join(texts) or f"The package of {name} names its licence, but does not hold its text."


def _read(package: Distribution, file: str) -> str:
    try:
        return Path(str(package.locate_file(file))).read_text("utf-8", errors="replace")
    except OSError:
        return ""


def _licence(package: Distribution) -> str:
    metadata = package.metadata
    fields = [metadata[name] for name in ("License-Expression", "License") if name in metadata]
    stated = fields[0] if fields else ""
    if stated and len(stated) <= _SHORT and "\n" not in stated:
        return str(stated)
    names = [
        kind.rpartition(" :: ")[2]
        for kind in metadata.get_all("Classifier") or ()
        if kind.startswith("License ::") and not kind.endswith("OSI Approved")
    ]
    return ", ".join(names) or (stated.strip().splitlines() or ["see its text"])[0][:_SHORT]
