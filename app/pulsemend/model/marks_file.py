"""Marks as files: the same reading, refusing and writing as for plans."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from pulsemend.errors import MarksError
from pulsemend.model.keys import key_defaults, show
from pulsemend.model.marks import BadStretch, EpochKey, MarkerKey, Marks, MovedPulse
from pulsemend.model.marks_keys import LATER_MARKS_KEYS, MARKS_KEYS, SCHEMA
from pulsemend.model.recording import FilePart, Fingerprint
from pulsemend.model.toml_edit import new_text, updated_text
from pulsemend.model.toml_tables import Source, parse, read_text, write_text

_NAMED_BY = {
    "fingerprint": "name",
    "pulses.moved": "sample",
    "bad_stretches": "",
    "epochs_left_out": "",
    "markers_ignored": "",
    "markers_added": "",
}
_SHA256 = re.compile(r"[0-9a-f]{64}")
_OTHER_RECORDING = "These marks belong to another recording or to an earlier state of this one"


@dataclass(frozen=True)
class MarksFile:
    """Marks together with the text they came from.

    Parameters
    ----------
    marks : Marks
    source : Source
        Text, name and lines; ``with marks_file.source.located(): ...`` gives later refusals their line.
    warnings : tuple of str
        One sentence each.
    """

    marks: Marks
    source: Source
    warnings: tuple[str, ...] = ()

    @property
    def text(self) -> str:
        """The text as it was read."""
        return self.source.text


def read_marks(path: Path) -> MarksFile:
    """Read a recording's marks.

    Parameters
    ----------
    path : Path
        The TOML file.

    Returns
    -------
    MarksFile

    Raises
    ------
    MarksError
        The file cannot be read, or a key is unknown, missing, impossible or of a later version.
    """
    return parse_marks(read_text(path, MarksError), str(path))


def parse_marks(text: str, name: str = "") -> MarksFile:
    """Read marks from their text.

    Parameters
    ----------
    text : str
        TOML, schema 1.
    name : str
        The file's name for messages.

    Returns
    -------
    MarksFile

    Raises
    ------
    MarksError
        A key is unknown, missing, impossible or of a later version.
    """
    source = parse(text, name, MARKS_KEYS, LATER_MARKS_KEYS, MarksError)
    with source.located():
        marks = _marks(source.tree)
        _check(marks)
    warnings = () if marks.fingerprint else ("marks hold no fingerprint, so they may be another recording's",)
    return MarksFile(marks, source, warnings)


def marks_text(marks: Marks) -> str:
    """Write marks as a new text.

    Parameters
    ----------
    marks : Marks
        What to write.
    """
    return new_text(marks_tree(marks), key_defaults(MARKS_KEYS), _NAMED_BY)


def update_text(text: str, marks: Marks) -> str:
    """Change a text so that it means other marks, comments and order kept.

    Parameters
    ----------
    text : str
        Valid marks.
    marks : Marks
        What the new text has to mean.

    Raises
    ------
    MarksError
        The text is no valid marks file.
    """
    if parse_marks(text).marks == marks:
        return text
    changed = updated_text(text, marks_tree(marks), key_defaults(MARKS_KEYS), _NAMED_BY)
    # Meaning goes before comments, as for plans.
    return changed if _means(changed, marks) else marks_text(marks)


def write_marks(path: Path, marks: Marks, text: str = "") -> str:
    """Write marks, whole or not at all.

    Parameters
    ----------
    path : Path
        Where to.
    marks : Marks
        What to write.
    text : str
        The text they were read from, whose comments are kept; empty: a new text.

    Returns
    -------
    str
        The text written.
    """
    new = update_text(text, marks) if text else marks_text(marks)
    write_text(path, new)
    return new


def check_fingerprint(marks: Marks, fingerprint: Fingerprint) -> None:
    """Refuse marks of another recording.

    Parameters
    ----------
    marks : Marks
        With or without a fingerprint; without one everything is accepted.
    fingerprint : Fingerprint
        Of the recording at hand.

    Raises
    ------
    MarksError
        Names the first file that differs.
    """
    sizes = tuple(FilePart(name, size) for name, size, _ in fingerprint.parts)
    check_files(marks, sizes)
    hashes = {name: sha256 for name, _, sha256 in fingerprint.parts}
    for place, (name, _, sha256) in enumerate(marks.fingerprint.parts if marks.fingerprint else (), start=1):
        if hashes[name] != sha256:
            _refuse(f"fingerprint[{place}].sha256", f"{name} has other contents", sha256, hashes[name])


def check_files(marks: Marks, parts: Sequence[FilePart]) -> None:
    """Refuse marks of a recording with other files or sizes: what can be told before anything is hashed.

    Parameters
    ----------
    marks : Marks
        With or without a fingerprint; without one everything is accepted.
    parts : sequence of FilePart
        Files of the recording at hand.

    Raises
    ------
    MarksError
        Names the first file that differs.
    """
    if marks.fingerprint is None:
        return
    sizes = {part.name: part.size for part in parts}
    for place, (name, size, _) in enumerate(marks.fingerprint.parts, start=1):
        if name not in sizes:
            _refuse(
                f"fingerprint[{place}].name", f"{name} is no file of this recording", name, " | ".join(sizes)
            )
        if sizes[name] != size:
            _refuse(f"fingerprint[{place}].size", f"{name} has another size", str(size), str(sizes[name]))
    marked = {name for name, _, _ in marks.fingerprint.parts}
    for name in sizes:
        if name not in marked:
            _refuse("fingerprint", f"{name} of this recording is not in it", " | ".join(sorted(marked)), name)


def check_samples(marks: Marks, n_samples: int) -> None:
    """Refuse pulses and stretches beyond the recording's end.

    Parameters
    ----------
    marks : Marks
        What to check.
    n_samples : int
        Length of the recording.

    Raises
    ------
    MarksError
        A sample number is too large.
    """
    named = [(f"pulses.added[{place}]", at) for place, at in enumerate(marks.pulses_added, start=1)]
    named += [(f"pulses.removed[{place}]", at) for place, at in enumerate(marks.pulses_removed, start=1)]
    for place, moved in enumerate(marks.pulses_moved, start=1):
        named += [(f"pulses.moved[{place}].sample", moved.sample), (f"pulses.moved[{place}].to", moved.to)]
    named += [
        (f"bad_stretches[{place}].stop", bad.stop - 1)
        for place, bad in enumerate(marks.bad_stretches, start=1)
    ]
    for table, markers in (("ignored", marks.markers_ignored), ("added", marks.markers_added)):
        named += [(f"markers_{table}[{place}].sample", m.sample) for place, m in enumerate(markers, start=1)]
    for key, sample in named:
        if sample >= n_samples:
            raise MarksError(
                key, "is beyond the recording's end", allowed=f"up to {n_samples - 1}", received=str(sample)
            )


def _means(text: str, marks: Marks) -> bool:
    try:
        return parse_marks(text).marks == marks
    except MarksError:
        return False


def marks_tree(marks: Marks) -> dict[str, Any]:
    """All values of marks as nested tables.

    Parameters
    ----------
    marks : Marks
        What to take apart.
    """
    parts = marks.fingerprint.parts if marks.fingerprint else ()
    return {
        "pulsemend_marks": SCHEMA,
        "bad": marks.bad,
        "good": marks.good,
        "trials_excluded": marks.trials_excluded,
        "fingerprint": [{"name": name, "size": size, "sha256": sha256} for name, size, sha256 in parts],
        "types": dict(marks.types),
        "gaps_ms": dict(marks.gaps_ms),
        "pulses": {
            "added": marks.pulses_added,
            "removed": marks.pulses_removed,
            "moved": [vars(moved) for moved in marks.pulses_moved],
        },
        "bad_stretches": [vars(stretch) for stretch in marks.bad_stretches],
        "epochs_left_out": [vars(key) for key in marks.epochs_left_out],
        "run": marks.run,
        "markers_ignored": [vars(key) for key in marks.markers_ignored],
        "markers_added": [vars(key) for key in marks.markers_added],
        "cures": {"accepted": marks.cures_accepted, "refused": marks.cures_refused},
        "log": {"file": marks.log_file, "rows_excluded": marks.log_rows_excluded},
    }


def _marks(tree: Mapping[str, Any]) -> Marks:
    parts = tuple((part["name"], part["size"], part["sha256"]) for part in tree["fingerprint"])
    pulses = tree["pulses"]
    return Marks(
        fingerprint=Fingerprint(parts) if parts else None,
        bad=tree["bad"],
        good=tree["good"],
        types=tree["types"],
        pulses_added=pulses["added"],
        pulses_removed=pulses["removed"],
        pulses_moved=tuple(MovedPulse(**moved) for moved in pulses["moved"]),
        gaps_ms=tree["gaps_ms"],
        bad_stretches=tuple(BadStretch(**stretch) for stretch in tree["bad_stretches"]),
        trials_excluded=tree["trials_excluded"],
        epochs_left_out=tuple(EpochKey(**key) for key in tree["epochs_left_out"]),
        markers_ignored=tuple(MarkerKey(**key) for key in tree["markers_ignored"]),
        markers_added=tuple(MarkerKey(**key) for key in tree["markers_added"]),
        cures_accepted=tree["cures"]["accepted"],
        cures_refused=tree["cures"]["refused"],
        log_file=tree["log"]["file"],
        log_rows_excluded=tree["log"]["rows_excluded"],
        run=tree["run"],
    )


def _check(marks: Marks) -> None:
    """Check what the keys must be to each other."""
    names: set[str] = set()
    for place, (name, _, sha256) in enumerate(marks.fingerprint.parts if marks.fingerprint else (), start=1):
        if name in names:
            raise MarksError(f"fingerprint[{place}].name", "names a file twice", received=show(name))
        names.add(name)
        if not _SHA256.fullmatch(sha256):
            raise MarksError(
                f"fingerprint[{place}].sha256",
                "is no SHA-256",
                allowed="64 of the signs 0-9 and a-f",
                received=show(sha256),
            )
    for place, name in enumerate(marks.good, start=1):
        if name in marks.bad:
            raise MarksError(f"good[{place}]", "is bad as well", received=show(name))
    seen: set[int] = set()
    for place, moved in enumerate(marks.pulses_moved, start=1):
        if moved.sample in seen or moved.sample in marks.pulses_removed:
            problem = "is moved twice" if moved.sample in seen else "is removed as well"
            raise MarksError(f"pulses.moved[{place}].sample", problem, received=str(moved.sample))
        seen.add(moved.sample)
    for place, key in enumerate(marks.cures_refused, start=1):
        if key in marks.cures_accepted:
            raise MarksError(f"cures.refused[{place}]", "is accepted as well", received=show(key))
    for place, stretch in enumerate(marks.bad_stretches, start=1):
        if stretch.stop <= stretch.start:
            raise MarksError(
                f"bad_stretches[{place}].stop",
                "must be above start",
                allowed=f"{stretch.start + 1} or more",
                received=str(stretch.stop),
            )


def _refuse(key: str, problem: str, marked: str, at_hand: str) -> None:
    raise MarksError(key, f"{problem}. {_OTHER_RECORDING}", allowed=at_hand, received=marked)
