"""`check_set` finds every edit, and answers with items whatever is wrong with the files."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from pulsemend.errors import SetError
from pulsemend.export.check_items import CheckItem, CheckResult
from pulsemend.export.checksums import checksums_text, file_sha256
from pulsemend.export.contents import SetEpoch
from pulsemend.export.read_set import check_set
from pulsemend.model.vocabulary import Fate, Format
from pulsemend.progress import Progress, finish
from support.written_sets import candidate, make_contents, make_data, plan_text, write_set

NAME = "sub-01_task-lantern_desc-mended"


@pytest.fixture(scope="session")
def whole_set(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_set(make_contents(), tmp_path_factory.mktemp("whole"))


@pytest.fixture
def copied_set(whole_set: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(whole_set, tmp_path / NAME))


def checked(folder: Path) -> CheckResult:
    return finish(check_set(folder))


def failed(folder: Path) -> dict[str, CheckItem]:
    return {item.id: item for item in checked(folder).items if not item.passed and item.kind == "integrity"}


def sign_again(folder: Path) -> None:
    """Write new checksums, as somebody would who does not want an edit to be found."""
    path = folder / f"{NAME}_checksums.sha256"
    path.unlink()
    path.write_bytes(checksums_text({file.name: file_sha256(file) for file in folder.iterdir()}))


def part(folder: Path, name: str) -> Path:
    return folder / f"{NAME}_{name}"


def replace_text(folder: Path, name: str, old: str, new: str) -> None:
    text = part(folder, name).read_bytes().decode()
    assert old in text
    part(folder, name).write_bytes(text.replace(old, new, 1).encode())


def flip_bit(folder: Path, name: str, place: int) -> None:
    data = bytearray(part(folder, name).read_bytes())
    data[place] ^= 1
    part(folder, name).write_bytes(data)


def data_place(folder: Path, name: str, kind: str) -> int:
    """First byte of the second epoch's samples."""
    samples = make_data(make_contents())[0][1].astype("f4").astype(kind).tobytes()
    return part(folder, name).read_bytes().index(samples)


def test_a_whole_set_passes_and_every_item_shows_value_and_limit(whole_set: Path) -> None:
    result = checked(whole_set)
    assert result.ok
    assert result.within_limits
    assert len({item.id for item in result.items}) == len(result.items)
    assert all(item.title and item.value and item.limit for item in result.items)
    kinds = {item.id: item.kind for item in result.items}
    assert {key for key, kind in kinds.items() if kind == "readiness"} == {
        "balance",
        "rank",
        "ranges",
        "replaced_by_rule",
    }
    assert not any("ready" in (item.title + item.value).lower() for item in result.items)


def test_progress_grows_to_the_end(whole_set: Path) -> None:
    steps: list[Progress] = []
    finish(check_set(whole_set), steps.append)
    done = [step.done for step in steps]
    assert done == sorted(done)
    assert all(step.done <= step.total for step in steps)


def test_a_flipped_bit_in_either_container(copied_set: Path) -> None:
    flip_bit(copied_set, "epochs.h5", data_place(copied_set, "epochs.h5", "<f4"))
    # changed structures may hang the library: what the checksum does not cover is not opened
    found = failed(copied_set)
    assert set(found) == {"checksums", "readable", "content", "equal"}
    assert "was changed after it was written" in found["readable"].detail
    sign_again(copied_set)
    found = failed(copied_set)
    assert set(found) == {"content", "equal"}
    assert found["equal"].detail == "epoch 1 differs"


def test_a_flipped_bit_in_fif(copied_set: Path) -> None:
    flip_bit(copied_set, "epo.fif", data_place(copied_set, "epo.fif", ">f4"))
    sign_again(copied_set)
    assert set(failed(copied_set)) == {"equal"}


def test_the_sign_of_a_zero_is_a_difference(copied_set: Path) -> None:
    with h5py.File(part(copied_set, "epochs.h5"), "r+") as file:
        assert np.signbit(file["data"][0, 0, 0])
        file["data"][0, 0, 0] = 0.0
    sign_again(copied_set)
    assert failed(copied_set)["equal"].detail == "epoch 0 differs"


def test_a_row_taken_out_of_the_ledger(copied_set: Path) -> None:
    lines = part(copied_set, "ledger.tsv").read_bytes().splitlines(keepends=True)
    part(copied_set, "ledger.tsv").write_bytes(b"".join(lines[:3] + lines[4:]))
    sign_again(copied_set)
    found = failed(copied_set)
    assert set(found) == {"ledger"}
    assert "4 rows, 5 candidates were counted" in found["ledger"].detail


def test_a_fate_that_was_changed(copied_set: Path) -> None:
    replace_text(copied_set, "ledger.tsv", "touches a gap", "kept")
    sign_again(copied_set)
    assert "the rows that are kept are not the epochs" in failed(copied_set)["ledger"].detail


def edit_h5(edit: Callable[[Any], None]) -> Callable[[Path], None]:
    def change(folder: Path) -> None:
        with h5py.File(part(folder, "epochs.h5"), "r+") as file:
            edit(file)

    return change


