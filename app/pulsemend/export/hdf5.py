"""The HDF5 container.

    /data      (epoch, channel, time)  float32 or float64, attribute units = "V"
    /replaced  (epoch, channel, time)  bool
    /decay_fitted (epoch, channel, time)  bool; only in sets whose plan has decays fitted
    /times     (time)                  float64, attributes units = "s" and zero = "anchor" | "epoch start"
    /channels/name|type|position|status
    /labels/name|trial|piece|anchor|onset_s|start_s and one dataset per label column
    attributes of the file: schema rate_hz plan source_sha256 content_sha256 replaced_reach_s rank

Texts are UTF-8 of variable length. `/data`, `/replaced` and `/decay_fitted` are contiguous and
reserved when the file is made, so that epochs are written in place without the library in between.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from pulsemend.export.contents import SCHEMA, Labels, SetChannel, SetContents, labels_of
from pulsemend.export.region import Region
from pulsemend.model.vocabulary import ChannelType

_TEXT = h5py.string_dtype("utf-8")
_UNKNOWN_M = (np.nan, np.nan, np.nan)


@dataclass(frozen=True)
class Hdf5Facts:
    """What an epochs file says besides its samples.

    Parameters
    ----------
    data, replaced : Region
    decay_fitted : Region or None
        None where the set has none.
    times : array, shape (n_times,), float64
        Seconds from `zero`.
    zero : str
    channels : tuple of SetChannel
        Without status notes, which only the table holds.
    labels : Labels
    attributes : mapping
        Of the file.
    """

    data: Region
    replaced: Region
    decay_fitted: Region | None
    times: NDArray[np.float64]
    zero: str
    channels: tuple[SetChannel, ...]
    labels: Labels
    attributes: Mapping[str, Any]


def create_hdf5(path: Path, contents: SetContents) -> tuple[Region, Region, Region | None]:
    """Write everything but the samples, and reserve their place.

    Parameters
    ----------
    path : Path
        The file.
    contents : SetContents
        The set.

    Returns
    -------
    data, replaced : Region
        Where the samples go.
    decay_fitted : Region or None
        None where the set has none.
    """
    flags = h5py.h5t.py_create(np.dtype(bool), logical=True)
    fitted = None
    with h5py.File(path, "w") as file:
        data = _reserve(file, "data", contents.shape, h5py.h5t.py_create(contents.dtype))
        replaced = _reserve(file, "replaced", contents.shape, flags)
        if contents.decay_fitted:
            fitted = _reserve(file, "decay_fitted", contents.shape, flags)
        file["data"].attrs["units"] = "V"
        file["times"] = np.asarray(contents.times, np.float64)
        file["times"].attrs["units"] = "s"
        file["times"].attrs["zero"] = contents.zero
        _write_channels(file.create_group("channels"), contents)
        _write_labels(file.create_group("labels"), labels_of(contents), contents.later)
        file.attrs["schema"] = SCHEMA
        file.attrs["rate_hz"] = float(contents.rate_hz)
        # A text of variable length lives in the file's heap: attributes themselves end at 64 KiB.
        file.attrs["plan"] = contents.plan_text
        file.attrs["source_sha256"] = contents.source_sha256
        file.attrs["replaced_reach_s"] = float(contents.replaced_reach_s)
    return (
        Region(path, data, contents.dtype.newbyteorder("<").str, contents.shape),
        Region(path, replaced, "|b1", contents.shape),
        None if fitted is None else Region(path, fitted, "|b1", contents.shape),
    )


def seal_hdf5(path: Path, content_sha256: str, rank: int) -> None:
    """Write what is known only after the last sample.

    Parameters
    ----------
    path : Path
        The file.
    content_sha256 : str
        See `content_hash`.
    rank : int
        Of the samples.
    """
    with h5py.File(path, "r+") as file:
        file.attrs["content_sha256"] = content_sha256
        file.attrs["rank"] = rank


def read_hdf5(path: Path) -> Hdf5Facts:
    """Read everything but the samples.

    Parameters
    ----------
    path : Path
        The file.

    Returns
    -------
    Hdf5Facts

    Raises
    ------
    OSError, KeyError, ValueError, TypeError, RuntimeError
        The file is damaged or is something else.
    """
    with h5py.File(path, "r") as file:
        data, replaced = file["data"], file["replaced"]
        if data.ndim != 3 or replaced.shape != data.shape:
            raise ValueError(f"/data has the shape {data.shape}, /replaced {replaced.shape}")
        if data.dtype.kind != "f" or replaced.dtype != np.bool_:
            raise ValueError(f"/data holds {data.dtype}, /replaced {replaced.dtype}")
        if data.attrs["units"] != "V":
            raise ValueError(f"/data is in {data.attrs['units']}, not in V")
        fitted = file.get("decay_fitted")
        if fitted is not None and (fitted.shape != data.shape or fitted.dtype != np.bool_):
            raise ValueError(f"/decay_fitted holds {fitted.dtype} of the shape {fitted.shape}")
        return Hdf5Facts(
            data=_region(path, data),
            replaced=_region(path, replaced),
            decay_fitted=None if fitted is None else _region(path, fitted),
            times=np.asarray(file["times"][()], np.float64),
            zero=str(file["times"].attrs["zero"]),
            channels=_read_channels(file["channels"]),
            labels=_read_labels(file["labels"]),
            attributes=dict(file.attrs),
        )


def _reserve(file: Any, name: str, shape: tuple[int, int, int], kind: Any) -> int:
    """Make a contiguous dataset whose bytes are in the file at once and unset; return its first byte."""
    settings = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
    settings.set_layout(h5py.h5d.CONTIGUOUS)
    settings.set_alloc_time(h5py.h5d.ALLOC_TIME_EARLY)
    settings.set_fill_time(h5py.h5d.FILL_TIME_NEVER)
    settings.set_obj_track_times(False)
    dataset = h5py.h5d.create(file.id, name.encode(), kind, h5py.h5s.create_simple(shape), dcpl=settings)
    return int(dataset.get_offset())


def _region(path: Path, dataset: Any) -> Region:
    offset = dataset.id.get_offset()
    if offset is None:
        raise ValueError(f"{dataset.name} does not lie in one piece: something else wrote the file again")
    region = Region(path, int(offset), dataset.dtype.str, dataset.shape)
    if 0 in region.shape or region.offset + region.epoch_bytes * region.shape[0] > path.stat().st_size:
        raise ValueError(f"the file ends before the last sample of {dataset.name}")
    return region


def _write_channels(group: Any, contents: SetContents) -> None:
    channels = contents.channels
    group.create_dataset("name", data=[channel.name for channel in channels], dtype=_TEXT)
    group.create_dataset("type", data=[channel.type.value for channel in channels], dtype=_TEXT)
    group.create_dataset("status", data=[channel.status for channel in channels], dtype=_TEXT)
    group["position"] = np.array([channel.position_m or _UNKNOWN_M for channel in channels], np.float64)
    group["position"].attrs["units"] = "m"


def _read_channels(group: Any) -> tuple[SetChannel, ...]:
    columns = zip(
        _texts(group["name"]),
        _texts(group["type"]),
        _texts(group["status"]),
        group["position"][()],
        strict=True,
    )
    return tuple(
        SetChannel(
            name,
            ChannelType(kind),
            status,  # type: ignore[arg-type]  # whatever the file says is hashed and compared
            position_m=None if np.isnan(place).all() else (float(place[0]), float(place[1]), float(place[2])),
        )
        for name, kind, status, place in columns
    )


def _write_labels(group: Any, labels: Labels, later: Mapping[str, Sequence[str]]) -> None:
    group.create_dataset("name", data=labels.name, dtype=_TEXT)
    group["trial"] = np.array(labels.trial, np.int64)
    group["piece"] = np.array(labels.piece, np.int64)
    group.create_dataset("anchor", data=labels.anchor, dtype=_TEXT)
    group["onset_s"] = np.array(labels.onset_s, np.float64)
    group["start_s"] = np.array(labels.start_s, np.float64)
    for column, texts in labels.more.items():
        # A slash in a name would make a group of it; the true name is kept beside the column.
        dataset = group.create_dataset(column.replace("/", "\u2215"), data=texts, dtype=_TEXT)
        dataset.attrs["column"] = column
        if column in later:
            # Rules whose epochs end before what this label tells of has happened.
            dataset.attrs["later"] = ", ".join(later[column])


def _read_labels(group: Any) -> Labels:
    fixed = ("name", "trial", "piece", "anchor", "onset_s", "start_s")
    return Labels(
        name=_texts(group["name"]),
        trial=tuple(group["trial"][()].tolist()),
        piece=tuple(group["piece"][()].tolist()),
        anchor=_texts(group["anchor"]),
        onset_s=tuple(group["onset_s"][()].tolist()),
        start_s=tuple(group["start_s"][()].tolist()),
        more={str(group[key].attrs["column"]): _texts(group[key]) for key in group if key not in fixed},
    )


def _texts(dataset: Any) -> tuple[str, ...]:
    return tuple(dataset.asstr()[()].tolist())
