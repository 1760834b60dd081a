"""The identity of a recording: size and SHA-256 of every file that makes it up."""

from __future__ import annotations

import hashlib
from pathlib import Path

from pulsemend.model.recording import Fingerprint, Recording
from pulsemend.progress import Progress, Work
from pulsemend.readers.common import file_part, missing

_CHUNK_BYTES = 4 << 20
_STAGE = "identifying the recording"


def fingerprint(recording: Recording) -> Work[Fingerprint]:
    """Hash all files of a recording.

    Parameters
    ----------
    recording : Recording
        Whose files are hashed.

    Yields
    ------
    Progress
        In bytes, after every chunk.

    Returns
    -------
    Fingerprint
        Parts in the order of `RecordingFacts.parts`.

    Raises
    ------
    MissingPart
        A file is no longer there.
    """
    paths = [Path(path) for path in recording.fingerprint_paths()]
    total = sum(file_part(path).size for path in paths)
    buffer = bytearray(_CHUNK_BYTES)
    view = memoryview(buffer)
    parts = []
    done = 0
    for path, named in zip(paths, recording.facts.parts, strict=True):
        digest, size = hashlib.sha256(), 0
        try:
            with path.open("rb", buffering=0) as file:
                while n_read := file.readinto(buffer):
                    digest.update(view[:n_read])
                    size += n_read
                    done += n_read
                    yield Progress(_STAGE, done, total)
        except OSError as error:
            raise missing(path, error) from error
        parts.append((named.name, size, digest.hexdigest()))
    return Fingerprint(tuple(parts))
