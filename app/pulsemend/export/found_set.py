"""Reading everything of an epoch set that can be read, and noting what cannot.

Nothing here judges; `integrity` and `readiness` do. Samples are read epoch by epoch.
"""

from __future__ import annotations

import json
import struct
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import PlanError, SetError
from pulsemend.export import contents as names
from pulsemend.export.checksums import file_sha256, read_checksums
from pulsemend.export.content_hash import ContentHash
from pulsemend.export.fif import FifFacts, read_fif
from pulsemend.export.folders import file_in
from pulsemend.export.hdf5 import Hdf5Facts, read_hdf5
from pulsemend.export.region import OpenRegion
from pulsemend.export.tables import Table, read_table
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.vocabulary import ChannelType, Fill
from pulsemend.progress import Progress, Work

_DAMAGE = (
    OSError,
    EOFError,
    LookupError,
    ValueError,
    TypeError,
    RuntimeError,
    AttributeError,
    ArithmeticError,
    MemoryError,
    struct.error,
)
"""What the libraries raise on files that are damaged or are something else."""


@dataclass
class FoundSet:
    """What could be read of a set; what could not is None, with the reason among the problems.

    Parameters
    ----------
    folder : Path
    prefix : str
        What the files' names start with.
    present : frozenset of str
        Names of the files that are there.
    digests, listed : dict of str to str
        SHA-256 by file name: of what is there, and as the checksums say; `listed` is None without them.
    problems : dict of str to str
        What is wrong, by file or by what was tried.
    hdf5, fif, plan, tables
        Containers without their samples, the plan, tables by name.
    facts : dict or None
        The part of the provenance file about the set.
    content_sha256 : str
        As computed from what was read.
    not_finite : list of str
        Places of samples that are not finite, the first of every epoch.
    unequal : list of int
        Epochs that differ between the containers.
    shares : list of float
        Replaced share of every epoch.
    decay_shares : list of float
        Share of every epoch that `/decay_fitted` marks; empty where the set has none.
    ranges_v : list of float
        Largest range of every epoch over its good EEG channels, in volts.
    """

    folder: Path
    prefix: str
    present: frozenset[str] = frozenset()
    digests: dict[str, str] = field(default_factory=dict)
    listed: dict[str, str] | None = None
    problems: dict[str, str] = field(default_factory=dict)
    hdf5: Hdf5Facts | None = None
    fif: FifFacts | None = None
    plan: Plan | None = None
    facts: dict[str, Any] | None = None
    tables: dict[str, Table] = field(default_factory=dict)
    content_sha256: str = ""
    not_finite: list[str] = field(default_factory=list)
    unequal: list[int] = field(default_factory=list)
    shares: list[float] = field(default_factory=list)
    decay_shares: list[float] = field(default_factory=list)
    ranges_v: list[float] = field(default_factory=list)

    def path(self, name: str) -> Path:
        """Path of one of the set's files."""
        return file_in(self.folder, self.prefix, name)

    @contextmanager
    def reading(self, name: str) -> Iterator[None]:
        """Note what is wrong with a file instead of raising it."""
        try:
            yield
        except FileNotFoundError:
            self.problems[name] = "is missing"
        except _DAMAGE as error:
            self.problems[name] = " ".join(str(error).split()) or type(error).__name__


def find_prefix(folder: Path) -> str:
    """Find what the files' names start with: the folder's own name unless it was renamed.

    Parameters
    ----------
    folder : Path
        Of the set.

    Raises
    ------
    SetError
        The folder is no set.
    """
    if not folder.is_dir():
        raise SetError("is no folder", where=str(folder), todo="Give the folder of an epoch set")
    known = (*names.CONTAINERS.values(), *names.SIDE_FILES, names.CHECKSUMS)
    counts: Counter[str] = Counter()
    for path in folder.iterdir():
        for name in known:
            if path.name.endswith(f"{names.SUFFIX}_{name}"):
                counts[path.name.removesuffix(f"_{name}")] += 1
    if not counts:
        raise SetError(
            "is no epoch set: it holds none of a set's files",
            where=str(folder),
            todo=f"Give the folder whose name ends with {names.SUFFIX}",
        )
    own = folder.resolve().name
    return own if counts[own] else counts.most_common(1)[0][0]


