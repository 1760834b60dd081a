"""Where the icons and the sample lie: in the package of a wheel, else in the repository.

A wheel carries both folders inside the package. An editable install runs the package from the checkout,
where they stand beside `app/`; the copy that the installer leaves in site-packages is stale from the next
edit on and is never looked at, because only the folder of this very file counts.
"""

from __future__ import annotations

from pathlib import Path

from pulsemend.errors import PulsemendError

_PACKAGE = Path(__file__).resolve().parent


def icons_folder() -> Path:
    """Folder of the program's icons (SVG).

    Raises
    ------
    PulsemendError
        The installation is incomplete.
    """
    return find_folder("icons", _PACKAGE)


def sample_folder() -> Path:
    """Folder of the sample: scenario, plan, log and one small recording.

    Raises
    ------
    PulsemendError
        The installation is incomplete.
    """
    return find_folder("sample_data", _PACKAGE)


def find_folder(name: str, package: Path) -> Path:
    """Find a resource folder inside a package, else in the checkout that holds the package.

    Parameters
    ----------
    name : str
        Name of the folder.
    package : Path
        Folder of the package; in a checkout ``app/pulsemend`` below the repository's top.

    Raises
    ------
    PulsemendError
        In neither place.
    """
    inside = package / name
    if inside.is_dir():
        return inside
    top = package.parent.parent
    # Without its pyproject.toml a folder of that name up there is somebody else's.
    if (top / "pyproject.toml").is_file() and (top / name).is_dir():
        return top / name
    raise PulsemendError(f"the folder {name} is missing", todo="Install Pulsemend again")
