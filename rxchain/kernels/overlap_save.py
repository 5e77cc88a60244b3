"""Streams through windows: what every stage built on fixed, overlapping windows has in common."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import Any, Generic, TypeVar

import numpy as np
from numpy.typing import NDArray

T = TypeVar("T", np.complex64, np.float32)


class Windows(Generic[T]):
    """Cuts a stream of ``(..., samples)`` into overlapping windows of fixed length, with zeros before its start.

    Each window holds ``overlap`` samples already seen and ``hop`` new ones. The windows fall at the same places
    whatever the blocks were, which is what makes everything built on them independent of the split.
    """

    def __init__(self, shape: tuple[int, ...], overlap: int, hop: int, dtype: type[T]) -> None:
        self.overlap, self.hop = overlap, hop
        self._window: NDArray[T] = np.zeros((*shape, overlap + hop), dtype)
        self.reset()

    def reset(self) -> None:
        """As new."""
        self._window[:] = 0
        self._filled = self.overlap
        self._used = True

    def take(self, block: NDArray[T]) -> tuple[NDArray[T] | None, NDArray[T]]:
        """A full window, or None, and what is left of the block for the next call. Read the window before that."""
        if self._used:
            self._window[..., : self.overlap] = self._window[..., self.hop :].copy()
            self._filled, self._used = self.overlap, False
        n = min(block.shape[-1], self._window.shape[-1] - self._filled)
        self._window[..., self._filled : self._filled + n] = block[..., :n]
        self._filled += n
        if self._filled < self._window.shape[-1]:
            return None, block[..., n:]
        self._used = True
        return self._window, block[..., n:]


class WindowedStage(ABC, Generic[T]):
    """A stage that makes ``hop`` outputs of each window, ``delay_samples`` late, and takes that delay out.

    A subclass calls ``_set_up`` and gives ``_advance``; process, flush and reset follow from these. The output's
    leading shape may differ from the input's; its rate may not.
    """

    def _set_up(
        self, shape: tuple[int, ...], dtype: type[T], overlap: int, hop: int, delay: int, out_shape: tuple[int, ...]
    ) -> None:
        self._input_shape = shape
        self._input_type: type[T] = dtype
        self._windows: Windows[T] = Windows(shape, overlap, hop, dtype)
        self._delay = delay
        self._nothing = np.zeros((*out_shape, 0), np.float32)
        self.reset()

    @property
    def delay_samples(self) -> int:
        """How far the output runs behind the input while streaming, apart from the wait for a full hop."""
        return self._delay

    def reset(self) -> None:
        """As new, with the same settings."""
        self._windows.reset()
        self._lead = self._delay
        self._missing = 0

    def process(self, block: NDArray[T]) -> NDArray[np.float32]:
        """The output as far as it is complete; sample k of it is the instant of sample k of the input."""
        self._missing += block.shape[-1]
        made = [self._nothing]
        while block.shape[-1]:
            window, block = self._windows.take(block)
            if window is not None:
                made.append(self._advance(window))
        output: NDArray[Any] = np.concatenate(made, axis=-1)
        skipped = min(self._lead, output.shape[-1])
        self._lead -= skipped
        self._missing -= output.shape[-1] - skipped
        return output[..., skipped:]

    def flush(self) -> NDArray[np.float32]:
        """The tail, as if silence followed; in all as much has come out as went in."""
        wanted = self._missing
        tail = self._nothing
        silence = np.zeros((*self._input_shape, self._windows.hop), self._input_type)
        while tail.shape[-1] < wanted:
            tail = np.concatenate([tail, self.process(silence)], axis=-1)
        self._missing = 0
        return tail[..., :wanted]

    @abstractmethod
    def _advance(self, window: NDArray[T]) -> NDArray[np.float32]:
        """The outputs of one window, as many as its hop."""
