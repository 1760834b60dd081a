"""The icons and the sample are found in a wheel, an editable install and a checkout alike."""

from __future__ import annotations

from pathlib import Path

import pytest

from pulsemend import resources
from pulsemend.errors import PulsemendError


def checkout(top: Path) -> Path:
    """Lay out a repository and return the folder of its package."""
    package = top / "app" / "pulsemend"
    package.mkdir(parents=True)
    (top / "pyproject.toml").touch()
    (top / "icons").mkdir()
    return package


def test_wheel_keeps_them_in_the_package(tmp_path: Path) -> None:
    package = tmp_path / "lib" / "site-packages" / "pulsemend"
    (package / "icons").mkdir(parents=True)
    assert resources.find_folder("icons", package) == package / "icons"


def test_checkout_keeps_them_at_its_top(tmp_path: Path) -> None:
    package = checkout(tmp_path)
    assert resources.find_folder("icons", package) == tmp_path / "icons"


def test_package_folder_comes_first(tmp_path: Path) -> None:
    package = checkout(tmp_path)
    (package / "icons").mkdir()
    assert resources.find_folder("icons", package) == package / "icons"


def test_stale_copy_of_an_editable_install_does_not_win(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The installer leaves a folder without code in site-packages, which is first on the path."""
    stale = tmp_path / "site-packages" / "pulsemend"
    (stale / "icons").mkdir(parents=True)
    monkeypatch.syspath_prepend(tmp_path / "site-packages")
    assert resources.icons_folder().parent != stale


def test_folder_of_somebody_else_is_not_taken(tmp_path: Path) -> None:
    package = tmp_path / "lib" / "pulsemend"
    package.mkdir(parents=True)
    (tmp_path / "icons").mkdir()
    with pytest.raises(PulsemendError, match="icons"):
        resources.find_folder("icons", package)


def test_this_installation_is_complete() -> None:
    assert (resources.icons_folder() / "pulsemend.svg").is_file()
    assert resources.sample_folder().is_dir()