def set_replaced(file: Any) -> None:
    file["replaced"][0, 0, 0] = True


def set_attribute(name: str, value: Any) -> Callable[[Path], None]:
    return edit_h5(lambda file: file.attrs.__setitem__(name, value))


def set_values(name: str, place: Any, value: Any) -> Callable[[Path], None]:
    return edit_h5(lambda file: file[name].__setitem__(place, value))


def remove(name: str) -> Callable[[Path], None]:
    return edit_h5(lambda file: file.__delitem__(name))


def make_chunked(file: Any) -> None:
    data = file["data"][()]
    units = file["data"].attrs["units"]
    del file["data"]
    file.create_dataset("data", data=data, chunks=True).attrs["units"] = units


EDITS: list[tuple[str, Callable[[Path], object], set[str]]] = [
    ("rate", set_attribute("rate_hz", 250.0), {"rate", "equal"}),
    ("rate is text", set_attribute("rate_hz", "fast"), {"rate", "equal"}),
    ("rate is zero", set_attribute("rate_hz", 0.0), {"rate", "equal"}),
    ("plan inside", set_attribute("plan", "pulsemend = 1"), {"plan"}),
    ("plan is numbers", set_attribute("plan", np.arange(4)), {"plan"}),
    ("hash inside", set_attribute("content_sha256", "0" * 64), {"content"}),
    ("hash is numbers", set_attribute("content_sha256", np.arange(4)), {"content"}),
    ("recording", set_attribute("source_sha256", "0" * 64), {"content"}),
    ("schema", set_attribute("schema", 2), {"readable"}),
    ("replaced", edit_h5(set_replaced), {"content", "replaced"}),
    ("trial", set_values("labels/trial", 0, 7), {"content", "labels"}),
    ("label", set_values("labels/cue1.item", 0, "x"), {"content", "labels"}),
    ("channel", set_values("channels/name", 0, "Pz"), {"content", "labels"}),
    ("position", set_values("channels/position", (0, 0), 1.0), {"content"}),
    ("times", set_values("times", 5, 9.0), {"rate"}),
    ("zero", edit_h5(lambda file: file["times"].attrs.__setitem__("zero", "noon")), {"rate", "equal"}),
    ("no data", remove("data"), {"readable", "content", "equal"}),
    ("no labels", remove("labels"), {"readable", "content", "equal"}),
    ("no label name", remove("labels/name"), {"readable", "content", "equal"}),
    ("chunked", edit_h5(make_chunked), {"readable", "content", "equal"}),
    ("plan text", lambda f: replace_text(f, "plan.toml", "lowpass_hz = 40.0", "lowpass_hz = 41.0"), {"plan"}),
    (
        "plan of a later schema",
        lambda f: replace_text(f, "plan.toml", "pulsemend = 1", "pulsemend = 2"),
        {"readable", "plan", "conditions"},
    ),
    (
        "plan is broken",
        lambda f: part(f, "plan.toml").write_bytes(b"[[[[\xff"),
        {"readable", "plan", "conditions"},
    ),
    ("onset", lambda f: replace_text(f, "epochs.tsv", "20.003", "2.003"), {"labels", "order"}),
    ("cell", lambda f: replace_text(f, "epochs.tsv", "links \u2190 2", "rechts"), {"labels"}),
    ("share", lambda f: replace_text(f, "epochs.tsv", "0.0125", "0.5"), {"replaced"}),
    ("index", lambda f: replace_text(f, "epochs.tsv", "\n2\t", "\n3\t"), {"order"}),
    ("status", lambda f: replace_text(f, "channels.tsv", "V\tbad", "V\tgood"), {"labels"}),
    ("ragged", lambda f: replace_text(f, "epochs.tsv", "\tdelay", "\tdelay\tx"), {"readable"}),
    ("counts", lambda f: replace_text(f, "provenance.json", '"epochs": 3', '"epochs": 4'), {"shapes"}),
    ("provenance", lambda f: part(f, "provenance.json").write_bytes(b"[" * 9000), {"readable"}),
    ("formats", lambda f: replace_text(f, "provenance.json", '"schema": 1', '"schema": 9'), {"readable"}),
    ("pulses", lambda f: replace_text(f, "pulses.tsv", "\n1\t", "\n"), {"readable"}),
    ("estimates", lambda f: part(f, "estimates.h5").write_bytes(b""), set()),
]


@pytest.mark.parametrize(("edit", "items"), [row[1:] for row in EDITS], ids=[row[0] for row in EDITS])
def test_an_edit_is_found_by_checksum_and_by_what_it_breaks(
    copied_set: Path, edit: Callable[[Path], object], items: set[str]
) -> None:
    edit(copied_set)
    assert "checksums" in failed(copied_set)
    sign_again(copied_set)
    found = failed(copied_set)
    assert items <= set(found), found
    assert "checksums" not in found
    assert all(item.detail for item in found.values())


