"""Reading an epoch set back: the named checks of its integrity, and the few facts about readiness known here.

A set that was damaged, cut short or edited gives items that are not passed, never a traceback. Samples are
read epoch by epoch.
"""

from __future__ import annotations

import json
import math
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal, TypeVar

import numpy as np

from pulsemend.errors import PlanError, SetError
from pulsemend.export import contents as names
from pulsemend.export.checksums import file_sha256, read_checksums
from pulsemend.export.content_hash import ContentHash
from pulsemend.export.contents import Labels, zero_samples
from pulsemend.export.fif import FifFacts, read_fif
from pulsemend.export.folders import file_in
from pulsemend.export.hdf5 import Hdf5Facts, read_hdf5
from pulsemend.export.region import OpenRegion
from pulsemend.export.tables import Table, cell, read_table
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.vocabulary import ChannelType, Fate, Fill
from pulsemend.progress import Progress, Work

T = TypeVar("T")

_DAMAGE = (OSError, EOFError, KeyError, ValueError, TypeError, RuntimeError, AttributeError, IndexError)
"""What the libraries raise on files that are damaged or are something else."""

_SAME_S = 1e-9
_SAME_SHARE = 1e-6


@dataclass(frozen=True)
class CheckItem:
    """One named check.

    Parameters
    ----------
    id : str
        For scripts.
    title : str
        What is checked.
    value, limit : str
        What was found, and what is asked for.
    passed : bool
    kind : {"integrity", "readiness"}
        Integrity decides about the exit code.
    detail : str
        Where, if not passed.
    """

    id: str
    title: str
    value: str
    limit: str
    passed: bool
    kind: Literal["integrity", "readiness"] = "integrity"
    detail: str = ""


@dataclass(frozen=True)
class CheckResult:
    """All checks of a set.

    Parameters
    ----------
    folder : Path
    items : tuple of CheckItem
    """

    folder: Path
    items: tuple[CheckItem, ...]

    @property
    def ok(self) -> bool:
        """Whether every check of integrity is passed."""
        return all(item.passed for item in self.items if item.kind == "integrity")

    @property
    def within_limits(self) -> bool:
        """Whether every item, of readiness too, is within its limit."""
        return all(item.passed for item in self.items)


@dataclass
class _Set:
    """What could be read of a set; what could not is None, with the reason among the problems."""

    folder: Path
    prefix: str
    present: frozenset[str] = frozenset()
    digests: dict[str, str] = field(default_factory=dict)
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

    def path(self, name: str) -> Path:
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
    prefix = _prefix(folder)
    found = yield from _read(_Set(folder, prefix))
    items = [_named(found), _checksums(found), *_integrity(found), *_readiness(found)]
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
    found = yield from _read(_Set(folder, prefix))
    return _integrity(found), found.digests


def _prefix(folder: Path) -> str:
    """Find what the files' names start with: the folder's own name unless it was renamed."""
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


def _read(found: _Set) -> Work[_Set]:
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
    if found.path(names.EPOCHS_H5).name in found.present:
        with found.reading(names.EPOCHS_H5):
            found.hdf5 = read_hdf5(found.path(names.EPOCHS_H5))
    if found.path(names.EPO_FIF).name in found.present:
        with found.reading(names.EPO_FIF):
            found.fif = read_fif(found.path(names.EPO_FIF))
    yield from _read_samples(found, done, total)
    return found


def _read_beside(found: _Set) -> None:
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


def _read_samples(found: _Set, done: float, total: float) -> Work[None]:
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
    ):
        for index in range(main.shape[0]):
            if index % 16 == 0:
                yield Progress("reading back", done + (total - done) * index / main.shape[0], total)
            volts = samples.read(index)
            finite = np.isfinite(volts)
            if h5 is not None:
                replaced = flags.read(index)
                found.shares.append(np.count_nonzero(replaced) / replaced.size)
                if missing_allowed:
                    finite |= replaced
                if content is not None:
                    content.add(volts, replaced)
            if not finite.all():
                channel, time = np.argwhere(~finite)[0].tolist()
                found.not_finite.append(f"epoch {index}, channel {channel}, sample {time}")
            if both and not _same_bits(volts, others.read(index)):
                found.unequal.append(index)
        if content is not None:
            found.content_sha256 = content.hexdigest()


