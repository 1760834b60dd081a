"""Write a folder with Lantern recordings, their plan, logs and truth."""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from pulsemend.errors import InputError, UsageError
from pulsemend.progress import Progress, Work
from pulsemend.resources import sample_folder
from pulsemend.simulate.head import REFERENCE
from pulsemend.simulate.lantern import RESOLUTION_UV, Lantern, LanternSpec, blocks, make_lantern
from pulsemend.simulate.truth import log_text, truth_arrays, truth_json
from pulsemend.simulate.write_triplet import TripletFormat, TripletPaths, TripletWriter
from pulsemend.units import v_to_uv

BLOCK_S = 1.0
MANIFEST = "sample.json"
PLAN = "lantern.toml"
STORY = "lantern.md"
_COMMENT = "Simulated by Pulsemend: no person was recorded. The truth stands beside it in truth/."


@dataclass(frozen=True)
class SampleResult:
    """What `write_sample` wrote.

    Parameters
    ----------
    folder : Path
        The sample's folder.
    plan : Path
        The plan for all recordings.
    recordings, logs, truths : tuple of Path
        Header, log and readable truth of each recording.
    """

    folder: Path
    plan: Path
    recordings: tuple[Path, ...]
    logs: tuple[Path, ...]
    truths: tuple[Path, ...]


def write_sample(
    folder: Path, recordings: int = 1, spec: LanternSpec | None = None, *, clean: bool = False
) -> Work[SampleResult]:
    """Write Lantern recordings with known truth.

    Every file is written under another name first and takes its place when all are complete. A file that
    exists is replaced only if the folder's ``sample.json`` lists it and nobody changed it since.

    Parameters
    ----------
    folder : Path
        Made if it does not exist.
    recordings : int
        Their number; participants are lt01, lt02, ...
    spec : LanternSpec or None
        What to simulate; with more than one recording only the participant differs.
    clean : bool
        Also write each recording without its pulse artifacts, as microvolts in float32, into ``truth/``.

    Yields
    ------
    Progress

    Returns
    -------
    SampleResult

    Raises
    ------
    UsageError
        No recording is asked for.
    InputError
        A file in the way, or a folder that cannot be written.
    """
    if recordings < 1:
        raise UsageError("a sample has at least one recording")
    specs = _specs(recordings, spec or LanternSpec())
    names = [name for each in specs for name in _names(each.stem, clean)]
    try:
        _refuse_foreign(folder, [PLAN, STORY, *names])
        (folder / "truth").mkdir(parents=True, exist_ok=True)
        with _part_files(folder, [MANIFEST, PLAN, STORY, *names]) as parts:
            for name in (PLAN, STORY):
                parts[name].write_bytes((sample_folder() / name).read_bytes())
            for i, each in enumerate(specs):
                stage = f"simulating {each.participant}"
                for share in _write_recording(parts, make_lantern(each), clean):
                    yield Progress(stage, i + share, len(specs))
            _put_in_place(folder, parts)
    except OSError as error:
        raise InputError(
            f"the sample cannot be written ({error.strerror})",
            where=str(folder),
            todo="Choose another folder",
        ) from error
    return SampleResult(
        folder=folder,
        plan=folder / PLAN,
        recordings=tuple(folder / f"{each.stem}_eeg.vhdr" for each in specs),
        logs=tuple(folder / f"{each.stem}_log.tsv" for each in specs),
        truths=tuple(folder / "truth" / f"{each.stem}_truth.json" for each in specs),
    )


def _specs(recordings: int, spec: LanternSpec) -> list[LanternSpec]:
    if recordings == 1:
        return [spec]
    return [replace(spec, participant=f"lt{i:02d}") for i in range(1, recordings + 1)]


def _names(stem: str, clean: bool) -> list[str]:
    """Files of one recording, relative to the sample's folder, with forward slashes."""
    names = [f"{stem}_eeg.{ending}" for ending in ("vhdr", "vmrk", "eeg")]
    names += [f"{stem}_log.tsv", f"truth/{stem}_truth.json", f"truth/{stem}_truth.npz"]
    if clean:
        names += [f"truth/{stem}_desc-clean_eeg.{ending}" for ending in ("vhdr", "vmrk", "eeg")]
    return names


