"""Cuts impulses out of the wideband stream, where they are still short, before any filter has spread them.

A sample is part of an impulse where its magnitude is several times the running median of the magnitudes: impulses are too
few to move a median, and a strong signal raises it, so that none of its own peaks is taken for one. What is cut out, with
a few samples on either side, is set to zero. Impulses that do not stand out of a strong neighbour stay.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import ComplexBlock, Floats

AUTO_DB = 14.0  # five times the median
_BLOCK_S, _BLOCKS = 2.7e-3, 8
_GUARD_S = 5e-6
_EVERY = 4  # samples of which one is enough for a median
_SMALLEST = 1e-12


class ImpulseBlanker:
    """The blanker of one wideband stream.

    threshold_db : over the running median of the magnitude. process(iq) : complex64, (n,); returns as much as is decided,
    sample for sample the stream itself but for what was cut out. blanked : samples cut out so far.
    """

    def __init__(self, rate_hz: float, threshold_db: float = AUTO_DB) -> None:
        self._factor = np.float32(10.0 ** (threshold_db / 20.0))
        self._block = max(64, round(_BLOCK_S * rate_hz))
        self._guard = max(2, round(_GUARD_S * rate_hz))
        self.delay_samples = self._block + self._guard
        self.reset()

    def reset(self) -> None:
        """As new."""
        self._waiting: ComplexBlock = np.zeros(0, np.complex64)
        self._medians: Floats = np.zeros(0)
        # Samples that are decided but for the guard of what comes after them, and which of them are to go.
        self._tail: ComplexBlock = np.zeros(0, np.complex64)
        self._tail_cut: NDArray[np.bool_] = np.zeros(0, bool)
        self._carry = 0  # samples of the next block that the guard of the last hit reaches
        self.blanked = 0

    def process(self, iq: ComplexBlock) -> ComplexBlock:
        """What is decided; see the class."""
        iq = np.concatenate([self._waiting, iq])
        whole = len(iq) // self._block * self._block
        done = [self._decide(iq[k : k + self._block]) for k in range(0, whole, self._block)]
        self._waiting = iq[whole:]
        return np.concatenate(done) if done else np.zeros(0, np.complex64)

    def flush(self) -> ComplexBlock:
        """The rest; the blanker is as new afterwards, but for its count."""
        rest = [self._decide(self._waiting)] if len(self._waiting) else []
        tail = self._tail.copy()
        tail[self._tail_cut] = 0
        blanked = self.blanked + int(self._tail_cut.sum())
        self.reset()
        self.blanked = blanked
        return np.concatenate([*rest, tail])

    def _decide(self, block: ComplexBlock) -> ComplexBlock:
        size = np.abs(block)
        self._medians = np.append(self._medians, np.median(size[::_EVERY]))[-_BLOCKS:]
        limit = self._factor * np.float32(max(float(np.median(self._medians)), _SMALLEST))
        cut = np.concatenate([self._tail_cut, np.zeros(len(block), bool)])
        cut[len(self._tail) : len(self._tail) + self._carry] = True
        hits = np.flatnonzero(size > limit) + len(self._tail)
        for by in range(-self._guard, self._guard + 1):
            near = hits + by
            cut[near[(near >= 0) & (near < len(cut))]] = True
        joined = np.concatenate([self._tail, block])
        ready = max(0, len(joined) - self._guard)
        # A hit at the block's end reaches into the next one.
        late = hits[hits + self._guard >= len(cut)]
        self._carry = int(late[-1] + self._guard - len(cut) + 1) if len(late) else 0
        self._tail, self._tail_cut = joined[ready:], cut[ready:]
        done = joined[:ready]
        if cut[:ready].any():
            done = done.copy()
            done[cut[:ready]] = 0
            self.blanked += int(cut[:ready].sum())
        return done