def test_a_plan_of_a_later_schema_is_named(copied_set: Path) -> None:
    replace_text(copied_set, "plan.toml", "pulsemend = 1", "pulsemend = 2")
    detail = failed(copied_set)["plan"].detail
    assert "line 1" in detail
    assert "received: 2" in detail


@pytest.mark.parametrize(
    "name", ["epochs.h5", "epo.fif", "epochs.tsv", "ledger.tsv", "provenance.json", "plan.toml"]
)
def test_a_missing_file(copied_set: Path, name: str) -> None:
    part(copied_set, name).unlink()
    found = failed(copied_set)
    assert {"checksums", "files"} <= set(found)
    assert f"{name} is missing" in found["files"].detail


def test_missing_checksums(copied_set: Path) -> None:
    part(copied_set, "checksums.sha256").unlink()
    assert failed(copied_set)["checksums"].detail == "checksums.sha256: is missing"
    part(copied_set, "checksums.sha256").write_bytes(b"nonsense\n")
    assert "line 1" in failed(copied_set)["checksums"].detail
    part(copied_set, "checksums.sha256").write_bytes(b"")
    assert "is not listed" in failed(copied_set)["checksums"].detail


@pytest.mark.parametrize(
    "name", ["epochs.h5", "epo.fif", "epochs.tsv", "provenance.json", "checksums.sha256"]
)
@pytest.mark.parametrize("share", [0.0, 0.02, 0.3, 0.9, 0.99])
def test_a_truncated_file(copied_set: Path, name: str, share: float) -> None:
    path = part(copied_set, name)
    path.write_bytes(path.read_bytes()[: int(share * path.stat().st_size)])
    assert "checksums" in failed(copied_set)


def test_a_renamed_folder_is_found_and_read(copied_set: Path) -> None:
    other = copied_set.rename(copied_set.parent / "sub-02_task-lantern_desc-mended")
    assert set(failed(other)) == {"name"}


def test_a_renamed_file_is_missing(copied_set: Path) -> None:
    part(copied_set, "ledger.tsv").rename(copied_set / "ledger.tsv")
    assert {"files", "checksums"} <= set(failed(copied_set))


def test_a_folder_that_is_no_set(tmp_path: Path) -> None:
    with pytest.raises(SetError, match="no epoch set"):
        checked(tmp_path)
    with pytest.raises(SetError, match="no folder"):
        checked(tmp_path / "nowhere")
    (tmp_path / "file").write_bytes(b"")
    with pytest.raises(SetError, match="no folder"):
        checked(tmp_path / "file")


@pytest.mark.parametrize("name", ["epochs.h5", "epo.fif"])
def test_damage_anywhere_outside_the_samples_gives_items(copied_set: Path, name: str) -> None:
    original = part(copied_set, name).read_bytes()
    start = data_place(copied_set, name, "<f4" if name == "epochs.h5" else ">f4") - 1600
    outside = [*range(start), *range(start + 4800, len(original))]
    places = np.random.default_rng(3).choice(outside, 60, replace=False).tolist()
    for place in places:
        data = bytearray(original)
        data[place] ^= 0xFF
        part(copied_set, name).write_bytes(data)
        assert "checksums" in failed(copied_set), place


def test_a_declared_condition_without_epochs_is_written_and_fails_the_check(tmp_path: Path) -> None:
    rows = (candidate(1), candidate(1, "baseline", Fate.OUTSIDE))
    epochs = (SetEpoch(rows[0], 10.003, 0.25, replaced_share=0.0125),)
    result = checked(write_set(make_contents(ledger=rows, epochs=epochs), tmp_path))
    assert not result.ok
    (item,) = [item for item in result.items if not item.passed and item.kind == "integrity"]
    assert item.id == "conditions"
    assert item.value == "baseline"


def test_order_of_rules_at_the_same_first_sample(tmp_path: Path) -> None:
    contents = make_contents()
    first, second, third = contents.epochs
    folder = write_set(make_contents(plan_text=plan_text()), tmp_path)
    assert checked(folder).ok
    with pytest.raises(Exception, match="order of the epochs: epoch 1 stands before epoch 0"):
        write_set(make_contents(epochs=(second, first, third)), tmp_path / "more")


@pytest.mark.parametrize("kind", [Format.HDF5, Format.FIF])
def test_one_container_alone_passes(tmp_path: Path, kind: Format) -> None:
    result = checked(write_set(make_contents(formats=(kind,)), tmp_path))
    assert result.ok, [item for item in result.items if not item.passed]
    values = {item.id: item.value for item in result.items}
    assert values["equal"] == "one container only"
    assert values["content"].startswith("not computed") is (kind is Format.FIF)


def test_readiness_beyond_its_limit_leaves_integrity_alone(copied_set: Path) -> None:
    facts = json.loads(part(copied_set, "provenance.json").read_bytes())
    facts["set"]["rank"] = 0
    part(copied_set, "provenance.json").write_bytes(json.dumps(facts).encode())
    sign_again(copied_set)
    result = checked(copied_set)
    assert result.ok
    assert not result.within_limits