def read_found(folder: Path, prefix: str) -> Work[FoundSet]:
    """Read whatever can be read.

    Parameters
    ----------
    folder : Path
        Of the set.
    prefix : str
        What the files' names start with.

    Returns
    -------
    FoundSet
        Whole, whatever is wrong with the files.
    """
    found = FoundSet(folder, prefix)
    found.present = frozenset(path.name for path in found.folder.iterdir() if path.is_file())
    listed = sorted(found.present - {found.path(names.CHECKSUMS).name})
    sizes = {name: (found.folder / name).stat().st_size for name in listed}
    total, done = 2.0 * sum(sizes.values()), 0.0
    for name in listed:
        yield Progress("reading back", done, total)
        with found.reading(name):
            found.digests[name] = file_sha256(found.folder / name)
        done += sizes[name]
    _read_beside(found)
    with found.reading(names.CHECKSUMS):
        found.listed = read_checksums(found.path(names.CHECKSUMS))
    path = found.path(names.EPOCHS_H5)
    if path.name in found.present:
        with found.reading(names.EPOCHS_H5):
            # The HDF5 library may never return from a file with damaged structures.
            digest = found.digests.get(path.name)
            if digest is None:
                raise ValueError("cannot be read, so it is not opened")
            if found.listed is not None and found.listed.get(path.name) != digest:
                raise ValueError("was changed after it was written, so it is not opened")
            found.hdf5 = read_hdf5(path)
    if found.path(names.EPO_FIF).name in found.present:
        with found.reading(names.EPO_FIF):
            found.fif = read_fif(found.path(names.EPO_FIF))
    yield from _read_samples(found, done, total)
    return found


def _read_beside(found: FoundSet) -> None:
    for name in (names.EPOCHS_TSV, names.LEDGER_TSV, names.PULSES_TSV, names.CHANNELS_TSV):
        with found.reading(name):
            found.tables[name] = read_table(found.path(name))
    with found.reading(names.PROVENANCE_JSON):
        facts = json.loads(found.path(names.PROVENANCE_JSON).read_bytes())["set"]
        found.facts = dict(facts)
    try:
        with found.reading(names.PLAN_TOML):
            found.plan = parse_plan(found.path(names.PLAN_TOML).read_bytes().decode(), names.PLAN_TOML).plan
    except PlanError as error:
        found.problems[names.PLAN_TOML] = str(error)


def _read_samples(found: FoundSet, done: float, total: float) -> Work[None]:
    """Go through the samples once: finite, equal in both containers, hashed, shares of replaced samples."""
    h5, fif = found.hdf5, found.fif
    main = h5.data if h5 is not None else fif.data if fif is not None else None
    if main is None:
        return
    both = h5 is not None and fif is not None and h5.data.shape == fif.data.shape
    missing_allowed = found.plan is not None and found.plan.pulses.fill is Fill.LEAVE
    content = None
    if h5 is not None:
        dtype = np.dtype(np.float32) if main.dtype == "<f4" else np.dtype(np.float64)
        with found.reading(names.EPOCHS_H5):
            content = ContentHash(h5.channels, h5.labels, dtype, main.shape)
    with (
        found.reading("samples"),
        OpenRegion(main) as samples,
        OpenRegion(h5.replaced if h5 is not None else main) as flags,
        OpenRegion(fif.data if fif is not None else main) as others,
        OpenRegion((h5.decay_fitted if h5 is not None else None) or main) as fitted,
    ):
        good = None
        if h5 is not None:
            good = [c.type is ChannelType.EEG and c.status == "good" for c in h5.channels]
        for index in range(main.shape[0]):
            if index % 16 == 0:
                yield Progress("reading back", done + (total - done) * index / main.shape[0], total)
            volts = samples.read(index)
            finite = np.isfinite(volts)
            if good is not None and len(good) == len(volts) and any(good) and finite.any():
                found.ranges_v.append(float(np.ptp(np.nan_to_num(volts[good]), axis=1).max()))
            if h5 is not None:
                replaced = flags.read(index)
                found.shares.append(np.count_nonzero(replaced) / replaced.size)
                marked = fitted.read(index) if h5.decay_fitted is not None else None
                if marked is not None:
                    found.decay_shares.append(np.count_nonzero(marked) / marked.size)
                if missing_allowed:
                    finite |= replaced
                if content is not None:
                    content.add(volts, replaced, marked)
            if not finite.all():
                channel, time = np.argwhere(~finite)[0].tolist()
                found.not_finite.append(f"epoch {index}, channel {channel}, sample {time}")
            if both and not _same_bits(volts, others.read(index)):
                found.unequal.append(index)
        if content is not None:
            found.content_sha256 = content.hexdigest()


def _same_bits(little: NDArray[Any], big: NDArray[Any]) -> bool:
    """Whether two arrays of either byte order hold the same bits; values would take -0 for 0."""
    if little.dtype.itemsize != big.dtype.itemsize:
        return False
    kind = f"u{little.dtype.itemsize}"
    return bool(np.array_equal(little.view(f"<{kind}"), big.view(f">{kind}")))
