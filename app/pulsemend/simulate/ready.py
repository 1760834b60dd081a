"""The small recording that comes with the program: ``python -m pulsemend.simulate.ready [FOLDER]``.

Writes it again into FOLDER, by default the folder that ships with the program. Plan and story stand there
already and are left alone.
"""

from __future__ import annotations

import shutil
import sys
import tempfile
from pathlib import Path

from pulsemend.progress import finish
from pulsemend.resources import sample_folder
from pulsemend.simulate.lantern import LanternSpec
from pulsemend.simulate.sample import MANIFEST, PLAN, STORY, write_sample

READY = LanternSpec(
    trials=2,
    channels=("F3", "Fz", "F4", "C3", "Cz", "C4", "TP8", "P3", "Pz", "P4", "O1", "O2"),
    faults=(),
)


def write_ready(folder: Path) -> None:
    """Write the small recording, its log and its truth.

    Parameters
    ----------
    folder : Path
        Files of the same names there are replaced.
    """
    with tempfile.TemporaryDirectory() as scratch:
        made = Path(scratch)
        finish(write_sample(made, spec=READY))
        for name in (PLAN, STORY, MANIFEST):
            (made / name).unlink()
        shutil.copytree(made, folder, dirs_exist_ok=True)


if __name__ == "__main__":
    write_ready(Path(sys.argv[1]) if len(sys.argv) > 1 else sample_folder())
