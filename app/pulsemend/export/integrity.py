"""The checks of integrity: whether a set is what was written, and whether its parts agree."""

from __future__ import annotations

import math
from collections import Counter

import numpy as np

from pulsemend.export import contents as names
from pulsemend.export.check_items import CheckItem, integrity_item
from pulsemend.export.contents import Labels, zero_samples
from pulsemend.export.found_set import FoundSet
from pulsemend.export.hdf5 import Hdf5Facts
from pulsemend.export.tables import cell
from pulsemend.model.vocabulary import Fate, Fill

_SAME_S = 1e-9
_SAME_SHARE = 1e-6


def check_integrity(found: FoundSet) -> list[CheckItem]:
    """Check what can be checked of any set, with checksums or without.

    Parameters
    ----------
    found : FoundSet
        What was read.
    """
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
        *_decay_fitted(found),
        _conditions(found),
    ]


def check_name(found: FoundSet) -> CheckItem:
    """Check that folder and files share their name.

    Parameters
    ----------
    found : FoundSet
        What was read.
    """
    own = found.folder.resolve().name
    problems = [] if own == found.prefix else ["the folder or its files were renamed"]
    return integrity_item("name", "folder and files share their name", own, found.prefix, problems)


def _files(found: FoundSet) -> CheckItem:
    kinds = (found.facts or {}).get("formats")
    containers = [
        name for kind, name in names.CONTAINERS.items() if isinstance(kinds, list) and kind in kinds
    ]
    wanted = [*(containers or names.CONTAINERS.values()), *names.SIDE_FILES]
    missing = [name for name in wanted if found.path(name).name not in found.present]
    if not containers and len(missing) == 1 and missing[0] in names.CONTAINERS.values():
        missing = []  # the provenance file is unreadable: one container may be all there was
    value = f"{len(wanted) - len(missing)} of {len(wanted)}"
    return integrity_item(
        "files", "files of the set", value, "all", [f"{name} is missing" for name in missing]
    )


def check_checksums(found: FoundSet) -> CheckItem:
    """Check that every file is as its checksum says, and that none is missing.

    Parameters
    ----------
    found : FoundSet
        What was read.
    """
    title, limit = "checksums of the files", "as written"
    if found.listed is None:
        problems = [f"{names.CHECKSUMS}: {found.problems[names.CHECKSUMS]}"]
        return integrity_item("checksums", title, "none", limit, problems)
    listed, digests = found.listed, found.digests
    problems = [f"{name} was changed" for name in listed if digests.get(name, listed[name]) != listed[name]]
    problems += [
        f"{name} {'cannot be read' if name in found.present else 'is missing'}"
        for name in listed
        if name not in digests
    ]
    wanted = (found.path(name).name for name in (*names.CONTAINERS.values(), *names.SIDE_FILES))
    problems += [f"{name} is not listed" for name in wanted if name in digests and name not in listed]
    value = f"{sum(digests.get(name) == digest for name, digest in listed.items())} of {len(listed)}"
    return integrity_item("checksums", title, value, limit, problems)


def _readable(found: FoundSet) -> CheckItem:
    problems = [f"{name}: {problem}" for name, problem in found.problems.items() if name != names.CHECKSUMS]
    for where, facts in (("provenance", found.facts), ("epochs.h5", found.hdf5 and found.hdf5.attributes)):
        schema = (facts or {}).get("schema", names.SCHEMA)
        if not np.array_equal(schema, names.SCHEMA):
            problems.append(f"{where} is of schema {schema}; this version reads {names.SCHEMA}")
    value = "all" if not problems else f"all but {len(problems)}"
    return integrity_item("readable", "files can be read", value, "all", problems)


def _plan(found: FoundSet) -> CheckItem:
    problems = []
    if found.plan is None:
        problems.append(found.problems.get(names.PLAN_TOML, "is missing"))
    elif found.hdf5 is not None:
        text = found.path(names.PLAN_TOML).read_bytes().decode()
        if not _is(found.hdf5.attributes.get("plan"), text):
            problems.append("plan.toml and the plan inside epochs.h5 differ")
    return integrity_item(
        "plan",
        "the plan the set was made with",
        "changed" if problems else "as written",
        "as written",
        problems,
    )


def _shapes(found: FoundSet) -> CheckItem:
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
    return integrity_item("shapes", "epochs x channels x samples", value, "the same in every file", problems)


def _rate_and_length(found: FoundSet) -> CheckItem:
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
            if not 0 < float(h5.attributes["rate_hz"]) < math.inf:
                raise ValueError(f"epochs.h5 says {h5.attributes['rate_hz']} Hz")
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
        return integrity_item("rate", "rate and length", value, "the plan's, in every file", problems)
    return integrity_item(
        "rate", "rate and length", "unknown", "the plan's, in every file", [found.problems["rate"]]
    )


def _finite(found: FoundSet) -> CheckItem:
    limit = "all finite"
    if found.plan is not None and found.plan.pulses.fill is Fill.LEAVE:
        limit = "all finite but replaced ones"
    problems = [*found.not_finite]
    if "samples" in found.problems:
        problems.append(found.problems["samples"])
    if found.hdf5 is None and found.fif is None:
        problems.append("no container can be read")
    return integrity_item("finite", "samples", "not finite" if problems else limit, limit, problems)


