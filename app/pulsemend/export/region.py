"""A stretch of a file where epochs lie back to back, whatever the container around it is.

Both containers reserve such a stretch; epochs are then written in place and read back one at a time.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Region:
    """Where the epochs lie.

    Parameters
    ----------
    path : Path
    offset : int
        First byte.
    dtype : str
        numpy's name of the stored type with its byte order, e.g. ``>f4``.
    shape : (int, int, int)
        (n_epochs, n_channels, n_times)
    """

    path: Path
    offset: int
    dtype: str
    shape: tuple[int, int, int]

    @property
    def epoch_bytes(self) -> int:
        """Bytes of one epoch."""
        return self.shape[1] * self.shape[2] * np.dtype(self.dtype).itemsize


class OpenRegion:
    """A region open for writing (of an existing file) or reading. One epoch is in memory at a time.

    Parameters
    ----------
    region : Region
    write : bool
    """

    def __init__(self, region: Region, *, write: bool = False) -> None:
        self.region = region
        self._file = region.path.open("r+b" if write else "rb", buffering=0)
        self._epoch: NDArray[Any] = np.empty(region.shape[1:], region.dtype)

    def write(self, index: int, values: NDArray[Any]) -> None:
        """Write one epoch, converted to the stored type.

        Parameters
        ----------
        index : int
            Of the epoch, from 0.
        values : array, shape (n_channels, n_times)
            In any type and byte order.

        Raises
        ------
        OSError
            The disk is full or gone.
        """
        self._epoch[...] = values
        self._file.seek(self.region.offset + index * self.region.epoch_bytes)
        rest = self._epoch.view(np.uint8).reshape(-1).data
        while rest:
            rest = rest[self._file.write(rest) :]

    def read(self, index: int) -> NDArray[Any]:
        """Read one epoch in the stored type.

        Parameters
        ----------
        index : int
            Of the epoch, from 0.

        Returns
        -------
        array, shape (n_channels, n_times)
            The same memory every time.

        Raises
        ------
        EOFError
            The file ends before.
        """
        self._file.seek(self.region.offset + index * self.region.epoch_bytes)
        rest = self._epoch.view(np.uint8).reshape(-1).data
        while rest:
            got = self._file.readinto(rest)
            if not got:
                raise EOFError(f"{self.region.path.name} ends inside epoch {index}")
            rest = rest[got:]
        return self._epoch

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()
