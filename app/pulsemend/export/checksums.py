"""Checksums of files, in the format that ``sha256sum -c`` reads."""

from __future__ import annotations

import hashlib
import os
import re
from collections.abc import Mapping
from pathlib import Path

_LINE = re.compile(rb"(\\?)([0-9a-f]{64}) [ *](.+)")
_ESCAPES = {b"\\": b"\\\\", b"\n": b"\\n", b"\r": b"\\r"}


def file_sha256(path: Path) -> str:
    """Hash a file's bytes.

    Parameters
    ----------
    path : Path
        The file.

    Returns
    -------
    str
        SHA-256 as 64 hexadecimal digits.
    """
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def checksums_text(digests: Mapping[str, str]) -> bytes:
    """One line per file; a name with a backslash or a line break is escaped, which a backslash in front says.

    Parameters
    ----------
    digests : mapping of str to str
        By file name.
    """
    lines = []
    for name in sorted(digests):
        raw = os.fsencode(name)
        escaped = re.sub(rb"[\\\n\r]", lambda match: _ESCAPES[match[0]], raw)
        mark = b"\\" if escaped != raw else b""
        lines.append(mark + digests[name].encode() + b"  " + escaped + b"\n")
    return b"".join(lines)


def read_checksums(path: Path) -> dict[str, str]:
    """Read digests by file name.

    Parameters
    ----------
    path : Path
        The file of checksums.

    Raises
    ------
    OSError, ValueError
        The file is missing, or a line is no checksum.
    """
    digests = {}
    plain = {escape: sign for sign, escape in _ESCAPES.items()}
    for number, line in enumerate(path.read_bytes().splitlines(), start=1):
        match = _LINE.fullmatch(line)
        if match is None:
            raise ValueError(f"{path.name}, line {number} is no checksum")
        mark, digest, raw = match.groups()
        name = re.sub(rb"\\[\\nr]", lambda found: plain[found[0]], raw) if mark else raw
        digests[os.fsdecode(name)] = digest.decode()
    return digests
