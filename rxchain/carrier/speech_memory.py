"""Two memories of the same evidence: a quick one that sees a new station, and a slow one that is sure of the old."""

from __future__ import annotations

import numpy as np

from rxchain.streams import Bools, FloatBlock

MEMORY_FRAMES = np.array([60.0, 240.0], np.float32)  # voiced frames; at a voice's usual pace about 4 and 15 s
QUICK, SLOW = 0, 1


class SpeechMemory:
    """Sums that are forgotten with every voiced frame, and not with time: silence keeps the answer.

    sums : float32, (2, n_channels, width): quick and slow.
    """

    def __init__(self, n_channels: int, width: int) -> None:
        self.sums: FloatBlock = np.zeros((2, n_channels, width), np.float32)

    def add(self, voiced: FloatBlock, values: FloatBlock) -> None:
        """Add ``values``, (n_channels, width), and forget by ``voiced`` frames, (n_channels,), each 0 to 1 or so."""
        self.sums *= (1.0 - voiced / MEMORY_FRAMES[:, None])[:, :, None]
        self.sums += values

    def forget_old(self, channels: Bools) -> None:
        """Let the slow memory know no more than the quick one."""
        self.sums[SLOW, channels] = self.sums[QUICK, channels]