def _same_bits(little: np.ndarray[Any, Any], big: np.ndarray[Any, Any]) -> bool:
    """Whether two arrays of either byte order hold the same bits; values would take -0 for 0."""
    if little.dtype.itemsize != big.dtype.itemsize:
        return False
    kind = f"u{little.dtype.itemsize}"
    return bool(np.array_equal(little.view(f"<{kind}"), big.view(f">{kind}")))


def _integrity(found: _Set) -> list[CheckItem]:
    return [
        _files(found),
        _readable(found),
        _plan(found),
        _shapes(found),
        _rate_and_length(found),
        _finite(found),
        _content(found),
        _containers_equal(found),
        _ledger(found),
        _labels(found),
        _order(found),
        _replaced(found),
        _conditions(found),
    ]


def _item(
    item_id: str, title: str, value: str, limit: str, problems: list[str] | tuple[str, ...] | str
) -> CheckItem:
    """Make an item, passed if there is no problem; the first few problems are its detail."""
    listed = [problems] if isinstance(problems, str) and problems else list(problems)
    detail = "; ".join(listed[:3]) + (f"; and {len(listed) - 3} more" if len(listed) > 3 else "")
    return CheckItem(item_id, title, value, limit, not listed, detail=detail)


def _named(found: _Set) -> CheckItem:
    own = found.folder.resolve().name
    problem = "" if own == found.prefix else "the folder or its files were renamed"
    return _item("name", "folder and files share their name", own, found.prefix, problem)


def _files(found: _Set) -> CheckItem:
    kinds = (found.facts or {}).get("formats", [])
    containers = [name for kind, name in names.CONTAINERS.items() if kind in kinds]
    wanted = [*(containers or names.CONTAINERS.values()), *names.SIDE_FILES]
    missing = [name for name in wanted if found.path(name).name not in found.present]
    if not containers and len(missing) == 1 and missing[0] in names.CONTAINERS.values():
        missing = []  # the provenance file is unreadable: one container may be all there was
    value = f"{len(wanted) - len(missing)} of {len(wanted)}"
    return _item("files", "files of the set", value, "all", [f"{name} is missing" for name in missing])


def _checksums(found: _Set) -> CheckItem:
    title, limit = "checksums of the files", "as written"
    path = found.path(names.CHECKSUMS)
    with found.reading(names.CHECKSUMS):
        listed = read_checksums(path)
        problems = [
            f"{name} was changed" for name in listed if found.digests.get(name, "") not in ("", listed[name])
        ]
        problems += [f"{name} is missing" for name in listed if name not in found.digests]
        wanted = (found.path(name).name for name in (*names.CONTAINERS.values(), *names.SIDE_FILES))
        problems += [
            f"{name} is not listed" for name in wanted if name in found.digests and name not in listed
        ]
        return _item("checksums", title, f"{len(listed) - len(problems)} of {len(listed)}", limit, problems)
    return _item("checksums", title, "none", limit, f"{names.CHECKSUMS}: {found.problems[names.CHECKSUMS]}")


def _readable(found: _Set) -> CheckItem:
    problems = [f"{name}: {problem}" for name, problem in found.problems.items() if name != names.CHECKSUMS]
    for where, facts in (("provenance", found.facts), ("epochs.h5", found.hdf5 and found.hdf5.attributes)):
        schema = (facts or {}).get("schema", names.SCHEMA)
        if not np.array_equal(schema, names.SCHEMA):
            problems.append(f"{where} is of schema {schema}; this version reads {names.SCHEMA}")
    value = "all" if not problems else f"all but {len(problems)}"
    return _item("readable", "files can be read", value, "all", problems)


def _plan(found: _Set) -> CheckItem:
    problems = []
    if found.plan is None:
        problems.append(found.problems.get(names.PLAN_TOML, "is missing"))
    elif found.hdf5 is not None:
        text = found.path(names.PLAN_TOML).read_bytes().decode()
        if found.hdf5.attributes.get("plan") != text:
            problems.append("plan.toml and the plan inside epochs.h5 differ")
    return _item(
        "plan",
        "the plan the set was made with",
        "changed" if problems else "as written",
        "as written",
        problems,
    )