def _content(found: FoundSet) -> CheckItem:
    title, limit = "content hash", "as written"
    if found.hdf5 is None:
        if found.path(names.EPOCHS_H5).name in found.present:
            return integrity_item("content", title, "unknown", limit, ["epochs.h5 cannot be read"])
        # Which samples were replaced stands in HDF5 only.
        return integrity_item("content", title, "not computed: the set has no epochs.h5", limit, [])
    recorded = {"epochs.h5": found.hdf5.attributes.get("content_sha256")}
    if found.facts is not None:
        recorded["provenance"] = found.facts.get("content_sha256")
    problems = [
        f"{where} says {text}" for where, text in recorded.items() if not _is(text, found.content_sha256)
    ]
    source = found.hdf5.attributes.get("source_sha256")
    if found.facts is not None and not _is(source, found.facts.get("source_sha256")):
        problems.append("epochs.h5 and provenance name different recordings")
    return integrity_item("content", title, found.content_sha256[:16] or "unknown", limit, problems)


def _containers_equal(found: FoundSet) -> CheckItem:
    title, limit = "HDF5 and FIF hold the same", "bit for bit"
    h5, fif = found.hdf5, found.fif
    present = [name for name in names.CONTAINERS.values() if found.path(name).name in found.present]
    if len(present) < 2:
        return integrity_item("equal", title, "one container only", limit, [])
    if h5 is None or fif is None:
        return integrity_item("equal", title, "unknown", limit, ["one of them cannot be read"])
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
    return integrity_item("equal", title, "different" if problems else "the same", limit, problems)


def _ledger(found: FoundSet) -> CheckItem:
    """Kept + left out = candidates; kept rows = epochs."""
    title, limit = "ledger", "kept + left out = candidates, kept = epochs"
    table = found.tables.get(names.LEDGER_TSV)
    if table is None or not {"name", "trial", "piece", "fate"} <= set(table):
        return integrity_item("ledger", title, "unknown", limit, ["ledger.tsv cannot be read"])
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
    return integrity_item("ledger", title, value, limit, problems)


def _labels(found: FoundSet) -> CheckItem:
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
    return integrity_item("labels", title, "different" if problems else "the same", limit, problems)


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


def _order(found: FoundSet) -> CheckItem:
    """Epochs stand in order of first sample, then of rule."""
    title, limit = "order of the epochs", "by first sample, then by rule"
    table = found.tables.get(names.EPOCHS_TSV, {})
    rules = {} if found.plan is None else {cell(r.name): i for i, r in enumerate(found.plan.epochs.rule)}
    with found.reading("order"):
        firsts = np.array(table["onset_s"], float) + np.array(table["start_s"], float)
        ranks = np.array([rules.get(name, -1) for name in table["name"]])
        steps, rule_steps = np.diff(firsts), np.diff(ranks)
        # Two epochs that begin at the same sample of the recording may have anchors within one sample of it.
        half_s = (
            0.5 / found.plan.filter.rate_hz if found.plan is not None and found.plan.filter.rate_hz else 0.0
        )
        back = (steps < -half_s - _SAME_S) | ((np.abs(steps) < _SAME_S) & (rule_steps < 0))
        problems = [
            f"epoch {index + 1} stands before epoch {index}" for index in np.flatnonzero(back).tolist()
        ]
        if table["index"] != tuple(str(index) for index in range(len(firsts))):
            problems.append("the column index does not count from 0")
        return integrity_item("order", title, "not in order" if problems else "in order", limit, problems)
    return integrity_item("order", title, "unknown", limit, [f"epochs.tsv: {found.problems['order']}"])


def _replaced(found: FoundSet) -> CheckItem:
    title, limit = "replaced share per epoch", "as in the samples"
    if found.hdf5 is None:
        return integrity_item("replaced", title, "not computed: no epochs.h5", limit, [])
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
    return integrity_item("replaced", title, f"{mean:.2%} on average", limit, problems)


def _decay_fitted(found: FoundSet) -> list[CheckItem]:
    """Check the marks of fitted decays, in a set that has any."""
    told = bool((found.facts or {}).get("decay_fitted"))
    there = found.hdf5 is not None and found.hdf5.decay_fitted is not None
    if found.hdf5 is None or not (told or there):
        return []
    problems = []
    if told != there:
        problems.append("provenance and epochs.h5 disagree whether decays were fitted")
    with found.reading("decay share"):
        column = np.array(found.tables[names.EPOCHS_TSV]["decay_share"], float)
        shares = found.decay_shares
        if column.shape != (len(shares),) or not np.allclose(column, shares, rtol=0, atol=_SAME_SHARE):
            problems.append("epochs.tsv and /decay_fitted differ")
    if "decay share" in found.problems:
        problems.append(f"epochs.tsv: {found.problems['decay share']}")
    mean = float(np.mean(found.decay_shares)) if found.decay_shares else 0.0
    title = "share per epoch where the decay's fit alters a response"
    return [integrity_item("decay_fitted", title, f"{mean:.2%} on average", "as in the samples", problems)]


def _conditions(found: FoundSet) -> CheckItem:
    """Every rule of the plan has epochs."""
    title, limit = "conditions without epochs", "none"
    counts = epochs_per_rule(found)
    if not counts:
        return integrity_item(
            "conditions", title, "unknown", limit, ["the plan or epochs.tsv cannot be read"]
        )
    empty = [name for name, count in counts.items() if not count]
    return integrity_item(
        "conditions", title, ", ".join(empty) or "none", limit, [f"{name} has no epoch" for name in empty]
    )


def epochs_per_rule(found: FoundSet) -> dict[str, int]:
    """Count the epochs of every rule of the plan; empty if either cannot be read.

    Parameters
    ----------
    found : FoundSet
        What was read.
    """
    table = found.tables.get(names.EPOCHS_TSV, {})
    if found.plan is None or "name" not in table:
        return {}
    counts = Counter(table["name"])
    return {rule.name: counts[cell(rule.name)] for rule in found.plan.epochs.rule}


def _is(value: object, text: object) -> bool:
    """Whether an attribute is that text; a damaged one may be an array, which compares to an array."""
    return isinstance(value, str) and value == text
