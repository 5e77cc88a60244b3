"""The offset, and whether to believe it: the likelihood names the place, the third-order line gives the last digit.

What has to hold before an offset is believed: hardly any of the posterior lies elsewhere (a monotone voice, whose offset
is known modulo its pitch alone, fails here); the frames agree nearly as well as frames of that quality do (noise, tones
and data fail); the pitch moves (fixed combs fail); and all that for three answers running. The thresholds were set on
the same recordings as the likelihood, on synthetic signals that are no speech, and on music.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.speech_likelihood import EXPECTED, LOG_PERIOD, LOG_PERIOD_SQUARED, VOICED, SpeechLikelihood
from rxchain.carrier.speech_line import SpeechLine
from rxchain.carrier.speech_memory import QUICK, SLOW
from rxchain.streams import Bools, FloatBlock, Floats

RANGE_HZ = 155.0  # one pitch beyond, an offset looks like one within: answers farther out are refused
_TEMPER = 0.5  # frames overlap, and err together
_NEAR_HZ = 10.0
_MASS = 0.95  # of the posterior within that reach
_FIT = 0.40  # of the reward that was to be expected
_SPREAD = 0.025  # standard deviation of the pitch, as a share of itself
_VOICED_FRAMES = 8.0
_REWARD = 8.0  # nepers
_LINE = 1.8  # height over the median; 2 to 20 for voices, and hardly ever above 1.8 for what is none
_STEADY = 3  # answers
_MOVED_HZ = 12.0  # a new station, where the quick memory is that far away and believes it
_REFUTED = 5.0  # nepers: or where it speaks so much against the slow answer
_NONE = np.float32(-1e9)


@dataclass(frozen=True, slots=True)
class Judged:
    """Both memories' answers, (2, n_channels): offsets, Hz, and whether each is good."""

    offset_hz: FloatBlock
    is_good: Bools


class SpeechVerdict:
    """Answers for every channel; to be asked every quarter of a second.

    offset_hz : float64, (n_channels,): how far the audio lies above its place. is_believed : without it, that means
        nothing.
    """

    def __init__(self, n_channels: int) -> None:
        self.offset_hz: Floats = np.zeros(n_channels)
        self.is_believed: Bools = np.zeros(n_channels, np.bool_)
        self._steady: NDArray[np.int64] = np.zeros(n_channels, np.int64)

    def answer(self, likelihood: SpeechLikelihood, line: SpeechLine) -> None:
        """Answer anew; where a new station speaks, let the memories forget the old one."""
        judged = judge(likelihood, line)
        offset_hz, is_good = judged.offset_hz, judged.is_good
        quick = likelihood.likelihood.sums[QUICK]
        at_old = np.abs(line.grid_hz - offset_hz[SLOW][:, None]) <= _NEAR_HZ
        against = _TEMPER * (quick.max(axis=1) - np.where(at_old, quick, _NONE).max(axis=1))
        has_moved = is_good[QUICK] & (np.abs(offset_hz[QUICK] - offset_hz[SLOW]) > _MOVED_HZ)
        has_moved |= (against > _REFUTED) & (likelihood.counts.sums[QUICK, :, VOICED] > _VOICED_FRAMES)
        likelihood.forget_old(has_moved)
        line.forget_old(has_moved)
        newest_hz = np.where(has_moved, offset_hz[QUICK], offset_hz[SLOW]).astype(np.float64)
        is_newest_good = np.where(has_moved, is_good[QUICK], is_good[SLOW])
        is_same = is_newest_good & (np.abs(newest_hz - self.offset_hz) < _NEAR_HZ)
        self._steady = np.where(is_same, self._steady + 1, 0)
        self.offset_hz = newest_hz
        self.is_believed = self._steady >= _STEADY


def judge(likelihood: SpeechLikelihood, line: SpeechLine) -> Judged:
    """What both memories say."""
    grid_hz, rewards, heights = line.grid_hz.astype(np.float32), likelihood.likelihood.sums, line.relative
    score = _TEMPER * rewards + np.log(heights)
    top = np.argmax(score, axis=2)
    near = np.abs(grid_hz - grid_hz[top][:, :, None]) <= _NEAR_HZ
    posterior = np.exp(score - score.max(axis=2, keepdims=True))
    mass = np.where(near, posterior, 0.0).sum(axis=2) / posterior.sum(axis=2)
    near_heights = np.where(near, heights, 0.0)
    offset_hz = _parabola(heights, np.argmax(near_heights, axis=2), grid_hz)
    counts = likelihood.counts.sums
    reward = np.where(near, rewards, _NONE).max(axis=2)
    fit = reward / np.maximum(counts[:, :, EXPECTED], 1e-3)
    n_voiced = np.maximum(counts[:, :, VOICED], 1e-3)
    variance = counts[:, :, LOG_PERIOD_SQUARED] / n_voiced - (counts[:, :, LOG_PERIOD] / n_voiced) ** 2
    is_good = (mass > _MASS) & (fit > _FIT) & (variance > _SPREAD**2) & (np.abs(offset_hz) < RANGE_HZ)
    is_good &= (n_voiced > _VOICED_FRAMES) & (reward > _REWARD) & (near_heights.max(axis=2) > _LINE)
    return Judged(offset_hz, is_good)


def _parabola(values: FloatBlock, top: NDArray[np.intp], grid_hz: FloatBlock) -> FloatBlock:
    """Where the parabola through the top and its neighbours has its own."""
    top = np.clip(top, 1, len(grid_hz) - 2)
    before, middle, after = (np.take_along_axis(values, top[:, :, None] + step, axis=2)[:, :, 0] for step in (-1, 0, 1))
    shift = np.clip(0.5 * (before - after) / np.minimum(before - 2.0 * middle + after, -1e-6), -1.0, 1.0)
    return np.asarray(grid_hz[top] + shift * (grid_hz[1] - grid_hz[0]))
