"""What the frames of a voice say about the offset: a calibrated likelihood, gathered from pitch to pitch.

A frame knows the offset modulo its own pitch. The pitch moves and the offset does not, so of all the offsets that one
frame allows only the true one goes on collecting. Each frame adds

    l(d) = log(1 - p + p exp(-theta^2 / 2 sigma^2) / (sigma sqrt(2 pi))),   theta = phase - d period, to +-1/2,

with ``p`` how often a peak of that height is the pitch, and ``sigma`` how far its phase scatters. Both were fitted on
nine recordings of read speech, four of men, four of women, one of several; none of them serves in the tests.
"""

from __future__ import annotations

import numpy as np

from rxchain.carrier.speech_cepstrum import PitchPeaks
from rxchain.carrier.speech_memory import SpeechMemory
from rxchain.streams import Bools, FloatBlock, Floats

_HEIGHTS = np.arange(0.24, 0.721, 0.02)  # peaks below the first say nothing
_SURE_HEIGHT = 0.36  # lower ones count only amid voice: noise alone shall neither add nor forget
_VOICING = 0.2
_VOICING_GAIN = 0.2  # memory of five frames
_PRESENCE_GAIN = 0.05  # of twenty, 0.6 s: pauses between words are no silence
_PRESENCE = 0.25  # noise stays below 0.24 in twenty minutes, speech at 6 dB above 0.25 for 95 % of the time
_TURN = 256  # steps of theta in a turn
_COUNTS = 4

VOICED, EXPECTED, LOG_PERIOD, LOG_PERIOD_SQUARED = range(_COUNTS)


def share_right(height: Floats) -> Floats:
    """How often the highest peak of the cepstrum is the pitch, by its height.

    >>> np.round(share_right(np.array([0.24, 0.29, 0.4])), 2).tolist()
    [0.12, 0.49, 0.97]
    """
    return np.asarray(0.98 / (1.0 + np.exp((0.290 - height) / 0.025)))


def scatter_cycles(height: Floats) -> Floats:
    """Standard deviation of the phase at a peak that is the pitch, by its height."""
    return np.clip(0.030 / height, 0.04, 0.10)


class SpeechLikelihood:
    """Log-likelihood of every offset of a grid, and what the verdict needs to know about the frames it comes from.

    likelihood : the memory of ``l(d)``. counts : the memory of the voiced frames' number, the reward they would have
        brought had they agreed as they should, and the weighted logarithms of their periods and the squares of those.
    voicing : float32, (n_channels,): share of voiced frames lately.
    """

    def __init__(self, n_channels: int, grid_hz: Floats) -> None:
        self._grid_hz = grid_hz.astype(np.float32)
        share = share_right(_HEIGHTS)
        self._table, expected = _table(share, scatter_cycles(_HEIGHTS))
        self._share, self._expected = share.astype(np.float32), expected
        self.likelihood = SpeechMemory(n_channels, len(grid_hz))
        self.counts = SpeechMemory(n_channels, _COUNTS)
        self.voicing: FloatBlock = np.zeros(n_channels, np.float32)
        self._presence: FloatBlock = np.zeros(n_channels, np.float32)

    @property
    def is_voice_present(self) -> Bools:
        """Where somebody speaks; a pause of a word's length is still speech."""
        return self._presence > _PRESENCE

    @property
    def lately(self) -> FloatBlock:
        """By how much the voicing exceeds what noise may reach: the weight of a frame that has no height of its own."""
        return np.asarray(np.maximum(self.voicing - _VOICING, 0.0))

    def add(self, peaks: PitchPeaks) -> None:
        """Take in a frame of every channel."""
        level = np.searchsorted(_HEIGHTS, peaks.height, side="right") - 1
        share = np.where(level >= 0, self._share[level], 0.0).astype(np.float32)
        self.voicing += _VOICING_GAIN * (share - self.voicing)
        self._presence += _PRESENCE_GAIN * (share - self._presence)
        is_voiced = self.voicing > _VOICING
        share *= is_voiced | (peaks.height > _SURE_HEIGHT)
        theta = self._grid_hz * peaks.period_s[:, None] - peaks.phase_cycles[:, None]
        steps = np.rint(theta * _TURN).astype(np.int32) & (_TURN - 1)
        reward = self._table.take(steps + np.int32(_TURN) * level.astype(np.int32)[:, None], mode="wrap")
        self.likelihood.add(share, np.where(share[:, None] > 0.0, reward, 0.0))
        log_period = np.log(peaks.period_s)
        each = np.stack([np.ones_like(share), self._expected[level] / self._share[level], log_period, log_period**2], 1)
        self.counts.add(share, share[:, None] * each)

    def forget_old(self, channels: Bools) -> None:
        """Let the slow memories know no more than the quick ones."""
        self.likelihood.forget_old(channels)
        self.counts.forget_old(channels)


def _table(share: Floats, scatter: Floats) -> tuple[FloatBlock, FloatBlock]:
    """``l`` by height and theta, (heights, steps of a turn), and the mean reward of a frame that fits, (heights,)."""
    theta = np.arange(_TURN) / _TURN
    theta -= np.rint(theta)
    share, scatter = share[:, None], scatter[:, None]
    normal = np.exp(-0.5 * (theta / scatter) ** 2) / (scatter * np.sqrt(2.0 * np.pi))
    ratio = 1.0 - share + share * normal
    reward = np.log(ratio)
    return reward.astype(np.float32), np.mean(ratio * reward, axis=1).astype(np.float32)