def _shapes(found: _Set) -> CheckItem:
    shapes: dict[str, tuple[int, ...]] = {}
    if found.hdf5 is not None:
        h5 = found.hdf5
        shapes["epochs.h5"] = h5.data.shape
        shapes["its labels, channels and times"] = (len(h5.labels.name), len(h5.channels), len(h5.times))
    if found.fif is not None:
        shapes["epo.fif"] = found.fif.data.shape
    facts = found.facts
    if facts is not None:
        shapes["provenance"] = tuple(facts.get(key, 0) for key in ("epochs", "channels", "samples_per_epoch"))
    rows = {name: len(next(iter(table.values()), ())) for name, table in found.tables.items()}
    first = next(iter(shapes.values()), (0, 0, 0))
    problems = [f"{name} {shape}" for name, shape in shapes.items() if shape != first]
    for name, place in ((names.EPOCHS_TSV, 0), (names.CHANNELS_TSV, 1)):
        if rows.get(name, first[place]) != first[place]:
            problems.append(f"{name} has {rows[name]} rows, expected {first[place]}")
    if facts is not None and rows.get(names.PULSES_TSV, facts.get("pulses")) != facts.get("pulses"):
        problems.append(
            f"{names.PULSES_TSV} has {rows[names.PULSES_TSV]} rows, expected {facts.get('pulses')}"
        )
    if not shapes:
        problems.append("no container can be read")
    value = " x ".join(str(size) for size in first)
    return _item("shapes", "epochs x channels x samples", value, "the same in every file", problems)


def _rate_and_length(found: _Set) -> CheckItem:
    rates: dict[str, float] = {}
    lengths: dict[str, int] = {}
    problems: list[str] = []
    facts = found.facts or {}
    with found.reading("rate"):
        if facts:
            rates["provenance"], lengths["provenance"] = (
                float(facts["rate_hz"]),
                int(facts["samples_per_epoch"]),
            )
        if found.hdf5 is not None:
            h5 = found.hdf5
            rates["epochs.h5"], lengths["epochs.h5"] = float(h5.attributes["rate_hz"]), len(h5.times)
            ideal = h5.times[0] + np.arange(len(h5.times)) / rates["epochs.h5"]
            if not np.allclose(h5.times, ideal, rtol=0.0, atol=_SAME_S):
                problems.append("/times does not run at that rate")
            if h5.zero not in ("anchor", "epoch start"):
                problems.append(f"/times counts from {h5.zero!r}")
        if found.fif is not None:
            rates["epo.fif"], lengths["epo.fif"] = found.fif.rate_hz, found.fif.data.shape[2]
        if found.plan is not None:
            rate_hz = found.plan.filter.rate_hz or float(facts.get("recorded_rate_hz", 0.0))
            if rate_hz:
                rates["plan"], lengths["plan"] = rate_hz, round(found.plan.epochs.length_s * rate_hz)
        rate_hz, length = next(iter(rates.values()), 0.0), next(iter(lengths.values()), 0)
        # FIF holds its rate in single precision.
        problems += [
            f"{where} {rate} Hz"
            for where, rate in rates.items()
            if not math.isclose(rate, rate_hz, rel_tol=1e-7)
        ]
        problems += [f"{where} {size} samples" for where, size in lengths.items() if size != length]
        value = f"{rate_hz:g} Hz, {length} samples"
        return _item("rate", "rate and length", value, "the plan's, in every file", problems)
    return _item("rate", "rate and length", "unknown", "the plan's, in every file", found.problems["rate"])


def _finite(found: _Set) -> CheckItem:
    limit = "all finite"
    if found.plan is not None and found.plan.pulses.fill is Fill.LEAVE:
        limit = "all finite but replaced ones"
    problems = [*found.not_finite]
    if "samples" in found.problems:
        problems.append(found.problems["samples"])
    if found.hdf5 is None and found.fif is None:
        problems.append("no container can be read")
    return _item("finite", "samples", "not finite" if problems else limit, limit, problems)


def _content(found: _Set) -> CheckItem:
    title, limit = "content hash", "as written"
    if found.hdf5 is None:
        if found.path(names.EPOCHS_H5).name in found.present:
            return _item("content", title, "unknown", limit, "epochs.h5 cannot be read")
        # Which samples were replaced stands in HDF5 only.
        return _item("content", title, "not computed: the set has no epochs.h5", limit, "")
    recorded = {"epochs.h5": found.hdf5.attributes.get("content_sha256")}
    if found.facts is not None:
        recorded["provenance"] = found.facts.get("content_sha256")
    problems = [f"{where} says {text}" for where, text in recorded.items() if text != found.content_sha256]
    if found.facts is not None and found.hdf5.attributes.get("source_sha256") != found.facts.get(
        "source_sha256"
    ):
        problems.append("epochs.h5 and provenance name different recordings")
    return _item("content", title, found.content_sha256[:16] or "unknown", limit, problems)


