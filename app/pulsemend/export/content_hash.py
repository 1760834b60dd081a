"""`content_sha256`: what "the same set" means everywhere, free of container and time.

The hash is SHA-256 over this stream. All numbers are little-endian; a text is its length in UTF-8 bytes as
uint64, then the bytes; a list is its length as uint64, then its items.

1. the text "pulsemend epoch set 1" and the text of the sample type, "float32" or "float64";
2. the shape: number of epochs, channels and times, uint64 each;
3. the list of channels, each: name, type, status (texts), position (3 float64 in metres, NaN if unknown);
4. the label columns name (texts), trial, piece (int64), anchor (texts), onset_s, start_s (float64), each
   as a list;
5. the list of other label columns sorted by name, each: its name, then its texts as a list;
6. for every epoch in order: its samples (channel, time) in volts, then one bit for each of them, 1 where it
   is replaced: eight to a byte, the first in the highest bit, the last byte filled up with zeros; then, in a
   set with `/decay_fitted` alone, the same of that.
"""

from __future__ import annotations

import hashlib
import math
import struct
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pulsemend.export.contents import Labels, SetChannel
from pulsemend.model.recording import FloatArray


class ContentHash:
    """The hash of a set, fed epoch by epoch.

    Parameters
    ----------
    channels : sequence of SetChannel
    labels : Labels
    dtype : dtype
        float32 or float64.
    shape : (int, int, int)
        (n_epochs, n_channels, n_times)
    """

    def __init__(
        self,
        channels: Sequence[SetChannel],
        labels: Labels,
        dtype: np.dtype[np.float32] | np.dtype[np.float64],
        shape: tuple[int, int, int],
    ) -> None:
        self._dtype = dtype.newbyteorder("<")
        self._hash = hashlib.sha256()
        self._text("pulsemend epoch set 1")
        self._text(dtype.name)
        self._hash.update(struct.pack("<3Q", *shape))
        self._size(len(channels))
        for channel in channels:
            for text in (channel.name, channel.type, channel.status):
                self._text(text)
            self._hash.update(struct.pack("<3d", *(channel.position_m or (math.nan,) * 3)))
        self._texts(labels.name)
        self._numbers("q", labels.trial)
        self._numbers("q", labels.piece)
        self._texts(labels.anchor)
        self._numbers("d", labels.onset_s)
        self._numbers("d", labels.start_s)
        self._size(len(labels.more))
        for column in sorted(labels.more):
            self._text(column)
            self._texts(labels.more[column])

    def add(
        self, data: FloatArray, replaced: NDArray[np.bool_], decay_fitted: NDArray[np.bool_] | None = None
    ) -> None:
        """Add the next epoch.

        Parameters
        ----------
        data : array, shape (n_channels, n_times)
            Volts.
        replaced : array of bool, shape (n_channels, n_times)
            Which samples are estimates.
        decay_fitted : array of bool, shape (n_channels, n_times), or None
            Where the fit of a decay would alter a response; None in a set that does not say so.
        """
        self._hash.update(np.ascontiguousarray(data, self._dtype).data)
        self._hash.update(np.packbits(replaced).data)
        if decay_fitted is not None:
            self._hash.update(np.packbits(decay_fitted).data)

    def hexdigest(self) -> str:
        """Return the hash of what was added so far."""
        return self._hash.hexdigest()

    def _size(self, size: int) -> None:
        self._hash.update(struct.pack("<Q", size))

    def _text(self, text: str) -> None:
        data = text.encode()
        self._size(len(data))
        self._hash.update(data)

    def _texts(self, texts: Sequence[str]) -> None:
        self._size(len(texts))
        for text in texts:
            self._text(text)

    def _numbers(self, kind: str, numbers: Sequence[int] | Sequence[float]) -> None:
        self._size(len(numbers))
        self._hash.update(struct.pack(f"<{len(numbers)}{kind}", *numbers))
