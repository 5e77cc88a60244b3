"""Offset and strength of a followed carrier over a measuring time, from its phase in blocks of about 43 ms.

The offset is the slope of a straight line through the unwrapped phase, which a long measuring time makes as sharp as the
bound allows (D. C. Rife, R. R. Boorstyn, IEEE Trans. Inf. Theory IT-20 (1974) 591-598); the uncertainty follows from how
the phase scatters about it at short and at longer lags: white noise averages out, wander does not.
"""

from __future__ import annotations

import numpy as np

from rxchain.carrier.track import Lock, Track
from rxchain.streams import Bools, ComplexBlock, Floats

BLOCK_HOPS = 8
_LONG_LAG = 4


class CarrierSums:
    """Running sums over the locked blocks of each channel, enough for slope, scatter and amplitude.

    A stretch without lock ends a segment: phase is not carried over it, the slopes of segments are pooled.
    """

    def __init__(self, n_channels: int, block_s: float) -> None:
        self._block_s = block_s
        n = n_channels
        self._index = 0
        self._previous = np.zeros((n, _LONG_LAG))
        self._run = np.zeros(n, np.int64)  # blocks of the present segment
        self._segment = np.zeros((5, n))  # weight, w t, w t^2, w phase, w t phase; from the segment's first block
        self._origin = np.zeros((2, n))  # time and phase of the segment's first block
        self._pooled = np.zeros((2, n))  # sums of products about the means: t phase, t t
        self._steps = np.zeros((2, 3, n))  # for lags 1 and 4: count, sum, sum of squares of the phase's advance
        self._amplitude = np.zeros((2, n))  # blocks, power
        self.seconds = np.zeros(n)

    def add(self, phase_cycles: Floats, power: Floats, locked: Bools) -> None:
        """Blocks in order, each (channels, blocks); phases continuous within a locked stretch."""
        for k in range(phase_cycles.shape[1]):
            self._add_one(phase_cycles[:, k], power[:, k], locked[:, k])

    def _add_one(self, phase: Floats, power: Floats, locked: Bools) -> None:
        time = self._index * self._block_s
        self._index += 1
        ended = ~locked & (self._run > 0)
        if ended.any():
            self._pool(ended)
        begun = locked & (self._run == 0)
        self._origin[0, begun], self._origin[1, begun] = time, phase[begun]
        for row, lag in enumerate((1, _LONG_LAG)):
            reach = locked & (self._run >= lag)
            advance = np.where(reach, phase - self._previous[:, -lag], 0.0)
            self._steps[row] += np.stack([reach, advance, advance**2])
        self._previous = np.concatenate([self._previous[:, 1:], phase[:, None]], axis=1)
        weight = np.where(locked, np.maximum(power, 1e-30), 0.0)
        t, p = time - self._origin[0], phase - self._origin[1]
        self._segment += weight * np.stack([np.ones_like(t), t, t * t, p, t * p])
        self._amplitude += np.stack([locked, np.where(locked, power, 0.0)])
        self._run = np.where(locked, self._run + 1, 0)
        self.seconds += np.where(locked, self._block_s, 0.0)

    def _pool(self, which: Bools) -> None:
        self._pooled[:, which] += _about_means(self._segment[:, which])
        self._segment[:, which] = 0.0

    def offset_hz(self) -> tuple[Floats, Floats]:
        """Slope of the phase and one standard deviation of it, hertz, (channels,); nan where there is too little."""
        products, squares = self._pooled + _about_means(self._segment)
        count = np.maximum(self._steps[:, 0], 1.0)
        with np.errstate(invalid="ignore", divide="ignore"):
            slope = np.where(squares > 0, products / squares, np.nan)
            variance = np.maximum(self._steps[:, 2] / count - (self._steps[:, 1] / count) ** 2, 0.0)
            wander = np.maximum(variance[1] - variance[0], 0.0) / (_LONG_LAG - 1)
            white = np.maximum(variance[0] - wander, 0.0) / 2.0
            blocks = self.seconds / self._block_s
            spread = blocks**3 / 12.0 * self._block_s**2
            sigma2 = white / spread + 0.35 * wander / (blocks * self._block_s**2)
        enough = blocks > 2 * _LONG_LAG
        # The clock that numbers the samples is taken as exact; a millionth of a hertz is the arithmetic's own limit.
        return np.where(enough, slope, np.nan), np.where(enough, np.sqrt(sigma2) + 1e-6, np.nan)

    def power(self) -> Floats:
        """Mean power of the carrier's blocks, noise included, (channels,); nan without any."""
        blocks, power = self._amplitude
        return np.where(blocks > 0, power / np.maximum(blocks, 1.0), np.nan)


def carrier_blocks(iq: ComplexBlock, track: Track, hop: int, valid: Bools) -> tuple[Floats, Floats, Bools]:
    """Phase in cycles, power, and lock of each block; (channels, blocks) each.

    iq holds whole blocks of upright samples, track its hops. A block counts as locked where all its hops are.
    """
    n_channels, n_hops = track.lock.shape
    n_blocks = n_hops // BLOCK_HOPS
    means = iq.reshape(n_channels, n_blocks, BLOCK_HOPS * hop).mean(axis=2, dtype=np.complex128)
    taken_out = track.phase_cycles.reshape(n_channels, n_blocks, BLOCK_HOPS).mean(axis=2)
    locked = (track.lock.reshape(n_channels, n_blocks, BLOCK_HOPS) == Lock.LOCKED).all(axis=2) & valid[:, None]
    return taken_out + np.angle(means) / (2 * np.pi), np.abs(means) ** 2, locked


def _about_means(sums: Floats) -> Floats:
    """Sums of products about the means, (2, channels): time with phase, time with time; in units of the mean weight."""
    weight, t, tt, p, tp = sums
    safe = np.maximum(weight, 1e-300)
    return np.where(weight > 0, np.stack([tp - t * p / safe, tt - t * t / safe]), 0.0)