def _containers_equal(found: _Set) -> CheckItem:
    title, limit = "HDF5 and FIF hold the same", "bit for bit"
    h5, fif = found.hdf5, found.fif
    present = [name for name in names.CONTAINERS.values() if found.path(name).name in found.present]
    if len(present) < 2:
        return _item("equal", title, "one container only", limit, "")
    if h5 is None or fif is None:
        return _item("equal", title, "unknown", limit, "one of them cannot be read")
    problems = [f"epoch {index} differs" for index in found.unequal]
    if (
        h5.data.shape != fif.data.shape
        or np.dtype(h5.data.dtype).itemsize != np.dtype(fif.data.dtype).itemsize
    ):
        problems.append("shape or precision differ")
    with found.reading("events"):
        rate_hz = float(h5.attributes["rate_hz"])
        zero: names.Zero = "anchor" if h5.zero == "anchor" else "epoch start"
        zeros = zero_samples(h5.labels.onset_s, h5.labels.start_s, zero, rate_hz)
        if tuple(zeros) != fif.zero_samples or round(float(h5.times[0]) * rate_hz) != fif.first:
            problems.append("times of the epochs differ")
    if "events" in found.problems:
        problems.append(found.problems["events"])
    return _item("equal", title, "different" if problems else "the same", limit, problems)


def _ledger(found: _Set) -> CheckItem:
    """Kept + left out = candidates; kept rows = epochs."""
    title, limit = "ledger", "kept + left out = candidates, kept = epochs"
    table = found.tables.get(names.LEDGER_TSV)
    if table is None or not {"name", "trial", "piece", "fate"} <= set(table):
        return _item("ledger", title, "unknown", limit, "ledger.tsv cannot be read")
    fates = Counter(table["fate"])
    kept, candidates = fates[Fate.KEPT], len(table["fate"])
    known = {fate.value for fate in Fate}
    problems = [f"unknown fate {fate!r}" for fate in fates if fate not in known]
    keys = list(zip(table["name"], table["trial"], table["piece"], strict=True))
    if len(set(keys)) != len(keys):
        problems.append("a candidate stands there twice")
    if found.facts is not None:
        if found.facts.get("candidates") != candidates:
            problems.append(f"{candidates} rows, {found.facts.get('candidates')} candidates were counted")
        if found.facts.get("fates") != dict(fates):
            problems.append("the fates do not add up to those counted")
    epochs = found.tables.get(names.EPOCHS_TSV)
    if epochs is not None and {"name", "trial", "piece"} <= set(epochs):
        chosen = {key for key, fate in zip(keys, table["fate"], strict=True) if fate == Fate.KEPT}
        if chosen != set(zip(epochs["name"], epochs["trial"], epochs["piece"], strict=True)):
            problems.append("the rows that are kept are not the epochs")
    value = f"{kept} kept + {candidates - kept} left out = {candidates} candidates"
    return _item("ledger", title, value, limit, problems)


def _labels(found: _Set) -> CheckItem:
    """Tables and HDF5 say the same about epochs and channels."""
    title, limit = "labels and channels", "the same in tables and epochs.h5"
    problems = []
    if found.hdf5 is not None:
        for name, wanted in (
            (names.EPOCHS_TSV, _label_columns(found.hdf5.labels)),
            (names.CHANNELS_TSV, _channel_columns(found.hdf5)),
        ):
            table = found.tables.get(name, {})
            problems += [
                f"{name}: {column} differs"
                for column, values in wanted.items()
                if table.get(column) != tuple(cell(value) for value in values)
            ]
    return _item("labels", title, "different" if problems else "the same", limit, problems)


def _label_columns(labels: Labels) -> dict[str, tuple[object, ...]]:
    return {
        "name": labels.name,
        "trial": labels.trial,
        "piece": labels.piece,
        "anchor": labels.anchor,
        "onset_s": labels.onset_s,
        "start_s": labels.start_s,
        **labels.more,
    }


