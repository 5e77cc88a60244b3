"""The newest stretch of a stream, at hand as one contiguous view."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import DTypeLike, NDArray

_ROOM = 4  # lengths of room: the stretch is moved back to the start once in so many lengths


class History:
    """The last ``length`` values of a stream along the last axis; zeros before the stream began."""

    def __init__(self, shape: tuple[int, ...], length: int, dtype: DTypeLike) -> None:
        self._store = np.zeros((*shape, _ROOM * length), dtype)
        self._length = length
        self._end = length

    def push(self, block: NDArray[Any]) -> None:
        """Append a block no longer than the history."""
        n = block.shape[-1]
        if self._end + n > self._store.shape[-1]:
            kept = self._length - n
            self._store[..., :kept] = self._store[..., self._end - kept : self._end]
            self._end = kept
        self._store[..., self._end : self._end + n] = block
        self._end += n

    def latest(self, n: int, ago: int = 0) -> NDArray[Any]:
        """A view of ``n`` values, the newest of which lies ``ago`` values before the newest of all."""
        stop = self._end - ago
        return self._store[..., stop - n : stop]
