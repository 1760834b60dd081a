"""What somebody dropped on the window, or named: a recording, a plan, a folder with both, a set. No Qt.

Only names are looked at here, so that a slow disk never holds up the window; readers judge the contents.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

RECORDING_ENDINGS = (".vhdr", ".eeg", ".vmrk", ".edf", ".bdf", ".fif", ".fif.gz")
"""Endings of the commonest recordings: those that are looked for in a folder."""

NO_RECORDINGS = ("", ".csv", ".html", ".json", ".md", ".pdf", ".png", ".tsv", ".toml", ".txt", ".zip")
"""Endings of files that are surely none."""

PLAN_ENDING = ".toml"
MARKS_ENDING = ".marks.toml"
SET_ENDING = "_desc-mended"
_MANY = 2000
"""Names looked at in a folder; beyond it nobody means the folder as a whole."""


@dataclass(frozen=True)
class Dropped:
    """What was found.

    Parameters
    ----------
    recording, plan, epoch_set : Path or None
        What can be opened.
    words : str
        Why nothing can be opened, or what was passed over; empty if there is nothing to say.
    """

    recording: Path | None = None
    plan: Path | None = None
    epoch_set: Path | None = None
    words: str = ""

    @property
    def is_something(self) -> bool:
        """Whether there is anything to open."""
        return not (self.recording is None and self.plan is None and self.epoch_set is None)


def what_is(paths: Sequence[Path]) -> Dropped:
    """Decide what dropped paths are.

    Parameters
    ----------
    paths : sequence of Path
        Files of one recording, a plan, both, or one folder.

    Returns
    -------
    Dropped
        Of a folder its only recording and its only plan; where there are several, the words say so.
    """
    if not paths:
        return Dropped(words="Nothing was dropped that lies on this computer.")
    if len(paths) == 1 and paths[0].is_dir():
        return _folder(paths[0])
    recordings, plans = _sorted_out(paths)
    if not recordings and not plans:
        if len(paths) == 1 and paths[0].suffix.lower() not in NO_RECORDINGS:
            # The reader library knows many more formats; it judges.
            return Dropped(recording=paths[0])
        known = ", ".join(RECORDING_ENDINGS)
        return Dropped(
            words=f"{paths[0].name} is no recording ({known}), no plan ({PLAN_ENDING}) and no folder."
        )
    words = ""
    if len(recordings) > 1:
        words = f"One window shows one recording: {recordings[0].name}; the others are left alone."
    elif len(plans) > 1:
        words = f"One window works with one plan: {plans[0].name}; the others are left alone."
    return Dropped(next(iter(recordings), None), next(iter(plans), None), words=words)


def is_recording(path: Path) -> bool:
    """Whether a file is named like a recording.

    Parameters
    ----------
    path : Path
        It need not exist.
    """
    return path.name.lower().endswith(RECORDING_ENDINGS)


def _folder(folder: Path) -> Dropped:
    if folder.name.endswith(SET_ENDING):
        return Dropped(epoch_set=folder)
    try:
        names = sorted(path for _, path in zip(range(_MANY), folder.iterdir(), strict=False))
    except OSError as error:
        return Dropped(words=f"The folder {folder.name} cannot be read: {error.strerror}.")
    recordings, plans = _sorted_out([path for path in names if not path.name.startswith(".")])
    if len(recordings) > 1:
        return Dropped(
            words=f"The folder {folder.name} holds {len(recordings)} recordings; open or drop one of them."
        )
    if not recordings and not plans:
        return Dropped(words=f"The folder {folder.name} holds no recording and no plan.")
    words = ""
    if len(plans) > 1:
        words = f"The folder {folder.name} holds {len(plans)} plans; open the one that is meant."
        plans = []
    return Dropped(next(iter(recordings), None), next(iter(plans), None), words=words)


def _sorted_out(paths: Sequence[Path]) -> tuple[list[Path], list[Path]]:
    """Pick recordings, each triplet once (by its header if that is there), and plans."""
    plans = [
        path
        for path in paths
        if path.name.lower().endswith(PLAN_ENDING) and not path.name.lower().endswith(MARKS_ENDING)
    ]
    files = [path for path in paths if is_recording(path)]
    headers = {path.with_suffix("") for path in files if path.suffix.lower() == ".vhdr"}
    recordings: list[Path] = []
    for path in files:
        is_part = path.suffix.lower() in {".eeg", ".vmrk"}
        if is_part and path.with_suffix("") in headers:
            continue
        # Without its header in sight, a triplet counts once all the same.
        if is_part and any(one.with_suffix("") == path.with_suffix("") for one in recordings):
            continue
        recordings.append(path)
    return recordings, plans