def _write_recording(parts: dict[str, Path], lantern: Lantern, clean: bool) -> Iterator[float]:
    """Write one recording's files; yield the share that is done."""
    spec, stem = lantern.spec, lantern.spec.stem
    parts[f"{stem}_log.tsv"].write_bytes(log_text(lantern.schedule.questions).encode())
    parts[f"truth/{stem}_truth.json"].write_bytes(truth_json(lantern).encode())
    parts[f"truth/{stem}_truth.npz"].write_bytes(truth_arrays(lantern))
    form = TripletFormat(spec.channels, spec.rate_hz, RESOLUTION_UV, REFERENCE, comment=_COMMENT)
    clean_form = replace(form, resolution_uv=1.0, number="float32")
    with contextlib.ExitStack() as stack:
        recording = stack.enter_context(_writer(parts, f"{stem}_eeg", form, lantern))
        without = f"truth/{stem}_desc-clean_eeg"
        beside = stack.enter_context(_writer(parts, without, clean_form, lantern)) if clean else None
        for block in blocks(lantern, max(1, round(BLOCK_S * spec.rate_hz))):
            recording.write(block.stored)
            if beside is not None:
                beside.write(v_to_uv(block.clean).astype(np.float32))
            yield (block.start + len(block.stored)) / lantern.n_samples


def _writer(parts: dict[str, Path], stem: str, form: TripletFormat, lantern: Lantern) -> TripletWriter:
    header, marker, samples = (parts[f"{stem}.{ending}"] for ending in ("vhdr", "vmrk", "eeg"))
    return TripletWriter(TripletPaths(header, marker, samples, Path(stem).name), form, lantern.markers)


def _listed(folder: Path) -> dict[str, str]:
    """Files that an earlier sample left, with their SHA-256."""
    try:
        content = json.loads((folder / MANIFEST).read_text(encoding="utf-8"))
    except FileNotFoundError:
        return {}
    except ValueError:
        content = None
    files = content.get("files") if isinstance(content, dict) else None
    if not isinstance(files, dict):
        raise InputError(
            f"{MANIFEST} is not the list that a sample leaves",
            where=str(folder),
            todo="Choose another folder",
        )
    return files


def _refuse_foreign(folder: Path, names: list[str]) -> None:
    """Raise if a file is in the way that is not the sample's own, unchanged."""
    own = _listed(folder)
    for name in names:
        path = folder / name
        if not path.exists():
            continue
        if name not in own:
            what = "a file that is not part of the sample is in the way"
        elif _sha256(path) != own[name]:
            what = "this file was changed since the sample was written"
        else:
            continue
        raise InputError(what, where=str(path), todo="Move it away or choose another folder")


def _sha256(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


@contextlib.contextmanager
def _part_files(folder: Path, names: list[str]) -> Iterator[dict[str, Path]]:
    """Paths to write to, by final name; what is left of them at the end is removed."""
    parts = {name: (folder / name).with_name(f".{Path(name).name}.part-{os.getpid()}") for name in names}
    try:
        yield parts
    finally:
        for path in parts.values():
            path.unlink(missing_ok=True)


def _put_in_place(folder: Path, parts: dict[str, Path]) -> None:
    """Move finished files to their names and list them."""
    # What an earlier run wrote stays listed: it is still the sample's own. The list comes first, so that a
    # crash among the moves leaves no file that a later run would take for somebody else's.
    listed = _listed(folder) | {name: _sha256(path) for name, path in parts.items() if name != MANIFEST}
    content = {"what": "files written by the sample, with their SHA-256", "files": listed}
    parts[MANIFEST].write_bytes((json.dumps(content, indent=1) + "\n").encode())
    for name in sorted(parts, key=lambda name: name != MANIFEST):
        parts[name].replace(folder / name)