def _channel_columns(h5: Hdf5Facts) -> dict[str, tuple[object, ...]]:
    return {
        "name": tuple(channel.name for channel in h5.channels),
        "type": tuple(channel.type.value.upper() for channel in h5.channels),
        "status": tuple(channel.status for channel in h5.channels),
    }


def _order(found: _Set) -> CheckItem:
    """Epochs stand in order of first sample."""
    title, limit = "order of the epochs", "by first sample"
    table = found.tables.get(names.EPOCHS_TSV, {})
    with found.reading("order"):
        firsts = np.array(table["onset_s"], float) + np.array(table["start_s"], float)
        back = np.flatnonzero(np.diff(firsts) < -_SAME_S)
        problems = [f"epoch {index + 1} begins before epoch {index}" for index in back.tolist()]
        if table["index"] != tuple(str(index) for index in range(len(firsts))):
            problems.append("the column index does not count from 0")
        return _item("order", title, "not in order" if problems else "in order", limit, problems)
    return _item("order", title, "unknown", limit, f"epochs.tsv: {found.problems['order']}")


def _replaced(found: _Set) -> CheckItem:
    title, limit = "replaced share per epoch", "as in the samples"
    if found.hdf5 is None:
        return _item("replaced", title, "not computed: no epochs.h5", limit, "")
    problems = []
    with found.reading("replaced"):
        told = np.array(found.tables[names.EPOCHS_TSV]["replaced_share"], float)
        if told.shape != (len(found.shares),) or not np.allclose(
            told, found.shares, rtol=0, atol=_SAME_SHARE
        ):
            problems.append("epochs.tsv and /replaced differ")
    if "replaced" in found.problems:
        problems.append(f"epochs.tsv: {found.problems['replaced']}")
    mean = float(np.mean(found.shares)) if found.shares else 0.0
    return _item("replaced", title, f"{mean:.2%} on average", limit, problems)


def _conditions(found: _Set) -> CheckItem:
    """Every rule of the plan has epochs."""
    title, limit = "conditions without epochs", "none"
    counts = _per_rule(found)
    if not counts:
        return _item("conditions", title, "unknown", limit, "the plan or epochs.tsv cannot be read")
    empty = [name for name, count in counts.items() if not count]
    return _item(
        "conditions", title, ", ".join(empty) or "none", limit, [f"{name} has no epoch" for name in empty]
    )


def _per_rule(found: _Set) -> dict[str, int]:
    """Epochs per rule of the plan; empty if either cannot be read."""
    table = found.tables.get(names.EPOCHS_TSV, {})
    if found.plan is None or "name" not in table:
        return {}
    counts = Counter(table["name"])
    return {rule.name: counts[cell(rule.name)] for rule in found.plan.epochs.rule}


def _readiness(found: _Set) -> list[CheckItem]:
    """Values for a person to judge, each with a limit; what cannot be read is a matter of integrity."""
    items = []
    counts = _per_rule(found)
    if counts:
        value = ", ".join(f"{name} {count}" for name, count in counts.items())
        passed = 2 * min(counts.values()) >= max(counts.values())
        items.append(
            CheckItem(
                "balance", "epochs per rule", value, "fewest at least half the most", passed, "readiness"
            )
        )
    rank = (found.facts or {}).get("rank")
    if found.hdf5 is not None and isinstance(rank, int):
        eeg = sum(c.type is ChannelType.EEG and c.status == "good" for c in found.hdf5.channels)
        limit = f"at least {eeg - 1}: {eeg} good EEG channels, one less for a common reference"
        items.append(CheckItem("rank", "rank of the samples", str(rank), limit, rank >= eeg - 1, "readiness"))
    shares = _share_per_rule(found)
    if shares:
        value = ", ".join(f"{name} {share:.2%}" for name, share in shares.items())
        passed = max(shares.values()) - min(shares.values()) <= 0.01
        limit = "rules within 1 percentage point of each other"
        items.append(
            CheckItem("replaced_by_rule", "replaced share per rule", value, limit, passed, "readiness")
        )
    return items


def _share_per_rule(found: _Set) -> dict[str, float]:
    if found.hdf5 is None or len(found.shares) != len(found.hdf5.labels.name):
        return {}
    per_rule: dict[str, list[float]] = {}
    for name, share in zip(found.hdf5.labels.name, found.shares, strict=True):
        per_rule.setdefault(name, []).append(share)
    return {name: sum(shares) / len(shares) for name, shares in per_rule.items()}
