"""The bookkeeping of fast convolution over a stream: which samples go through which transform."""

from __future__ import annotations

from typing import Generic, TypeVar

import numpy as np
from numpy.typing import NDArray

T = TypeVar("T", np.complex64, np.float32)


class Windows(Generic[T]):
    """Cuts a stream of ``(rows, samples)`` into overlapping windows of fixed length, with zeros before its start.

    Each window holds ``overlap`` samples already seen and ``hop`` new ones. The windows fall at the same places
    whatever the blocks were, which is what makes everything built on them independent of the split.
    """

    def __init__(self, n_rows: int, overlap: int, hop: int, dtype: type[T]) -> None:
        self.overlap, self.hop = overlap, hop
        self._window = np.zeros((n_rows, overlap + hop), dtype)
        self.reset()

    def reset(self) -> None:
        """As new."""
        self._window[:] = 0
        self._filled = self.overlap
        self._used = True

    @property
    def n_pending(self) -> int:
        """Samples taken in that no window has held as new ones yet."""
        return 0 if self._used else self._filled - self.overlap

    def take(self, block: NDArray[T]) -> tuple[NDArray[T] | None, NDArray[T]]:
        """A full window, or None, and what is left of the block for the next call. Read the window before that."""
        if self._used:
            self._window[:, : self.overlap] = self._window[:, self.hop :].copy()
            self._filled, self._used = self.overlap, False
        n = min(block.shape[1], self._window.shape[1] - self._filled)
        self._window[:, self._filled : self._filled + n] = block[:, :n]
        self._filled += n
        if self._filled < self._window.shape[1]:
            return None, block[:, n:]
        self._used = True
        return self._window, block[:, n:]
