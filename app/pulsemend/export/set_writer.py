"""Writing an epoch set: streamed, hashed on the way, read back, and visible only when it is whole."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import NoEpochs, OutOfSpace, PulsemendError, SetError
from pulsemend.export import contents as names
from pulsemend.export.checksums import checksums_text
from pulsemend.export.content_hash import ContentHash
from pulsemend.export.contents import SetContents, labels_of
from pulsemend.export.fif import LARGEST_BYTES, create_fif, fif_bytes, fif_names
from pulsemend.export.folders import (
    check_name,
    check_replaceable,
    check_space,
    drop_part,
    file_in,
    make_part,
    publish,
    recover,
    set_folder,
    sync_file,
    sync_folder,
    user_errors,
)
from pulsemend.export.hdf5 import create_hdf5, seal_hdf5
from pulsemend.export.read_set import read_back
from pulsemend.export.region import OpenRegion
from pulsemend.export.tables import channels_text, epochs_text, ledger_text, pulses_text
from pulsemend.model.epochs import FIXED_COLUMNS
from pulsemend.model.recording import FloatArray
from pulsemend.model.vocabulary import Fill, Format
from pulsemend.notice import SAFETY_NOTICE
from pulsemend.progress import finish

_ROOM_BESIDE = 32_000_000
"""Bytes kept free for tables, estimates and what the file system needs itself."""


class SetWriter:
    """Writes one epoch set.

    A context manager: entering opens it; whatever is raised inside removes what was written. Nothing is
    written before `open`, and nothing but a hidden folder is visible before `finish`.

    Parameters
    ----------
    contents : SetContents
    parent : Path
        The set becomes a folder in it; made if missing.
    overwrite : bool
        Whether a set that stands there is replaced.

    Raises
    ------
    SetError
        The set exists, or cannot be written in these formats or under this name.
    NoEpochs
        No epoch is kept.
    OutOfSpace
        The disk, or the FIF format, cannot hold it.
    """

    def __init__(self, contents: SetContents, parent: Path, overwrite: bool) -> None:
        self.contents = contents
        self.folder = set_folder(parent.absolute(), contents.stem)
        self._overwrite = overwrite
        self._part: Path | None = None
        self._data: list[OpenRegion] = []
        self._replaced: OpenRegion | None = None
        self._decay_fitted: OpenRegion | None = None
        self._next = 0
        check_contents(contents)
        check_place(parent, contents.stem, overwrite=overwrite)
        check_space(parent, needed_bytes(contents))
        self._hash = ContentHash(contents.channels, labels_of(contents), contents.dtype, contents.shape)

    def open(self) -> Self:
        """Make the hidden folder and the containers, with the samples' place reserved.

        Returns
        -------
        SetWriter
            Itself.

        Raises
        ------
        SetError, OutOfSpace
            The disk refuses.
        """
        if self._part is not None:
            return self
        with self._whole_or_nothing():
            self._part = make_part(self.folder)
            if Format.HDF5 in self.contents.formats:
                data, replaced, fitted = create_hdf5(self._path(names.EPOCHS_H5), self.contents)
                self._data.append(OpenRegion(data, write=True))
                self._replaced = OpenRegion(replaced, write=True)
                self._decay_fitted = None if fitted is None else OpenRegion(fitted, write=True)
            if Format.FIF in self.contents.formats:
                region = create_fif(self._path(names.EPO_FIF), self.contents)
                self._data.append(OpenRegion(region, write=True))
        return self

    def write(
        self,
        index: int,
        data: FloatArray,
        replaced: NDArray[np.bool_],
        decay_fitted: NDArray[np.bool_] | None = None,
    ) -> None:
        """Write one epoch to every container.

        Parameters
        ----------
        index : int
            Epochs come in the order of the set, from 0.
        data : array, shape (n_channels, n_times)
            Volts.
        replaced : array of bool, shape (n_channels, n_times)
            Which samples are estimates.
        decay_fitted : array of bool, shape (n_channels, n_times), or None
            Where the fit of a decay would alter a response; for sets that have it.

        Raises
        ------
        OutOfSpace
            The disk is full; what was written is removed.
        """
        if index != self._next or index >= self.contents.shape[0]:
            raise ValueError(f"epoch {self._next} of {self.contents.shape[0]} is expected, received {index}")
        if data.shape != self.contents.shape[1:] or replaced.shape != data.shape:
            raise ValueError(
                f"expected {self.contents.shape[1:]}, received {data.shape} and {replaced.shape}"
            )
        if (decay_fitted is not None) != self.contents.decay_fitted:
            raise ValueError("decay_fitted must be given for a set that has it, and for no other")
        volts: NDArray[Any] = data.astype(self.contents.dtype, copy=False)
        with self._whole_or_nothing():
            for region in self._data:
                region.write(index, volts)
            if self._replaced is not None:
                self._replaced.write(index, replaced)
            if self._decay_fitted is not None and decay_fitted is not None:
                self._decay_fitted.write(index, decay_fitted)
        self._hash.add(volts, replaced, decay_fitted)
        self._next += 1

    def finish(
        self, rank: int, extra_provenance: Mapping[str, object], save_estimates: Callable[[Path], None]
    ) -> Path:
        """Write what stands beside the containers, read everything back, and put the set in its place.

        Parameters
        ----------
        rank : int
            Of the data written.
        extra_provenance : mapping
            JSON-able; added to the contents' own.
        save_estimates : callable
            Writes the estimates to the path it is given.

        Returns
        -------
        Path
            The set's folder.

        Raises
        ------
        SetError, OutOfSpace
            The disk refuses; what was written is removed.
        PulsemendError
            What was read back is not what was written.
        """
        if self._part is None or self._next != self.contents.shape[0]:
            raise ValueError(f"{self._next} of {self.contents.shape[0]} epochs were written")
        part = self._part
        with self._whole_or_nothing():
            self._close()
            if Format.HDF5 in self.contents.formats:
                seal_hdf5(self._path(names.EPOCHS_H5), self._hash.hexdigest(), rank)
            self._write_beside(rank, extra_provenance, save_estimates)
            for path in sorted(part.iterdir()):
                sync_file(path)
            self._write_checksums(part)
            sync_folder(part)
            publish(part, self.folder, overwrite=self._overwrite)
        self._part = None
        return self.folder

    @property
    def content_sha256(self) -> str:
        """Identity of the data written so far."""
        return self._hash.hexdigest()

    def abort(self) -> None:
        """Remove everything that was written. May be called at any time, and again."""
        self._close()
        if self._part is not None:
            drop_part(self._part)
            self._part = None

    def __enter__(self) -> Self:
        return self.open()

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        # Left without `finish`, there is no set to keep either.
        self.abort()

    @contextmanager
    def _whole_or_nothing(self) -> Iterator[None]:
        """Remove what was written, whatever is raised inside."""
        try:
            with user_errors(self.folder):
                yield
        except BaseException:
            self.abort()
            raise

    def _path(self, name: str) -> Path:
        return file_in(self._part or self.folder, self.folder.name, name)

    def _close(self) -> None:
        for region in (*self._data, self._replaced, self._decay_fitted):
            if region is not None:
                region.close()
        self._data, self._replaced, self._decay_fitted = [], None, None

    def _write_beside(
        self, rank: int, extra: Mapping[str, object], save_estimates: Callable[[Path], None]
    ) -> None:
        contents = self.contents
        provenance = {
            **contents.provenance,
            **extra,
            "set": set_facts(contents, rank, self._hash.hexdigest()),
            "safety_notice": list(SAFETY_NOTICE),
        }
        texts = {
            names.EPOCHS_TSV: epochs_text(contents),
            names.LEDGER_TSV: ledger_text(contents),
            names.PULSES_TSV: pulses_text(contents),
            names.CHANNELS_TSV: channels_text(contents),
            names.PLAN_TOML: contents.plan_text,
            names.MARKS_TOML: contents.marks_text,
            names.PROVENANCE_JSON: json.dumps(provenance, indent=2, allow_nan=False) + "\n",
        }
        for name, text in texts.items():
            self._path(name).write_bytes(text.encode())
        save_estimates(self._path(names.ESTIMATES_H5))

    def _write_checksums(self, part: Path) -> None:
        """Read the set back; what was read gives the checksums."""
        items, digests = finish(read_back(part, self.folder.name))
        wrong = [item for item in items if not item.passed and item.id != "conditions"]
        if wrong:
            raise PulsemendError(
                f"what was read back is not what was written: {wrong[0].title}: {wrong[0].detail}",
                where=str(self.folder),
                todo="Nothing was kept. Check the disk and run again",
            )
        path = self._path(names.CHECKSUMS)
        path.write_bytes(checksums_text(digests))
        sync_file(path)


def check_place(parent: Path, stem: str, *, overwrite: bool) -> None:
    """Put in order what dead processes left, and say early what would be said at the end.

    Parameters
    ----------
    parent : Path
        Folder of the sets.
    stem : str
        The recording's name.
    overwrite : bool
        Whether a set that stands there is replaced.

    Raises
    ------
    SetError
        The set exists, what stands there is none, or the name cannot be a folder's.
    """
    check_name(stem)
    folder = set_folder(parent.absolute(), stem)
    recover(folder)
    if folder.exists() or folder.is_symlink():
        if not overwrite:
            raise SetError("the set exists", where=str(folder), todo="Use --overwrite to replace it")
        check_replaceable(folder)


def check_contents(contents: SetContents) -> None:
    """Refuse what cannot be written, before anything is.

    Parameters
    ----------
    contents : SetContents
        The set.

    Raises
    ------
    SetError, NoEpochs, OutOfSpace
    """
    if not contents.epochs:
        raise NoEpochs("no epoch is kept, so there is nothing to write", where=contents.stem)
    if not contents.formats:
        raise SetError("no format is chosen", where="export.formats", todo="Choose hdf5, fif or both")
    if Format.MAT in contents.formats:
        raise SetError("mat is not in this version", where="export.formats", todo="Choose hdf5, fif or both")
    if Format.FIF in contents.formats:
        _check_fif(contents)
    texts = [channel.name for channel in contents.channels]
    for row in contents.ledger:
        texts += [*row.labels, *row.labels.values()]
    if any("\x00" in text for text in texts):
        raise SetError("a channel name or a label holds a zero character", where=contents.stem)
    taken = [column for column in contents.label_columns if column in FIXED_COLUMNS]
    if taken:
        raise SetError(f"the label {taken[0]} has the name of a fixed column", where=contents.stem)


def _check_fif(contents: SetContents) -> None:
    if contents.fill is Fill.LEAVE:
        raise SetError(
            'FIF cannot hold the missing samples of fill "leave"',
            where="export.formats",
            todo='Choose formats = ["hdf5"] or another fill',
        )
    size = fif_bytes(contents)
    if size > LARGEST_BYTES:
        raise OutOfSpace(
            f"FIF would take {size / 1e9:.2f} GB; the format is used up to {LARGEST_BYTES / 1e9:.1f} GB",
            where="export.formats",
            todo='Choose formats = ["hdf5"], which has no such limit',
        )


def needed_bytes(contents: SetContents) -> int:
    """Bytes that the set will take at most.

    Parameters
    ----------
    contents : SetContents
        The set.
    """
    samples = int(np.prod(contents.shape))
    needed = _ROOM_BESIDE + 2 * 256 * (len(contents.ledger) + len(contents.pulses))
    if Format.HDF5 in contents.formats:
        needed += samples * (contents.dtype.itemsize + 1 + contents.decay_fitted)
    if Format.FIF in contents.formats:
        needed += fif_bytes(contents)
    return needed


def set_facts(contents: SetContents, rank: int, content_sha256: str) -> dict[str, Any]:
    """Collect what the provenance file says about the files of the set.

    Parameters
    ----------
    contents : SetContents
        The set.
    rank : int
        Of the samples.
    content_sha256 : str
        See `content_hash`.
    """
    real_names = [channel.name for channel in contents.channels]
    return {
        "schema": names.SCHEMA,
        "formats": [kind.value for kind in contents.formats],
        "precision": contents.precision.value,
        "unit": "V",
        "epochs": contents.shape[0],
        "channels": contents.shape[1],
        "samples_per_epoch": contents.shape[2],
        "rate_hz": contents.rate_hz,
        "recorded_rate_hz": contents.recorded_rate_hz,
        "zero": contents.zero,
        "first_time_s": float(contents.times[0]),
        "candidates": len(contents.ledger),
        "fates": {fate.value: count for fate, count in contents.fates.items()},
        "pulses": len(contents.pulses),
        "rank": rank,
        "replaced_reach_s": contents.replaced_reach_s,
        "decay_fitted": contents.decay_fitted,
        "source_sha256": contents.source_sha256,
        "content_sha256": content_sha256,
        "names_in_fif": {
            real: name for real, name in zip(real_names, fif_names(real_names), strict=True) if real != name
        },
    }
