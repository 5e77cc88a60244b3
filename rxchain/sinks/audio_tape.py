"""The last moments of one channel's audio, contiguous in memory."""

from __future__ import annotations

import numpy as np

from rxchain.streams import FloatBlock


class AudioTape:
    """Keeps at least the last ``keep`` samples of float32 (messages, n); counted from the start of the stream."""

    def __init__(self, n_messages: int, keep: int) -> None:
        self._keep = keep
        self._samples = np.zeros((n_messages, 2 * keep), np.float32)
        self._filled = 0
        self.end = 0  # index after the newest sample

    def append(self, audio: FloatBlock) -> None:
        """Adds what follows."""
        self.end += audio.shape[1]
        audio = audio[:, -self._keep :]
        n = audio.shape[1]
        if self._filled + n > self._samples.shape[1]:
            kept = min(self._filled, self._keep - n)
            self._samples[:, :kept] = self._samples[:, self._filled - kept : self._filled].copy()
            self._filled = kept
        self._samples[:, self._filled : self._filled + n] = audio
        self._filled += n

    def read(self, first: int, end: int) -> FloatBlock:
        """Samples ``first`` to ``end``, (messages, end - first); zeros where they are not kept or not there yet."""
        start = self.end - self._filled
        if first >= start and end <= self.end:
            return self._samples[:, first - start : end - start]
        wanted = np.zeros((len(self._samples), end - first), np.float32)
        low, high = max(first, start), min(end, self.end)
        if high > low:
            wanted[:, low - first : high - first] = self._samples[:, low - start : high - start]
        return wanted
