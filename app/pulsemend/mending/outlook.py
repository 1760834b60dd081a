"""What would be written, before anything is: files, shape, sizes, disk left, and what would be refused."""

from __future__ import annotations

import os
import shutil
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from pulsemend.errors import InputError, NoEpochs
from pulsemend.export.contents import CHECKSUMS, CONTAINERS, SIDE_FILES, SetChannel, SetContents, SetEpoch
from pulsemend.export.fif import fif_bytes
from pulsemend.export.folders import check_name, check_replaceable, check_space, file_in, set_folder
from pulsemend.export.set_writer import check_contents, needed_bytes
from pulsemend.mending.learned import Learned
from pulsemend.mending.prepare import need_known_pulses
from pulsemend.model.vocabulary import ChannelType, Format, Precision
from pulsemend.progress import Progress, Work

FORMATS = (Format.HDF5, Format.FIF)
"""Formats of this version."""


@dataclass(frozen=True)
class FormatOutlook:
    """One format, chosen or not.

    Parameters
    ----------
    format : Format
    chosen : bool
    size_bytes : int
        Of its file, at most.
    refusal : str
        Why it cannot hold this set; empty if it can.
    """

    format: Format
    chosen: bool
    size_bytes: int
    refusal: str = ""


@dataclass(frozen=True)
class Outlook:
    """What writing would give.

    Parameters
    ----------
    folder : Path
        The set.
    shape : tuple of int
        (n_epochs, n_channels, n_times).
    rate_hz : float
        Of the set.
    precision : Precision
    formats : tuple of FormatOutlook
        All of this version.
    files : tuple of (str, int or None)
        Names, and sizes in bytes at most; None where it is small.
    needed_bytes : int
        Of the whole set, at most.
    free_bytes : int
        On the disk of that place.
    exists : bool
        Whether a set stands there that could be replaced.
    refusals : tuple of str
        Why nothing would be written, one sentence each; empty if it would.
    """

    folder: Path
    shape: tuple[int, int, int]
    rate_hz: float
    precision: Precision
    formats: tuple[FormatOutlook, ...]
    files: tuple[tuple[str, int | None], ...]
    needed_bytes: int
    free_bytes: int
    exists: bool
    refusals: tuple[str, ...]


def looking_ahead(learned: Learned, parent: Path) -> Work[Outlook]:
    """Look ahead as a piece of work: a slow disk must keep nobody waiting.

    Parameters
    ----------
    learned : Learned
        What is known of the recording.
    parent : Path
        Folder of the sets.

    Yields
    ------
    Progress

    Returns
    -------
    Outlook
    """
    yield Progress("looking ahead", 0, 0)
    return look_ahead(learned, parent)


def look_ahead(learned: Learned, parent: Path) -> Outlook:
    """Tell what `mend` would write, and what it would refuse; writes nothing and reads no sample.

    Parameters
    ----------
    learned : Learned
        What is known of the recording.
    parent : Path
        Folder of the sets; need not exist.
    """
    contents = _contents(learned)
    folder = set_folder(parent.absolute(), contents.stem)
    needed = needed_bytes(contents)
    formats = tuple(_format_outlook(contents, kind) for kind in FORMATS)
    sizes: list[tuple[str, int | None]] = [
        (CONTAINERS[one.format], one.size_bytes) for one in formats if one.chosen
    ]
    sizes += [(name, None) for name in (*SIDE_FILES, CHECKSUMS)]
    place = _nearest(parent)
    return Outlook(
        folder=folder,
        shape=contents.shape,
        rate_hz=contents.rate_hz,
        precision=contents.precision,
        formats=formats,
        files=tuple((file_in(folder, folder.name, name).name, size) for name, size in sizes),
        needed_bytes=needed,
        free_bytes=shutil.disk_usage(place).free,
        exists=os.path.lexists(folder),
        refusals=(
            *_refusals_of_contents(learned, contents, formats),
            *_refusals_of_place(contents.stem, folder, place, needed),
        ),
    )


def _contents(learned: Learned) -> SetContents:
    """Describe the set as far as sizes and refusals need it."""
    plan, setup, decision = learned.plan, learned.setup, learned.decision
    recorded_hz = setup.facts.rate_hz
    epochs = tuple(
        SetEpoch(candidate, (candidate.anchor_sample or 0.0) / recorded_hz, candidate.start_s)
        for candidate in decision.kept
    )
    return SetContents(
        stem=setup.facts.stem,
        # Types and positions of channels play no part in it, and positions cost the loading of a library.
        channels=tuple(SetChannel(name, ChannelType.EEG) for name in setup.names),
        rate_hz=setup.rate_hz,
        recorded_rate_hz=recorded_hz,
        times=np.arange(round(plan.epochs.length_s * setup.rate_hz)) / setup.rate_hz,
        zero="epoch start",
        epochs=epochs,
        ledger=decision.ledger,
        pulses=learned.estimates.pulses,
        plan_text="",
        marks_text="",
        source_sha256="",
        precision=plan.export.precision,
        formats=plan.export.formats,
        fill=plan.pulses.fill,
    )


def _format_outlook(contents: SetContents, kind: Format) -> FormatOutlook:
    samples = int(np.prod(contents.shape))
    size = fif_bytes(contents) if kind is Format.FIF else samples * (contents.dtype.itemsize + 1)
    refusal = ""
    try:
        check_contents(replace(contents, formats=(kind,)))
    except NoEpochs:
        pass  # A matter of the set, not of the format.
    except InputError as error:
        refusal = str(error)
    return FormatOutlook(kind, kind in contents.formats, size, refusal)


def _refusals_of_contents(
    learned: Learned, contents: SetContents, formats: tuple[FormatOutlook, ...]
) -> list[str]:
    found = _said_by(lambda: need_known_pulses(learned.estimates, learned.setup.facts))
    if not learned.decision.ledger:
        found.append("No trial was found, so there is no epoch to write.")
    elif not contents.epochs:
        fates = Counter(candidate.fate for candidate in learned.decision.ledger)
        fate, count = fates.most_common(1)[0]
        found.append(f"None of {fates.total()} epochs is kept; {count} of them: {fate}.")
    found += [one.refusal for one in formats if one.chosen and one.refusal]
    return list(dict.fromkeys(found))


def _refusals_of_place(stem: str, folder: Path, place: Path, needed: int) -> list[str]:
    found = _said_by(lambda: check_name(stem))
    if not place.is_dir():
        found.append(f"{place}: is no folder. Choose another place.")
    elif not os.access(place, os.W_OK | os.X_OK):
        found.append(f"{place}: nothing may be written there. Choose another place.")
    if os.path.lexists(folder):
        found += _said_by(lambda: check_replaceable(folder))
    return found + _said_by(lambda: check_space(place, needed))


def _said_by(check: Callable[[], None]) -> list[str]:
    """Put what a check refuses into a list."""
    try:
        check()
    except InputError as error:
        return [str(error)]
    except OSError as error:
        return [f"{error.filename or 'the place'}: {error.strerror or error}."]
    return []


def _nearest(parent: Path) -> Path:
    """Nearest folder that exists."""
    place = parent.absolute()
    while not os.path.lexists(place):
        place = place.parent
    return place
